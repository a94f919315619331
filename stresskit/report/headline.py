"""What the first screen says: what the worst scenario costs, where, and how sure one can be."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from stresskit.report import numbers as num
from stresskit.report.reading import (
    Breakdown,
    Record,
    book,
    finest,
    has_payoff,
    lines,
    reference,
    scenarios,
    worst,
)
from stresskit.report.tables import Cell, Table, columns, row, without
from stresskit.runs.records import WEIGHTED, StudyResult

#: Segments shown as those that carry the loss.
MOST_CARRIERS = 3
#: Cautions on the first screen; all of them stand in their own section.
MOST_CAUTIONS = 4


@dataclass(frozen=True, slots=True)
class Tile:
    """One large figure: label, value, a line below."""

    label: str
    value: str
    below: str


@dataclass(frozen=True, slots=True)
class Carriers:
    """Segments that carry the difference (or, with one scenario, the loss)."""

    title: str
    sentence: str
    table: Table
    shares: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Headline:
    """The first screen."""

    sentence: str
    tiles: tuple[Tile, ...]
    table: Table
    carriers: Carriers | None
    evidence: tuple[str, ...]


def headline(result: StudyResult) -> Headline:
    """All parts of the first screen."""
    return Headline(
        _sentence(result), _tiles(result), scenario_table(result), _carriers(result), _evidence(result)
    )


def name_of(scenario: str) -> str:
    """A scenario's name for people: the weighted mean says what it is."""
    return "weighted mean" if scenario == WEIGHTED else scenario


def _sentence(result: StudyResult) -> str:
    rows, base, bad = book(result), reference(result), worst(result)
    loans, exposure = num.count(rows[base]["loans"]), num.short(rows[base]["exposure"])
    over = f"{loans} loans with {exposure} outstanding"
    if bad is None:
        loss = float(rows[base]["el_lifetime"])
        return f"In {base}, {over} are expected to lose {num.short(loss)} until they mature."
    loss, before = float(rows[bad]["el_lifetime"]), float(rows[base]["el_lifetime"])
    more = loss - before
    change = num.percent(abs(num.difference(loss, before)), 1)
    side = "more" if more >= 0 else "less"
    return (
        f"In {bad}, {over} are expected to lose {num.short(loss)} until they mature: "
        f"{num.short(abs(more))} ({change}) {side} than in {base}."
    )


def _tiles(result: StudyResult) -> tuple[Tile, ...]:
    rows, base, bad = book(result), reference(result), worst(result)
    seen = bad or base
    tiles = []
    for label, column, shape in (
        ("Lifetime expected loss", "el_lifetime", num.short),
        ("12-month expected loss", "el_12m", num.short),
        ("12-month PD", "pd_12m", num.percent),
        ("Lifetime PD", "pd_lifetime", num.percent),
    ):
        below = f"in {seen}" if bad is None else f"in {bad}; {shape(rows[base][column])} in {base}"
        tiles.append(Tile(label, shape(rows[seen][column]), below))
    return tuple(tiles)


def against(value: float, before: float) -> Cell:
    """Difference to the reference: amount, and percent as second line."""
    return Cell(
        num.signed(num.amount(value - before)), num.signed(num.percent(num.difference(value, before), 1))
    )


def adjusted_heading(result: StudyResult) -> tuple[str, ...]:
    """Heading of the column that only a study with floors or overlays has."""
    return () if result.adjustments is None else ("Lifetime EL after adjustments",)


def adjusted_cell(r: Record) -> tuple[Cell, ...]:
    """The lifetime loss after floors and overlays, and its distance from the model's."""
    if "el_lifetime_adjusted" not in r:
        return ()
    after, model = float(r["el_lifetime_adjusted"]), float(r["el_lifetime"])
    change = "" if after == model else num.signed(num.percent(num.difference(after, model), 1))
    return (Cell(num.amount(after), change),)


def scenario_table(result: StudyResult) -> Table:
    """Whole book, a row per scenario."""
    rows, base = book(result), reference(result)
    out = []
    for name in scenarios(result):
        r = rows[name]
        own = name == base
        out.append(
            row(
                Cell(name_of(name), "reference" if own else ""),
                num.amount(r["exposure"]),
                num.percent(r["pd_12m"]),
                num.percent(r["pd_lifetime"]),
                num.percent(r["lgd"]),
                num.amount(r["el_12m"]),
                "" if own else against(float(r["el_12m"]), float(rows[base]["el_12m"])),
                num.amount(r["el_lifetime"]),
                "" if own else against(float(r["el_lifetime"]), float(rows[base]["el_lifetime"])),
                *adjusted_cell(r),
            )
        )
    heads = columns(
        "Scenario", "Exposure", "12-month PD", "Lifetime PD", "LGD", "12-month EL", f"12-month EL against {base}",
        "Lifetime EL", f"Lifetime EL against {base}", *adjusted_heading(result),
    )  # fmt: skip
    note = "Amounts in the currency of the loan file. PD: mean over loans" + (
        ", early repayment counted as an exit." if has_payoff(result) else "; no early repayment is modelled."
    )
    table = Table("The whole book by scenario", heads, tuple(out), note)
    if worst(result):
        return table
    return without(table, f"12-month EL against {base}", f"Lifetime EL against {base}")


def _carriers(result: StudyResult) -> Carriers | None:
    cut = finest(result)
    if cut is None:
        return None
    base, bad = reference(result), worst(result)
    rows = lines(result, cut.by)
    weight = {s: float(rows[(s, bad or base)]["el_lifetime"]) for s in cut.segments}
    if bad is not None:
        weight = {s: w - float(rows[(s, base)]["el_lifetime"]) for s, w in weight.items()}
    total = math.fsum(weight.values())
    if total == 0:
        return None
    top = sorted(cut.segments, key=lambda s: (-weight[s] / total, s))[:MOST_CARRIERS]
    shares = tuple(weight[s] / total for s in top)
    return Carriers(
        f"Where it falls: {cut.title}",
        _carrier_sentence(cut, top, sum(shares), base, bad),
        _carrier_table(rows, top, shares, (base, bad), cut.title),
        shares,
    )


def _carrier_sentence(cut: Breakdown, top: Sequence[str], share: float, base: str, bad: str | None) -> str:
    what = f"the difference between {bad} and {base}" if bad is not None else "the lifetime expected loss"
    if len(cut.segments) <= len(top):
        return (
            f"All {len(top)} segments, by their part of {what}."
            if len(top) > 1
            else f"One segment carries {what}."
        )
    return f"{len(top)} of {len(cut.segments)} segments carry {num.percent(share, 0)} of {what}."


def _carrier_table(
    rows: Mapping[tuple[str, str], Record],
    top: Sequence[str],
    shares: Sequence[float],
    names: tuple[str, str | None],
    title: str,
) -> Table:
    base, bad = names
    out = []
    for segment, share in zip(top, shares, strict=True):
        b = rows[(segment, base)]
        if bad is None:
            cells = (num.amount(b["exposure"]), num.percent(b["pd_lifetime"]), num.amount(b["el_lifetime"]))
            out.append(row(segment, *cells, num.percent(share, 0)))
            continue
        w = rows[(segment, bad)]
        out.append(
            row(
                segment,
                num.amount(b["exposure"]),
                f"{num.percent(b['pd_lifetime'])} → {num.percent(w['pd_lifetime'])}",
                against(float(w["el_lifetime"]), float(b["el_lifetime"])),
                num.percent(share, 0),
            )
        )
    if bad is None:
        heads = columns(title, "Exposure", "Lifetime PD", "Lifetime EL", "Part of the loss")
    else:
        heads = columns(
            title,
            "Exposure",
            f"Lifetime PD, {base} → {bad}",
            "Lifetime EL, difference",
            "Part of the difference",
        )
    return Table("Segments that carry the loss", heads, tuple(out))


def _evidence(result: StudyResult) -> tuple[str, ...]:
    """How sure: periods behind the macro coefficients, signs, extrapolation, range."""
    out = []
    periods = [
        f"{facts['periods']} periods ({cause})" for cause, facts in result.fits.items() if "periods" in facts
    ]
    if periods:
        out.append("Hazards were estimated on " + ", ".join(periods) + ".")
    stated = result.coefficients[
        result.coefficients["expect"].notna() & (result.coefficients["expect"] != "")
    ]
    if len(stated):
        kept = int(stated["sign_ok"].eq(True).sum())
        out.append(f"{kept} of {len(stated)} coefficients with an expected sign have it.")
    seen = worst(result) or reference(result)
    r = book(result)[seen]
    out.append(
        f"{num.percent(r['from_extrapolated_age'], 0)} of lifetime PD in {seen} comes from ages beyond those observed, "
        f"{num.percent(r['beyond_path'], 0)} from periods after the scenario's last given value."
    )
    if _acts_late(result):
        out.append(
            f"The 12-month figures of {seen} are those of {reference(result)}: with the lags of the macro terms its values "
            "act on the hazards only after the first 12 months."
        )
    return tuple(out)


def _acts_late(result: StudyResult) -> bool:
    """Whether the worst scenario changes the lifetime loss but nothing within 12 months."""
    bad = worst(result)
    if bad is None:
        return False
    before, after = book(result)[reference(result)], book(result)[bad]
    moved = abs(num.difference(float(after["el_lifetime"]), float(before["el_lifetime"])))
    early = abs(num.difference(float(after["el_12m"]), float(before["el_12m"])))
    return moved > 0.001 and early < 1e-9


def main_cautions(result: StudyResult, standing: Sequence[str]) -> tuple[str, ...]:
    """The first few cautions that the engine found; the standing words have their own place."""
    return tuple(c for c in result.cautions if c not in standing)[:MOST_CAUTIONS]
