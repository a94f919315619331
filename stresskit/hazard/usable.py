"""Gates that a finished fit is measured against: what was asked, what was found, what to do.

Events, rank, separation and convergence stop a fit (hazard.gates, hazard.newton) and are recorded here as
passed. The others leave a fit that can be looked at; projecting it needs a recorded reason. docs/gates.md
has the reason and the source of each threshold.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import special

from stresskit.core.period import Frequency, format_period
from stresskit.core.values import FeatureTable
from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.covariance import FEWEST_PERIODS
from stresskit.hazard.design import Design
from stresskit.hazard.estimation import MAXIMUM_LIKELIHOOD, Estimation
from stresskit.hazard.gates import RUNNING_ERROR
from stresskit.hazard.learn import weight_by_column
from stresskit.hazard.newton import DEVIANCE_TOLERANCE, GRADIENT_TOLERANCE, Solution, standard_errors
from stresskit.hazard.sums import LoanSums
from stresskit.hazard.terms import LoanCategory
from stresskit.kernels.counts import by_level
from stresskit.kernels.linalg import RANK_TOLERANCE

Floats = NDArray[np.float64]

#: Gates whose failure stops a fit.
HARD = ("events", "rank", "separation", "convergence")
#: All gates, in the order in which they are asked.
GATES = (*HARD, "actual_expected", "levels", "macro_range", "events_per_coefficient", "periods")
#: |actual / expected - 1| of the whole book; the first under score equations that make it 0.
OVERALL_EXACT, OVERALL = 1e-6, 0.01
#: A level fails when it is off by more than this share AND by more than chance explains at this joint level.
LEVEL_SHARE, LEVEL_P = 0.10, 0.01
#: Levels with fewer expected events are joined before the chi-square (Cochran 1954, Biometrics 10).
LEAST_EXPECTED = 5.0
#: A column with more values than this is a measurement or an identifier, not a breakdown; so many loans are looked at
#: to leave out most such columns at once.
MOST_LEVELS = 50
_GLANCES = (100, 500, 10_000)
#: A macro feature varies when its standard deviation is above this share of its largest size, and no unbroken
#: run on one side of its mean may hold more than this share of its squared deviations.
FLAT_SHARE, EPISODE_SHARE = 1e-3, 0.80
#: Levels of a feature that goes by a loan column that are told one by one.
SHOWN_LEVELS = 5
#: Vittinghoff and McCulloch 2007, American Journal of Epidemiology 165.
LEAST_EVENTS = 5.0
#: Periods per macro coefficient: Harrell 2015, Regression Modeling Strategies, 4.4.
PERIODS_EACH = 10
#: With more of the events in one period than this a macro coefficient says that the period was bad, and no more. Our own line.
MOST_OF_EVENTS = 0.8


@dataclass(frozen=True, slots=True)
class Gate:
    """One gate: ``asked`` as an inequality, ``found`` in the same units, ``remedy`` empty when it passed."""

    name: str
    passed: bool
    asked: str
    found: str
    remedy: str = ""

    @property
    def hard(self) -> bool:
        return self.name in HARD


#: What stands for the gates of a model saved before there were any.
UNKNOWN = Gate(
    "recorded", False, "the gates were checked when the model was fitted",
    "the model carries none: it was saved in format version 1 or put together by hand", "Fit again",
)  # fmt: skip


@dataclass(frozen=True, slots=True, eq=False)
class Finished:
    """What the gates look at."""

    design: Design
    rows: CauseRows
    features: FeatureTable | None
    frequency: Frequency
    solution: Solution
    estimation: Estimation
    link: str
    n_periods: int


def gates_of(fit: Finished, sums: LoanSums, reach: Floats) -> tuple[Gate, ...]:
    """All gates of a fit. ``reach`` (k,) range of every column over the rows."""
    expected, variance = sums.expected_by_loan(fit.solution.params)
    return (
        _events(fit),
        _rank(fit),
        _separation(fit, reach),
        _convergence(fit.solution),
        _overall(fit, float(expected.sum())),
        _levels(fit, expected, variance),
        _macro_range(fit),
        _events_each(fit),
        _periods(fit),
    )


def _gate(name: str, passed: bool, asked: str, found: str, remedy: str = "") -> Gate:
    return Gate(name, bool(passed), asked, found, "" if passed else remedy)


def _count(value: float) -> str:
    return f"{value:,.0f}" if float(value).is_integer() else f"{value:,.1f}"


# ---- gates that stopped the fit when they failed


def _events(fit: Finished) -> Gate:
    d, n = fit.rows.event_weight, fit.rows.total_weight
    return _gate(
        "events", 0.0 < d < n, "0 < events < rows at risk", f"{_count(d)} events in {_count(n)} rows"
    )


def _rank(fit: Finished) -> Gate:
    """1 - R^2 of each column on the others, in the metric of the information, around the mean where there is a constant."""
    information = fit.solution.at.information
    asked = f"1 - R2 of every column on the others > {RANK_TOLERANCE:g}"
    labels = fit.design.labels
    if len(labels) == 1:
        return _gate("rank", True, asked, "one column")
    try:
        inverse = np.diag(np.linalg.inv(_unit(information))) / np.diag(information)
    except np.linalg.LinAlgError:
        return _gate("rank", True, asked, "columns told apart at the start of the fit")
    size = np.diag(information).copy()
    if fit.design.intercept:
        size -= information[:, 0] ** 2 / information[0, 0]
        size[0] = np.inf
    with np.errstate(divide="ignore", invalid="ignore"):
        left = np.where(size > 0.0, 1.0 / (size * inverse), np.inf)
    left[0] = np.inf if fit.design.intercept else left[0]
    worst = int(np.argmin(left))
    return _gate("rank", True, asked, f"least for {labels[worst]}: {min(float(left[worst]), 1.0):.2g}")


def _unit(matrix: Floats) -> Floats:
    scale = np.sqrt(np.diag(matrix))
    out: Floats = matrix / np.outer(scale, scale)
    return out


def _separation(fit: Finished, reach: Floats) -> Gate:
    asked = (
        "every level has events and survivors, and no coefficient still walks away with standard error x range "
        f"> {RUNNING_ERROR:g}"
    )
    handled = fit.estimation.pooled or fit.estimation.separated
    if handled:
        more = f" and {len(handled) - 3} more" if len(handled) > 3 else ""
        return _gate("separation", True, asked, f"settled as the study says: {'; '.join(handled[:3])}{more}")
    size = standard_errors(fit.solution.at) * reach
    worst = int(np.argmax(size))
    return _gate("separation", True, asked, f"largest for {fit.design.labels[worst]}: {size[worst]:.3g}")


def _convergence(solution: Solution) -> Gate:
    passed = solution.deviance_change <= DEVIANCE_TOLERANCE and solution.scaled_gradient <= GRADIENT_TOLERANCE
    return _gate(
        "convergence",
        passed,
        f"relative change of the deviance <= {DEVIANCE_TOLERANCE:g} and scaled gradient <= {GRADIENT_TOLERANCE:g}",
        f"{solution.deviance_change:.1e} and {solution.scaled_gradient:.1e} after {solution.iterations} iterations",
        "Fit again with fewer terms",
    )


# ---- gates that leave a fit to look at


def _overall(fit: Finished, expected: float) -> Gate:
    """With a constant the score equation of the logit makes actual = expected; cloglog comes within rounding of the hazards."""
    actual = fit.rows.event_weight
    exact = (
        fit.link == "logit"
        and fit.design.constant() is not None
        and fit.estimation.method == MAXIMUM_LIKELIHOOD
    )
    limit = OVERALL_EXACT if exact else OVERALL
    share = actual / expected - 1.0
    return _gate(
        "actual_expected",
        abs(share) <= limit,
        f"|actual / expected - 1| <= {limit:g} over all rows",
        f"{_count(actual)} events, {expected:,.2f} expected: {round(share, 7) + 0.0:+.7f}",
        "Keep the intercept (or age: steps without one), lower a ridge, or add the terms that set the level",
    )


def _levels(fit: Finished, expected: Floats, variance: Floats) -> Gate:
    rows = fit.rows
    actual = rows.events_by_loan()
    found: list[tuple[str, float, float, float]] = []
    joined, statistic, freedom = 0, 0.0, 0
    modelled = _modelled(fit.design)
    for name, code, labels in _breakdowns(fit, modelled):
        a, e, v = (by_level(code, x, len(labels)) for x in (actual, expected, variance))
        small, keep = np.flatnonzero(e < LEAST_EXPECTED), np.flatnonzero(e >= LEAST_EXPECTED)
        joined += small.size
        parts = [(f"{name}[{labels[j]}]", float(a[j]), float(e[j]), float(v[j])) for j in keep]
        if float(e[small].sum()) >= LEAST_EXPECTED:
            rest = f"{name}[{small.size} small levels]"
            parts.append((rest, float(a[small].sum()), float(e[small].sum()), float(v[small].sum())))
        statistic += sum((x - y) ** 2 / z for _, x, y, z in parts if z > 0.0)
        # The score equations hold the levels of a category of the hazard at their actual events.
        freedom += 0 if name in modelled else max(len(parts) - 1, 0)
        found += parts
    asked = (
        f"no level with |actual / expected - 1| > {LEVEL_SHARE:g} and chi-square p x comparisons < {LEVEL_P:g} "
        f"(levels with fewer than {LEAST_EXPECTED:g} expected events joined)"
    )
    if not found:
        return _gate("levels", True, asked, "no static category with enough events")
    return _level_verdict(
        found, asked, f"{len(found)} comparisons, chi-square {statistic:.1f} on {freedom}", joined
    )


def _level_verdict(found: list[tuple[str, float, float, float]], asked: str, count: str, joined: int) -> Gate:
    m = len(found)
    p = [
        min(1.0, m * float(special.chdtrc(1.0, (a - e) ** 2 / v))) if v > 0.0 else 1.0 for _, a, e, v in found
    ]
    share = [a / e - 1.0 for _, a, e, _ in found]
    bad = [i for i in range(m) if abs(share[i]) > LEVEL_SHARE and p[i] < LEVEL_P]
    order = sorted(bad or range(m), key=lambda i: (p[i], -abs(share[i])))
    shown = "; ".join(
        f"{found[i][0]} {_count(found[i][1])} events, {found[i][2]:,.1f} expected ({share[i]:+.1%}, p x {m} = {p[i]:.2g})"
        for i in order[: 3 if bad else 1]
    )
    more = f"; and {len(bad) - 3} more" if len(bad) > 3 else ""
    small = f"; {joined} small levels joined" if joined else ""
    return _gate(
        "levels", not bad, asked, f"{count}; {'off' if bad else 'least likely'}: {shown}{more}{small}",
        "Add the column (as: category) or its interaction to the hazard, or fit that part of the book by itself",
    )  # fmt: skip


def _modelled(design: Design) -> set[str]:
    return {t.source for t in design.terms if isinstance(t, LoanCategory) and not t.moving}


def _breakdowns(fit: Finished, categories: set[str]) -> Iterable[tuple[str, NDArray[np.int32], list[str]]]:
    """(name, level of each loan, labels) of every static column of few values, text or number, and of all categories."""
    for name, column in fit.rows.static.items():
        values = np.asarray(column)
        if name not in categories and any(len(pd.unique(values[:n])) > MOST_LEVELS for n in _GLANCES):
            continue
        found = fit.rows.coded(name)
        if 1 < len(found.text) <= MOST_LEVELS or name in categories:
            yield name, found.code, [str(v) for v in found.text]


def _macro_range(fit: Finished) -> Gate:
    asked = (
        f"standard deviation > {FLAT_SHARE:g} x largest size, and no unbroken run on one side of the mean holds more than "
        f"{EPISODE_SHARE:.0%} of the squared deviations"
    )
    names = fit.design.features
    if not names or fit.features is None:
        return _gate("macro_range", True, asked, "no macro term")
    words, passed = [], True
    for name in names:
        by_column = weight_by_column(name, fit.rows, fit.features)
        told = [_column_range(fit, c, np.flatnonzero(w > 0)) for c, w in by_column.items() if (w > 0).any()]
        # One coefficient for all levels: a level that saw more than one episode is evidence beyond one.
        passed &= any(fine for fine, _ in told)
        words += [text for _, text in told[:SHOWN_LEVELS]]
        words += [f"{name}: {len(told) - SHOWN_LEVELS} more levels"] if len(told) > SHOWN_LEVELS else []
    return _gate(
        "macro_range", passed, asked, "; ".join(words),
        "Use a longer history or another feature; one episode cannot tell a macro effect from whatever else happened then",
    )  # fmt: skip


def _column_range(fit: Finished, name: str, used: NDArray[np.int64]) -> tuple[bool, str]:
    """Whether one column varies enough over the periods ``used``, in words."""
    assert fit.features is not None
    first = fit.rows.first_period
    x = fit.features.column(name)[first - fit.features.start + used]
    share, run = largest_run(x)
    deviation = float(x.std())
    flat = deviation <= FLAT_SHARE * float(np.abs(x).max())
    if deviation == 0.0:
        return False, f"{name} {x[0]:.4g} throughout"
    span = " to ".join(format_period(first + int(used[j]), fit.frequency) for j in (run[0], run[1]))
    return not flat and share <= EPISODE_SHARE, (
        f"{name} {x.min():.4g} to {x.max():.4g} = {np.ptp(x) / deviation:.1f} standard deviations"
        f"{' (next to no variation)' if flat else ''}, largest run {share:.0%} ({span})"
    )


def largest_run(x: Floats) -> tuple[float, tuple[int, int]]:
    """Largest share of the squared deviations from the mean in one unbroken run on one side of it, and its first and last index."""
    centred = x - x.mean()
    square = centred * centred
    total = float(square.sum())
    if total == 0.0:
        return 0.0, (0, x.size - 1)
    edges = np.flatnonzero(np.concatenate(([True], (centred[1:] > 0.0) != (centred[:-1] > 0.0), [True])))
    shares = np.add.reduceat(square, edges[:-1]) / total
    best = int(np.argmax(shares))
    return float(shares[best]), (int(edges[best]), int(edges[best + 1]) - 1)


def _events_each(fit: Finished) -> Gate:
    """The fewer of events and survivors counts (Peduzzi and others 1996, Journal of Clinical Epidemiology 49)."""
    fewer = min(fit.rows.event_weight, fit.rows.total_weight - fit.rows.event_weight)
    size = float(fit.design.k) if fit.estimation.effective is None else fit.estimation.effective
    each = fewer / max(size, 1.0)
    return _gate(
        "events_per_coefficient", each >= LEAST_EVENTS, f"events / coefficients >= {LEAST_EVENTS:g}",
        f"{_count(fewer)} events for {size:g} coefficients: {each:.1f}",
        "Use fewer terms, fewer knots or pooled levels, or state a ridge",
    )  # fmt: skip


def macro_columns(design: Design) -> NDArray[np.bool_]:
    """(k,) columns that vary by period alone."""
    index = design.index
    return np.asarray(
        (index["feature"] >= 0) & (index["loan"] < 0) & (index["age"] < 0) & (index["moving"] < 0)
    )


def _periods(fit: Finished) -> Gate:
    m = int(macro_columns(fit.design).sum())
    asked = f"periods >= {FEWEST_PERIODS} and >= {PERIODS_EACH} x macro coefficients, none with over {MOST_OF_EVENTS:.0%} of events"
    if not fit.design.sources("feature"):
        return _gate("periods", True, asked, "no macro term")
    events = fit.rows.by_period()[1]
    share = float(events.max() / events.sum())
    enough = fit.n_periods >= max(FEWEST_PERIODS, PERIODS_EACH * m)
    return _gate(
        "periods", enough and share <= MOST_OF_EVENTS, asked,
        f"{fit.n_periods} periods, {m} macro coefficients" + (f", {share:.0%} of the events in one period" if share > MOST_OF_EVENTS else ""),
        "Use a longer history or fewer macro terms; the spread between few periods says little about their errors",
    )  # fmt: skip


def gate_plain(gate: Gate) -> dict[str, Any]:
    """As JSON holds it."""
    return {
        "name": gate.name,
        "passed": gate.passed,
        "asked": gate.asked,
        "found": gate.found,
        "remedy": gate.remedy,
    }
