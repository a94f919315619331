"""Tables of evidence: coefficients, actual against expected, reconciliation, findings, alignment, macro range, record."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

import pandas as pd

from stresskit.report import numbers as num
from stresskit.report.reading import at_largest, calendar_years, numbers, single_scenarios
from stresskit.report.tables import Cell, Table, columns, cut, from_frame, row, text, without
from stresskit.runs.records import StudyResult

#: Facts of a fit that the report names, in this order; all of them are in the workbook's record.
_FACT_WORDS = {
    "link": "link", "rows": "rows at risk", "loans": "loans", "events": "events",
    "count": "counts of loans by column", "table_rows": "rows of the table at risk", "lines": "lines, each one cluster",
    "rows_without_feature": "rows left out because a macro feature was not known", "coefficients": "coefficients",
    "llf": "log-likelihood", "aic": "AIC", "converged": "converged", "iterations": "iterations",
    "deviance_change": "last relative change of the deviance", "scaled_gradient": "scaled gradient",
    "smallest_age": "smallest age observed", "largest_age": "largest age observed",
    "df": "degrees of freedom of the t quantiles",
}  # fmt: skip


def causes(result: StudyResult) -> tuple[str, ...]:
    """Causes in the order of the coefficient table."""
    return tuple(str(c) for c in result.coefficients["cause"].unique())


def fit_line(facts: Mapping[str, object]) -> str:
    """One line of facts on a fit."""
    parts = []
    for key, words in _FACT_WORDS.items():
        value = facts.get(key)
        # a weighted count of none can leave a residue
        residue = key == "rows_without_feature" and isinstance(value, int | float) and value < 0.5
        if value is None or residue:
            continue
        parts.append(f"{words} {_fact(value)}")
    return "; ".join(parts)


def _fact(value: object) -> str:
    if isinstance(value, bool) or not isinstance(value, int | float):
        return text(value)
    return num.count(value) if float(value).is_integer() else num.plain(value, 3)


def coefficient_table(result: StudyResult, cause: str) -> Table:
    """Coefficients of one cause; all three standard errors beside each other."""
    rows = result.coefficients[result.coefficients["cause"] == cause]
    out = []
    factors = [math.exp(c) if abs(c) < 50 else math.nan for c in numbers(rows, "coef")]
    for r, factor in zip(rows.itertuples(index=False), factors, strict=True):
        out.append(
            row(
                str(r.term),
                num.plain(r.coef, 4),
                num.plain(factor, 3),
                Cell(num.plain(r.se, 4), text(r.se_kind)),
                num.plain(r.statistic),
                *_inference(r.se, r.p_value, r.lower, r.upper),
                num.plain(r.se_period, 4),
                num.plain(r.se_loan, 4),
                num.plain(r.se_model, 4),
                _sign(r.expect, r.sign_ok, getattr(r, "at_bound", False)),
            )
        )
    heads = columns(
        "Term", "Coefficient", "exp", "Standard error", _letter(rows), "p", "Interval (95%)", "se by period", "se by loan",
        "se of the model", "Expected sign",
    )  # fmt: skip
    return Table(f"Coefficients of the {cause} hazard", heads, tuple(out))


def _letter(rows: pd.DataFrame) -> str:
    """z where the errors shown first go with the normal distribution, as in the summary of the fit."""
    return "z" if set(rows["se_kind"]) <= {"model_expected", "model_observed", "loan"} else "t"


def _inference(se: Any, p: Any, lower: Any, upper: Any) -> tuple[str, str]:
    """p-value and interval; a coefficient with an error and no p-value is one whose inference is withheld (see gates.md)."""
    if math.isfinite(se) and math.isnan(p):
        return "withheld", "withheld"
    return num.p_value(p), f"{num.plain(lower, 3)} to {num.plain(upper, 3)}"


def _sign(expect: object, ok: object, at_bound: object) -> Cell:
    if at_bound is True:
        return Cell("held at its bound", "free fit beside it in coefficients.csv", "warn")
    if not isinstance(expect, str) or not expect:
        return Cell("not stated")
    good = ok is not None and ok is not pd.NA and bool(ok)
    return Cell(expect, "has it" if good else "has it NOT", "good" if good else "warn")


def age_table(rows: pd.DataFrame) -> Table:
    """The table behind the hazards by age."""
    out = [
        row(
            num.count(r.age), num.count(r.at_risk), num.count(r.events), num.percent(r.observed, 3),
            f"{num.percent(r.lower, 3)} to {num.percent(r.upper, 3)}", num.percent(r.fitted, 3),
        )
        for r in rows.itertuples(index=False)
    ]  # fmt: skip
    heads = columns("Age", "At risk", "Events", "Observed", "95% band", "Fitted", words=0)
    rows_shown, note = cut(out, rest="hazard_by_age.csv")
    return Table("Hazard by age", heads, rows_shown, note)


def yearly_actual_expected(rows: pd.DataFrame) -> pd.DataFrame:
    """Sums of at_risk, events, expected by calendar year (index)."""
    years = rows.assign(year=calendar_years(rows["period"]))
    return years.groupby("year")[["at_risk", "events", "expected"]].sum()


def actual_expected_table(rows: pd.DataFrame) -> Table:
    """Events counted and expected by calendar year, with their ratio."""
    out = [
        row(
            str(year), num.count(r["at_risk"]), num.count(r["events"]), num.plain(r["expected"], 1), _ratio(r)
        )
        for year, r in yearly_actual_expected(rows).iterrows()
    ]
    heads = columns("Year", "Rows at risk", "Actual", "Expected", "Actual / expected")
    return Table("Actual against expected by calendar year", heads, tuple(out))


def period_table(rows: pd.DataFrame) -> Table:
    """The same by calendar period, with the band of the evidence where the rows have one."""
    banded = "low_events" in rows
    out = [
        row(
            text(r["period"]),
            num.count(r["at_risk"]),
            num.count(r["events"]),
            num.plain(r["expected"], 2),
            _ratio(r),
            f"{num.plain(r['low_events'], 1)} to {num.plain(r['high_events'], 1)}" if banded else "",
        )
        for _, r in rows.iterrows()
    ]
    heads = columns("Period", "Rows at risk", "Actual", "Expected", "Actual / expected", "95% band")
    rows_shown, note = cut(out, rest="actual_expected.csv")
    table = Table("Actual against expected by calendar period", heads, rows_shown, note)
    return table if banded else without(table, "95% band")


def _ratio(r: pd.Series) -> str:
    return num.plain(r["events"] / r["expected"]) if r["expected"] else num.MISSING


def gate_tables(result: StudyResult) -> tuple[str, Table | None, Table] | None:
    """What every fit was measured against before it was projected: a sentence, those that failed, all of them; None where
    the record does not say."""
    gates = result.record.get("gates")
    if not isinstance(gates, Sequence) or not gates:
        return None
    rows = [(bool(g["passed"]), _gate_row(g)) for g in gates]
    failed = tuple(r for passed, r in rows if not passed)
    line = f"{len(rows) - len(failed)} of {len(rows)} gates passed" + (
        ", none failed." if not failed else "."
    )
    heads = columns("Cause", "Gate", "Asked", "Found", "Verdict", words=5)
    short = Table("Gates that failed and were accepted", heads, failed) if failed else None
    return line, short, Table("Gates of the fits", heads, tuple(r for _, r in rows))


def _gate_row(gate: Mapping[str, Any]) -> tuple[Cell, ...]:
    reason = str(gate.get("accepted", ""))
    verdict = Cell("passed", mark="good") if gate["passed"] else Cell("failed", f"accepted: {reason}", "warn")
    name = str(gate["name"]).replace("_", " ")
    return row(str(gate["cause"]), name, str(gate["asked"]), str(gate["found"]), verdict)


def reconciliation_table(result: StudyResult) -> tuple[Table, tuple[str, ...]]:
    """The account of the loan data, and one sentence per column that does not add up (none is good)."""
    frame = result.reconciliation
    counts = [c for c in frame.columns if c not in ("what", "reason")]
    wrong = []
    what = frame["what"].astype(str)
    if {"in", "used"} <= set(what):
        for c in counts:
            total = frame[c].groupby(what).sum()
            gap = float(total["in"] - total["used"] - total.get("left out", 0))
            if abs(gap) > 1e-9 * max(1.0, abs(float(total["in"]))):
                wrong.append(f"{c.replace('_', ' ')}: in differs from used + left out by {num.plain(gap)}")
    formats = {c: (num.amount if c == "balance" else num.count) for c in counts}
    shown = frame.assign(reason=frame["reason"].fillna(""))
    return from_frame(shown, "Reconciliation of the loan data", formats=formats), tuple(wrong)


def findings_table(result: StudyResult) -> Table:
    """What the quality rules found."""
    return from_frame(result.findings, "Findings of the quality rules", formats={"count": num.count})


def alignment_table(result: StudyResult) -> Table:
    """Which macro period a model period read."""
    return from_frame(
        result.alignment,
        "Alignment sample",
        formats={"value": lambda v: num.plain(v, 4)},
        rest="alignment.csv",
        most=60,
    )


def outside_table(result: StudyResult) -> Table | None:
    """Macro features outside their estimation range, by scenario; None when all stay inside."""
    frame = result.features
    ahead = frame[frame["scenario"].isin(single_scenarios(result)) & (frame["outside"].astype(float) > 0)]
    if not len(ahead):
        return None
    out = []
    for (scenario, feature), rows in ahead.groupby(["scenario", "feature"], sort=False):
        everything = frame[(frame["scenario"] == scenario) & (frame["feature"] == feature)]
        lowest, highest = float(rows["lowest"].iloc[0]), float(rows["highest"].iloc[0])
        far = at_largest(rows, numbers(rows, "outside"))
        beyond, width = float(far["outside"]), highest - lowest
        out.append(
            row(
                str(scenario),
                str(feature),
                f"{num.plain(lowest, 3)} to {num.plain(highest, 3)}",
                Cell(num.plain(far["value"], 3), f"in {far['period']}"),
                Cell(
                    num.plain(beyond, 3),
                    f"{num.percent(beyond / width, 0)} of the range" if width > 0 else "",
                ),
                Cell(f"{len(rows):,} of {len(everything):,}", f"longest run {_longest_run(everything)}"),
                f"{rows['period'].iloc[0]} to {rows['period'].iloc[-1]}",
            )
        )
    heads = columns(
        "Scenario", "Feature", "Estimated on", "Furthest value", "Outside by", "Periods outside", "First to last",
        words=2,
    )  # fmt: skip
    return Table("Macro features outside their estimation range", heads, tuple(out))


def _longest_run(rows: pd.DataFrame) -> int:
    longest = now = 0
    for outside in rows["outside"].astype(float) > 0:
        now = now + 1 if outside else 0
        longest = max(longest, now)
    return longest


def flat_record(record: Mapping[str, object]) -> tuple[dict[str, str], dict[str, str]]:
    """The run record as dotted names: short values, and texts of several lines apart."""
    short: dict[str, str] = {}
    long: dict[str, str] = {}
    for key, value in _walk("", record):
        shown = text(value)
        (long if "\n" in shown.strip() else short)[key] = shown
    return short, long


def _walk(prefix: str, value: object) -> Iterator[tuple[str, object]]:
    if isinstance(value, Mapping):
        for key, inner in value.items():
            yield from _walk(f"{prefix}.{key}" if prefix else str(key), inner)
    elif isinstance(value, Sequence) and not isinstance(value, str | bytes):
        if all(not isinstance(v, Mapping | list | tuple) for v in value):
            yield prefix, " ".join(str(v) for v in value)
            return
        for k, inner in enumerate(value, start=1):
            label = inner.get("name", k) if isinstance(inner, Mapping) else k
            yield from _walk(f"{prefix}.{label}", inner)
    else:
        yield prefix, value
