"""What a fit does about levels without events (or without survivors): the spec's ``when_separated``.

pool: such a level of a category counts as the reference; such a band of ages is joined with the next older
one (the last with the one before), again until every band can be estimated. ridge and firth keep the design.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import NumericError
from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.design import Design
from stresskit.hazard.gates import Trouble, level_totals, refuse, trouble_with_indicators, trouble_with_levels
from stresskit.hazard.penalty import penalised_columns
from stresskit.hazard.sums import Sums
from stresskit.hazard.terms import AgeSteps, LoanCategory
from stresskit.kernels.blocks import stay_rows, totals
from stresskit.spec.terms import HazardSpec

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Settled:
    """The design to fit, what was found and joined, and whether the fit has to reduce its bias."""

    design: Design
    separated: tuple[str, ...]
    pooled: tuple[str, ...]
    firth: bool


def settle_levels(spec: HazardSpec, design: Design, rows: CauseRows) -> Settled:
    """Before the fit. Raises NumericError for levels that the spec does not say how to treat."""
    firth = spec.bias_reduction == "firth"
    if spec.when_separated == "pool":
        found = _by_text(trouble_with_levels(design, rows))
        design, pooled = pool_levels(design, rows)
        refuse([t.text for t in trouble_with_levels(design, rows)])
        return Settled(design, found if pooled else (), pooled, firth)
    return _accepted(spec, Settled(design, (), (), firth), trouble_with_levels(design, rows))


def settle_columns(spec: HazardSpec, settled: Settled, sums: Sums) -> Settled:
    """The same for 0/1 columns of any kind, columns that move along a stay included.

    Columns of one level each were looked at with their levels, so that sums are asked for only where there are others.
    """
    if not (settled.design.indicators() & ~single_levels(settled.design)).any():
        return settled
    return _accepted(spec, settled, trouble_with_indicators(settled.design, *sums.column_totals()))


def single_levels(design: Design) -> NDArray[np.bool_]:
    """(k,) columns of one level of a static category or of one band of ages."""
    found = np.zeros(design.k, dtype=bool)
    for j, owner in enumerate(design.owner):
        term = next((t for t in design.terms if t.name == owner), None)
        found[j] = isinstance(term, AgeSteps) or (isinstance(term, LoanCategory) and not term.moving)
    return found


def _by_text(found: list[Trouble]) -> tuple[str, ...]:
    return tuple(t.text for t in found)


def _accepted(spec: HazardSpec, settled: Settled, found: list[Trouble]) -> Settled:
    """Settled with ``found`` noted, where the estimator gives finite coefficients all the same."""
    if not found:
        return settled
    firth = settled.firth or spec.when_separated == "firth"
    if not firth:
        carried: set[str] = set()
        if spec.when_separated == "ridge":
            penalised = penalised_columns(spec, settled.design)
            carried = {name for name, yes in zip(settled.design.owner, penalised, strict=True) if yes}
        refuse([t.text for t in found if t.term not in carried])
    noted = tuple(dict.fromkeys((*settled.separated, *_by_text(found))))
    return replace(settled, separated=noted, firth=firth)


def pool_levels(design: Design, rows: CauseRows) -> tuple[Design, tuple[str, ...]]:
    """The design with the levels joined that have no events or no survivors, and what was joined."""
    terms, said = list(design.terms), list[str]()
    for i, term in enumerate(terms):
        if isinstance(term, AgeSteps):
            terms[i], joined = _bands(term, *level_totals(term, rows))
            said += joined
        elif isinstance(term, LoanCategory):
            at_risk, events = _moving_totals(term, rows) if term.moving else level_totals(term, rows)
            terms[i], joined = _category(term, at_risk, events)
            said += joined
    return (Design(design.intercept, tuple(terms)) if said else design), tuple(said)


def _moving_totals(term: LoanCategory, rows: CauseRows) -> tuple[Floats, Floats]:
    """(rows at risk, events) of each level of a column that moves along a stay."""
    stay, age = stay_rows(rows.entry, rows.exit)
    level = term.level(rows.moving[term.source][rows.first_row[stay] + age - rows.entry[stay] - 1])
    weight, size = rows.weight[stay], len(term.labels)
    event = rows.event[stay] & (age == rows.exit[stay])
    return totals(level, weight, size), totals(level, weight * event, size)


def _parted(at_risk: Floats, events: Floats) -> NDArray[np.bool_]:
    return (events <= 0.0) | (events >= at_risk)


def _category(term: LoanCategory, at_risk: Floats, events: Floats) -> tuple[LoanCategory, list[str]]:
    parted = _parted(at_risk, events)
    if not parted.any():
        return term, []
    sound = np.flatnonzero(~parted)
    if sound.size < (1 if term.full else 2):
        left = "every level" if sound.size == 0 else f"every level but {term.levels[sound[0]]!r}"
        raise NumericError(
            f"category {term.source!r}: {left} is without events or without survivors, so pooling leaves nothing to "
            "compare. Leave the term out."
        )
    reference = term.reference if not parted[term.reference] else int(sound[np.argmax(at_risk[sound])])
    kept = tuple(term.levels[j] for j in sound)
    lost = tuple(term.levels[j] for j in np.flatnonzero(parted))
    said = [
        f"{term.labels[j]} ({at_risk[j]:,.0f} rows at risk, {events[j]:,.0f} events) with {term.labels[reference]}"
        for j in np.flatnonzero(parted)
    ]
    if reference != term.reference:
        said[-1] += f", the reference from now on in place of {term.labels[term.reference]}"
    return replace(
        term, levels=kept, reference=kept.index(term.levels[reference]), pooled=term.pooled + lost
    ), said


def _bands(term: AgeSteps, at_risk: Floats, events: Floats) -> tuple[AgeSteps, list[str]]:
    last, labels = list(term.last), list(term.labels)
    n, d, said = at_risk.tolist(), events.tolist(), list[str]()
    while len(last) > 1:
        parted = np.flatnonzero(_parted(np.array(n), np.array(d)))
        if parted.size == 0:
            break
        j = int(parted[0])
        other = j + 1 if j + 1 < len(last) else j - 1
        said.append(f"{labels[j]} ({n[j]:,.0f} rows at risk, {d[j]:,.0f} events) with {labels[other]}")
        a, b = min(j, other), max(j, other)
        labels[a : b + 1] = [_joined(labels[a], labels[b])]
        last[a : b + 1] = [last[b]]
        n[a : b + 1] = [n[a] + n[b]]
        d[a : b + 1] = [d[a] + d[b]]
    if not said:
        return term, []
    if len(last) == 1 and not term.full:
        raise NumericError(
            "age steps: pooling bands without events leaves one band. Leave the term out or state wider `bands`."
        )
    return AgeSteps(tuple(last), term.lowest, tuple(labels), int(np.argmax(d)), term.full), said


def _joined(younger: str, older: str) -> str:
    """age[1-6], age[7+] -> age[1+]."""
    first = younger.removeprefix("age[").rstrip("]").split("-")[0]
    end = older.removeprefix("age[").rstrip("]").split("-")[-1]
    return f"age[{first}+]" if end.endswith("+") else f"age[{first}-{end}]"
