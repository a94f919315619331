"""The examples of docs/scenarios.md give the numbers that stand below them."""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

from stresskit.core.period import parse_period
from stresskit.scenario.resolve import resolve
from stresskit.spec.load import load_scenario
from tests.docs.markdown import ROOT, Block, blocks
from tests.macro.world import MONTH, history, section

PAGE = ROOT / "docs" / "scenarios.md"
EXAMPLES = [
    (first, second)
    for first, second in pairwise(blocks(PAGE))
    if first.language == "yaml" and second.language == "text"
]
VARIABLES = {
    "unemployment_rate": "percent",
    "house_price_index": "index",
    "gdp_growth": {"unit": "percent", "place": "step", "rate": "per_period"},
}
MACRO = section(VARIABLES, {f"{v}_level": {"of": v} for v in VARIABLES})
PAST = history(
    MACRO,
    "2024Q4",
    unemployment_rate=[4.0, 5.0, 5.5, 5.3, 5.2],
    house_price_index=[140, 142, 145, 147, 150],
    gdp_growth=[0.4, 0.5, 0.5, 0.4, 0.5],
)
BASELINE = """scenario: baseline
starts: 2026Q1
paths:
  unemployment_rate: {values: [5.0, 5.1, 5.2, 5.3]}
  house_price_index: {values: [151, 152, 153, 154]}
  gdp_growth: {values: [0.5]}
"""


def test_every_example_has_its_numbers() -> None:
    loose = [b for b in blocks(PAGE) if b.language == "yaml" and not b.complete]
    assert loose == [first for first, _ in EXAMPLES]
    assert len(EXAMPLES) >= 12


@pytest.mark.parametrize(("yaml", "numbers"), EXAMPLES, ids=lambda b: b.name)
def test_example(yaml: Block, numbers: Block, tmp_path: Path) -> None:
    (tmp_path / "baseline.yaml").write_text(BASELINE)
    (tmp_path / "example.yaml").write_text(
        f"scenario: example\nbased_on: baseline\nstarts: 2026Q1\n{yaml.text}"
    )
    loaded = [load_scenario(tmp_path / f"{n}.yaml") for n in ("baseline", "example")]
    as_of = parse_period("2025-12", MONTH)
    found = resolve(loaded, MACRO, PAST, as_of=as_of, model=MONTH, horizon=18)[1].values
    assert numbers.text.strip()
    for line in numbers.text.splitlines():
        variable, shown = line.split(": ")
        assert variable in yaml.text
        np.testing.assert_allclose(found[variable], [float(x) for x in shown.split()], rtol=2e-8, atol=5e-9)
