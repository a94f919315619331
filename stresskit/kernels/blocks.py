"""Stays as rows, rows in fixed blocks, blocks on threads with a fixed order of addition."""

from __future__ import annotations

import os
import threading
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any, Generic, TypeVar

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
    """work(0), work(1), ... in this order; computed on ``threads`` threads when more than one, the caller's being one of them.

    No more than a few results per thread wait for their turn, so memory does not grow with the number of blocks.
    """
    if threads <= 1 or blocks <= 1:
        for b in range(blocks):
            yield work(b)
        return
    shared = _Shared(work, blocks, 4 * threads)
    helpers = [threading.Thread(target=shared.help, daemon=True) for _ in range(min(threads, blocks) - 1)]
    try:
        for helper in helpers:
            helper.start()
        for b in range(blocks):
            yield shared.result(b)
    finally:
        shared.end()
        for helper in helpers:
            if helper.ident is not None:
                helper.join()


@dataclass(slots=True)
class _Failed:
    error: BaseException


class _Shared(Generic[T]):
    """Blocks that several threads take one after the other.

    A pool of threads with a queue would do, but takes longer to be made than a pass over a small book.
    """

    def __init__(self, work: Callable[[int], T], blocks: int, ahead: int) -> None:
        """ahead: blocks that are taken at most before the first of them is asked for."""
        self._work, self._blocks, self._ahead = work, blocks, ahead
        self._taken, self._asked = 0, 0
        self._done: dict[int, T | _Failed] = {}
        self._changed = threading.Condition()

    def help(self) -> None:
        """Works until nothing is left to take."""
        while (b := self._take()) is not None:
            try:
                self._put(b, self._work(b))
            except BaseException as error:  # noqa: BLE001  raised again where the result is asked for
                self._put(b, _Failed(error))

    def _take(self) -> int | None:
        with self._changed:
            while self._taken < self._blocks:
                if self._taken < self._asked + self._ahead:
                    self._taken += 1
                    return self._taken - 1
                self._changed.wait()
        return None

    def _put(self, b: int, found: T | _Failed) -> None:
        with self._changed:
            self._done[b] = found
            self._changed.notify_all()

    def result(self, b: int) -> T:
        """Of block b; works on others while it waits for it."""
        while True:
            with self._changed:
                self._asked = b
                while b not in self._done and self._taken >= min(self._blocks, b + self._ahead):
                    self._changed.wait()
                if b in self._done:
                    found = self._done.pop(b)
                    self._asked = b + 1
                    self._changed.notify_all()
                    break
                mine = self._taken
                self._taken += 1
            try:
                self._put(mine, self._work(mine))
            except Exception as error:  # noqa: BLE001  raised in its turn, so that it is the first one for any number of threads
                self._put(mine, _Failed(error))
        if isinstance(found, _Failed):
            raise found.error
        return found

    def end(self) -> None:
        """Nothing is left to take from now on."""
        with self._changed:
            self._taken = self._blocks
            self._changed.notify_all()


def totals(index: NDArray[np.integer[Any]], weight: NDArray[Any], size: int) -> Floats:
    """(size,) sum of ``weight`` per value of ``index``, added in the order given."""
    return np.bincount(index, weights=weight, minlength=size).astype(np.float64, copy=False)


def counts_along(entry: Ints, exit_: Ints, weight: Floats, size: int) -> Floats:
    """(size,) total weight of the stays whose ages entry + 1 .. exit contain a, for a = 0 .. size - 1."""
    change = totals(entry + 1, weight, size + 1) - totals(exit_ + 1, weight, size + 1)
    return np.cumsum(change)[:size]
