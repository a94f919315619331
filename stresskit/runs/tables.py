"""Value objects to the tables of :class:`stresskit.runs.records.StudyResult`."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.coded import coded
from stresskit.core.period import Frequency, format_period
from stresskit.core.values import (
    FLAG_NAMES,
    FeatureTable,
    MacroHistory,
    Portfolio,
    RiskSet,
    ScenarioPath,
)
from stresskit.hazard.diagnostics import actual_expected, hazard_by_age
from stresskit.hazard.result import HazardFit
from stresskit.kernels.packs import firsts
from stresskit.loss.assess import CELL_MEASURES, LossResult
from stresskit.loss.result import AMOUNTS
from stresskit.macro.calendar import first_after
from stresskit.panel.result import Finding
from stresskit.projection.factors import ranks
from stresskit.runs.records import PORTFOLIO

Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Cells:
    """The finest breakdown: cells of all segment columns crossed, and how they add up.

    codes       (n,) cell of each loan
    count       number of cells
    breakdowns  (by, segment labels, (cells,) index of the segment each cell belongs to)
    """

    codes: Ints
    count: int
    breakdowns: tuple[tuple[str, tuple[str, ...], Ints], ...]


def make_cells(portfolio: Portfolio, segments: Sequence[str]) -> Cells:
    """Cells and breakdowns: whole book, each column by itself, all columns crossed."""
    n = portfolio.n_loans
    if not segments:
        return Cells(np.zeros(n, dtype=np.int64), 1, (("", (PORTFOLIO,), np.zeros(1, dtype=np.int64)),))
    levels, inverse = [], []
    for name in segments:
        column = coded(portfolio, name)
        values, place = np.unique(column.values.astype(str), return_inverse=True)
        levels.append(values)
        inverse.append(place[column.codes])
    crossed = np.ravel_multi_index(tuple(inverse), tuple(v.shape[0] for v in levels))
    codes, count = ranks(crossed)
    first = firsts(codes, count)
    out: list[tuple[str, tuple[str, ...], Ints]] = [("", (PORTFOLIO,), np.zeros(count, dtype=np.int64))]
    for name, values, index in zip(segments, levels, inverse, strict=True):
        out.append((name, tuple(map(str, values)), index[first]))
    labels = _labels(segments, [v[i[first]] for v, i in zip(levels, inverse, strict=True)])
    if len(segments) > 1:
        out.append(("+".join(segments), labels, np.arange(count, dtype=np.int64)))
    return Cells(codes, count, tuple(out))


def _labels(names: Sequence[str], columns: Sequence[NDArray[Any]]) -> tuple[str, ...]:
    """Labels of crossed cells; spelled out with names where values that hold " / " would make two look alike."""
    short = tuple(" / ".join(map(str, values)) for values in zip(*columns, strict=True))
    if len(set(short)) == len(short):
        return short
    return tuple(
        ", ".join(f"{n}={str(v)!r}" for n, v in zip(names, values, strict=True))
        for values in zip(*columns, strict=True)
    )


def _group_sum(values: NDArray[Any], index: Ints, size: int) -> NDArray[Any]:
    """Sum rows of ``values`` (k, ...) into ``size`` groups, in row order."""
    out = np.zeros((size, *values.shape[1:]))
    np.add.at(out, index, values)
    return out


def _ratio(top: NDArray[Any], bottom: NDArray[Any]) -> NDArray[Any]:
    out: NDArray[Any] = np.divide(
        top, bottom, out=np.full(np.shape(top), np.nan), where=np.asarray(bottom) > 0
    )
    return out


def _of_all(measure: str, values: NDArray[np.float64], portfolio: Portfolio) -> NDArray[np.float64]:
    """A measure of each entry as a sum over the loans that it stands for; amounts are such sums already."""
    return values if portfolio.count is None or measure in AMOUNTS else values * portfolio.count


def whole_number(loans: float) -> float:
    """A number of loans as an integer, as it is where counts are not whole."""
    return int(loans) if loans == int(loans) else loans


def whole_numbers(numbers: NDArray[np.float64]) -> NDArray[Any]:
    """Numbers of loans as integers, as they are where counts are not whole."""
    whole = numbers.astype(np.int64)
    return whole if (whole == numbers).all() else numbers


def summary_table(portfolio: Portfolio, cells: Cells, results: Mapping[str, LossResult]) -> pd.DataFrame:
    """A row per scenario, breakdown and segment; columns as in StudyResult.summary."""
    frames = []
    counts = portfolio.counts
    for scenario, result in results.items():
        for by, labels, index in cells.breakdowns:
            segment, size = index[cells.codes], len(labels)
            loans = _group_sum(counts, segment, size)
            total = {m: _group_sum(_of_all(m, v, portfolio), segment, size) for m, v in result.loans.items()}
            frames.append(
                pd.DataFrame(
                    {
                        "scenario": scenario,
                        "by": by,
                        "segment": labels,
                        "loans": whole_numbers(loans),
                        "exposure": _group_sum(portfolio.balance, segment, size),
                        "pd_12m": total["pd_12m"] / loans,
                        "pd_lifetime": total["pd_lifetime"] / loans,
                        "pd_no_payoff": total["pd_no_payoff"] / loans,
                        "payoff_lifetime": total["payoff_lifetime"] / loans,
                        "lgd": _ratio(total["el_lifetime"], total["exposed_lifetime"]),
                        "el_12m": total["el_12m"],
                        "el_lifetime": total["el_lifetime"],
                        "from_extrapolated_age": _ratio(total["extrapolated"], total["pd_lifetime"]),
                        "beyond_path": _ratio(total["beyond_path"], total["pd_lifetime"]),
                    }
                )
            )
    return pd.concat(frames, ignore_index=True)


def segment_table(portfolio: Portfolio, cells: Cells, results: Mapping[str, LossResult]) -> pd.DataFrame:
    """A row per scenario, breakdown, segment and step; columns as in StudyResult.segments."""
    frames = []
    per_cell = np.bincount(cells.codes, weights=portfolio.count, minlength=cells.count).astype(np.float64)
    for scenario, result in results.items():
        horizon = next(iter(result.cells.values())).shape[1]
        steps = np.arange(1, horizon + 1)
        periods = [format_period(portfolio.as_of + int(h), portfolio.frequency) for h in steps]
        for by, labels, index in cells.breakdowns:
            loans = _group_sum(per_cell, index, len(labels))
            total = {m: _group_sum(result.cells[m], index, len(labels)) for m in CELL_MEASURES}
            for k, label in enumerate(labels):
                share = {m: total[m][k] / loans[k] for m in ("on_book", "default", "payoff", "matured")}
                frames.append(
                    pd.DataFrame(
                        {
                            "scenario": scenario,
                            "by": by,
                            "segment": label,
                            "step": steps,
                            "period": periods,
                            "survival": share["on_book"],
                            "default": share["default"],
                            "payoff": share["payoff"],
                            "matured": share["matured"],
                            "default_cumulative": np.cumsum(share["default"]),
                            "balance": total["balance"][k],
                            "default_amount": total["default_amount"][k],
                            "el": total["el"][k],
                        }
                    )
                )
    return pd.concat(frames, ignore_index=True)


def path_table(
    history: MacroHistory | None, paths: Sequence[ScenarioPath], *, as_of: int, model: Frequency
) -> pd.DataFrame:
    """History up to as_of, then every scenario: a row per variable and macro period."""
    names = ["scenario", "variable", "unit", "period", "value", "flag"]
    if history is None:
        return pd.DataFrame({n: pd.Series(dtype="float64" if n == "value" else "object") for n in names})
    first = first_after(as_of, model=model, macro=history.frequency)
    keep = max(0, min(history.n_periods, first - history.start))
    frames = []
    for variable, values in history.values.items():
        periods = [format_period(history.start + i, history.frequency) for i in range(keep)]
        frames.append(
            pd.DataFrame(
                {
                    "scenario": "history",
                    "variable": variable,
                    "unit": history.units[variable],
                    "period": periods,
                    "value": values[:keep],
                    "flag": "observed",
                }
            ).dropna(subset=["value"])
        )
    for path in paths:
        for variable, values in path.values.items():
            frames.append(
                pd.DataFrame(
                    {
                        "scenario": path.name,
                        "variable": variable,
                        "unit": history.units.get(variable, ""),
                        "period": [
                            format_period(path.start + i, path.frequency) for i in range(path.horizon)
                        ],
                        "value": values,
                        "flag": [FLAG_NAMES[int(f)] for f in path.flags[variable]],
                    }
                )
            )
    return pd.concat(frames, ignore_index=True)[names]


def feature_table(
    fits: Mapping[str, HazardFit], observed: FeatureTable, projected: Mapping[str, FeatureTable]
) -> pd.DataFrame:
    """Every macro feature that a hazard uses, on model periods, with its estimation range."""
    ranges: dict[str, tuple[float, float]] = {}
    for f in fits.values():
        for name, (low, high) in f.feature_ranges.items():
            before = ranges.get(name, (low, high))
            # The narrowest range counts: outside it at least one hazard is extrapolated.
            ranges[name] = (max(low, before[0]), min(high, before[1]))
    frames = []
    for scenario, table in [("history", observed), *projected.items()]:
        for name in table.names:
            if name not in ranges:
                continue
            value, (low, high) = table.column(name), ranges[name]
            frames.append(
                pd.DataFrame(
                    {
                        "scenario": scenario,
                        "feature": name,
                        "period": [
                            format_period(table.start + i, table.frequency) for i in range(table.n_periods)
                        ],
                        "value": value,
                        "lowest": low,
                        "highest": high,
                        "outside": np.maximum(np.maximum(low - value, value - high), 0.0),
                        "flag": "observed"
                        if scenario == "history"
                        else [FLAG_NAMES[int(f)] for f in table.flags[:, table.names.index(name)]],
                    }
                )
            )
    names = ["scenario", "feature", "period", "value", "lowest", "highest", "outside", "flag"]
    if not frames:
        return pd.DataFrame(
            {n: pd.Series(dtype="object" if n in (*names[:3], "flag") else "float64") for n in names}
        )
    return pd.concat(frames, ignore_index=True)


def diagnostic_tables(
    fits: Mapping[str, HazardFit], risk_set: RiskSet, features: FeatureTable
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Hazard by age, and actual against expected events by calendar period, all causes."""
    ages: list[pd.DataFrame] = []
    periods: list[pd.DataFrame] = []
    for cause, f in fits.items():
        for out, frame in (
            (ages, hazard_by_age(f, risk_set, features)),
            (periods, actual_expected(f, risk_set, features)),
        ):
            frame = frame.drop(columns="cause", errors="ignore")
            frame.insert(0, "cause", cause)
            out.append(frame)
    return pd.concat(ages, ignore_index=True), pd.concat(periods, ignore_index=True)


def coefficient_table(fits: Mapping[str, HazardFit]) -> pd.DataFrame:
    """Coefficients of all causes, one under the other."""
    frames = []
    for cause, f in fits.items():
        frame = f.coefficient_table().drop(columns="cause", errors="ignore")
        frame.insert(0, "cause", cause)
        frames.append(frame)
    return pd.concat(frames, ignore_index=True)


def fit_facts(fits: Mapping[str, HazardFit]) -> dict[str, dict[str, Any]]:
    """The facts block of every fit."""
    out = {}
    for cause, f in fits.items():
        facts = f.facts.plain()
        facts |= {
            "link": f.spec.link,
            "df": f.df if np.isfinite(f.df) else None,
            "covariance": f.covariance_kind,
        }
        facts |= {"rows": facts.pop("n_rows"), "loans": facts.pop("n_loans"), "events": facts.pop("n_events")}
        facts |= {
            "periods": facts.pop("n_periods"),
            "coefficients": f.design.k,
            "aic": f.aic,
            "converged": True,
            "gates_failed": [g.name for g in f.failed_gates],
        }
        if f.facts.count:
            # what a reader counts is loan-periods; an identifier is a line of the table, and one cluster
            facts |= {"table_rows": facts["rows"], "rows": f.nobs, "lines": facts.pop("loans")}
        if not f.estimation.plain:
            facts |= {"estimator": f.estimation.method} | {
                name: value
                for name, value in f.estimation.document().items()
                if name not in ("method", "free", "weights")
            }
        out[cause] = facts
    return out


def finding_table(findings: Sequence[Finding]) -> pd.DataFrame:
    """Findings of the quality rules; ``first`` joined to one text."""
    return pd.DataFrame(
        [(f.code, f.policy, f.severity, f.count, ", ".join(f.first), f.message) for f in findings],
        columns=["code", "policy", "severity", "count", "first", "message"],
    )
