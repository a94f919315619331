"""The scenario part of `stresskit check`: paths beside history and forecast, plausibility, features out of range."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pandas as pd
from rich.text import Text

from stresskit.core.errors import DataError
from stresskit.core.period import format_period
from stresskit.core.values import FLAG_NAMES, ScenarioPath
from stresskit.hazard.at_risk import cause_rows
from stresskit.hazard.learn import feature_at_risk
from stresskit.macro.features import build_features
from stresskit.report.terminal import console, show
from stresskit.runs.api import Prepared, StudyFile
from stresskit.runs.plausibility import RAREST, plausibility_tables
from stresskit.scenario.plausibility import assess_paths

#: Years of the paths that the terminal shows, at the end of each.
SHOWN_YEARS = 5
NOT_ASSESSED = "How plausible the scenarios are was not assessed: the study declares no macro.var."


def scenario_tables(file: StudyFile, data: Prepared) -> dict[str, Any]:
    """What the check tells of scenarios beside sentences; empty for a study without macro variables."""
    if data.history is None or file.study.macro is None:
        return {}
    out: dict[str, Any] = {"paths": _paths(data, None), "features_outside": _outside(file, data)}
    if data.var is None:
        return out
    tables = plausibility_tables(data.var, assess_paths(data.var, data.paths), data.history.units)
    return out | {
        "paths": _paths(data, tables.forecast),
        "plausibility": tables.scenarios,
        "plausibility_variables": tables.variables,
        "plausibility_words": list(tables.sentences),
        "var": dict(tables.model),
    }


def _paths(data: Prepared, forecast: pd.DataFrame | None) -> pd.DataFrame:
    """variable, period, a column per scenario (value, and how it came about unless given), the forecast's band."""
    history = data.history
    assert history is not None
    year = history.frequency.per_year
    bands = {} if forecast is None else {(r.variable, r.period): r for r in forecast.itertuples()}
    out = []
    for variable, observed in history.values.items():
        mine = [p for p in data.paths if variable in p.values]
        if not mine:
            continue
        start, longest = mine[0].start, max(p.horizon for p in mine)
        known = observed[: start - history.start]
        for row in [-1, *range(year - 1, min(longest, SHOWN_YEARS * year), year)]:
            period = format_period(start + row, history.frequency)
            cells: dict[str, str] = {"variable": variable, "period": period}
            for p in data.paths:
                cells[p.name] = f"{known[-1]:.5g} observed" if row < 0 else _cell(p, variable, row)
            band = bands.get((variable, period))
            if forecast is not None:
                cells["VAR forecast"] = "" if band is None else f"{band.low:.4g} to {band.high:.4g}"
            out.append(cells)
    return pd.DataFrame(out)


def _cell(path: ScenarioPath, variable: str, row: int) -> str:
    if variable not in path.values or row >= path.horizon:
        return "-"
    how = FLAG_NAMES[int(path.flags[variable][row])]
    return f"{path.values[variable][row]:.5g}" + ("" if how == "given" else f" {how}")


def _ranges(file: StudyFile, data: Prepared) -> dict[str, tuple[float, float]]:
    """Feature column -> lowest and highest value over the rows at risk of the hazards that use it, as a fit keeps them.

    Of several hazards the narrowest range counts: outside it at least one is extrapolated. No fit is needed.
    """
    out: dict[str, tuple[float, float]] = {}
    risk = data.loans.risk_set
    for cause, spec in file.study.hazards.items():
        needed = spec.macro_features()
        if not needed or cause not in risk.causes:
            continue
        try:
            rows = cause_rows(risk, cause, data.features, needed)
        except DataError:
            continue  # no row is left: a fit stops at this, and the check has told it
        for name in needed:
            read = {c: value for c, (_, value) in feature_at_risk(name, rows, data.features).items()}
            everywhere = np.concatenate(list(read.values()))
            for column, value in read.items():
                seen = value if value.size else everywhere
                low, high = float(seen.min()), float(seen.max())
                before = out.get(column, (low, high))
                out[column] = max(low, before[0]), min(high, before[1])
    return out


def _outside(file: StudyFile, data: Prepared) -> pd.DataFrame:
    """Features that leave the range on which hazards are estimated: how far, how long, from when."""
    macro, history, ranges = file.study.macro, data.history, _ranges(file, data)
    assert macro is not None
    assert history is not None
    out = []
    # Without a row at risk there is no range, and features of the path may not even be had: the check has told why.
    for path in data.paths if ranges else ():
        ahead = build_features(
            macro, history,
            model=file.frequency, start=file.as_of + 1, end=file.as_of + data.horizon, path=path,
        )  # fmt: skip
        for name in ahead.names:
            if name not in ranges:
                continue
            low, high = ranges[name]
            value = ahead.column(name)
            far = np.maximum(low - value, value - high)
            rows = np.flatnonzero(far > 0)
            if rows.size:
                furthest = int(np.argmax(far))
                first = format_period(ahead.start + int(rows[0]), ahead.frequency)
                size = float(far[furthest])
                share = size / (high - low) if high > low else math.nan
                out.append(
                    (path.name, name, low, high, float(value[furthest]), size, share, rows.size, first)
                )
    heads = (
        "scenario",
        "feature",
        "lowest",
        "highest",
        "furthest",
        "outside_by",
        "of_width",
        "periods",
        "first",
    )
    return pd.DataFrame(out, columns=list(heads))


def print_scenarios(outcome: dict[str, Any]) -> None:
    """The tables of :func:`scenario_tables` on stdout."""
    if "paths" not in outcome:
        return
    if len(outcome["paths"]):
        show(outcome["paths"], title="Scenario paths at the end of each year")
    if len(outcome["features_outside"]):
        rows = outcome["features_outside"]
        shown = rows[["scenario", "feature", "furthest", "of_width", "periods", "first"]]
        shown.insert(2, "estimated_on", [f"{r.lowest:.3g} to {r.highest:.3g}" for r in rows.itertuples()])
        show(
            shown,
            title="Macro features outside the range that hazards are estimated on; beyond: by how much of its width",
            formats={"furthest": lambda v: f"{v:.3g}", "of_width": _percent},
            names={"of_width": "beyond"},
        )
    else:
        console().print(
            Text("Macro features: every scenario stays inside the range that hazards are estimated on.\n")
        )
    if "plausibility" in outcome:
        _print_plausibility(outcome)
    else:
        console().print(Text(f"{NOT_ASSESSED}\n"))


def _print_plausibility(outcome: dict[str, Any]) -> None:
    rows, model = outcome["plausibility"], outcome["var"]
    shown = rows[["scenario", "span", "periods", "stated", "d2", "tail"]].assign(
        rank=[f"{r} of {w + 1}" if w else "-" for r, w in zip(rows["rank"], rows["windows"], strict=True)]
    )
    show(
        shown,
        title="Plausibility: distance of what scenarios state from the VAR's forecast; rank among the path and windows of history",
        formats={"d2": _tenth, "tail": _share},
    )
    show(
        outcome["plausibility_variables"],
        title="Each variable by itself: largest distance in standard deviations; its own path's d2 and tail",
        formats={"z": lambda v: f"{v:+.1f}", "d2": _tenth, "dof": _whole, "tail": _share},
    )
    out = console()
    made = ", ".join(f"{name} ({how})" for name, how in model["variables"].items())
    out.print(
        Text(
            f"VAR of {made}: {model['lags']} lag{'s' if model['lags'] > 1 else ''} ({model['criterion']}), "
            f"{model['periods']} periods {model['first']} to {model['last']}, largest root {model['largest_root']:.3f}"
        )
    )
    for sentence in outcome["plausibility_words"]:
        out.print(Text(f"  - {sentence}"))
    out.print()


def _percent(value: float) -> str:
    return "-" if math.isnan(value) else f"{value:.0%}"


def _tenth(value: float) -> str:
    return "-" if math.isnan(value) else f"{value:.1f}"


def _whole(value: float) -> str:
    return "-" if math.isnan(value) else f"{value:.0f}"


def _share(value: float) -> str:
    if math.isnan(value):
        return "-"
    return f"{value:.2g}" if value >= RAREST else f"<{RAREST:.0e}"
