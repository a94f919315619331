"""Plausibility of a study's scenarios as tables and sentences."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd
from scipy.special import ndtri

from stresskit.core.period import Frequency, format_period
from stresskit.macro.var import VarModel, forecast_mean, forecast_sd, levels
from stresskit.runs.records import PlausibilityTables
from stresskit.scenario.plausibility import Plausibility, Span

WHOLE, YEAR = "whole path", "first year"
#: A path of which fewer than this share lie further away is said to be so among the cautions.
IMPLAUSIBLE = 0.001
#: Shares below this are not told apart in words: the normal law is not known that far out.
RAREST = 1e-6

_COLUMNS = {
    "scenarios": (
        "scenario", "span", "first", "last", "periods", "stated", "d2", "tail", "in_words", "rank", "windows",
        "beyond_5pct",
    ),
    "variables": ("scenario", "variable", "how", "periods", "z", "at", "d2", "dof", "tail"),
    "pairs": (
        "scenario", "first", "second", "d2_together", "dof", "tail_together", "d2_apart", "excess",
    ),
    "episodes": ("scenario", "span", "place", "first", "last", "d2", "tail"),
    "forecast": ("variable", "unit", "period", "middle", "low", "high"),
}  # fmt: skip


def in_words(tail: float, stated: int) -> str:
    """The share of paths that lie further from the forecast, for people."""
    if stated == 0:
        return "nothing is stated in this span"
    if tail < RAREST:
        return "fewer than one in a million such paths are this far from the forecast"
    if tail <= 0.5:
        n = 1.0 / tail
        digits = max(0, math.floor(math.log10(n)) - 1)
        return f"about one in {int(round(n, -digits)):,} such paths is this far from the forecast"
    share = "nearly all" if tail > 0.995 else f"{100 * tail:.0f}%"
    return f"nearer to the forecast than {share} of such paths"


def plausibility_tables(
    model: VarModel, found: Sequence[Plausibility], units: Mapping[str, str]
) -> PlausibilityTables:
    """All tables of what ``scenario.plausibility.assess_paths`` found; units: variable -> unit of its values."""
    rows: dict[str, list[tuple[Any, ...]]] = {name: [] for name in _COLUMNS}
    for item in found:
        _scenario(rows, item, model.frequency)
    rows["forecast"] = _forecast(model, found, units)
    frames = {
        name: pd.DataFrame(rows[name], columns=list(columns)) if rows[name] else _empty(columns)
        for name, columns in _COLUMNS.items()
    }
    told = []
    for item in found:
        told += _told(item, model.frequency)
        mine = frames["variables"][frames["variables"]["scenario"] == item.scenario]
        if words := furthest_words(mine):
            told.append(f"Scenario {item.scenario}: {words}.")
        pairs = frames["pairs"][frames["pairs"]["scenario"] == item.scenario]
        told += [f"Scenario {item.scenario}: {pair_words(r)}." for r in pairs.to_dict("records")]
    return PlausibilityTables(model=facts(model), sentences=tuple(told), **frames)


def _empty(columns: Sequence[str]) -> pd.DataFrame:
    return pd.DataFrame({c: pd.Series(dtype="object") for c in columns})


def facts(model: VarModel) -> dict[str, Any]:
    """What the VAR is, for the record."""
    return {
        "variables": dict(zip(model.names, model.transforms, strict=True)),
        "lags": model.lags,
        "criterion": model.criterion,
        "first": format_period(model.first, model.frequency),
        "last": format_period(model.last, model.frequency),
        "periods": model.nobs,
        "largest_root": model.root,
        "band": model.band,
    }


def _scenario(rows: dict[str, list[tuple[Any, ...]]], item: Plausibility, clock: Frequency) -> None:
    name = item.scenario
    for label, span in ((WHOLE, item.whole), (YEAR, item.first_year)):
        d = span.distance
        rows["scenarios"].append(
            (
                name, label, format_period(item.start, clock), format_period(item.start + span.periods - 1, clock),
                span.periods, d.dof, d.d2, d.tail, in_words(d.tail, d.dof), span.rank, span.windows,
                span.beyond / span.windows if span.windows else math.nan,
            )
        )  # fmt: skip
        for place, e in enumerate(span.episodes, start=1):
            ends = format_period(e.first, clock), format_period(e.last, clock)
            rows["episodes"].append((name, label, place, *ends, e.distance.d2, e.distance.tail))
    for m in item.moves:
        own = (m.distance.d2, m.distance.dof, m.distance.tail) if m.distance else (math.nan,) * 3
        how = "given" if m.distance else "filled"
        rows["variables"].append((name, m.name, how, m.periods, m.z, format_period(m.period, clock), *own))
    if item.pair is not None:
        p = item.pair
        apart = p.apart[0].d2 + p.apart[1].d2
        rows["pairs"].append(
            (name, *p.names, p.together.d2, p.together.dof, p.together.tail, apart, p.excess)
        )


def _forecast(
    model: VarModel, found: Sequence[Plausibility], units: Mapping[str, str]
) -> list[tuple[Any, ...]]:
    """Bands as far as any scenario states values, one year at least; cut at a variable's floor."""
    periods = max([model.frequency.per_year, *(item.whole.periods for item in found)])
    mean = forecast_mean(model, periods)
    half = float(ndtri(0.5 + model.band / 2.0)) * forecast_sd(model, periods)
    out: list[tuple[Any, ...]] = []
    for i, (name, transform) in enumerate(zip(model.names, model.transforms, strict=True)):
        floor = model.floors.get(name, -np.inf)
        three = [np.maximum(levels(y[:, i], transform), floor) for y in (mean, mean - half, mean + half)]
        for h in range(periods):
            label = format_period(model.last + 1 + h, model.frequency)
            out.append((name, units.get(name, ""), label, *(float(x[h]) for x in three)))
    return out


def with_bands(frame: pd.DataFrame, found: Sequence[Plausibility]) -> pd.DataFrame:
    """The path table with low, high and at_floor of filled values."""
    out = frame.assign(low=np.nan, high=np.nan, at_floor=False)
    for item in found:
        for name, band in item.filled.items():
            mine = (out["scenario"] == item.scenario) & (out["variable"] == name) & (out["flag"] == "filled")
            n = int(mine.sum())
            out.loc[mine, "low"], out.loc[mine, "high"] = band.low[:n], band.high[:n]
            out.loc[mine, "at_floor"] = band.at_floor[:n]
    return out


def _among(span: Span, clock: Frequency) -> str:
    if not span.windows:
        return "history is too short for a window of that length"
    worst = span.episodes[0]
    ends = f"{format_period(worst.first, clock)} to {format_period(worst.last, clock)}"
    if span.rank == 1:
        return f"further than each of {span.windows:,} windows of history of that length, of which {ends} was the furthest"
    return f"{span.rank - 1:,} of {span.windows:,} windows of history of that length were further, {ends} the furthest"


def furthest_words(rows: pd.DataFrame) -> str:
    """Which of a scenario's stated variables lies furthest from its forecast: why the path is as far as it is."""
    stated = rows[rows["how"] == "given"]
    if not len(stated):
        return ""
    size = stated["z"].astype(float).abs()
    r = stated.iloc[int(np.argmax(size))]
    return (
        f"furthest from its own forecast is {r['variable']}, by {float(r['z']):+.1f} standard deviations in {r['at']}; its path alone: "
        f"{in_words(float(r['tail']), int(r['dof']))}"
    )


def pair_words(r: Mapping[Any, Any]) -> str:
    """What a row of the table of pairs says; far together is what hardly half of all paths are."""
    size = f"(d² {r['d2_together']:.1f} together, {r['d2_apart']:.1f} apart)"
    names = f"{r['first']} and {r['second']}"
    if r["excess"] <= 0:
        return f"no pair of variables moves against the ties of history; nearest to it are {names} {size}"
    if r["tail_together"] > 0.5:
        return f"no pair of variables is far from history together; the furthest are {names} {size}"
    return f"least like history together are {names}, which move against the ties between them {size}"


def _told(item: Plausibility, clock: Frequency) -> list[str]:
    """One sentence per span."""
    unit = "month" if clock is Frequency.MONTH else "quarter"
    out = []
    for label, span in ((WHOLE, item.whole), (YEAR, item.first_year)):
        d = span.distance
        if d.dof:
            out.append(
                f"Scenario {item.scenario}, {label} ({span.periods} {unit}s, {d.dof} stated values): "
                f"{in_words(d.tail, d.dof)} (d² {d.d2:.1f}); {_among(span, clock)}."
            )
    return out


def plausibility_cautions(tables: PlausibilityTables, paths: pd.DataFrame) -> list[str]:
    """Scenarios hardly any path is further away than, and filled values that were put at a floor."""
    out = []
    rows = tables.scenarios
    for r in rows[rows["tail"].astype(float) < IMPLAUSIBLE].itertuples():
        out.append(f"Scenario {r.scenario}, {r.span}: {r.in_words} of the study's VAR.")
    floored = paths[paths["at_floor"].astype(bool)]
    for (scenario, variable), part in floored.groupby(["scenario", "variable"], sort=False):
        many = len(part) > 1
        out.append(
            f"Scenario {scenario}: {len(part)} filled value{'s' if many else ''} of {variable} lay below its floor "
            f"{float(part['value'].iloc[0]):g} and {'were' if many else 'was'} put there, from {part['period'].iloc[0]} on; the "
            "other filled values were not adjusted to that."
        )
    return out
