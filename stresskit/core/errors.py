"""Every error a user can meet, as one small tree.

    StresskitError            exit 1   (never raised itself)
    |- UsageError             exit 2   wrong command, option or call
    |  '- OutputError         exit 2   a place that exists already or cannot be written
    |- TextError              exit 3   study or scenario text: file, line, column
    |- DataError              exit 4   loans or macro data: problems with codes and counts
    |- NumericError           exit 5   a fit or projection that cannot be trusted
    '- CheckFailed            exit 6   a check that the user asked for failed

A message says what is wrong, where, how many and the first few, what was expected and what to do.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field


class StresskitError(Exception):
    """Base of all errors that carry a message for the user and an exit code."""

    exit_code: int = 1


class UsageError(StresskitError):
    """A command, option or call that cannot be carried out as written."""

    exit_code = 2


class TextError(StresskitError):
    """Study or scenario text that does not say something stresskit can use."""

    exit_code = 3

    def __init__(
        self, message: str, *, file: str | None = None, line: int | None = None, column: int | None = None
    ) -> None:
        self.file, self.line, self.column = file, line, column
        place = ""
        if file is not None:
            place = (
                file + (f":{line}" if line is not None else "") + (f":{column}" if column is not None else "")
            )
            place += ": "
        super().__init__(place + message)


@dataclass(frozen=True, slots=True)
class Problem:
    """One kind of trouble in data: rule code, how many, the first cases, and the remedy."""

    code: str
    message: str
    count: int
    first: tuple[str, ...] = field(default=())
    remedy: str = ""

    def text(self) -> str:
        cases = f" First: {', '.join(self.first)}." if self.first else ""
        remedy = f" {self.remedy}" if self.remedy else ""
        return f"[{self.code}] {self.message} ({self.count:,} found).{cases}{remedy}"


class DataError(StresskitError):
    """Loan or macro data that cannot be used; carries every problem found, not only the first."""

    exit_code = 4

    def __init__(self, message: str, problems: Sequence[Problem] = ()) -> None:
        self.problems = tuple(problems)
        super().__init__("\n".join([message, *(f"  {p.text()}" for p in self.problems)]))


class NumericError(StresskitError):
    """A computation whose result could not be trusted (no convergence, rank, separation, no events)."""

    exit_code = 5


class CheckFailed(StresskitError):
    """A comparison that the user asked for came out different."""

    exit_code = 6


class OutputError(UsageError):
    """A place that cannot be written: it exists already, is read-only, or the disk is full."""
