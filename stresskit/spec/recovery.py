"""The ``recovery`` section of a study: workouts of defaulted loans, and how LGD is taken from them."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from stresskit.spec.base import ErrorAt, Name, PeriodText, Strict
from stresskit.spec.terms import HazardSpec

Share = Annotated[float, Field(ge=0, le=1)]
CasePolicy = Literal["reject", "leave_out", "keep"]


class CaseColumns(Strict):
    """Which column of the case table plays which role."""

    case: Name = Field(description="identifier of the workout")
    default: Name = Field(description="period or date of default")
    amount: Name = Field(description="amount owed at default")
    entry: Name | None = Field(
        None,
        description="late entry: last period before the case came under observation; amount is then what it owed at that time. Blank: from default",
    )
    closed: Name | None = Field(None, description="period or date of closing; blank while the case is open")
    kind: Name | None = Field(None, description="how the case was closed, see kinds")
    rate: Name | None = Field(
        None, description="nominal annual rate that the case's cash flows are discounted at, a fraction"
    )
    loss: Name | None = Field(
        None,
        description="cases without cash flows: amount finally lost; the rest counts as recovered at closing",
    )


class ClosingKinds(Strict):
    """Codes of the kind column. Amounts not recovered at a closing are lost, but for a cure."""

    full: tuple[str, ...] = Field((), description="repaid in full")
    write_off: tuple[str, ...] = Field((), description="written off")
    sale: tuple[str, ...] = Field((), description="sold; the price is a recovery")
    cure: tuple[str, ...] = Field((), description="back to performing")
    open: tuple[str, ...] = Field((), description="still being worked out; a blank always means that")

    @model_validator(mode="after")
    def _once(self) -> ClosingKinds:
        seen: dict[str, str] = {}
        for name in ("full", "write_off", "sale", "cure", "open"):
            for i, code in enumerate(getattr(self, name)):
                if code in seen:
                    raise ErrorAt(f"code {code!r} stands under {seen[code]} too", name, i)
                seen[code] = name
        return self


class FlowColumns(Strict):
    """Which column of the cash-flow table plays which role."""

    case: Name = Field(description="identifier of the workout, as in the case table")
    date: Name = Field(description="period or date of the cash flow")
    recovery: Name = Field(description="amount received, not negative")
    cost: Name | None = Field(
        None, description="cost of the workout, not negative; kept apart from recoveries"
    )


class Flows(Strict):
    """Dated cash flows of the workouts, a row per flow."""

    file: Name = Field(description=".csv or .parquet, relative to the study file")
    columns: FlowColumns = Field(description="which column plays which role")


class Recovery(Strict):
    """Workouts in, LGD by recovery time out."""

    cases: Name = Field(description=".csv or .parquet with a row per workout, relative to the study file")
    columns: CaseColumns = Field(description="which column plays which role")
    kinds: ClosingKinds = Field(
        default_factory=lambda: ClosingKinds.model_validate({}), description="codes of the kind column"
    )
    flows: Flows | None = Field(
        None, description="dated cash flows; without them columns.loss says what was finally lost"
    )
    end: Annotated[int, Field(ge=1, le=600)] = Field(
        description="declared end of workout in model periods after default; what is not recovered by then is lost"
    )
    observed_until: PeriodText | None = Field(
        None, description="last period in which cash flows were recorded; default: as_of"
    )
    discount: Literal["rate", "none"] | Annotated[float, Field(ge=-0.05, le=1)] = Field(
        "rate",
        description="to the period of default. rate: each case's own nominal rate (columns.rate); a number: one effective annual rate; none",
    )
    by: tuple[Name, ...] = Field(
        (),
        description="case columns by which curves differ, crossed; the book needs columns of the same names",
    )
    static: tuple[Name, ...] = Field((), description="further case columns that the regression uses")
    cure_loss: Share = Field(
        0.0, description="share of the cured amount that counts as lost (costs of cure, later default)"
    )
    support: Annotated[int, Field(ge=1)] = Field(
        5,
        description="cases that must be under observation in a workout period for its recovery rate to count as observed",
    )
    hazard: HazardSpec | None = Field(
        None,
        description="regression of recoveries on workout age, case columns and macro features; every unit of currency is an individual",
    )
    cure_hazard: HazardSpec | None = Field(
        None, description="the same for cures; needed beside hazard when cases cure"
    )
    resamples: Annotated[int, Field(ge=0, le=20000)] = Field(
        500, description="resampled sets of cases behind the bands; 0: no bands"
    )
    seed: Annotated[int, Field(ge=0)] = Field(20251231, description="of the resampling")
    rules: dict[str, CasePolicy] = Field(
        default_factory=dict, description="rule code -> policy, where the default policy is not wanted"
    )

    @model_validator(mode="after")
    def _roles(self) -> Recovery:
        c = self.columns
        if self.flows is None and c.loss is None:
            raise ErrorAt("without flows the case table needs columns.loss: what was finally lost", "columns")
        if self.flows is not None and c.loss is not None:
            raise ErrorAt("give flows or columns.loss, not both", "columns", "loss")
        if (c.closed is None) != (c.kind is None):
            raise ErrorAt("columns.closed and columns.kind belong together", "columns")
        if c.loss is not None and c.closed is None:
            raise ErrorAt("columns.loss needs columns.closed and columns.kind", "columns")
        if self.discount == "rate" and c.rate is None:
            raise ErrorAt(
                "discount: rate needs columns.rate; or state one effective annual rate, or none", "discount"
            )
        if self.cure_hazard is not None and self.hazard is None:
            raise ErrorAt("cure_hazard needs hazard beside it", "cure_hazard")
        for i, name in enumerate(self.by):
            if name in self.by[:i]:
                raise ErrorAt(f"column {name!r} is stated twice", "by", i)
        return self
