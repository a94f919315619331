"""A reverse stress test as tables, sentences, notes and scenario text."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.special import ndtr

from stresskit.analyses.elasticity import in_shares
from stresskit.analyses.reversed import Reached, Reversed
from stresskit.core.period import Frequency, format_period
from stresskit.core.values import FLAG_NAMES, ScenarioPath
from stresskit.macro.var import forecast_mean, levels
from stresskit.runs.records import AnalysisTable

Floats = NDArray[np.float64]

#: How values of a unit stand in a sentence.
_PLAIN = {"percent": "{:.1f}", "fraction": "{:.3f}", "index": "{:.1f}", "level": "{:.4g}"}
#: Years of history in the table of paths.
HISTORY_YEARS = 12


def chance(distance: float) -> float:
    """Share of the VAR's paths whose figure is at least that of the nearest path, to first order: Φ(-distance)."""
    return float(ndtr(-distance))


def chance_words(distance: float) -> str:
    """``about one path in 34``."""
    share = chance(distance)
    if share < 1e-6:
        return "fewer than one path in a million"
    if share > 0.4:
        return "about half of all paths"
    n = 1.0 / share
    digits = max(0, int(np.floor(np.log10(n))) - 1)
    return f"about one path in {int(round(n, -digits)):,}"


def reverse_answer(found: Reversed) -> str:
    """The mildest path in words, or that there is none within the distance."""
    target, base = found.target, found.free.base.name
    aim = f"{target.what} of {target.words(target.threshold)} ({target.words(found.before)} along {base})"
    if found.reached:
        best = found.reached[0]
        if best.distance < 1e-6:
            return (
                f"The VAR's own forecast, continued by the rule for afterwards, reaches the {aim}: it gives "
                f"{target.words(found.at_forecast)}, with no shock at all."
            )
        return (
            f"The mildest path that reaches a {aim}: {_moves(found, best)}. It lies {best.distance:.2f} standard deviations from the "
            f"VAR's forecast; {chance_words(best.distance)} has a figure as high or higher."
        )
    if not found.worst:
        return f"No path was found that reaches a {aim}: the search did not settle."
    worst = found.worst[0]
    far = (
        f"the nearest path that does lies {found.nearest:.2f} away"
        if np.isfinite(found.nearest)
        else "no path was found at all"
    )
    return (
        f"A {aim} cannot be reached within {found.within:g} standard deviations of the VAR's forecast: {far}. The largest figure "
        f"within that distance is {target.words(worst.figure)}: {_moves(found, worst)}."
    )


def _unit(found: Reversed, variable: str) -> str:
    history = found.free.setting.data.history
    return "level" if history is None else history.units[variable]


def _moves(found: Reversed, reached: Reached) -> str:
    """``unemployment_rate up to 8.1 in 2027Q1 (baseline 5.1), ...`` of the variables read."""
    out = []
    for v in found.read:
        x, base = reached.path.values[v], found.free.base.values[v]
        row, gap = _furthest(found, v, x, base)
        when = format_period(found.free.base.start + row, found.free.base.frequency)
        word = "up" if gap > 0 else "down"
        say = _PLAIN[_unit(found, v)].format
        out.append(
            (
                abs(gap),
                f"{v.replace('_', ' ')} {word} to {say(x[row])} in {when} ({found.free.base.name} {say(base[row])})",
            )
        )
    return ", ".join(words for _, words in out)


def _furthest(found: Reversed, variable: str, x: Floats, base: Floats) -> tuple[int, float]:
    """Row and size of the largest gap to the reference in the free periods; relative for an index or a level."""
    n = found.free.periods
    gap = x[:n] - base[:n] if in_shares(_unit(found, variable)) else x[:n] / base[:n] - 1.0
    row = int(np.argmax(np.abs(gap)))
    return row, float(gap[row])


def reverse_tables(found: Reversed) -> tuple[AnalysisTable, ...]:
    """All tables; docs/reverse-stress.md lists their columns."""
    out = [
        AnalysisTable(
            "solutions",
            "Paths found",
            _solutions(found),
            note="distance: standard deviations from the VAR's forecast, the root of d². share beyond: share of the VAR's paths with a "
            "figure as high or higher, to first order.",
        ),
        AnalysisTable(
            "moves",
            "Where they differ most from the reference",
            _furthest_moves(found),
            note="gap: in points, or of an index or level as a share; the largest one in the free periods.",
        ),
        AnalysisTable(
            "scenarios",
            "Beside the study's own scenarios",
            _scenarios(found),
            note="distance of a scenario: of the values that it states, over whatever length it states them.",
        ),
        AnalysisTable("paths", "Paths", _paths(found), shown=False),
    ]
    if found.surface is not None:
        out.append(AnalysisTable("surface", "Figure over two variables", _surface(found), shown=False))
    return tuple(out)


def _kind(found: Reversed) -> str:
    """Column name of the figure, by which it is written as a share or an amount."""
    return "pd_or_share" if found.target.share else "el_figure"


def _solutions(found: Reversed) -> pd.DataFrame:
    kind, rows = _kind(found), []
    for r in (*found.reached, *found.worst):
        row = {
            "scenario": r.name,
            kind: r.figure,
            "share_of_threshold": r.figure / found.target.threshold,
            "distance": r.distance,
            "d2": r.distance**2,
            "share_beyond": chance(r.distance) if r in found.reached else np.nan,
        }
        rows.append(row)
    if not rows:
        return pd.DataFrame({"scenario": pd.Series(dtype=object), kind: pd.Series(dtype=float)})
    return pd.DataFrame(rows)


def _furthest_moves(found: Reversed) -> pd.DataFrame:
    rows = []
    for r in (*found.reached, *found.worst):
        for v in found.read:
            x, base = r.path.values[v], found.free.base.values[v]
            at, gap = _furthest(found, v, x, base)
            shares = in_shares(_unit(found, v))
            rows.append(
                {
                    "scenario": r.name,
                    "variable": v,
                    "unit": _unit(found, v),
                    "period": format_period(found.free.base.start + at, found.free.base.frequency),
                    "value": x[at],
                    "reference": base[at],
                    "gap_points": gap if shares else np.nan,
                    "gap_change": np.nan if shares else gap,
                }
            )
    names = ("scenario", "variable", "unit", "period", "value", "reference", "gap_points", "gap_change")
    return pd.DataFrame(rows, columns=list(names))


def _scenarios(found: Reversed) -> pd.DataFrame:
    rows = [(r.name, r.figure, r.distance) for r in (*found.reached, *found.worst)]
    rows += [("VAR forecast", found.at_forecast, 0.0), *found.others]
    frame = pd.DataFrame(rows, columns=["scenario", _kind(found), "distance"])
    frame.insert(2, "share_of_threshold", frame[_kind(found)] / found.target.threshold)
    return frame.assign(reached=frame["share_of_threshold"] >= 1.0 - 1e-6)


def _paths(found: Reversed) -> pd.DataFrame:
    """scenario ("history" for observed values), variable, unit, period, value, flag; of the VAR's variables."""
    free, frames = found.free, []
    history, clock = free.setting.data.history, free.base.frequency
    costliest = max(found.others, key=lambda o: o[1])[0]
    shown: list[ScenarioPath] = [r.path for r in (*found.reached, *found.worst)] + [free.base]
    if costliest != free.base.name:
        shown.append(free.setting.path(costliest))
    for i, v in enumerate(free.model.names):
        if history is not None:
            end = free.base.start - history.start
            x = history.values[v][max(0, end - HISTORY_YEARS * clock.per_year) : end]
            first = free.base.start - x.size
            frames.append(_rows("history", (v, _unit(found, v)), first, x, ["observed"] * x.size, clock))
        for p in shown:
            if v not in p.values:
                # a variable that nothing reads need not be stated by a scenario
                continue
            n = min(p.horizon, free.periods + 2 * clock.per_year)
            flags = [FLAG_NAMES[int(f)] for f in p.flags[v][:n]]
            frames.append(_rows(p.name, (v, _unit(found, v)), p.start, p.values[v][:n], flags, clock))
        mean = levels(forecast_mean(free.model, free.periods)[:, i], free.model.transforms[i])
        frames.append(
            _rows("VAR forecast", (v, _unit(found, v)), free.base.start, mean, ["given"] * mean.size, clock)
        )
    return pd.concat(frames, ignore_index=True)


def _rows(
    name: str, variable: tuple[str, str], first: int, x: Floats, flags: list[str], clock: Frequency
) -> pd.DataFrame:
    """``variable``: its name and unit; ``first``: ordinal of the first period."""
    periods = [format_period(first + k, clock) for k in range(x.size)]
    return pd.DataFrame(
        {
            "scenario": name,
            "variable": variable[0],
            "unit": variable[1],
            "period": periods,
            "value": x,
            "flag": flags,
        }
    )


def _surface(found: Reversed) -> pd.DataFrame:
    assert found.surface is not None
    s = found.surface
    a, b = np.meshgrid(*s.shifts, indexing="ij")
    names = [
        f"{v}_{'change' if relative else 'points'}" for v, relative in zip(s.names, s.relative, strict=True)
    ]
    return pd.DataFrame({names[0]: a.ravel(), names[1]: b.ravel(), _kind(found): s.figures.ravel()})


def reverse_notes(found: Reversed) -> tuple[str, ...]:
    """How it was done, and what it cannot say."""
    free, target = found.free, found.target
    clock = "months" if free.base.frequency.per_year == 12 else "quarters"
    made = target.count - found.on_surface
    out = [
        f"Most plausible: smallest Mahalanobis distance under the study's VAR over {free.periods} free {clock} of "
        f"{', '.join(free.model.names)}; after them the rule for afterwards. {_count(found.starts, 'start')}, "
        f"{_count(found.gradients, 'whole gradient')}, {made:,} projections of the whole book"
        + (f", and {found.on_surface} for the surface." if found.on_surface else "."),
    ]
    outside = sorted(set(found.all_read) - set(free.model.names))
    if outside:
        out.append(f"{', '.join(outside)}: read, but not in macro.var, so as in {free.base.name} throughout.")
    if found.reached and found.reached[0].distance >= 1e-6:
        out.append(
            "The chance is that of the VAR at its estimated parameters, with the threshold's surface taken as flat at the nearest path "
            "(first-order reliability); other paths beyond the threshold are further away."
        )
        if len(found.reached) > 1:
            out.append(f"{len(found.reached)} different paths reach the threshold; each has a scenario file.")
    if found.reached or found.worst:
        names = ", ".join(f"{r.name}.yaml" for r in (*found.reached, *found.worst))
        out.append(
            f"Ready as scenarios: {names}. Each was read back and projected again; figures and distances are those of the text."
        )
    return tuple(out)


def _count(n: int, what: str) -> str:
    return f"{n} {what}{'' if n == 1 else 's'}"


def text_of(found: Reversed, reached: Reached) -> str:
    """The scenario file of a path."""
    study, target = found.free.setting.file.study, found.target
    kind = "largest figure within the distance" if reached in found.worst else "nearest path that reaches it"
    head = (
        f"Reverse stress of {study.study} at {study.as_of}: {target.what} of {target.words(target.threshold)}.",
        f"This path, the {kind}, gives {target.words(reached.figure)} at d² {reached.distance**2:.6g} ({reached.dof} stated values).",
    )
    notes = {
        "purpose": f"Reverse stress test: {target.what} of {target.words(target.threshold)}.",
        "origin": "Found by a search over the paths of the study's VAR; most plausible, not most likely to happen.",
    }
    return found.free.text(reached.y, name=reached.name, head=head, notes=notes)
