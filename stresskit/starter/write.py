"""Writes the folder of a first study; nothing that exists is touched."""

from __future__ import annotations

import os
import re
from dataclasses import dataclass
from pathlib import Path

from stresskit.core.errors import OutputError
from stresskit.core.period import Frequency, parse_period
from stresskit.demo.bank import invented_panel
from stresskit.runs.place import whole_folder
from stresskit.starter.columns import look
from stresskit.starter.guess import Guess, guess
from stresskit.starter.texts import (
    FRESH,
    UNKNOWN,
    adverse_text,
    baseline_text,
    guessed_parts,
    macro_to_fill,
    quarter_after,
    study_text,
)

#: Loans of the invented book: enough for a fit, small enough to read.
LOANS = 700
_COLUMNS = [
    "loan_id", "month", "opened", "matures", "product", "region", "home_value", "annual_rate", "balance", "status",
]  # fmt: skip


@dataclass(frozen=True, slots=True)
class Started:
    """What was written.

    study    the study file
    files    every file, relative to the folder
    guessed  the guess, None for the invented book
    to_name  lines of the study that name a column which could not be guessed
    """

    study: Path
    files: tuple[str, ...]
    guessed: Guess | None
    to_name: tuple[str, ...]


def start(folder: Path, *, loans: Path | None = None) -> Started:
    """Write a study into a new folder: with an invented book, or for the table ``loans``.

    Raises OutputError when the folder holds anything or cannot be written, DataError for a table that cannot be read.
    """
    folder = Path(folder)
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise OutputError(
            f"{folder} exists already and is not empty: nothing was written; choose another folder"
        )
    found = None if loans is None else guess(look(Path(loans)))
    with whole_folder(folder) as part:
        (part / "scenarios").mkdir()
        text = _fresh(part) if found is None else _for_table(part, folder, found)
        _write(part / "study.yaml", text)
        files = tuple(sorted(f.relative_to(part).as_posix() for f in part.rglob("*") if f.is_file()))
    missing = tuple(line.strip() for line in text.splitlines() if _to_name(line))
    return Started(folder / "study.yaml", files, found, missing)


def _to_name(line: str) -> bool:
    return (UNKNOWN in line or "CODE_TO_NAME" in line) and not line.lstrip().startswith("#")


def _write(path: Path, text: str) -> None:
    path.write_text(text, encoding="utf-8", newline="\n")


def _fresh(part: Path) -> str:
    table, macro = invented_panel(LOANS)
    frame = table.to_pandas()[_COLUMNS]
    frame["balance"] = frame["balance"].round(2)
    frame.to_csv(part / "loans.csv", index=False, lineterminator="\n")
    lines = macro.splitlines()
    known = lines[0].split(",")
    kept = [known.index(c) for c in ("period", "unemployment_rate", "house_price_index")]
    _write(part / "macro.csv", "".join(",".join(line.split(",")[k] for k in kept) + "\n" for line in lines))
    first = quarter_after(FRESH["as_of"], "month")
    prices = [round(150.0 * 1.005**k, 1) for k in range(1, 9)]
    why = "CHECK: invented numbers that go with the invented history."
    baseline = baseline_text(
        first, unemployment=[5.0, 5.0, 5.1, 5.1, 5.1, 5.0, 5.0, 5.0], prices=prices, why=why
    )
    _write(part / "scenarios" / "baseline.yaml", baseline)
    _write(part / "scenarios" / "adverse.yaml", adverse_text(first))
    return study_text(FRESH)


def _for_table(part: Path, folder: Path, found: Guess) -> str:
    file = Path(os.path.relpath(found.looked.file.resolve(), folder.resolve())).as_posix()
    name = re.sub(r"[^A-Za-z0-9_-]+", "-", folder.resolve().name).strip("-")
    name = name if re.match(r"[A-Za-z]", name) else f"study-{name}".rstrip("-")
    parts = guessed_parts(found, file=file, name=name[:80])
    first = quarter_after(parts["as_of"], found.frequency)
    begins = first - 40
    if found.first is not None:
        clock = Frequency(found.frequency)
        ordinal = parse_period(found.first, clock)
        begins = (ordinal // 3 if clock is Frequency.MONTH else ordinal) - 8
    _write(part / "macro.csv", macro_to_fill(min(begins, first - 9), first - 1))
    why = "CHECK: placeholders. State here what your house expects, in the units of macro.csv."
    baseline = baseline_text(first, unemployment=[5.0] * 4, prices=[100.0] * 4, why=why)
    _write(part / "scenarios" / "baseline.yaml", baseline)
    _write(part / "scenarios" / "adverse.yaml", adverse_text(first))
    return study_text(parts)
