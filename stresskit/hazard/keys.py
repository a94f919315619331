"""Keys: which column of a macro feature that goes by a loan column (a region's house prices) a loan reads."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import prod
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.coded import Coder
from stresskit.core.values import KeyedFeature, level_column
from stresskit.hazard.levels import Coded
from stresskit.hazard.terms import KeyedMacro, level_codes

Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Keys:
    """Combinations of levels, one of each loan column that some feature of a hazard goes by.

    A key is the number of a combination, 0 <= key < count; loans with the same key read the same columns. Without
    features that go by a column there is one key, 0.
    """

    terms: tuple[KeyedMacro, ...]

    @property
    def levels(self) -> dict[str, tuple[str, ...]]:
        """Loan column -> levels with a variable in every feature that goes by it."""
        out: dict[str, tuple[str, ...]] = {}
        for term in self.terms:
            out[term.by] = tuple(v for v in out.get(term.by, term.levels) if v in term.levels)
        return out

    @property
    def count(self) -> int:
        return prod(len(levels) for levels in self.levels.values())

    def of_loans(
        self,
        columns: Mapping[str, NDArray[Any] | Coded],
        n: int,
        ids: NDArray[Any] | None = None,
        coder: Coder | None = None,
    ) -> Ints:
        """(n,) key of each loan; ``coder`` where columns are already there as codes.

        DataError for loans of a level that a feature has no variable for.
        """
        key = np.zeros(n, dtype=np.int64)
        for term in {term.key: term for term in self.terms}.values():
            level_codes(term.source, term.key, columns, ids, coder)
        for by, levels in self.levels.items():
            key = key * len(levels) + level_codes("", KeyedFeature(by, levels), columns, ids, coder)
        return key

    def reads(self, key: int) -> dict[str, str]:
        """Feature -> column of a feature table that loans of a key read."""
        levels = self.levels
        places = np.unravel_index(key, tuple(map(len, levels.values()))) if levels else ()
        mine = {by: levels[by][int(place)] for by, place in zip(levels, places, strict=True)}
        return {term.source: level_column(term.source, mine[term.by]) for term in self.terms}

    def not_read(self, key: int) -> set[str]:
        """Columns of a feature table that only loans of other keys read."""
        return {column for term in self.terms for column in term.columns} - set(self.reads(key).values())
