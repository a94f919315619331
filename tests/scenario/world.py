"""Scenario files on disk, read by the real loader, resolved against a small history."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from stresskit.core.errors import TextError
from stresskit.core.period import Frequency, parse_period
from stresskit.core.values import MacroHistory, ScenarioPath
from stresskit.scenario.resolve import resolve
from stresskit.spec.load import load_scenario
from stresskit.spec.study import Macro
from tests.macro.world import MONTH, QUARTER, history, section

#: Unemployment in percent and a house-price index are used by features, the policy rate is declared only.
MACRO = section(
    {"u": "percent", "hpi": "index", "policy": "percent"},
    {
        "u_change": {"of": "u", "transform": "difference", "over": 2},
        "hpi_growth": {"of": "hpi", "transform": "growth"},
        "u_level": {"of": "u"},
    },
)
#: 2024Q4 .. 2025Q4; the mean of u is 5.0.
HISTORY = history(
    MACRO,
    "2024Q4",
    u=[4.0, 5.0, 5.5, 5.3, 5.2],
    hpi=[140.0, 142.0, 145.0, 147.0, 150.0],
    policy=[np.nan, 3.0, 3.0, 2.5, 2.5],
)
BASELINE = """
    scenario: baseline
    starts: 2026Q1
    paths:
      u: {values: [5.0, 5.1, 5.2, 5.3]}
      hpi: {values: [151, 152, 153, 154]}
"""


def write(folder: Path, name: str, text: str) -> Path:
    file = folder / f"{name}.yaml"
    file.write_text(textwrap.dedent(text).strip() + "\n", encoding="utf-8")
    return file


def resolved(
    folder: Path,
    *texts: str,
    macro: Macro | None = MACRO,
    past: MacroHistory | None = HISTORY,
    as_of: str = "2025-12",
    model: Frequency = MONTH,
    horizon: int = 24,
) -> Mapping[str, ScenarioPath]:
    """Paths by scenario name; the texts are written to s0.yaml, s1.yaml, ..."""
    loaded = [load_scenario(write(folder, f"s{i}", text)) for i, text in enumerate(texts)]
    paths = resolve(loaded, macro, past, as_of=parse_period(as_of, model), model=model, horizon=horizon)
    assert [p.name for p in paths] == [item.model.scenario for item in loaded]
    return {p.name: p for p in paths}


def refused(folder: Path, *texts: str, error: type[Exception] = TextError, **more: Any) -> str:
    """The message, its folder taken out."""
    with pytest.raises(error) as caught:
        resolved(folder, *texts, **more)
    return str(caught.value).replace(f"{folder}/", "")


def scenario(
    name: str = "stress",
    *,
    head: str = "",
    u: str = "{values: [6, 7]}",
    tail: str = "",
    hpi: str = "{values: [150]}",
) -> str:
    """A scenario with one line per path; ``head`` and ``tail`` are further lines."""
    lines = [
        f"scenario: {name}",
        "starts: 2026Q1",
        *head.splitlines(),
        "paths:",
        f"  u: {u}",
        f"  hpi: {hpi}",
        *tail.splitlines(),
    ]
    return "\n".join(lines)


__all__ = ["BASELINE", "HISTORY", "MACRO", "MONTH", "QUARTER", "refused", "resolved", "scenario", "write"]
