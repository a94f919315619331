"""search.yaml as frozen models: which macro specifications to try for one cause, and by which rules."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from stresskit.spec.base import ErrorAt, Identifier, Name, PeriodText, Sign, Strict

TransformName = Literal["level", "difference", "growth", "log_growth", "year_on_year", "moving_average"]
#: Transforms that take a span from ``over``.
SPANNING = ("difference", "growth", "log_growth", "moving_average")

Share = Annotated[float, Field(gt=0, lt=1)]


class Candidate(Strict):
    """Features of one variable: every transform with every span and every lag listed."""

    of: Name = Field(description="a variable under the study's macro.variables")
    transforms: tuple[TransformName, ...] = Field(
        ("level",), min_length=1, description="as transform under the study's macro.features"
    )
    over: tuple[Annotated[int, Field(ge=1, le=400)], ...] = Field(
        (1,), min_length=1, description="spans in macro periods; for the transforms that have a span"
    )
    lags: tuple[Annotated[int, Field(ge=0, le=400)], ...] = Field(
        (0,), min_length=1, description="lags in macro periods"
    )
    expect: Sign | None = Field(
        None, description="expected sign of the coefficient of each of these features"
    )

    @model_validator(mode="after")
    def _useful(self) -> Candidate:
        for key in ("transforms", "over", "lags"):
            values = getattr(self, key)
            doubled = [v for i, v in enumerate(values) if v in values[:i]]
            if doubled:
                raise ErrorAt(f"{doubled[0]!r} is listed twice", key)
        if self.over != (1,) and not any(t in SPANNING for t in self.transforms):
            raise ErrorAt(
                f"over has no use for {', '.join(self.transforms)}; it is a span for {', '.join(SPANNING)}",
                "over",
            )
        return self


class Stationarity(Strict):
    """Tests of each feature's history: ADF (null: unit root) and KPSS (null: stationary)."""

    require: Literal["none", "adf", "kpss", "both"] = Field(
        "none",
        description="none: verdicts are recorded and refuse nothing; adf: the unit root must be rejected; "
        "kpss: stationarity must not be rejected; both: both",
    )
    level: Share = Field(0.05, description="significance level of both tests")
    around: Literal["constant", "trend"] = Field(
        "constant", description="stationary around a constant or a straight line"
    )


class Rules(Strict):
    """What a specification must satisfy to be ranked. Refused ones are recorded with their reasons."""

    sign: Literal["require", "record"] = Field("require", description="expected signs of candidates")
    max_p: Share | None = Field(
        0.05,
        description="largest p-value of any macro term that is searched, clustered by period; null: no rule",
    )
    p_value: Literal["raw", "holm", "bonferroni"] = Field(
        "raw", description="which p-value max_p is held against: as fitted, or adjusted for the number tried"
    )
    max_vif: Annotated[float, Field(gt=1, le=1000)] | None = Field(
        5.0, description="largest variance inflation factor among the macro terms; null: no rule"
    )
    stationarity: Stationarity = Field(
        Stationarity.model_validate({}), description="tests of each feature's history"
    )
    gain: Literal["require", "record"] = Field(
        "require", description="out-of-time gain over the hazard without the searched terms must be above 0"
    )


class OutOfTime(Strict):
    """Rolling origin: refit up to a cut-off, score the window after it; give cutoffs or folds."""

    cutoffs: tuple[PeriodText, ...] | None = Field(
        None, min_length=1, description="last periods of the refits, rising"
    )
    folds: Annotated[int, Field(ge=1, le=60)] | None = Field(
        None,
        description="number of windows, end to end, the last one ending in the last period at risk (default 4)",
    )
    window: Annotated[int, Field(ge=1, le=240)] = Field(
        12, description="length of a scored window in model periods"
    )

    @model_validator(mode="after")
    def _one(self) -> OutOfTime:
        if self.cutoffs is not None and self.folds is not None:
            raise ErrorAt("give cutoffs or folds, not both", "folds")
        return self


class SearchSpec(Strict):
    """One search: a cause, candidates, rules, the criterion of the ranking."""

    search: Identifier = Field(description="name of the search, shown on every output")
    cause: Literal["default", "payoff"] = Field(
        description="hazard of the study whose macro terms are searched"
    )
    candidates: tuple[Candidate, ...] = Field(min_length=1, description="features to try")
    most_terms: Annotated[int, Field(ge=1, le=4)] = Field(
        1, description="specifications have 1 up to this many searched macro terms"
    )
    keep: tuple[Name, ...] = Field(
        (), description="macro features of the study's hazard that stay in every specification"
    )
    same_variable: Literal["once", "many"] = Field(
        "once", description="once: no specification has two features of one variable"
    )
    rules: Rules = Field(Rules.model_validate({}), description="what a specification must satisfy")
    out_of_time: OutOfTime = Field(OutOfTime.model_validate({}), description="rolling-origin scores")
    rank_by: Literal["out_of_time", "aic"] = Field(
        "out_of_time",
        description="out_of_time: largest gain first; aic: smallest AIC first; the other is shown beside",
    )
    limit: Annotated[int, Field(ge=1, le=100_000)] = Field(
        500,
        description="most specifications that may be tried; a search that makes more is refused with its count",
    )
