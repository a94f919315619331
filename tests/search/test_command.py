"""The command as a user meets it, on the small monthly study."""

from __future__ import annotations

import json
from pathlib import Path

import pandas as pd
import pytest

from tests.cli.small_study import write_small_study
from tests.program import stresskit

SEARCH = """\
search: unemployment
cause: default
candidates:
  - {of: unemployment_rate, transforms: [level, difference], over: [4], lags: [0, 1], expect: positive}
out_of_time: {folds: 2, window: 6}
rules: {gain: record}
"""


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    file = write_small_study(tmp_path_factory.mktemp("pier"))
    (file.parent / "search.yaml").write_text(SEARCH)
    return file


def test_search_prints_writes_and_repeats_to_the_same_bytes(study: Path) -> None:
    base = study.parent
    done = stresskit("search", study, base / "search.yaml", "--out", "one", cwd=base)
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    assert "4 specifications were tried (4 of 1 term)" in done.stdout
    assert "\x1b" not in done.stdout
    table = pd.read_csv(base / "one" / "search.csv")
    assert len(table) == 4
    record = json.loads((base / "one" / "manifest.json").read_text())
    assert record["search"]["tried"] == 4
    assert record["search"]["text"] == SEARCH
    assert set(record["outputs"]) >= {
        "search.csv",
        "terms.csv",
        "windows.csv",
        "features.csv",
        "references.csv",
    }
    again = stresskit("search", study, base / "search.yaml", "--out", "two", "--threads", "2", cwd=base)
    assert again.returncode == 0, again.stderr
    assert json.loads((base / "two" / "manifest.json").read_text())["outputs"] == record["outputs"]


def test_json_has_everything_and_best_limits_the_table(study: Path) -> None:
    base = study.parent
    out = json.loads(stresskit("search", study, base / "search.yaml", "--json", cwd=base).stdout)
    assert out["tried"] == len(out["specifications"]) == 4
    assert out["folder"] is None
    best = next(r for r in out["specifications"] if r["rank"] == 1)
    # the defaults of the small study follow this feature
    assert best["specification"] == "unemployment_change"
    assert "unemployment_change" in out["winner"]
    printed = stresskit("search", study, base / "search.yaml", "--best", "1", cwd=base)
    assert "1 of 4 specifications tried, best first" in printed.stdout


def test_refusals_leave_nothing_behind(study: Path, tmp_path: Path) -> None:
    bad = tmp_path / "search.yaml"
    bad.write_text(SEARCH + "limit: 3\n")
    done = stresskit("search", study, bad, "--out", tmp_path / "out", cwd=tmp_path)
    assert done.returncode == 3
    assert f"{bad}:7:1: limit: 4 features make 4 specifications" in done.stderr
    assert "Traceback" not in done.stderr
    assert not (tmp_path / "out").exists()
    (tmp_path / "there").mkdir()
    (tmp_path / "there" / "mine.txt").write_text("keep me")
    taken = stresskit(
        "search", study, study.parent / "search.yaml", "--out", tmp_path / "there", cwd=tmp_path
    )
    assert taken.returncode == 2
    assert "exists already" in taken.stderr
    assert stresskit("search", study, bad, "--best", "0", cwd=tmp_path).returncode == 2


def test_help_has_an_example(tmp_path: Path) -> None:
    done = stresskit("search", "--help", cwd=tmp_path)
    assert done.returncode == 0
    assert "Example: stresskit search" in done.stdout
