"""docs/search.md: its example is read by the program, and its table has every key."""

from __future__ import annotations

import re
from pathlib import Path

from stresskit.search.judge import RULES
from stresskit.spec.load import load_search
from stresskit.spec.search import Candidate, OutOfTime, Rules, SearchSpec, Stationarity

PAGE = (Path(__file__).parents[2] / "docs" / "search.md").read_text(encoding="utf-8")


def test_the_example_is_a_search(tmp_path: Path) -> None:
    block = re.search(r"```yaml\n(search:.*?)```", PAGE, re.S)
    assert block is not None
    (tmp_path / "search.yaml").write_text(block[1])
    assert load_search(tmp_path / "search.yaml").model.search == "default-drivers"


def test_every_key_and_every_reason_is_described() -> None:
    table = PAGE[PAGE.index("## Every key") :]
    keys = {n for m in (SearchSpec, Candidate, Rules, Stationarity, OutOfTime) for n in m.model_fields}
    assert {k for k in keys if not re.search(rf"`(rules\.)?{k}[`.]", table)} == set()
    assert {r for r in RULES if f"`{r}`" not in PAGE} == set()
    undescribed = [
        f"{m.__name__}.{n}"
        for m in (SearchSpec, Candidate, Rules, Stationarity, OutOfTime)
        for n, info in m.model_fields.items()
        if not info.description
    ]
    assert undescribed == []
