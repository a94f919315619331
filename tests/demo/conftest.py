"""One small and one full demo, each drawn once for all tests here."""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from stresskit.demo.bank import write_demo


@dataclass(frozen=True)
class Written:
    """A demo folder and its parts as a reader sees them."""

    study: Path
    loans: pd.DataFrame
    macro: pd.DataFrame
    truth: dict[str, Any]

    @property
    def folder(self) -> Path:
        return self.study.parent

    def spoiled(self) -> set[str]:
        return {loan for kind in self.truth["spoiled"].values() for loan in kind["loans"]}


def read_demo(study: Path) -> Written:
    folder = study.parent
    loans = pd.read_parquet(folder / "loans.parquet")
    for column in ("month", "opened", "matures"):
        loans[column] = pd.PeriodIndex(pd.to_datetime(loans[column]), freq="M")
    truth = json.loads((folder / "truth.json").read_text(encoding="utf-8"))
    return Written(study, loans, pd.read_csv(folder / "macro.csv"), truth)


@pytest.fixture(scope="session")
def small(tmp_path_factory: pytest.TempPathFactory) -> Written:
    return read_demo(write_demo(tmp_path_factory.mktemp("small") / "bank", loans=1500))


@pytest.fixture(scope="session")
def full(tmp_path_factory: pytest.TempPathFactory) -> Written:
    return read_demo(write_demo(tmp_path_factory.mktemp("full") / "bank"))
