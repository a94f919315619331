"""Tables of the evidence on the fits, behind its pictures; all rows are in the run folder's evidence/."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import partial
from typing import Any

import pandas as pd

from stresskit.report import numbers as num
from stresskit.report.tables import Column, Format, Table, columns, from_frame, row

#: What a grouping of the rows is called.
GROUPINGS = {
    "period": "calendar period", "age": "age band", "cohort": "cohort", "predicted": "tenth of the prediction",
}  # fmt: skip


def _digits(digits: int) -> Format:
    return partial(num.plain, digits=digits)


def _sd(value: Any) -> str:
    """Standard deviations: a tenth is as fine as they are read, so a small one is 0.0."""
    return num.plain(round(float(value), 1) + 0.0, 1)


def _share(digits: int) -> Format:
    return partial(num.percent, digits=digits)


def _yes(value: Any) -> str:
    return "yes" if value else ""


def _whole(value: Any) -> str:
    return num.plain(value, 0)


@dataclass(frozen=True, slots=True)
class _Shape:
    """Columns of a table, how they are shown, and their headings where the name does not do."""

    title: str
    formats: Mapping[str, Format]
    names: Mapping[str, str] = field(default_factory=dict)


_SHAPES: Mapping[str, _Shape] = {
    "survival": _Shape(
        "observed and fitted survival",
        {"age": _whole, "at_risk": num.count, "events": num.count, "observed": _share(2), "lower": _share(2),
         "upper": _share(2), "fitted": _share(2), "gap": _share(2), "z_shock": _sd},
        {"lower": "band from", "upper": "to", "z_shock": "sd off"},
    ),
    "autocorrelation": _Shape(
        "autocorrelation of the residuals of calendar periods",
        {"lag": _whole, "autocorrelation": _digits(3), "of_deviance": _digits(3), "band": _digits(3), "ljung_box": _digits(1),
         "p_value": num.p_value},
        {"of_deviance": "of deviance residuals", "band": "band, ±", "ljung_box": "Ljung-Box to here", "p_value": "p"},
    ),
    "deciles": _Shape(
        "predicted and actual rate by tenth, later periods",
        {"band": _whole, "at_risk": num.count, "events": num.count, "expected": _digits(1), "predicted": _share(3),
         "actual": _share(3), "lower": _share(3), "upper": _share(3)},
        {"band": "tenth", "lower": "band from", "upper": "to"},
    ),
    "calibration": _Shape(
        "calibration on later periods",
        {"term": str, "ideal": _whole, "estimate": _digits(3), "lower": _digits(3), "upper": _digits(3), "p_value": num.p_value},
        {"lower": "95% from", "upper": "to", "p_value": "p"},
    ),
    "auc": _Shape(
        "AUC by horizon",
        {"sample": str, "horizon": _whole, "auc": _digits(3), "lower": _digits(3), "upper": _digits(3), "cases": num.count,
         "landmarks": num.count, "event_periods": num.count},
        {"sample": "rows", "horizon": "within periods", "auc": "AUC", "lower": "95% from", "upper": "to", "cases": "cases",
         "event_periods": "periods with events"},
    ),
    "lag_profile": _Shape(
        "log-likelihood at other lags",
        {"term": str, "lag": _whole, "behind": _digits(1), "behind_scaled": _digits(1), "coef": _digits(3),
         "se_period": _digits(3), "best": _yes, "study": _yes},
        {"behind": "units behind the best", "behind_scaled": "shocks allowed for", "coef": "coefficient",
         "se_period": "se by period", "study": "the study's"},
    ),
    "stability": _Shape(
        "coefficients before and after",
        {"term": str, "before": _digits(3), "se_before": _digits(3), "after": _digits(3), "se_after": _digits(3),
         "z": _digits(1), "p_value": num.p_value, "held": _yes},
        {"se_before": "se", "se_after": "se after", "p_value": "p", "held": "kept as in the whole fit"},
    ),
}  # fmt: skip


def evidence_table(name: str, cause: str, rows: pd.DataFrame) -> Table:
    """A table of the evidence under the name that it has there."""
    shape = _SHAPES[name]
    return from_frame(
        rows[list(shape.formats)],
        f"{cause}: {shape.title}",
        formats=shape.formats,
        names=shape.names,
        rest=f"evidence/{name}.csv",
    )


def group_table(title: str, rows: pd.DataFrame) -> Table:
    """Actual against expected by group, of one or several groupings."""
    out = [
        row(
            GROUPINGS.get(str(r.by), str(r.by)),
            str(r.group),
            num.count(r.at_risk),
            num.count(r.events),
            num.plain(r.expected, 1),
            f"{num.plain(r.low_events, 1)} to {num.plain(r.high_events, 1)}",
            num.plain(r.ratio),
            _sd(r.z_shock),
        )
        for r in rows.itertuples(index=False)
    ]
    heads = columns(
        "By",
        "Group",
        "Rows at risk",
        "Actual",
        "Expected",
        "95% band",
        "Actual / expected",
        "sd off",
        words=2,
    )
    return Table(title, heads, tuple(out))


def total_table(cause: str, rows: pd.DataFrame) -> Table:
    """The total test of every grouping."""
    out = [
        row(
            GROUPINGS.get(str(r["by"]), str(r["by"])),
            str(r["groups"]) + (f" ({r['pooled_to']})" if r["pooled_to"] != r["groups"] else ""),
            num.plain(r["chi2"], 1),
            num.count(r["df"]),
            num.p_value(r["p_value"]),
            num.p_value(r["p_clustered"]),
        )
        for r in rows.to_dict("records")
    ]
    heads = (
        Column("By", number=False),
        *(
            Column(c)
            for c in ("Groups (pooled to)", "Chi-square", "Degrees", "p, loans independent", "p, by period")
        ),
    )
    return Table(f"{cause}: total tests of events against expected", heads, tuple(out))
