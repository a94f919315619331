"""A column of levels by its distinct values: found once, so that nobody looks at the text of every loan again."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.values import sealed

Codes = NDArray[np.int32]


@dataclass(frozen=True, slots=True, eq=False)
class Coded:
    """code (n,) place of each case's level among ``text`` (levels,), which holds every level of the column once."""

    code: Codes
    text: NDArray[np.object_]


#: So many cases are looked at to see whether cases of equal text share an object.
_GLANCE = 1000


def coded(values: NDArray[Any]) -> Coded:
    """Levels in the order in which they first occur; what is missing is a level of its own."""
    if not _shared(values):
        return _coded(values)
    # Objects are told apart by their addresses, several times as fast as by what they say; then each is read once.
    place, addresses = pd.factorize(np.frombuffer(values, dtype=np.intp))
    first = np.empty(addresses.size, dtype=np.intp)
    first[place[::-1]] = np.arange(place.size - 1, -1, -1)
    found = _coded(values[first])
    return Coded(sealed(found.code.take(place)), found.text)


def _shared(values: NDArray[Any]) -> bool:
    """Whether values are far more cases than objects, by the first ones."""
    if values.dtype != object or not values.flags.c_contiguous or values.size < _GLANCE:
        return False
    return len(pd.unique(np.frombuffer(values, dtype=np.intp, count=_GLANCE))) < _GLANCE // 10


def _coded(values: NDArray[Any]) -> Coded:
    code, distinct = pd.factorize(values)
    if code.size and int(code.min()) < 0:
        code, distinct = pd.factorize(values, use_na_sentinel=False)
    return Coded(sealed(code.astype(np.int32)), as_text(np.asarray(distinct)))


def as_text(x: NDArray[Any]) -> NDArray[np.object_]:
    """Levels as text; whole numbers without a decimal point."""
    if x.dtype == object:
        return x
    values, code = np.unique(x, return_inverse=True)
    text = [
        str(int(v))
        if isinstance(v, float | np.floating | np.integer | np.bool_) and float(v).is_integer()
        else str(v)
        for v in values
    ]
    return np.array(text, dtype=object)[code]


def places(known: tuple[str, ...], text: NDArray[np.object_]) -> NDArray[np.intp]:
    """(n,) position of each text among the known ones, -1 for none."""
    if text.size < _GLANCE:
        # pandas takes longer to begin
        at = {level: j for j, level in enumerate(known)}
        return np.array([at.get(level, -1) for level in text.tolist()], dtype=np.intp)
    return np.asarray(pd.Index(np.array(known, dtype=object)).get_indexer(pd.Index(text)))


def places_of(known: tuple[str, ...], x: NDArray[Any] | Coded) -> NDArray[np.intp]:
    """The same for the cases of a column, as it is or coded."""
    return (
        places(known, x.text).take(x.code) if isinstance(x, Coded) else places(known, as_text(np.asarray(x)))
    )


def texts_of(x: NDArray[Any] | Coded, cases: NDArray[np.bool_]) -> NDArray[np.object_]:
    """Levels of the marked cases as text."""
    return x.text[x.code[cases]] if isinstance(x, Coded) else as_text(np.asarray(x))[cases]
