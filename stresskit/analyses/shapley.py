"""Splits of a difference: exact Shapley values of a game on few players, and the log-mean split of a product.

A game of k players gives a value to each of the 2^k coalitions; coalition m (a bit mask) has player i in it where bit i
is set. Values may be arrays (amounts by segment and year): every entry is a game of its own.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import factorial

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Split:
    """What each player carries of the difference between all and none; (k, ...) each.

    shares   Shapley values: they add up to the difference
    alone    the player by itself, less nobody: first in
    removed  everybody, less everybody but the player: last in
    """

    shares: Floats
    alone: Floats
    removed: Floats


def shapley(values: Floats) -> Floats:
    """Shapley values (k, ...) of games with values (2^k, ...) by coalition.

    Mean over all orders of what a player adds on joining (Shapley 1953). Raises ValueError for another number of values
    than a power of two.
    """
    k = players_of(values)
    masks = np.arange(1 << k)
    size = np.array([int(m).bit_count() for m in masks])
    out = np.zeros((k, *values.shape[1:]))
    weight = np.array([factorial(s) * factorial(k - 1 - s) / factorial(k) for s in range(k)])
    for i in range(k):
        for m in masks[(masks >> i) & 1 == 0]:
            out[i] += weight[size[m]] * (values[m | (1 << i)] - values[m])
    return out


def split(values: Floats) -> Split:
    """Shapley values with the two one-at-a-time answers beside them; values (2^k, ...)."""
    k = players_of(values)
    bits, everybody = [1 << i for i in range(k)], (1 << k) - 1
    alone = np.array([values[b] - values[0] for b in bits])
    removed = np.array([values[everybody] - values[everybody ^ b] for b in bits])
    return Split(shapley(values), alone, removed)


def players_of(values: Floats) -> int:
    """Number of players of a game with so many values."""
    k = int(values.shape[0]).bit_length() - 1
    if values.shape[0] != 1 << k:
        raise ValueError(
            f"{values.shape[0]} values are not those of all coalitions: a power of two is expected"
        )
    return k


def log_mean(a: Floats, b: Floats) -> Floats:
    """Logarithmic mean (a - b) / ln(a / b); a where they are equal, 0 where one of them is 0."""
    both = (a > 0) & (b > 0)
    a, b = np.where(both, a, 1.0), np.where(both, b, 1.0)
    apart = np.log(a / b)
    # Near equality the quotient loses digits; (a + b) / 2 is then exact to the square of the distance.
    near = np.abs(apart) < 1e-6
    mean = np.where(near, 0.5 * (a + b), (a - b) / np.where(near, 1.0, apart))
    return np.where(both, mean, 0.0)


def log_mean_split(before: Mapping[str, Floats], after: Mapping[str, Floats]) -> dict[str, Floats]:
    """Factor -> its part of the difference of the products of all factors (LMDI-I, Ang 2005).

    L(V1, V0) ln(x1 / x0) with L the logarithmic mean of the products. Where a product is 0 before or after, no
    logarithm exists: the difference goes in equal parts to the factors that are 0 on one side only, which is where the
    split tends to as small numbers take the place of 0.
    """
    names = list(before)
    v0, v1 = (_product([side[n] for n in names]) for side in (before, after))
    mean = log_mean(v1, v0)
    changed = {n: (before[n] > 0) != (after[n] > 0) for n in names}
    several = np.maximum(sum((c.astype(np.float64) for c in changed.values()), np.zeros(v0.shape)), 1.0)
    out = {}
    for n in names:
        both = (before[n] > 0) & (after[n] > 0)
        ratio = np.where(both, after[n], 1.0) / np.where(both, before[n], 1.0)
        edge = np.where(changed[n], (v1 - v0) / several, 0.0)
        out[n] = np.where((v0 > 0) & (v1 > 0), mean * np.log(ratio), edge)
    return out


def _product(parts: list[Floats]) -> Floats:
    out = np.ones(np.shape(parts[0]))
    for part in parts:
        out = out * part
    return out
