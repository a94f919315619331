"""A progress bar with the remaining time on stderr. Imported only by commands that take long."""

from __future__ import annotations

import contextlib
import sys
from collections.abc import Callable, Iterator

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn


@contextlib.contextmanager
def progress_bar(what: str) -> Iterator[Callable[[int, int], None]]:
    """A bar with the remaining time on stderr, which is gone afterwards; nothing when stderr is no terminal."""
    if not sys.stderr.isatty():
        yield lambda done, total: None
        return
    columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task(what, total=None)
        yield lambda done, total: bar.update(task, completed=done, total=total)
