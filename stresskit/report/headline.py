"""What the first screen says: what the worst scenario costs, where, and how sure one can be."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from markupsafe import Markup

from stresskit.report import numbers as num
from stresskit.report.reading import (
    Breakdown,
    Record,
    book,
    finest,
    has_payoff,
    lines,
    name_of,
    reference,
    scenarios,
    worst,
)
from stresskit.report.tables import Cell, Table, columns, row
from stresskit.runs.cautions import NOTABLE_SHARE
from stresskit.runs.records import StudyResult

#: Segments shown as those that carry the loss.
MOST_CARRIERS = 3
#: Cautions on the first screen; all of them stand in their own section.
MOST_CAUTIONS = 3
#: What cautions of one kind have in common: the first of a kind stands for all on the first screen.
_KINDS = (
    "leaves the range on which hazards were estimated", "anything in history", "the afterwards rule", "such paths",
    "takes against the expected sign", "has fewer than ten", "failed the gate",
)  # fmt: skip
#: Cautions that "How sure" says in its own words beside them.
_TOLD = ("of lifetime default incidence comes from", "of lifetime default incidence falls after")


@dataclass(frozen=True, slots=True)
class Carriers:
    """Segments that carry the difference (or, with one scenario, the loss)."""

    title: str
    sentence: str
    table: Table
    shares: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Said:
    """A sentence on how sure one can be; ``notable``: it takes away from what the figures say."""

    text: str
    notable: bool = False


@dataclass(frozen=True, slots=True)
class Headline:
    """The first screen."""

    sentence: Markup
    table: Table
    carriers: Carriers | None
    evidence: tuple[Said, ...]

    @property
    def words(self) -> str:
        """The sentence as plain text."""
        return self.sentence.striptags()


def headline(result: StudyResult) -> Headline:
    """All parts of the first screen."""
    return Headline(_sentence(result), scenario_table(result), _carriers(result), _evidence(result))


def _sentence(result: StudyResult) -> Markup:
    rows, base, bad = book(result), reference(result), worst(result)
    loans, exposure = num.count(rows[base]["loans"]), num.short(rows[base]["exposure"])
    over = f"{loans} loans with {exposure} outstanding"
    seen = bad or base
    loss = float(rows[seen]["el_lifetime"])
    first = Markup("In {}, {} are expected to lose <b>{}</b> until they mature, {} of what is owed").format(
        seen, over, num.short(loss), coverage(rows[seen])
    )
    if bad is None:
        return first + "."
    more = loss - float(rows[base]["el_lifetime"])
    change = num.percent(abs(num.difference(loss, float(rows[base]["el_lifetime"]))), 1)
    side = "more" if more >= 0 else "less"
    return first + Markup(": <b>{} ({}) {}</b> than in {}.").format(num.short(abs(more)), change, side, base)


def coverage(r: Record) -> str:
    """Lifetime EL as a share of exposure."""
    exposure = float(r["exposure"])
    return num.percent(float(r["el_lifetime"]) / exposure) if exposure > 0 else num.MISSING


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
    """Whole book, a row per scenario; below each figure its difference to the reference."""
    rows, base = book(result), reference(result)
    out = []
    for name in scenarios(result):
        r, before = rows[name], None if name == base else rows[base]
        out.append(
            row(
                Cell(name_of(name), "reference" if name == base and worst(result) else ""),
                *(_with_points(r, before, c) for c in ("pd_12m", "pd_lifetime", "lgd")),
                *(_with_change(r, before, c) for c in ("el_12m", "el_lifetime")),
                coverage(r),
                *adjusted_cell(r),
            )
        )
    heads = columns(
        "Scenario", "12-month PD", "Lifetime PD", "LGD", "12-month EL", "Lifetime EL", "Lifetime EL of exposure",
        *adjusted_heading(result),
    )  # fmt: skip
    note = (
        f"Exposure {num.amount(rows[base]['exposure'])}, in the currency of the loan file. PD: mean over loans"
        + (", early repayment an exit." if has_payoff(result) else "; no early repayment modelled.")
        + (f" Below a figure: difference to {base} (pp: percentage points)." if worst(result) else "")
    )
    return Table("The whole book by scenario", heads, tuple(out), note)


def _with_points(r: Record, before: Record | None, column: str) -> Cell:
    """A share, and its difference to the reference in percentage points."""
    value = num.percent(r[column])
    if before is None or value == num.MISSING:
        return Cell(value)
    gap = 100 * (float(r[column]) - float(before[column]))
    if gap != gap:
        return Cell(value)
    # what rounds to nothing is nothing here, whatever the last bits say
    return Cell(value, "±0.00 pp" if abs(gap) < 0.005 else f"{num.signed(num.plain(gap))} pp")


def _with_change(r: Record, before: Record | None, column: str) -> Cell:
    """An amount, and its difference to the reference as amount and percent."""
    value = num.amount(r[column])
    if before is None:
        return Cell(value)
    gap = against(float(r[column]), float(before[column]))
    return Cell(value, gap.text if gap.sub == num.MISSING else f"{gap.text} ({gap.sub})")


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


def _evidence(result: StudyResult) -> tuple[Said, ...]:
    """How sure: periods behind the macro coefficients, signs, extrapolation, range."""
    out = []
    periods = [
        f"{facts['periods']} periods ({cause})" for cause, facts in result.fits.items() if "periods" in facts
    ]
    if periods:
        out.append(Said("Estimated on " + ", ".join(periods) + "."))
    stated = result.coefficients[
        result.coefficients["expect"].notna() & (result.coefficients["expect"] != "")
    ]
    if len(stated):
        kept = int(stated["sign_ok"].eq(True).sum())
        out.append(
            Said(f"{kept} of {len(stated)} coefficients with an expected sign have it.", kept < len(stated))
        )
    seen = worst(result) or reference(result)
    r = book(result)[seen]
    beyond = (float(r["from_extrapolated_age"]), float(r["beyond_path"]))
    words = (
        f"Of lifetime PD in {seen}, {num.percent(r['from_extrapolated_age'], 0)} comes from ages beyond those observed, "
        f"{num.percent(r['beyond_path'], 0)} from after the scenario's last given value."
    )
    out.append(Said(words, max(beyond) > NOTABLE_SHARE))
    if _acts_late(result):
        late = f"Within 12 months {seen} costs no more than {reference(result)}: its values act on the hazards later."
        out.append(Said(late, notable=True))
    return tuple(out)


def _acts_late(result: StudyResult) -> bool:
    """Whether the worst scenario raises the lifetime loss but hardly anything within 12 months."""
    bad = worst(result)
    if bad is None:
        return False
    before, after = book(result)[reference(result)], book(result)[bad]
    moved = num.difference(float(after["el_lifetime"]), float(before["el_lifetime"]))
    early = num.difference(float(after["el_12m"]), float(before["el_12m"]))
    return moved > 0.001 and early < 0.05 * moved


def main_cautions(result: StudyResult, standing: Sequence[str]) -> tuple[str, ...]:
    """The first of each kind of caution that the engine found, at most a few; the standing words have their own place."""
    kinds: dict[str, list[str]] = {}
    for caution in result.cautions:
        if caution not in standing and not any(told in caution for told in _TOLD):
            kinds.setdefault(next((k for k in _KINDS if k in caution), caution), []).append(caution)
    first = list(kinds.values())[:MOST_CAUTIONS]
    return tuple(c[0] if len(c) == 1 else f"{c[0]} ({len(c) - 1} more like this)" for c in first)
