"""What a reviewer should know about paths before signing them: sentences, nothing is refused here."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency, format_period
from stresskit.core.values import AFTERWARDS, FILLED, MacroHistory, ScenarioPath

Floats = NDArray[np.float64]

#: Rounding in a published table is no jump: a move counts as larger from this ratio on.
_LARGER = 1.0 + 1e-9
#: A history in percent that never leaves +-0.5, or one in fractions that goes beyond +-1.5, is probably the other.
_PERCENT_FROM, _FRACTION_TO = 0.5, 1.5
#: Words that tell the sentence on a jump at the join from all others.
JOINS = "where the path joins history"


def path_findings(paths: Sequence[ScenarioPath], history: MacroHistory) -> list[str]:
    """Sentences on identical scenarios, units, impossible values, jumps, values history has not seen, vintage, and reach.

    An index trends, so its moves are relative and what is compared with history's range is its
    growth over one year; all other variables are compared as they are. History counts up to the
    period before a path starts. Most important first; an empty list means nothing to say.
    """
    twins = [_identical(a, b) for a, b in combinations(paths, 2)]
    out = [sentence for sentence in twins if sentence]
    out.extend(_units(history))
    for finder in (_impossible, _join, _return, _unseen):
        for path in paths:
            for variable in path.values:
                found = finder(path, variable, history)
                out.extend(f"Scenario {path.name}: {words}" for words in found)
    out.extend(_vintage(paths, history))
    reach: dict[str, list[str]] = {}
    for path in paths:
        for words in _reach(path):
            reach.setdefault(words, []).append(path.name)
    for words, names in reach.items():
        out.append(f"Scenario{'s' if len(names) > 1 else ''} {', '.join(names)}: {words}")
    return out


def _identical(a: ScenarioPath, b: ScenarioPath) -> str:
    same = bool(a.values) and a.start == b.start and a.values.keys() == b.values.keys()
    if same and all(np.array_equal(a.values[v], b.values[v]) for v in a.values):
        return f"Scenarios {a.name} and {b.name} are identical: every variable has the same values in every period."
    return ""


def _vintage(paths: Sequence[ScenarioPath], history: MacroHistory) -> list[str]:
    """That the macro table goes on where the paths begin: it is newer than the scenarios."""
    starts = [p.start for p in paths if p.values and p.start <= history.end]
    if not starts:
        return []
    first, last = (format_period(p, history.frequency) for p in (min(starts), history.end))
    n = history.end - min(starts) + 1
    unit = "month" if history.frequency is Frequency.MONTH else "quarter"
    return [
        f"Stale vintage: the macro table has {n} {unit}{'s' if n > 1 else ''} ({first}{f' to {last}' if n > 1 else ''}) that the "
        "scenarios still project. They are not used, and what was revised up to as_of is; a later as_of with scenarios restated "
        f"from {format_period(history.end + 1, history.frequency)} uses them."
    ]


def _units(history: MacroHistory) -> list[str]:
    """Variables whose history looks as if it were in another unit than the study declares."""
    out = []
    for variable, values in history.values.items():
        known, unit = values[np.isfinite(values)], history.units.get(variable)
        if not known.any():
            continue
        seen = f"the history of {variable} lies between {known.min():.4g} and {known.max():.4g}"
        size = float(np.abs(known).max())
        if unit == "percent" and size <= _PERCENT_FROM:
            out.append(
                f"Unit of {variable}: {seen} throughout, small for unit: percent (5 is 5 %); "
                "if 0.05 means 5 %, declare unit: fraction."
            )
        elif unit == "fraction" and size > _FRACTION_TO:
            out.append(
                f"Unit of {variable}: {seen}, large for unit: fraction (0.05 is 5 %); "
                "if 5 means 5 %, declare unit: percent."
            )
    return out


def _observed(path: ScenarioPath, variable: str, history: MacroHistory) -> Floats:
    """The variable's observed values up to the period before the path, (n,), all finite, newest last."""
    values = history.values.get(variable, np.empty(0))[: max(0, path.start - history.start)]
    return values[np.isfinite(values)]


def _relative(variable: str, history: MacroHistory, *series: Floats) -> bool:
    return history.units.get(variable) == "index" and all(bool((s > 0).all()) for s in series)


def _change(old: Floats, new: Floats, relative: bool) -> Floats:
    return new / old - 1.0 if relative else new - old


def _size(change: float, unit: str, relative: bool) -> str:
    if relative:
        return f"{change:+.1%}"
    return f"{change:+.3g}" + (" points" if unit == "percent" else "")


def _impossible(path: ScenarioPath, variable: str, history: MacroHistory) -> list[str]:
    unit = history.units.get(variable)
    rows = np.flatnonzero(path.values[variable] <= 0)
    if unit not in ("index", "level") or not rows.size:
        return []
    first = format_period(path.start + int(rows[0]), path.frequency)
    return [f"{variable} ({unit}) is at or below zero in {_count(rows.size, path)}, first in {first}."]


def _join(path: ScenarioPath, variable: str, history: MacroHistory) -> list[str]:
    past, ahead = _observed(path, variable, history), path.values[variable]
    if not past.size:
        return []
    between = (
        f"{JOINS}, from {past[-1]:.6g} in {format_period(path.start - 1, path.frequency)} "
        f"to {ahead[0]:.6g} in {format_period(path.start, path.frequency)}"
    )
    return _jump(path, variable, history, step=np.array([past[-1], ahead[0]]), where=between)


def _return(path: ScenarioPath, variable: str, history: MacroHistory) -> list[str]:
    """A jump where what is stated ends: an artefact, where a jump inside the stated path is intent."""
    ahead = path.values[variable]
    row = max(_sound(path.flags[variable]), path.stated.get(variable, 0))
    if not 0 < row < ahead.size:
        return []
    where = (
        f"in {format_period(path.start + row, path.frequency)}, where the stated values end and the "
        "afterwards rule begins"
    )
    return _jump(path, variable, history, step=ahead[row - 1 : row + 1], where=where)


def _jump(path: ScenarioPath, variable: str, history: MacroHistory, *, step: Floats, where: str) -> list[str]:
    """A sentence when the move between the two values of ``step`` is larger than any one-period move of history."""
    past = _observed(path, variable, history)
    if past.size < 2:
        return []
    relative = _relative(variable, history, past, step)
    move = float(_change(step[:1], step[1:], relative)[0])
    largest, when = _largest(past, path, relative)
    if abs(move) <= abs(largest) * _LARGER:
        return []
    unit = history.units.get(variable, "")
    return [
        f"{variable} jumps by {_size(move, unit, relative)} {where}; "
        f"history's largest one-period move is {_size(largest, unit, relative)} in {when}."
    ]


def _largest(past: Floats, path: ScenarioPath, relative: bool) -> tuple[float, str]:
    moves = _change(past[:-1], past[1:], relative)
    row = int(np.argmax(np.abs(moves)))
    return float(moves[row]), format_period(path.start - moves.size + row, path.frequency)


def _unseen(path: ScenarioPath, variable: str, history: MacroHistory) -> list[str]:
    past, ahead = _observed(path, variable, history), path.values[variable]
    year = path.frequency.per_year
    relative = _relative(variable, history, past, ahead)
    what = variable
    if relative:
        if past.size <= year:
            return []
        joined = np.concatenate([past, ahead])
        growth = joined[year:] / joined[:-year] - 1.0
        past, ahead = growth[: -ahead.size], growth[-ahead.size :]
        what = f"the yearly growth of {variable}"
    if past.size < 2:
        return []
    low, high = float(past.min()), float(past.max())
    unit = history.units.get(variable, "")
    seen = f"{low:.1%} to {high:.1%}" if relative else f"{low:.4g} to {high:.4g}"
    out = []
    for side, distance in (("above", ahead - high), ("below", low - ahead)):
        rows = np.flatnonzero(distance > abs(high - low) * (_LARGER - 1.0))
        if rows.size:
            far = float(distance.max())
            size = f"{100 * far:.1f} percentage points" if relative else _size(far, unit, False).lstrip("+")
            out.append(
                f"{what} lies {side} anything in history ({seen}) in {_count(rows.size, path)} from "
                f"{format_period(path.start + int(rows[0]), path.frequency)}, by up to {size}."
            )
    return out


def _sound(flags: NDArray[np.int64]) -> int:
    """How many rows come before the first that rests on an afterwards rule."""
    stated = np.flatnonzero(flags != AFTERWARDS)
    return int(stated[-1]) + 1 if stated.size else 0


def _reach(path: ScenarioPath) -> list[str]:
    """Variables whose stated values end before the path does, grouped by where they end."""
    groups: dict[tuple[int, bool], list[str]] = {}
    for variable, flags in path.flags.items():
        sound = _sound(flags)
        groups.setdefault((sound, path.stated.get(variable, 0) > sound), []).append(variable)
    out = []
    for (sound, changes), variables in sorted(groups.items()):
        rest = path.horizon - sound
        if not rest:
            continue
        last = format_period(path.start + sound - 1, path.frequency)
        share = f"the last {_count(rest, path)} of {path.horizon} ({rest / path.horizon:.0%})"
        if changes:
            out.append(
                f"{', '.join(variables)} {'changes a path that is' if len(variables) == 1 else 'change paths that are'} stated up to "
                f"{last}; {share} follow the afterwards rule of {'that path' if len(variables) == 1 else 'those paths'} or of this scenario."
            )
            continue
        how = "stated or filled" if any((path.flags[v] == FILLED).any() for v in variables) else "stated"
        out.append(
            f"{', '.join(variables)} {'is' if len(variables) == 1 else 'are'} {how} up to {last}; {share} follow the afterwards rule."
        )
    return out


def _count(n: int, path: ScenarioPath) -> str:
    unit = "month" if path.frequency is Frequency.MONTH else "quarter"
    return f"{n} {unit}{'s' if n != 1 else ''}"
