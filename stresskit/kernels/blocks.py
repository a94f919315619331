"""Stays as rows, rows in fixed blocks, blocks on threads with a fixed order of addition."""

from __future__ import annotations

import os
from collections import deque
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

Ints = NDArray[np.int64]
Floats = NDArray[np.float64]
T = TypeVar("T")


def stay_rows(entry: Ints, exit_: Ints) -> tuple[Ints, Ints]:
    """(stay index, age) of every row of stays over ages entry + 1 .. exit, stay after stay."""
    length = exit_ - entry
    start = np.cumsum(length) - length
    stay = np.repeat(np.arange(entry.size), length)
    age = np.arange(stay.size) + np.repeat(entry + 1 - start, length)
    return stay, age


def block_cuts(size: Ints, group: Ints, target: int) -> Ints:
    """Item indices 0 = c0 < c1 < ... = n: consecutive items of about ``target`` total size, groups whole.

    size   (n,) rows of each item
    group  (n,) ascending label; items of one label never fall in two blocks

    The cuts depend on the data and ``target`` alone, never on threads.
    """
    n = size.size
    if n == 0:
        return np.zeros(1, dtype=np.int64)
    first = np.flatnonzero(np.concatenate(([True], group[1:] != group[:-1])))
    before = np.cumsum(size)[first] - size[first]
    wanted = np.arange(0, int(size.sum()), target)
    chosen = first[np.searchsorted(before, wanted, side="left").clip(max=first.size - 1)]
    return np.unique(np.concatenate(([0], chosen, [n]))).astype(np.int64)


def processors() -> int:
    """Processors that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return max(1, len(os.sched_getaffinity(0)))
    return os.cpu_count() or 1


def in_order(work: Callable[[int], T], blocks: int, threads: int) -> Iterator[T]:
    """work(0), work(1), ... in this order; computed on ``threads`` threads when more than one.

    No more than a few results per thread wait for their turn, so memory does not grow with the number of blocks.
    """
    if threads <= 1 or blocks <= 1:
        for b in range(blocks):
            yield work(b)
        return
    with ThreadPoolExecutor(max_workers=threads) as pool:
        waiting: deque[Future[T]] = deque()
        try:
            for b in range(blocks):
                waiting.append(pool.submit(work, b))
                if len(waiting) >= 4 * threads:
                    yield waiting.popleft().result()
            while waiting:
                yield waiting.popleft().result()
        finally:
            for future in waiting:
                future.cancel()


def totals(index: NDArray[np.integer[Any]], weight: NDArray[Any], size: int) -> Floats:
    """(size,) sum of ``weight`` per value of ``index``, added in the order given."""
    return np.bincount(index, weights=weight, minlength=size).astype(np.float64, copy=False)


def counts_along(entry: Ints, exit_: Ints, weight: Floats, size: int) -> Floats:
    """(size,) total weight of the stays whose ages entry + 1 .. exit contain a, for a = 0 .. size - 1."""
    change = totals(entry + 1, weight, size + 1) - totals(exit_ + 1, weight, size + 1)
    return np.cumsum(change)[:size]
