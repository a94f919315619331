"""`stresskit check` names what is wrong where scenarios meet history: jump, gaps, missing quarters, stale vintage."""

from __future__ import annotations

from pathlib import Path

import pytest

from stresskit.core.errors import DataError, StresskitError, TextError
from stresskit.report.checkup import check_report
from stresskit.runs.api import load_study, prepare
from tests.cli.small_study import BASELINE, write_small_study


@pytest.fixture
def study(tmp_path: Path) -> Path:
    return write_small_study(tmp_path)


def check(study: Path) -> list[str]:
    """What the command prints under cautions about scenarios, without a process of its own for every case."""
    file = load_study(study)
    out: list[str] = check_report(file, prepare(file))["scenarios"]
    return out


def refused(study: Path, error: type[StresskitError]) -> str:
    with pytest.raises(error) as caught:
        check(study)
    return str(caught.value)


def baseline(study: Path, old: str, new: str) -> None:
    assert old in BASELINE
    (study.parent / "baseline.yaml").write_text(BASELINE.replace(old, new), encoding="utf-8")


def test_a_jump_at_the_join(study: Path) -> None:
    assert not [s for s in check(study) if s.startswith("Scenario baseline") and "joins history" in s]
    baseline(study, "[5.0, 5.0,", "[15.0, 5.0,")
    found = [s for s in check(study) if s.startswith("Scenario baseline: unemployment_rate jumps by")]
    assert len(found) == 1
    assert "where the path joins history, from " in found[0]
    assert " to 15 in 2021Q1; history's largest one-period move is " in found[0]


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("values: [5.0, 5.0, 4.9, 4.9]", "values: {2021Q1: 5.0, 2021Q3: 4.9}",
         "values by period must run without holes from 2021Q1; expected 2021Q2, found 2021Q3"),
        ("starts: 2021Q1", "starts: 2020Q4",
         "stale vintage: scenario 'baseline' starts in 2020Q4, but the first period after as_of 2020-12 is 2021Q1; restate it from "
         "2021Q1, or move as_of"),
        ("starts: 2021Q1", "starts: 2021Q3", "scenario 'baseline' starts in 2021Q3, but the first period after as_of 2020-12 is 2021Q1"),
    ],
)  # fmt: skip
def test_holes_and_starts(old: str, new: str, words: str, study: Path) -> None:
    baseline(study, old, new)
    assert words in refused(study, TextError)


def test_a_quarter_that_the_macro_table_lacks(study: Path) -> None:
    file = study.parent / "macro.csv"
    lines = file.read_text(encoding="utf-8").splitlines()
    missing = lines.pop(5).split(",")[0]
    file.write_text("\n".join(lines) + "\n", encoding="utf-8")
    assert f"[period_missing] periods without a row (1 found). First: {missing.replace(' ', '')}." in refused(
        study, DataError
    )


def test_a_blank_in_the_macro_table(study: Path) -> None:
    file = study.parent / "macro.csv"
    lines = file.read_text(encoding="utf-8").splitlines()
    cells = lines[5].split(",")
    lines[5] = ",".join([cells[0], "", *cells[2:]])
    file.write_text("\n".join(lines) + "\n", encoding="utf-8")
    assert "[value_blank] blank cells of" in refused(study, DataError)


def test_a_macro_table_that_ends_too_early_and_one_that_goes_on(study: Path) -> None:
    file = study.parent / "macro.csv"
    lines = file.read_text(encoding="utf-8").splitlines()
    file.write_text("\n".join(lines[:-1]) + "\n", encoding="utf-8")
    assert "as_of 2020-12 needs it up to 2020Q4: supply the missing periods, or move as_of" in refused(
        study, DataError
    )
    later = lines[-1].split(",")
    assert later[0].replace(" ", "") == "2020Q4"
    file.write_text("\n".join([*lines, ",".join(["2021Q1", *later[1:]])]) + "\n", encoding="utf-8")
    assert any(s.startswith("Stale vintage: the macro table has 1 quarter (2021Q1)") for s in check(study))
