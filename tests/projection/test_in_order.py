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


@pytest.mark.parametrize("threads", [1, 2, 3])
@pytest.mark.parametrize("bad", [0, 3, 29])
def test_an_error_comes_out_and_the_helpers_end(threads: int, bad: int) -> None:
    """The first one in the order of blocks, after the results before it, whoever meets it and when."""
    before = threading.active_count()

    def work(b: int) -> int:
        if b >= bad:
            raise ValueError(f"no {b}")
        return b

    seen = []
    with pytest.raises(ValueError, match=f"no {bad}$"):
        for value in in_order(work, 30, threads):
            seen.append(value)
    assert seen == list(range(bad))
    assert threading.active_count() == before


def test_two_threads_work_at_once() -> None:
    """Each of the first two blocks waits for the other to have begun."""
    met = threading.Barrier(2, timeout=20)

    def work(b: int) -> int:
        if b < 2:
            met.wait()
        return b

    assert list(in_order(work, 5, 2)) == list(range(5))


def test_results_that_nobody_takes_are_left_and_the_helpers_end() -> None:
    before = threading.active_count()
    some = in_order(lambda b: b, 100, 3)
    assert next(some) == 0
    some.close()
    assert threading.active_count() == before
