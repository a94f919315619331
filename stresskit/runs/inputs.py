"""What a study is made of before anything is fitted: its checked text, and its data ready to use."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from types import MappingProxyType

import pandas as pd

from stresskit.core.period import Frequency, parse_period
from stresskit.core.values import FeatureTable, MacroHistory, ScenarioPath
from stresskit.macro.var import VarModel
from stresskit.panel.result import LoanData
from stresskit.recovery.read import WorkoutData
from stresskit.spec.load import Loaded
from stresskit.spec.scenario import ScenarioSpec, TableMapping
from stresskit.spec.study import Study


@dataclass(frozen=True, slots=True)
class StudyFile:
    """A study and its scenarios as checked text, and the folder that file names are relative to."""

    study: Study
    loaded: Loaded[Study]
    scenarios: tuple[Loaded[ScenarioSpec | TableMapping], ...]
    base: Path

    @property
    def frequency(self) -> Frequency:
        return Frequency(self.study.frequency)

    @property
    def as_of(self) -> int:
        return parse_period(self.study.as_of, self.frequency)


@dataclass(frozen=True, slots=True)
class Prepared:
    """Data ready to fit and project: risk set, book, macro history and features on model periods.

    digests  file name relative to the study's folder -> sha256
    given    tables handed over in memory in place of files
    """

    loans: LoanData
    history: MacroHistory | None
    features: FeatureTable
    alignment: pd.DataFrame
    paths: tuple[ScenarioPath, ...]
    horizon: int
    digests: Mapping[str, str]
    var: VarModel | None = None
    schedules: Mapping[str, pd.DataFrame] = field(default_factory=lambda: MappingProxyType({}))
    workouts: WorkoutData | None = None
    given: tuple[str, ...] = ()
