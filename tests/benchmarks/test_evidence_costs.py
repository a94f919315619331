"""The benchmark of evidence at small size: its study is one that all six variables act on. Nothing is timed here."""

from __future__ import annotations

from pathlib import Path

import pytest
from rich.console import Console

from stresskit.analyses.ask import analyse
from stresskit.spec.attribution import Attribution
from tests.benchmarks.evidence import (
    QUARTERS,
    VARIABLES,
    attribution_run,
    evidence_setting,
    print_rows,
    reverse_run,
)


@pytest.mark.slow
def test_the_costs_are_those_of_what_is_promised(tmp_path: Path) -> None:
    setting = evidence_setting(tmp_path, loans=500, history=900)
    assert setting.book.horizon == QUARTERS
    asked = Attribution.model_validate({"from": "baseline", "to": "storm", "matrix": False})
    found = analyse(setting, "attribution", asked)
    assert found.facts["variables"] == sorted(VARIABLES)
    parts = found.table("variables").set_index("variable")["el_lifetime"]
    assert (parts[list(VARIABLES)] != 0.0).all()
    # 64 coalitions, two channels more, both ends, four per elasticity
    assert attribution_run(setting)[1]() == 64 + 2 + 2 + 4 * len(VARIABLES)
    assert reverse_run(setting)[1]() < 200


def test_the_table_shows_ratios(capsys: pytest.CaptureFixture[str]) -> None:
    line = {"what": "a", "loans": 5, "projections": 4, "seconds": 0.5, "one_projection": 0.25, "ratio": 2.0}
    print_rows([line], Console(width=150))
    assert "0.50" in capsys.readouterr().out
