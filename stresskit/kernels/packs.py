"""Loops of a book's preparation: codes, stable orders by counting, loans into lanes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled

Ints = NDArray[np.int64]
Shorts = NDArray[np.int32]


@compiled
def ranked(values: Ints, low: int, size: int) -> tuple[Ints, int]:
    """(place (n,) of each value among the distinct ones, how many); values - low within 0 .. size - 1."""
    place = np.zeros(size, dtype=np.int64)
    for i in range(values.size):
        place[values[i] - low] = 1
    count = 0
    for k in range(size):
        if place[k]:
            place[k] = count
            count += 1
    out = np.empty(values.size, dtype=np.int64)
    for i in range(values.size):
        out[i] = place[values[i] - low]
    return out, count


@compiled
def firsts(codes: Ints, count: int) -> Ints:
    """(count,) first position of each code."""
    out = np.zeros(count, dtype=np.int64)
    for i in range(codes.size - 1, -1, -1):
        out[codes[i]] = i
    return out


@compiled
def crossed(a: Ints, b: Ints, width: int) -> Shorts:
    """(n,) a * width + b."""
    out = np.empty(a.size, dtype=np.int32)
    for i in range(a.size):
        out[i] = a[i] * width + b[i]
    return out


@compiled
def counting_order(key: Shorts, bound: int, before: Shorts) -> tuple[Shorts, Ints]:
    """(order (n,), how many of each key (bound,)): stable by key, equals as in ``before`` (n,), or as they stand if that is empty."""
    count = np.zeros(bound, dtype=np.int64)
    for i in range(key.size):
        count[key[i]] += 1
    to = np.cumsum(count) - count
    order = np.empty(key.size, dtype=np.int32)
    if before.size == 0:
        for i in range(key.size):
            order[to[key[i]]] = i
            to[key[i]] += 1
    else:
        for j in range(key.size):
            i = before[j]
            order[to[key[i]]] = i
            to[key[i]] += 1
    return order, count


@compiled
def spread_out(order: Shorts, start: Ints, count: Ints, slots: int) -> Ints:
    """(slots,) loan of each slot, -1 for padding: ``count`` loans of each chunk from its ``start`` on, in their order."""
    out = np.full(slots, -1, dtype=np.int64)
    k = 0
    for c in range(start.size):
        for i in range(count[c]):
            out[start[c] + i] = order[k]
            k += 1
    return out
