"""The study's section ``analyses``: questions asked of the stressed figure after the projection."""

from __future__ import annotations

from pydantic import Field

from stresskit.spec.attribution import Attribution
from stresskit.spec.backtest import Backtest
from stresskit.spec.bands import Bands
from stresskit.spec.base import Strict
from stresskit.spec.model_choice import ModelChoice
from stresskit.spec.reverse import Reverse

#: Analyses that cannot honour ``loans.columns.count``, with the reason.
UNCOUNTED = {
    "bands": "its draws are of books whose loans it joins and weights itself, one line as one loan",
}


def not_counted(key: str) -> str:
    """Why an analysis is refused in a study with a column of counts."""
    return (
        f"{key} is not possible with loans.columns.count: {UNCOUNTED[key]}. Take count out of loans.columns, with a "
        f"loan table of a line per loan, or leave {key} out"
    )


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
