"""Calendar years, stages, capital and adjustments as tables and pictures; each None where the study asks for none."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd

from stresskit.report import figures as fig
from stresskit.report import numbers as num
from stresskit.report.balance_sheets import AMOUNTS, run_off
from stresskit.report.picture import Key, Panel, Picture, scenario_marks
from stresskit.report.reading import decimal_years, name_of, reference, scenarios, worst
from stresskit.report.tables import Cell, Table, columns, cut, row
from stresskit.runs.records import StudyResult

#: Stage, colour, words: from light to dark (on a dark screen from dim to bright), and none that a scenario has.
STAGES = ((1, "band", "Stage 1"), (2, "accent", "Stage 2"), (3, "ink", "Stage 3"))
#: Rows of one breakdown's table.
MOST_ROWS = 240
Shape = Callable[[Any], str]
Headings = Mapping[str, str]

_YEARS: Headings = {
    "loans_end": "Loans at the end",
    "balance_end": AMOUNTS["balance_end"],
    "pd": "PD",
    "lgd": "LGD",
    **{name: AMOUNTS[name] for name in ("default_amount", "loss", "el")},
}
_STOCKS: Headings = {
    **{f"{what}_stage_{k}": f"Stage {k} {what}" for what in ("loans", "balance") for k in (1, 2, 3)},
    "outflow_stage_3": "Left stage 3",
}
_IMPAIRMENT: Headings = {
    **{f"impairment_stage_{k}": f"Stage {k} impairment" for k in (1, 2, 3)},
    "impairment": "Impairment",
    "written_off": "Written off",
    "impairment_charge": "Charge",
}
_CAPITAL: Headings = {
    "balance_end": "Performing balance",
    "pd_regulatory": "PD in the formula",
    "lgd_regulatory": "LGD in the formula",
    "rwa_performing": "Risk-weighted, performing",
    "rwa_defaulted": "Risk-weighted, in default",
    "rwa": "Risk-weighted amount",
    "el_regulatory": "Expected loss",
    "el_less_provisions": "Expected loss less provisions",
}


def _shape(column: str) -> Shape:
    """How a column is written: probabilities and LGDs in percent, numbers of loans and amounts whole."""
    if column.split("_")[0] in ("pd", "lgd"):
        return num.percent
    return num.count if column.startswith("loans") else num.amount


def _frame(result: StudyResult) -> pd.DataFrame:
    if result.years is None:
        raise ValueError("this result has no year view")
    return run_off(result.years)


def has_stages(result: StudyResult) -> bool:
    return result.years is not None and "balance_stage_1" in result.years


def has_capital(result: StudyResult) -> bool:
    return result.years is not None and "rwa" in result.years


def _book(result: StudyResult, scenario: str) -> pd.DataFrame:
    rows = _frame(result)
    return rows[(rows["by"] == "") & (rows["scenario"] == scenario)]


def _table(
    result: StudyResult,
    rows: pd.DataFrame,
    title: str,
    wanted: Headings,
    *,
    segments: bool,
) -> Table:
    """A row per (segment,) scenario and point; a block per segment and scenario."""
    shown = {c: words for c, words in wanted.items() if c in rows}
    out = []
    for (segment, scenario), mine in rows.groupby(["segment", "scenario"], sort=False):
        for k, r in enumerate(mine.to_dict("records")):
            mark = "first" if k == 0 else "again"
            first = str(segment) if segments else name_of(str(scenario))
            head = [Cell(first, mark=mark)]
            if segments:
                head.append(Cell(name_of(str(scenario))))
            until = Cell(str(r["until"]), "as of" if r["periods"] == 0 else "")
            cells = ["" if missing(r, c) else _shape(c)(r[c]) for c in shown]
            out.append(row(*head, until, *cells))
    kept, note = cut(out, rest="results.xlsx and years.csv", most=MOST_ROWS)
    heads = ("Segment", "Scenario") if segments else ("Scenario",)
    labels = (*heads, "End of", *shown.values())
    return Table(title, columns(*labels, words=len(heads) + 1), kept, note)


def missing(r: Mapping[Any, Any], column: str) -> bool:
    """A flow at as_of, which is no flow of zero."""
    value = r[column]
    return r["periods"] == 0 and isinstance(value, float) and value != value


def _in_order(result: StudyResult, rows: pd.DataFrame) -> pd.DataFrame:
    """Segments as they come, scenarios in the order of the study."""
    order = {s: k for k, s in enumerate(scenarios(result))}
    segment = {s: k for k, s in enumerate(dict.fromkeys(rows["segment"]))}
    keys = rows.assign(_s=rows["segment"].map(segment), _k=rows["scenario"].map(order))
    return keys.sort_values(["_s", "_k"], kind="stable").drop(columns=["_s", "_k"])


def year_tables(result: StudyResult) -> tuple[Table, tuple[Table, ...]] | None:
    """The whole book, and a table per breakdown."""
    if result.years is None:
        return None
    rows = _in_order(result, run_off(result.years))
    whole = _table(result, rows[rows["by"] == ""], "The whole book by calendar year", _YEARS, segments=False)
    parts = tuple(
        _table(result, mine, f"Calendar years by {str(by).replace('+', ' and ')}", _YEARS, segments=True)
        for by, mine in rows[rows["by"] != ""].groupby("by", sort=False)
    )
    return whole, parts


def _book_table(result: StudyResult, title: str, wanted: Headings) -> Table:
    rows = _in_order(result, _frame(result))
    return _table(result, rows[rows["by"] == ""], title, wanted, segments=False)


def stage_rule(result: StudyResult) -> str:
    """The declared trigger of stage 2 in words."""
    rule = result.study.staging
    if rule is None:
        return ""
    joined = []
    if rule.ratio is not None:
        joined.append(f"more than {rule.ratio:g} times that at origination for the same remaining life")
    if rule.increase is not None:
        joined.append(f"higher by more than {num.percent(rule.increase)}")
    parts = []
    if joined:
        word = " and " if rule.combine == "both" else " or "
        parts.append("the lifetime PD is " + word.join(joined))
    if rule.backstop_pd is not None:
        parts.append(f"the 12-month PD is above {num.percent(rule.backstop_pd)}")
    text = "A loan is in stage 2 when " + ", or ".join(parts)
    if rule.low_risk is not None:
        text += f", but not with a 12-month PD of {num.percent(rule.low_risk)} or less"
    if rule.past_due is not None:
        text += f", and in any case when it is {rule.past_due.days} days past due at as_of"
    return f"{text}. A defaulted loan is in stage 3 for {rule.stays_years} year ends."


def _stacks(rows: pd.DataFrame, what: str) -> pd.DataFrame:
    """Points (index: decimal year of the END of the period, less one) by stage."""
    at = decimal_years(rows["until"]) - 1.0
    return pd.DataFrame(
        {label: rows[f"{what}_stage_{k}"].to_numpy(dtype=np.float64) for k, _, label in STAGES}, index=at
    )


def stage_pictures(result: StudyResult) -> tuple[Picture, ...]:
    """Stage 2 and 3 stocks, and impairment, at every year end: a column per point, a panel per scenario."""
    if not has_stages(result):
        return ()
    first = (
        "Balance in stages 2 and 3 at as_of (first column) and at the ends of the years named below, today's book only. "
        "One height for all scenarios."
    )
    second = (
        "Impairment by stage at the same points. A loan counts with the probability of still being there."
    )
    return (
        _stage_picture(
            result, "balance", STAGES[1:], first, _book_table(result, "Stages of the whole book", _STOCKS)
        ),
        _stage_picture(
            result,
            "impairment",
            STAGES,
            second,
            _book_table(result, "Impairment of the whole book", _IMPAIRMENT),
        ),
    )


def _stage_picture(
    result: StudyResult, what: str, stages: Sequence[tuple[int, str, str]], caption: str, table: Table
) -> Picture:
    names, labels = scenarios(result), [label for _, _, label in stages]
    found = {n: _stacks(_book(result, n), what)[labels] for n in names}
    top = max(float(t.sum(axis=1).max()) for t in found.values())
    divisor, word = num.scale(top)
    panels = []
    for k, name in enumerate(names):
        note = _stage_note(_book(result, name), what)
        svg = fig.stacked_panel(
            found[name], [colour for _, colour, _ in stages], divisor=divisor, top=1.06 * top / divisor or 1.0,
            key=f"stage-{what[:3]}{k}", alt=f"{what.capitalize()} by stage in {name_of(name)} at year ends. {note}",
        )  # fmt: skip
        panels.append(Panel(name_of(name), f"{what}, {word}", svg, note, scenario=k))
    keys = tuple(Key("square", colour, label) for _, colour, label in stages)
    return Picture(f"stages-{what}", caption, tuple(panels), (table,), keys=keys, small=True)


def _stage_note(rows: pd.DataFrame, what: str) -> str:
    """How much of the performing balance is in stage 2, or the impairment, first and at its largest."""
    if what == "impairment":
        values = rows["impairment"].to_numpy(dtype=np.float64)
        k = int(np.argmax(values))
        return f"{num.short(values[0])} at as_of; largest {num.short(values[k])} at {rows['until'].iloc[k]}."
    second = rows["balance_stage_2"].to_numpy(dtype=np.float64)
    performing = second + rows["balance_stage_1"].to_numpy(dtype=np.float64)
    share = np.divide(second, performing, out=np.zeros_like(second), where=performing > 0)
    k = int(np.argmax(share))
    return (
        f"Stage 2 holds {num.percent(share[0], 1)} of the performing balance at as_of; "
        f"most {num.percent(share[k], 1)} at {rows['until'].iloc[k]}."
    )


def capital_picture(result: StudyResult) -> Picture | None:
    """Risk-weighted amount over performing balance, and the amount itself, at year ends by scenario."""
    if not has_capital(result):
        return None
    legend = scenario_marks(result)
    found = {n: _book(result, n) for n in scenarios(result)}
    at = {n: decimal_years(r["until"]) - 1.0 for n, r in found.items()}
    labels = {
        float(x): f"end of {u}" for n, r in found.items() for x, u in zip(at[n], r["until"], strict=True)
    }
    amounts = {n: r["rwa"].to_numpy(dtype=np.float64) for n, r in found.items()}
    divisor, word = num.scale(max(float(v.max()) for v in amounts.values()))
    shares = {
        n: np.divide(r["rwa_performing"].to_numpy(dtype=np.float64), r["balance_end"].to_numpy(dtype=np.float64),
                     out=np.full(len(r), np.nan), where=r["balance_end"].to_numpy() > 0)
        for n, r in found.items()
    }  # fmt: skip
    base, bad = reference(result), worst(result)
    note = ""
    if bad is not None:
        gap = amounts[bad] - amounts[base]
        k = int(np.argmax(np.abs(gap)))
        note = f"{bad} against {base}: at most {num.signed(num.short(float(gap[k])))}, at {found[bad]['until'].iloc[k]}."
    panels = (
        Panel("Risk-weighted amount", word, fig.point_panel(
            {n: (at[n], v) for n, v in amounts.items()}, legend, percent=False, key="rwa", labels=labels, divisor=divisor,
            alt=f"Risk-weighted amount at year ends by scenario. {note}"), note),
        Panel("Average risk weight", "of the performing balance", fig.point_panel(
            {n: (at[n], v) for n, v in shares.items()}, legend, percent=True, key="rwd", labels=labels,
            alt="Average risk weight of the performing balance at year ends by scenario.")),
    )  # fmt: skip
    caption = "At as_of and at the ends of the years named below. The amount falls as today's book is repaid; the weight shows the stress."
    table = _book_table(result, "Capital of the whole book", _CAPITAL)
    return Picture("capital", caption, panels, (table,), legend)


def adjustment_table(result: StudyResult) -> Table | None:
    """Floors and overlays of the whole book, before and after, scenario by scenario."""
    if result.adjustments is None:
        return None
    rows = result.adjustments[result.adjustments["by"] == ""]
    out = []
    for j, name in enumerate(scenarios(result)):
        mine = rows[rows["scenario"] == name].to_dict("records")
        for k, r in enumerate(mine):
            head = Cell(name_of(name), mark="first" if k == 0 else "again")
            # a reason is a sentence: once is enough
            what = Cell(f"{r['kind']} {r['name']}", str(r["reason"]) if j == 0 else "")
            out.append(row(head, what, num.count(r["loans"]), *_before_after(r, r)))
        if len(mine) > 1:
            out.append(
                row(Cell(name_of(name), mark="again"), "all together", "", *_before_after(mine[0], mine[-1]))
            )
    heads = columns(
        "Scenario",
        "Adjustment",
        "Loans",
        "12-month EL before",
        "after",
        "Lifetime EL before",
        "after",
        words=2,
    )
    return Table("Floors and overlays, one after the other", heads, tuple(out))


def _before_after(first: Mapping[Any, Any], last: Mapping[Any, Any]) -> tuple[str | Cell, ...]:
    """Before ``first`` and after ``last``, of both losses; an adjustment that changes nothing shows a dash."""
    out: list[str | Cell] = []
    for name in ("el_12m", "el_lifetime"):
        before, after = float(first[f"{name}_before"]), float(last[f"{name}_after"])
        change = num.signed(num.percent(num.difference(after, before), 1))
        out += [num.amount(before), num.MISSING if after == before else Cell(num.amount(after), change)]
    return tuple(out)
