"""Blocks on threads: in order, few waiting, errors and interrupts pass through."""

from __future__ import annotations

import threading

import pytest

from stresskit.kernels.blocks import in_order, processors


@pytest.mark.parametrize("threads", [1, 2, 5])
def test_in_order(threads: int) -> None:
    started = 0
    lock = threading.Lock()

    def work(b: int) -> int:
        nonlocal started
        with lock:
            started += 1
        return b * b

    seen = []
    for value in in_order(work, 60, threads):
        seen.append(value)
        assert started <= len(seen) + 4 * threads
    assert seen == [b * b for b in range(60)]
    assert processors() >= 1


@pytest.mark.parametrize("threads", [1, 2])
def test_an_interrupt_ends_the_work(threads: int) -> None:
    calls = []

    def work(b: int) -> int:
        calls.append(b)
        return b

    def interrupted() -> None:
        for value in in_order(work, 10_000, threads):
            if value == 3:
                raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        interrupted()
    assert len(calls) < 100
