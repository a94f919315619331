"""What the documentation tells people to type works, on a small invented book."""

from __future__ import annotations

import json
import os
import runpy
import shlex
import shutil
import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest

from tests import program
from tests.docs.markdown import ROOT, Block, blocks, pages
from tests.docs.own_book import write_own_book

#: Commands on pages whose inputs are too large or not ours to ship, and the tests that run them.
ELSEWHERE = {
    "stresskit import supervisor.yaml --out scenarios --study study.yaml": "tests/imports",
    "stresskit bands study.yaml --precision 1%": "tests/cli/test_feel.py",
    "stresskit reverse harbour-demo/study.yaml --loss-rise 50% --out mildest": "tests/cli/test_feel.py",
    "stresskit reverse harbour-demo/study.yaml --pd-12m 8% --segment product=floating": "tests/analyses/test_reverse.py",
    "stresskit compare run-2025q3 run-2025q4 --out change": "tests/cli/test_feel.py",
}
#: Pages whose commands are those of a test below, or of tests/cli/test_feel.py.
BELOW = ("README", "own-loans", "command-line")
PYTHON = [b for page in pages() for b in blocks(page) if b.language == "python"]


@pytest.fixture(scope="module")
def book(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("own")
    write_own_book(folder)
    return folder


@pytest.fixture
def here(book: Path, tmp_path: Path) -> Path:
    return Path(shutil.copytree(book, tmp_path / "book"))


def stresskit(words: list[str], folder: Path) -> str:
    """stdout of a command that succeeds. Warnings are errors, as in all tests."""
    done = program.stresskit(*words, cwd=folder)
    assert done.returncode == 0, done.stderr
    return done.stdout


def script(file: Path, folder: Path) -> str:
    """stdout of a script, in a process as a reader starts it."""
    done = subprocess.run(
        [sys.executable, str(file)], cwd=folder, capture_output=True, text=True, timeout=300, check=False,
        env=os.environ | {"PYTHONWARNINGS": "error"},
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    return done.stdout


@pytest.mark.slow
@pytest.mark.parametrize("block", PYTHON, ids=lambda b: b.name)
def test_python_blocks_run(block: Block, here: Path) -> None:
    """Each with names of its own, as a script; only the imports of the library are shared."""
    (here / "block.py").write_text(block.text, encoding="utf-8")
    with program.in_folder(here, ["block.py"]):
        runpy.run_path("block.py", run_name="__main__")


def commands(page: Path) -> list[str]:
    """Lines of a page's blocks that call the program, in their order."""
    shells = [b for b in blocks(page) if b.language in ("", "sh", "console")]
    lines = [line for b in shells for line in b.text.splitlines()]
    return [line for line in lines if line.startswith("stresskit ") and line not in ELSEWHERE]


@pytest.mark.slow
@pytest.mark.parametrize(
    "page", [p for p in pages() if commands(p) and p.stem not in BELOW], ids=lambda p: p.stem
)
def test_commands_of_a_page_run_in_their_order(page: Path, here: Path) -> None:
    """In a folder with the small book, the demo as ``harbour-demo``, and the files that the page shows."""
    (here / "demo").rename(here / "harbour-demo")
    for block in blocks(page):
        if block.file:
            (here / block.file).write_text(block.text, encoding="utf-8")
    for line in commands(page):
        words, _, target = line.partition(" > ")
        out = stresskit(shlex.split(words)[1:], here)
        if target:
            (here / target.strip()).write_text(out, encoding="utf-8")


@pytest.mark.slow
def test_the_example_script_runs(tmp_path: Path) -> None:
    shown = script(ROOT / "docs" / "examples" / "harbour.py", tmp_path)
    assert "what_if" in shown
    assert (tmp_path / "harbour-example" / "run" / "report.html").is_file()


@pytest.mark.slow
@pytest.mark.parametrize("study", ["study.yaml", "study_spells.yaml"])
def test_the_readme_takes_own_loans_to_a_report(study: str, here: Path) -> None:
    checked = json.loads(stresskit(f"check {study} --json".split(), here))
    account = pd.DataFrame(checked["reconciliation"])
    columns = ["rows", "loans", "events_default", "events_payoff"]
    total = account.groupby("what")[columns].sum()
    assert (
        total.loc["in"] == total.loc["used"] + total.reindex(["left out"]).fillna(0).loc["left out"]
    ).all()
    assert total.loc["used", "events_default"] > 0

    result = json.loads(stresskit(f"run {study} --out run1 --json".split(), here))
    book = {row["scenario"]: row for row in result["summary"] if row["by"] == ""}
    assert set(book) == {"baseline", "recession"}
    assert book["recession"]["el_lifetime"] > book["baseline"]["el_lifetime"] > 0
    assert (here / "run1" / "report.html").stat().st_size > 10_000
    assert (here / "run1" / "results.xlsx").is_file()


@pytest.mark.slow
def test_both_layouts_of_the_same_loans_give_the_same_hazards(here: Path) -> None:
    """A row per loan says what the panel says, so the default hazard must come out the same."""
    fits = {}
    for study in ("study.yaml", "study_spells.yaml"):
        out = json.loads(stresskit(f"fit {study} --out models_{Path(study).stem} --json".split(), here))
        table = pd.DataFrame(out["coefficients"])
        fits[study] = table[table["cause"] == "default"].set_index("term")["coef"]
    left, right = fits.values()
    pd.testing.assert_series_equal(left, right, rtol=1e-6)
