"""Files beside the study that analyses read: inputs of the result like loans and macro history."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from stresskit.runs.manifest import MANIFEST
from stresskit.runs.record import digest_file, relative
from stresskit.spec.backtest import Backtest
from stresskit.spec.load import load_scenario
from stresskit.spec.model_choice import ModelChoice
from stresskit.spec.scenario import TableMapping


def digests_read(spec: Any, base: Path) -> dict[str, str]:
    """File name relative to ``base``, the study's folder -> sha256, of what an analysis with these options reads.

    What is not there is left out: the analysis itself says that it is missing.
    """
    return {name: digest_file(base / name) for name in _names(spec, base) if (base / name).is_file()}


def _names(spec: Any, base: Path) -> list[str]:
    if isinstance(spec, ModelChoice) and spec.search is not None:
        finished = (base / spec.search).is_dir()
        return [f"{spec.search}/{name}" for name in (MANIFEST, "search.csv")] if finished else [spec.search]
    if isinstance(spec, Backtest):
        scenarios = [name for names in spec.scenarios_then.values() for name in names]
        return [*spec.vintages.values(), *scenarios, *(t for s in scenarios for t in _table(base, s))]
    return []


def _table(base: Path, scenario: str) -> list[str]:
    """The table that a scenario file takes its paths from, where it does."""
    if not (base / scenario).is_file():
        return []
    model = load_scenario(base / scenario).model
    if not isinstance(model, TableMapping):
        return []
    return [relative((base / scenario).parent / model.table, base) or model.table]
