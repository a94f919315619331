"""Figures of the macro side: scenario paths with history, and features against their estimation range."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from stresskit.report import figures as fig
from stresskit.report import numbers as num
from stresskit.report.picture import MOST_PANELS, Key, Panel, Picture, scenario_marks
from stresskit.report.reading import at_largest, decimal_years, numbers, reference, single_scenarios
from stresskit.report.tables import MOST_ROWS, Cell, Table, columns, cut, row
from stresskit.runs.records import PlausibilityTables, StudyResult

#: Cells of all path tables together; beyond that the tables are cut and name the file that has all.
MOST_CELLS = 12_000
#: Years of macro history drawn.
HISTORY_YEARS = 25


def path_picture(result: StudyResult) -> Picture | None:
    """History and scenarios of every macro variable; None without macro variables."""
    frame = result.paths
    if not len(frame):
        return None
    legend = tuple(m for m in scenario_marks(result) if m.name in single_scenarios(result))
    panels, tables = [], []
    variables = frame["variable"].unique()
    most = max(24, MOST_CELLS // (len(variables) * max(1, len(legend))))
    for k, variable in enumerate(variables):
        mine = frame[frame["variable"] == variable]
        history = mine[mine["scenario"] == "history"]
        if len(history):
            x = decimal_years(history["period"])
            history = history[x > x[-1] - HISTORY_YEARS]
        paths = {str(n): rows for n, rows in mine.groupby("scenario", sort=False) if n != "history"}
        note = _gap(paths, reference(result), relative=str(mine["unit"].iloc[0]) == "index")
        svg = fig.path_panel(
            history,
            paths,
            legend,
            forecast=forecast_of(result, str(variable)),
            key=f"path{k}",
            alt=f"{variable}: history, then a line per scenario. {note}",
        )
        panels.append(Panel(str(variable), str(mine["unit"].iloc[0]), svg, note))
        names = [m.name for m in legend if m.name in paths]
        tables.append(_path_table(str(variable), history, paths, names, most=most))
    caption = (
        "History (dark line, at most the last 25 years) up to the dotted upright at its last value, then a line per "
        "scenario. A line is dashed after the scenario's last given value: from there its rule for afterwards holds."
    )
    keys: tuple[Key, ...] = ()
    if result.plausibility is not None:
        band = band_words(result.plausibility)
        caption += f" Shaded: where {band} of the paths lie that the VAR expects from history alone, while values are stated."
        keys = (Key("band", "band", f"forecast, {band} of paths"),)
        if (frame["flag"] == "filled").any():
            caption += " Dash and dot: values that a scenario leaves out and the VAR fills, given those it states; fine dots: their band."
            keys = (*keys, Key("dashdot", "ink", "left out and filled, with band"))
    return Picture("paths", caption, tuple(panels), tuple(tables), legend, keys)


def band_words(tables: PlausibilityTables) -> str:
    """The probability inside the bands, ``90%``."""
    return f"{100 * float(tables.model['band']):g}%"


def forecast_of(result: StudyResult, variable: str) -> pd.DataFrame | None:
    """The forecast of one variable, None when there is none."""
    if result.plausibility is None:
        return None
    rows = result.plausibility.forecast
    return rows[rows["variable"] == variable]


def _gap(paths: Mapping[str, pd.DataFrame], base: str, *, relative: bool) -> str:
    """Where each other scenario is furthest from the reference; in percent for an index, whose points mean nothing."""
    if base not in paths:
        return ""
    before = paths[base].set_index("period")["value"]
    out = []
    for name, rows in paths.items():
        after = rows.set_index("period")["value"]
        apart = after / before - 1.0 if relative else after - before
        gap = apart.dropna().rename("gap").reset_index()
        size = np.abs(numbers(gap, "gap"))
        if name == base or not size.shape[0] or size.max() == 0:
            continue
        far = at_largest(gap, size)
        how = num.percent(far["gap"], 1) if relative else num.plain(far["gap"])
        words = f"{name} {num.signed(how)} in {far['period']}"
        out.append((float(size.max()), words))
    furthest = [words for _, words in sorted(out, key=lambda pair: -pair[0])[:3]]
    return f"Furthest from {base}: " + "; ".join(furthest) + "." if furthest else ""


def _path_table(
    variable: str,
    history: pd.DataFrame,
    paths: Mapping[str, pd.DataFrame],
    shown: Sequence[str],
    *,
    most: int,
) -> Table:
    by_period = {n: paths[n].set_index("period") for n in shown}
    periods = list(dict.fromkeys(p for n in shown for p in paths[n]["period"]))
    out = [
        row(str(r.period), *([Cell(num.plain(r.value), mark="past")] * len(shown)))
        for r in history.tail(8).itertuples(index=False)
    ]
    for period in periods:
        cells = []
        for n in shown:
            if period not in by_period[n].index:
                cells.append(Cell(num.MISSING))
                continue
            r = by_period[n].loc[period]
            flag = str(r["flag"])
            below = "" if flag == "given" else flag
            if flag == "filled" and np.isfinite(r.get("low", np.nan)):
                below = f"filled, {num.plain(r['low'])} to {num.plain(r['high'])}"
            cells.append(Cell(num.plain(r["value"]), below, "" if flag == "given" else "after"))
        out.append(row(str(period), *cells))
    rows, note = cut(out, rest="results.xlsx and paths.csv", most=min(most, MOST_ROWS))
    past = "The first rows are history." if len(history) else ""
    return Table(variable, columns("Period", *shown), rows, f"{past} {note}".strip())


def feature_picture(result: StudyResult) -> Picture | None:
    """Macro features along the scenarios against the range of estimation; None without features."""
    names = single_scenarios(result)
    frame = result.features[result.features["scenario"].isin(names)]
    if not len(frame):
        return None
    legend = tuple(m for m in scenario_marks(result) if m.name in names)
    panels = []
    features = [str(f) for f in frame["feature"].unique()]
    for k, feature in enumerate(features[:MOST_PANELS]):
        mine = frame[frame["feature"] == feature]
        lowest, highest = float(mine["lowest"].iloc[0]), float(mine["highest"].iloc[0])
        outside = mine[mine["outside"].astype(float) > 0]
        who = ", ".join(str(s) for s in outside["scenario"].unique())
        note = f"Outside in {who}." if who else "Inside the range in every scenario."
        svg = fig.feature_panel(
            {str(n): rows for n, rows in mine.groupby("scenario", sort=False)}, legend,
            lowest=lowest, highest=highest, key=f"feature{k}", alt=f"{feature} along the scenarios. {note}",
        )  # fmt: skip
        panels.append(
            Panel(feature, f"estimated on {num.plain(lowest, 3)} to {num.plain(highest, 3)}", svg, note)
        )
    left = len(features) - len(panels)
    caption = (
        "Shaded: the values that the hazards were estimated on. Outside it a hazard rests on the shape of the formula, "
        "not on experience."
        + (f" The first {len(panels)} features; {left} more are in features.csv." if left else "")
    )
    return Picture("features", caption, tuple(panels), (_feature_table(frame),), legend)


def _feature_table(frame: pd.DataFrame) -> Table:
    out = []
    for (feature, scenario), rows in frame.groupby(["feature", "scenario"], sort=False):
        value = numbers(rows, "value")
        low, high = at_largest(rows, -value), at_largest(rows, value)
        out.append(
            row(
                str(feature),
                str(scenario),
                f"{num.plain(low['lowest'], 3)} to {num.plain(low['highest'], 3)}",
                Cell(num.plain(low["value"], 3), f"in {low['period']}"),
                Cell(num.plain(high["value"], 3), f"in {high['period']}"),
                num.count((rows["outside"].astype(float) > 0).sum()),
                num.count((rows["flag"] == "afterwards").sum()),
            )
        )
    heads = columns(
        "Feature",
        "Scenario",
        "Estimated on",
        "Lowest",
        "Highest",
        "Periods outside",
        "Periods afterwards",
        words=2,
    )
    note = "Afterwards: made from a value after a scenario's last given one, which its rule for afterwards supplies."
    return Table("Macro features along the scenarios", heads, tuple(out), note)
