"""The report's section "LGD by recovery time": how open workouts were treated, what it changed, curves, evidence."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from markupsafe import Markup

from stresskit.report import numbers as num
from stresskit.report.picture import Key, Panel, Picture
from stresskit.report.reading import clock
from stresskit.report.style import stand_in
from stresskit.report.svg import canvas, finish, percent_axis, settings
from stresskit.report.tables import Table, columns, from_frame, row, titled
from stresskit.runs.records import StudyResult
from stresskit.runs.recovery import ALL_CASES, RecoveryResult
from stresskit.spec.study import RecoveryLgd

_WIDE, _SMALL = (450, 256), (320, 200)
#: Segments drawn; all of them are in the table.
_MOST = 8


@dataclass(frozen=True, slots=True)
class RecoveryPage:
    """The section: one sentence, the table that answers "what did open workouts change", pictures, tables."""

    line: str
    treatment: Table
    summary: Table
    curves: Picture
    triangle: Picture | None
    resolved: Picture
    along: Table | None
    tables: tuple[Table, ...]


def recovery_page(result: StudyResult) -> RecoveryPage | None:
    """None when the study has no workouts."""
    found: RecoveryResult | None = result.recovery
    if found is None:
        return None
    return RecoveryPage(
        _line(found), _treatments(found), _summary(found), _curves(result, found), _triangle(found), _resolved(found),
        _along(result, found), _evidence(found),
    )  # fmt: skip


def _whole(found: RecoveryResult, table: str) -> pd.DataFrame:
    frame = found.tables[table]
    return frame[frame["segment"] == ALL_CASES]


def _line(found: RecoveryResult) -> str:
    whole = _whole(found, "summary").iloc[0]
    band = ""
    if np.isfinite(whole["lower"]):
        band = f" (90% band {num.percent(whole['lower'], 1)} to {num.percent(whole['upper'], 1)}, by resampling whole cases)"
    return (
        f"{num.count(whole['cases'])} workouts, {num.count(whole['open_cases'])} of them open. Of one unit owed at default "
        f"{num.percent(whole['lgd'], 1)} is lost by the end of workout{band}; costs of {num.percent(whole['cost'], 1)} stand apart."
    )


def _treatments(found: RecoveryResult) -> Table:
    rows = []
    for r in _whole(found, "treatments").to_dict("records"):
        ours = r["treatment"].startswith("all cases")
        change = num.MISSING if ours else num.signed(num.percent(r["against_ours"], 1))
        rows.append(row(str(r["treatment"]), num.percent(r["lgd"], 1), change, num.count(r["cases"])))
    return Table(
        "What the treatment of open workouts changes", columns("Treatment", "LGD", "Against ours", "Cases used"), tuple(rows),
        "Ours keeps every case: an open one counts as far as it has been observed, with its partial recoveries. Dropping open cases keeps the quick ones; taking "
        "them as finished counts as lost what may still come. Amount-weighted, costs apart.",
    )  # fmt: skip


def _summary(found: RecoveryResult) -> Table:
    percent = lambda v: num.percent(v, 1)  # noqa: E731
    frame = found.tables["summary"].drop(columns=["se"])
    return from_frame(
        frame, "LGD by segment",
        formats={"cases": num.count, "open_cases": num.count, "amount": num.amount, "last_supported": num.count,
                 **dict.fromkeys(("lgd", "lower", "upper", "cost", "lgd_by_cases", "weibull", "loglogistic", "long_run_average"), percent)},
        names={"lower": "90% from", "upper": "to", "lgd_by_cases": "LGD, cases alike", "weibull": "Weibull", "loglogistic": "log-logistic",
               "long_run_average": "mean of years", "last_supported": "observed to", "lgd": "LGD"},
    )  # fmt: skip


def _curves(result: StudyResult, found: RecoveryResult) -> Picture:
    per = clock(result).value
    frame = found.tables["curves"]
    panels = []
    order = found.tables["summary"].sort_values(["amount"], ascending=False, kind="stable")["segment"]
    names = [ALL_CASES, *[s for s in order if s != ALL_CASES][:_MOST]]
    for k, name in enumerate(names):
        rows = frame[frame["segment"] == name]
        last = rows.iloc[-1]
        note = f"Still owed after {int(last['period'])} {per}s: {num.percent(last['unresolved'], 1)}."
        if last["cured_share"] > 0:
            note += f" Cured: {num.percent(last['cured_share'], 1)}."
        panels.append(
            Panel(
                str(name),
                "share of the amount at default",
                _curve_svg(rows, key=f"rec{k}", alt=f"{name}: share still owed by {per} in default. {note}"),
                note,
            )
        )
    caption = (
        f"Across: {per}s in default. Line: share of the amount owed at default that is neither recovered nor cured (product limit, every unit of currency "
        "counted alike, open cases censored); band: 90% by resampling whole cases; dashes: share recovered. The line's right end, with the cured share's own loss, is the LGD; costs apart."
    )
    keys = (Key("line", "s1", "still owed"), Key("band", "s1", "90% band"), Key("dash", "s0", "recovered"))
    shown = frame[frame["period"] % (clock(result).per_year // 2) == 0]
    percent = lambda v: num.percent(v, 1)  # noqa: E731
    table = from_frame(
        shown[["segment", "period", "at_risk", "recovered", "cured", "unresolved", "lower", "upper", "cost", "loss_rate_from_here"]],
        "Recovery curves, half-yearly",
        formats={"period": num.count, **dict.fromkeys(("at_risk", "recovered", "cured"), num.amount),
                 **dict.fromkeys(("unresolved", "lower", "upper", "cost", "loss_rate_from_here"), percent)},
        names={"unresolved": "still owed", "lower": "90% from", "upper": "to", "loss_rate_from_here": "loss of what is owed here"},
        rest="recovery/curves.csv",
    )  # fmt: skip
    return Picture("recovery", caption, tuple(panels), (table,), keys=keys)


def _curve_svg(rows: pd.DataFrame, *, key: str, alt: str) -> Markup:
    with settings():
        figure, axes = canvas(*_WIDE)
        x = rows["period"].to_numpy(dtype=float)
        y = rows["unresolved"].to_numpy(dtype=float)
        if rows["lower"].notna().any():
            axes.fill_between(
                x,
                rows["lower"].to_numpy(dtype=float),
                rows["upper"].to_numpy(dtype=float),
                color=stand_in("s1"),
                alpha=0.25,
                linewidth=0,
                zorder=2,
            )
        axes.plot(x, y, color=stand_in("s1"), linewidth=2.2, drawstyle="steps-post", zorder=4)
        recovered = 1.0 - y - rows["cured_share"].to_numpy(dtype=float)
        axes.plot(
            x,
            recovered,
            color=stand_in("s0"),
            linewidth=1.6,
            linestyle=(0, (4.0, 3.0)),
            drawstyle="steps-post",
            zorder=3,
        )
        axes.set_xlim(0, float(x[-1]))
        axes.set_ylim(0, 1)
        percent_axis(axes)
        return finish(figure, key=key, alt=alt)


def _triangle(found: RecoveryResult) -> Picture | None:
    frame = found.tables["triangle"]
    if not len(frame):
        return None
    wide = frame.pivot(index="default_year", columns="workout_year", values="recovered_share")
    note = f"{len(wide)} default years, up to {int(wide.columns.max())} workout years; a cell stands where all cases of the year were observed that long."
    svg = _heat_svg(
        wide, key="triangle", alt=f"Cumulative share recovered by default year and workout year. {note}"
    )
    heads = columns("Default year", "Cases", "Amount", *(f"Year {int(j)}" for j in wide.columns))
    first = frame.drop_duplicates("default_year").set_index("default_year")
    rows = tuple(
        row(
            str(int(y)),
            num.count(first.loc[y, "cases"]),
            num.amount(first.loc[y, "amount"]),
            *(num.percent(v, 1) for v in wide.loc[y]),
        )
        for y in wide.index
    )
    caption = "Down: year of default. Across: workout year. Darker: more of the amount recovered by then. Rows that stay light are years that recovered worse."
    return Picture(
        "triangle",
        caption,
        (Panel("Share recovered", "of the amount at default, cumulative", svg, note),),
        (Table("Triangle of recoveries", heads, rows),),
        small=True,
    )


def _heat_svg(wide: pd.DataFrame, *, key: str, alt: str) -> Markup:
    """Cells from pale to full in one hue, with the figure in each: readable without colour."""
    with settings():
        figure, axes = canvas(_WIDE[0], 60 + 24 * len(wide))
        axes.grid(visible=False)
        values = wide.to_numpy(dtype=float)
        for i in range(values.shape[0]):
            for j in range(values.shape[1]):
                if np.isfinite(values[i, j]):
                    axes.bar(
                        j + 1,
                        0.92,
                        0.94,
                        bottom=i - 0.46,
                        color=stand_in("s2"),
                        alpha=0.12 + 0.6 * float(values[i, j]),
                        linewidth=0,
                    )
                    axes.text(
                        j + 1,
                        i,
                        f"{100 * values[i, j]:.0f}%",
                        ha="center",
                        va="center",
                        color=stand_in("ink"),
                        fontsize=10.5,
                    )
        axes.set_ylim(values.shape[0] - 0.5, -0.5)
        axes.set_xlim(0.5, values.shape[1] + 0.5)
        axes.set_yticks(range(values.shape[0]), [str(int(y)) for y in wide.index])
        axes.set_xticks(range(1, values.shape[1] + 1))
        return finish(figure, key=key, alt=alt)


def _resolved(found: RecoveryResult) -> Picture:
    frame = found.tables["resolved"]
    with settings():
        figure, axes = canvas(*_SMALL)
        x = frame["default_year"].to_numpy(dtype=float)
        closed = frame["closed_share_amount"].to_numpy(dtype=float)
        axes.bar(x, closed, 0.8, color=stand_in("s0"), linewidth=0, zorder=2)
        axes.bar(
            x, 1.0 - closed, 0.8, bottom=closed, color=stand_in("band"), linewidth=0, zorder=2, alpha=0.6
        )
        axes.set_ylim(0, 1)
        percent_axis(axes)
        last = frame.iloc[-1]
        note = f"Of defaults of {int(last['default_year'])}, {num.percent(last['closed_share_amount'], 0)} of the amount is closed."
        svg = finish(
            figure,
            key="resolved",
            alt=f"Share of the amount at default whose workout is closed, by default year. {note}",
        )
    table = from_frame(
        frame, "Workouts by default year",
        formats={"default_year": lambda v: str(int(v)), "amount": num.amount,
                 **dict.fromkeys(("cases", "open", "full", "write_off", "sale", "cure"), num.count),
                 **dict.fromkeys(("closed_share_cases", "closed_share_amount", "recovered_share", "still_owed_open_share"), lambda v: num.percent(v, 1))},
    )  # fmt: skip
    caption = "Closed and open workouts by year of default. The younger the year, the more a figure from closed cases alone rests on the quick ones."
    return Picture(
        "resolved", caption, (Panel("Closed workouts", "share of the amount at default", svg, note),), (table,),
        keys=(Key("columns", "s0", "closed"), Key("band", "band", "open")), small=True,
    )  # fmt: skip


def _along(result: StudyResult, found: RecoveryResult) -> Table | None:
    """Loss-weighted LGD by scenario: what the path after default does to it, beside average and downturn."""
    rows = result.summary[result.summary["by"] == ""]
    if not len(rows):
        return None
    lines = [
        row(
            str(r["scenario"]),
            num.percent(r["lgd"], 1),
            num.amount(r["el_12m"]),
            num.amount(r["el_lifetime"]),
        )
        for r in rows.to_dict("records")
    ]
    lgd = result.study.loss.lgd
    beside = [
        ("mean of default years, costs apart", float(_whole(found, "summary")["long_run_average"].iloc[0]))
    ]
    worst = found.tables["worst_years"]
    if len(worst):
        years = ", ".join(str(int(y)) for y in worst["default_year"])
        weight = worst["cases"].to_numpy(dtype=float)
        beside.append(
            (
                f"worst default years ({years}), costs apart",
                float(weight @ worst["lgd"].to_numpy(dtype=float) / weight.sum()),
            )
        )
    if isinstance(lgd, RecoveryLgd) and lgd.floor > 0:
        beside.append(("floor that the study declares", lgd.floor))
    lines += [row(name, num.percent(value, 1), num.MISSING, num.MISSING) for name, value in beside]
    return Table(
        "LGD of the projected losses, beside average and downturn", columns("", "LGD", "12-month EL", "Lifetime EL"), tuple(lines),
        "Scenarios: loss-weighted over the life of the book, costs and floor as the study declares. A stressed LGD below the worst years asks for a reason.",
    )  # fmt: skip


def _evidence(found: RecoveryResult) -> tuple[Table, ...]:
    percent = lambda v: num.percent(v, 1)  # noqa: E731
    year: Any = {"default_year": lambda v: str(int(v))}
    out = []
    hold = found.tables["hold_out"]
    if len(hold):
        out.append(
            from_frame(
                hold, "Held-out default years: predicted with the information of that date, and realised",
                formats={**year, "cases": num.count, "cases_known": num.count, "workout_periods": num.count,
                         **dict.fromkeys(("predicted_unresolved", "realised_unresolved", "difference"), percent)},
                names={"predicted_unresolved": "predicted still owed", "realised_unresolved": "realised", "workout_periods": "after periods", "cases_known": "cases known then"},
            )
        )  # fmt: skip
    worst = found.tables["worst_years"]
    if len(worst):
        average = float(_whole(found, "summary")["long_run_average"].iloc[0])
        table = from_frame(
            worst, "Worst default years beside the average",
            formats={**year, "cases": num.count, "lgd": percent, "observed_periods": num.count}, names={"lgd": "LGD"},
        )  # fmt: skip
        note = (
            f"Mean of the default years that were observed to the end of workout: {num.percent(average, 1)}."
            if np.isfinite(average)
            else ""
        )
        out.append(Table(table.title, table.columns, table.rows, note))
    cox = found.tables["cox"]
    if len(cox):
        table = from_frame(
            cox,
            "Cox regression of recovery on case columns, for comparison",
            formats={"coef": lambda v: num.plain(v, 3), "se": lambda v: num.plain(v, 3)},
        )
        note = "Per unit of the column as it stands in the case table (the regression above may standardise it); amounts as weights, errors clustered by case."
        out.append(Table(table.title, table.columns, table.rows, note))
    account = from_frame(
        found.tables["reconciliation"], "Workouts and cash flows: in = used + left out",
        formats={"count": num.count, "amount": num.amount, "recovered": num.amount},
    )  # fmt: skip
    out.append(account)
    if len(found.tables["findings"]):
        out.append(
            titled(
                from_frame(
                    found.tables["findings"][["code", "policy", "count", "message", "first"]],
                    "x",
                    formats={"count": num.count},
                ),
                "Findings on workouts",
            )
        )
    return tuple(out)
