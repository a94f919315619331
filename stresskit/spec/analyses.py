"""The study's section ``analyses``: questions asked of the stressed figure after the projection."""

from __future__ import annotations

from pydantic import Field

from stresskit.spec.attribution import Attribution
from stresskit.spec.backtest import Backtest
from stresskit.spec.bands import Bands
from stresskit.spec.base import Strict
from stresskit.spec.model_choice import ModelChoice
from stresskit.spec.reverse import Reverse


class Analyses(Strict):
    """Which analyses `stresskit run` adds to the result; each has a command of its own as well."""

    attribution: Attribution | None = Field(
        None,
        description="which variable and which channel the difference to the reference scenario comes from",
    )
    bands: Bands | None = Field(None, description="how wide the figures are, and what makes them wide")
    reverse: Reverse | None = Field(
        None, description="the most plausible path that reaches a stated threshold"
    )
    model_choice: ModelChoice | None = Field(
        None, description="the stressed loss under other specifications of the model"
    )
    backtest: Backtest | None = Field(
        None, description="what the model would have said at past dates, and what came"
    )
