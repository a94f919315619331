"""The vector autoregression that judges and completes scenarios, as text."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from stresskit.spec.base import ErrorAt, Finite, Identifier, PeriodText, Strict

VarTransform = Literal["level", "difference", "log_difference"]


class Var(Strict):
    """A vector autoregression (VAR) of macro variables, estimated on history up to as_of."""

    variables: dict[Identifier, VarTransform] = Field(
        min_length=2,
        description="variable under macro.variables -> what enters the VAR: its level, its change, or the change of its "
        "logarithm (values above zero); declare what makes it stationary",
    )
    lags: Literal["aic", "bic"] | Annotated[int, Field(ge=1, le=24)] = Field(
        "bic", description="macro periods: the number itself, or the criterion that chooses it up to max_lags"
    )
    max_lags: Annotated[int, Field(ge=1, le=24)] = Field(
        4, description="most lags that a criterion may choose, macro periods"
    )
    from_: PeriodText | None = Field(
        None,
        alias="from",
        description="first macro period used; default: from where every variable is known",
    )
    floors: dict[Identifier, Finite] = Field(
        default_factory=dict,
        description="variable -> lowest value that may be filled in, in the variable's unit; lower ones are put there and flagged",
    )
    band: Annotated[float, Field(ge=0.01, le=0.999)] = Field(
        0.9, description="probability inside the bands that are shown: 0.9 is from 5% to 95%"
    )

    @model_validator(mode="after")
    def _consistent(self) -> Var:
        if isinstance(self.lags, int) and "max_lags" in self.model_fields_set:
            raise ErrorAt("max_lags has no use with a fixed number of lags; leave it out", "max_lags")
        for name in self.floors:
            if name not in self.variables:
                raise ErrorAt(
                    f"{name!r} is not under variables ({', '.join(self.variables)})", "floors", name
                )
        return self
