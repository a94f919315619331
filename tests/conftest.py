"""What holds for all tests: how they are drawn, in which order they run, and that nothing is compiled twice.

Hypothesis draws the same examples in every run, so that a red run can be repeated.
HYPOTHESIS_PROFILE=explore draws new ones: for hunting, not for the gate.
"""

from __future__ import annotations

import gc
import os
import signal

import pytest
from hypothesis import settings

settings.register_profile("repeatable", derandomize=True)
settings.register_profile("explore", derandomize=False)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "repeatable"))

# Many tests start the program: Python shall keep what it compiled of our modules, and not compile them in every process.
os.environ.pop("PYTHONDONTWRITEBYTECODE", None)

# What a shell starts in the background ignores interrupts, and so does what it starts in turn.
if signal.getsignal(signal.SIGINT) is signal.SIG_IGN:
    signal.signal(signal.SIGINT, signal.default_int_handler)


#: The longest file begins, and compiles the kernels; beside it one that needs none, or both workers would compile them.
FIRST = ("tests/docs/test_examples.py", "tests/report/test_html.py")


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Files with most slow tests first: two workers end together only if what is handed out last is short."""
    files = [item.nodeid.partition("::")[0] for item in items]
    slow = dict.fromkeys(files, 0)
    for file, item in zip(files, items, strict=True):
        slow[file] += item.get_closest_marker("slow") is not None
    turn = {file: (*(file != first for first in FIRST), -count) for file, count in slow.items()}
    items.sort(key=lambda item: turn[item.nodeid.partition("::")[0]])


def pytest_collection_finish() -> None:
    """Four thousand tests and the libraries stay until the end: the search for garbage need not look at them again."""
    gc.collect()
    gc.freeze()
