"""Facts of a fit that are not coefficients."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields
from types import MappingProxyType
from typing import Any


@dataclass(frozen=True, slots=True)
class FitFacts:
    """Facts of a fit that are not coefficients.

    n_rows     rows at risk used; nobs is their total weight (the same for weights of 1)
    n_events   weight of the events used
    n_periods  calendar periods with rows at risk
    rows_without_feature, events_without_feature   weights left out: a macro feature was not known
    smallest_age, largest_age   observed at risk
    supported_age  the last age with enough at risk (AgeTerm.support); later ages count as extrapolated. 0 in
                   models saved before it was kept: the largest age then
    deviance_change, scaled_gradient   see hazard.newton.Solution
    count      column of counts that the rows were weighted with; empty: none. Not in models fitted without
    feature_ranges   macro feature -> (lowest, highest) over the rows at risk, before any transform
    """

    cause: str
    frequency: str
    n_rows: int
    nobs: float
    n_events: float
    n_loans: int
    n_periods: int
    rows_without_feature: float
    events_without_feature: float
    smallest_age: int
    largest_age: int
    llf: float
    iterations: int
    deviance_change: float
    scaled_gradient: float
    feature_ranges: Mapping[str, tuple[float, float]]
    supported_age: int = 0
    count: str = ""

    def __post_init__(self) -> None:
        object.__setattr__(self, "feature_ranges", MappingProxyType(dict(self.feature_ranges)))
        object.__setattr__(self, "supported_age", self.supported_age or self.largest_age)

    def plain(self) -> dict[str, Any]:
        out = {f.name: getattr(self, f.name) for f in fields(self) if f.name != "count" or self.count}
        return out | {"feature_ranges": {k: list(v) for k, v in self.feature_ranges.items()}}
