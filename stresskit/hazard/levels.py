"""A column of levels by its distinct values: found once, so that nobody looks at the text of every loan again."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

Codes = NDArray[np.int32]


@dataclass(frozen=True, slots=True, eq=False)
class Coded:
    """code (n,) place of each case's level among ``text`` (levels,), which holds every level of the column once."""

    code: Codes
    text: NDArray[np.object_]


def coded(values: NDArray[Any]) -> Coded:
    """Levels in the order in which they first occur; what is missing is a level of its own."""
    code, distinct = pd.factorize(values)
    if code.size and int(code.min()) < 0:
        code, distinct = pd.factorize(values, use_na_sentinel=False)
    place = code.astype(np.int32)
    place.setflags(write=False)
    return Coded(place, as_text(np.asarray(distinct)))


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
    return np.asarray(pd.Index(np.array(known, dtype=object)).get_indexer(pd.Index(text)))


def places_of(known: tuple[str, ...], x: NDArray[Any] | Coded) -> NDArray[np.intp]:
    """The same for the cases of a column, as it is or coded."""
    return places(known, x.text)[x.code] if isinstance(x, Coded) else places(known, as_text(np.asarray(x)))


def texts_of(x: NDArray[Any] | Coded, cases: NDArray[np.bool_]) -> NDArray[np.object_]:
    """Levels of the marked cases as text."""
    return x.text[x.code[cases]] if isinstance(x, Coded) else as_text(np.asarray(x))[cases]
