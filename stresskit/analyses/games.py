"""The games of an attribution: the loss along every mixture of two paths, projected in batches."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from stresskit.analyses.mixed import with_channels, with_variables
from stresskit.core.errors import UsageError
from stresskit.core.period import year_of
from stresskit.core.values import ScenarioPath
from stresskit.kernels.blocks import processors
from stresskit.loss.book import Route
from stresskit.loss.result import LossResult
from stresskit.runs.setting import Setting
from stresskit.spec.base import meant

Floats = NDArray[np.float64]

#: Paths that go through the book together.
BATCH = 8
#: Variables or groups told apart: 2^k projections.
MOST_PLAYERS = 10


@dataclass(frozen=True, slots=True)
class Player:
    """A variable, or a group of them, that moves from one path to the other as a whole."""

    name: str
    variables: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Cast:
    """Who plays, sorted by name, and who does not: variables that differ and are not read, read and do not differ."""

    players: tuple[Player, ...]
    not_read: tuple[str, ...]
    alike: tuple[str, ...]


def cast(
    start: ScenarioPath, end: ScenarioPath, read: Sequence[str], groups: Mapping[str, Sequence[str]]
) -> Cast:
    """The players between two paths.

    Raises UsageError for a group that names no variable of the paths, a group called like a variable outside it, and more
    players than can be told apart.
    """
    known = sorted(set(start.values) & set(end.values))
    for group, names in groups.items():
        for name in names:
            if name not in known:
                raise UsageError(
                    f"attribution.groups.{group}: there is no variable {name!r}{meant(name, known)} (variables: {', '.join(known)})"
                )
        if group in known and group not in names:
            raise UsageError(
                f"attribution.groups: a group cannot be called {group!r}, a variable that is not in it has that name"
            )
    differ = [v for v in known if not np.array_equal(start.values[v], end.values[v])]
    moved = [v for v in differ if v in read]
    owner = {v: g for g, names in groups.items() for v in names}
    found: dict[str, list[str]] = {}
    for v in moved:
        found.setdefault(owner.get(v, v), []).append(v)
    players = tuple(Player(n, tuple(found[n])) for n in sorted(found))
    if len(players) > MOST_PLAYERS:
        raise UsageError(
            f"{len(players)} variables differ between {start.name} and {end.name} and are read, which would take 2^{len(players)} "
            f"projections; at most {MOST_PLAYERS} can be told apart: put some together under attribution.groups, such as "
            f"groups: {{{players[0].name}_and_{players[1].name}: [{players[0].variables[0]}, {players[1].variables[0]}]}}"
        )
    not_read = tuple(v for v in differ if v not in read)
    return Cast(players, not_read, tuple(v for v in known if v in read and v not in differ))


@dataclass(slots=True, eq=False)
class Mixtures:
    """Losses along mixtures of two paths; every figure (cells, Y + 1): discounted lifetime loss by calendar year of the
    default, and last the part of the first 12 months.

    count  projections made so far
    tell   called with that number after each batch
    """

    setting: Setting
    start: ScenarioPath
    end: ScenarioPath
    players: tuple[Player, ...]
    channels: tuple[str, ...]
    tell: Callable[[int], None]
    count: int = 0
    _routes: dict[int, Route] = field(default_factory=dict)
    results: dict[tuple[int, tuple[str, ...]], Floats] = field(default_factory=dict)

    @property
    def years(self) -> tuple[int, ...]:
        """Calendar years of the steps of the projection."""
        book = self.setting.portfolio
        steps = np.arange(1, self.setting.book.horizon + 1)
        return tuple(dict.fromkeys(year_of(book.as_of + int(h), book.frequency) for h in steps))

    @property
    def everybody(self) -> int:
        return (1 << len(self.players)) - 1

    def path(self, mask: int) -> ScenarioPath:
        """The start with the variables of a coalition as the end has them."""
        names = [v for i, p in enumerate(self.players) if mask >> i & 1 for v in p.variables]
        return with_variables(self.start, self.end, names, f"{self.start.name} with {mask}")

    def route(self, mask: int) -> Route:
        """Kept while it is needed: what is worked out for a path on the way (recoveries after each default) is worked out once."""
        if mask not in self._routes:
            self._routes[mask] = self.setting.route(self.path(mask))
        return self._routes[mask]

    def _asked(self, mask: int, channels: Sequence[str]) -> tuple[int, tuple[str, ...]]:
        """The name under which a mixture's figure is kept; nothing moves without variables or without channels."""
        some = tuple(c for c in self.channels if c in channels)
        return (mask, some) if mask and some else (0, ())

    def values(self, asked: Iterable[tuple[int, Sequence[str]]]) -> Floats:
        """(n, cells, Y + 1) figures of coalitions of variables through some channels, projected where not known yet."""
        keys = [self._asked(m, c) for m, c in asked]
        new = [k for k in dict.fromkeys(keys) if k not in self.results]
        for first in range(0, len(new), BATCH):
            part = new[first : first + BATCH]
            routes = [self._mixture(*key) for key in part]
            found = self.setting.book.along(routes, threads=processors())
            self.results |= {k: self._figure(r) for k, r in zip(part, found, strict=True)}
            self.count += len(part)
            self._forget({mask for mask, _ in new[first + BATCH :]})
            self.tell(self.count)
        return np.array([self.results[k] for k in keys])

    def _mixture(self, mask: int, channels: tuple[str, ...]) -> Route:
        if channels == self.channels:
            return self.route(mask)
        return with_channels(self.route(0), self.route(mask), channels) if channels else self.route(0)

    def _figure(self, result: LossResult) -> Floats:
        return by_year(self.setting, result)

    def _forget(self, needed: set[int]) -> None:
        """Lets go of what was worked out for coalitions that are not asked for any more: it can be as large as the book."""
        for mask in set(self._routes) - needed - {0, self.everybody}:
            del self._routes[mask]


def by_year(setting: Setting, result: LossResult) -> Floats:
    """(cells, Y + 1) discounted loss by calendar year of the default, then that of the first 12 months."""
    book, el = setting.portfolio, result.cells["el"]
    years = np.array([year_of(book.as_of + h, book.frequency) for h in range(1, el.shape[1] + 1)])
    starts = np.flatnonzero(np.diff(years, prepend=years[0] - 1))
    whole = np.add.reduceat(el, starts, axis=1)
    return np.column_stack([whole, el[:, : book.frequency.per_year].sum(axis=1)])
