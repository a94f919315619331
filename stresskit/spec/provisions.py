"""What a study may ask for on top of the losses: staging, capital, year view, adjustments."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from stresskit.spec.base import ErrorAt, Finite, Identifier, Name, Strict

Fraction = Annotated[float, Field(ge=0, le=1)]
StaysYears = Annotated[int, Field(ge=1, le=30)]

CapitalClass = Literal[
    "residential_mortgage",
    "qualifying_revolving",
    "qualifying_transactor",
    "other_retail",
    "corporate",
    "financial_institution",
    "high_volatility_real_estate",
]
BalanceSheet = Literal["run_off", "constant"]
Security = Literal["unsecured", "financial", "receivables", "real_estate", "other_physical"]


class Reference(Strict):
    """A PD away from the scenarios: a loan column, or the fitted hazard under stated conditions."""

    column: Name | None = Field(None, description="loan column that holds it, a fraction")
    conditions: Name = Field(
        "mean",
        description="without a column: conditions under which the fitted hazards give it. mean: every macro feature at its "
        "mean over the estimation periods; the name of a scenario: its path, counted from the loan's first period",
    )

    @model_validator(mode="after")
    def _one(self) -> Reference:
        if self.column is not None and "conditions" in self.model_fields_set:
            raise ErrorAt("give column or conditions, not both", "conditions")
        return self


class PastDue(Strict):
    """Days past due as a backstop."""

    column: Name = Field(description="loan column with the days past due at as_of")
    days: Annotated[int, Field(ge=1, le=365)] = Field(
        30, description="a loan that many days past due, or more, is in stage 2"
    )


class Staging(Strict):
    """Stages 1, 2 and 3 (IFRS 9, 5.5.3 to 5.5.11) at as_of and at the year ends of the year view."""

    at_origination: Reference = Field(
        default_factory=lambda: Reference.model_validate({}),
        description="the lifetime PD at origination. column: over the whole original term",
    )
    ratio: Annotated[float, Field(ge=1, le=1000)] | None = Field(
        None,
        description="stage 2 when the lifetime PD is more than this many times that at origination for the same remaining life",
    )
    increase: Fraction | None = Field(
        None, description="stage 2 when the lifetime PD is higher by more than this, a fraction"
    )
    combine: Literal["both", "either"] = Field(
        "both", description="whether ratio and increase have to be exceeded together, or one of them"
    )
    backstop_pd: Fraction | None = Field(
        None, description="a 12-month PD above this means stage 2 whatever it was at origination"
    )
    low_risk: Fraction | None = Field(
        None, description="a 12-month PD of this or less means stage 1 unless the loan is past due"
    )
    past_due: PastDue | None = Field(None, description="days past due as a backstop, at as_of only")
    stays_years: StaysYears = Field(
        2, description="calendar-year ends at which a defaulted loan is in stage 3 before it is written off"
    )
    defaulted_lgd: Fraction | None = Field(
        None, description="LGD of loans in default at as_of; default: by loss.lgd"
    )

    @model_validator(mode="after")
    def _triggers(self) -> Staging:
        if self.ratio is None and self.increase is None and self.backstop_pd is None:
            raise ErrorAt(
                "staging needs ratio, increase or backstop_pd: without one no loan can reach stage 2"
            )
        if "combine" in self.model_fields_set and (self.ratio is None or self.increase is None):
            raise ErrorAt("combine joins ratio and increase: give both", "combine")
        return self


class Capital(Strict):
    """Risk-weighted amounts by the formulas of the Basel Framework (CRE31, CRE32). An estimate."""

    class_: Name = Field(alias="class", description="loan column that tells the exposure class")
    values: dict[str, CapitalClass] = Field(
        min_length=1, description="value of that column -> class; every value of the book"
    )
    secured: dict[str, Security] = Field(
        default_factory=dict,
        description="value of that column -> kind of security, for the LGD floor; default: unsecured",
    )
    stressed_weight: Fraction = Field(
        description="regulatory PD = this x stressed 12-month PD + (1 - this) x long-run PD"
    )
    long_run: Reference = Field(
        default_factory=lambda: Reference.model_validate({}),
        description="the long-run 12-month PD. column: of the next 12 months, kept along the path",
    )
    downturn_lgd: dict[str, Fraction] = Field(
        default_factory=dict, description="value of that column -> least LGD in the formula"
    )
    input_floors: bool = Field(
        True, description="apply the PD and LGD floors of CRE32.4, CRE32.17 and CRE32.58"
    )
    turnover: Name | None = Field(
        None,
        description="corporate: loan column with annual sales in millions of euros, for the firm-size adjustment",
    )
    maturity: Literal["remaining"] | Annotated[float, Field(ge=1, le=5)] = Field(
        2.5,
        description="effective maturity in years of classes that use it, or remaining: the remaining term, 1 to 5",
    )
    stays_years: StaysYears | None = Field(
        None,
        description="as under staging, for the risk weight of defaulted loans; default: that of staging, or 2",
    )

    @model_validator(mode="after")
    def _known(self) -> Capital:
        for place in ("secured", "downturn_lgd"):
            for value in getattr(self, place):
                if value not in self.values:
                    raise ErrorAt(f"{value!r} is not among values ({', '.join(self.values)})", place, value)
        return self


class Floors(Strict):
    """Least values, loan by loan, for the figures after adjustments."""

    pd_12m: Fraction | None = Field(None, description="least 12-month PD")
    lgd: Fraction | None = Field(None, description="least LGD")


class Overlay(Strict):
    """A judgement on top of the model: who, why, how much."""

    name: Identifier = Field(description="name of the overlay")
    reason: Annotated[str, Field(min_length=10, max_length=1000)] = Field(
        description="why, in a sentence; shown with the figures"
    )
    where: dict[Name, tuple[str, ...]] = Field(
        default_factory=dict,
        description="loan column -> values; loans that match all columns. Default: all loans",
    )
    scenarios: tuple[Name, ...] = Field((), description="scenarios it applies in; default: all")
    multiply: Annotated[float, Field(ge=0, le=100)] | None = Field(
        None, description="factor on the expected losses"
    )
    add: Finite | None = Field(
        None, description="amount added to the expected loss of these loans, spread by their balance"
    )
    on: Literal["both", "el_12m", "el_lifetime"] = Field("both", description="which expected loss is changed")

    @model_validator(mode="after")
    def _one(self) -> Overlay:
        if (self.multiply is None) == (self.add is None):
            raise ErrorAt("give multiply or add, one of them")
        return self


class Adjustments(Strict):
    """Floors, then overlays in their order; never part of the model's own figures."""

    floors: Floors = Field(
        default_factory=lambda: Floors.model_validate({}), description="least values, applied first"
    )
    overlays: tuple[Overlay, ...] = Field((), description="overlays, applied in this order")

    @model_validator(mode="after")
    def _some(self) -> Adjustments:
        names = [o.name for o in self.overlays]
        for i, name in enumerate(names):
            if name in names[:i]:
                raise ErrorAt(f"overlay {name!r} is stated twice", "overlays", i, "name")
        if not names and self.floors.pd_12m is None and self.floors.lgd is None:
            raise ErrorAt("adjustments without floors or overlays adjust nothing")
        return self


class YearView(Strict):
    """What the year view shows."""

    first: Annotated[int, Field(ge=1, le=50)] = Field(5, description="calendar years from as_of on")
    balance_sheet: tuple[BalanceSheet, ...] = Field(
        ("run_off",),
        description="run_off: today's loans until they leave; constant, beside it: what leaves is replaced like for like",
    )

    @model_validator(mode="after")
    def _sheets(self) -> YearView:
        if self.balance_sheet not in (("run_off",), ("run_off", "constant")):
            raise ErrorAt("expected [run_off], or [run_off, constant]", "balance_sheet")
        return self

    @property
    def constant(self) -> bool:
        """Whether the book is also held constant."""
        return "constant" in self.balance_sheet


def book_columns(
    staging: Staging | None,
    capital: Capital | None,
    adjustments: Adjustments | None,
    breakdowns: tuple[tuple[str, ...], ...],
) -> tuple[dict[str, str], dict[str, str]]:
    """Loan columns that these sections read of the book: (categories, numbers), column -> place in the study."""
    category: dict[str, str] = {}
    number: dict[str, str] = {}
    for i, names in enumerate(breakdowns):
        for name in names:
            category.setdefault(name, f"breakdowns#{i + 1}")
    if staging is not None:
        if staging.past_due is not None:
            number.setdefault(staging.past_due.column, "staging.past_due.column")
        if staging.at_origination.column is not None:
            number.setdefault(staging.at_origination.column, "staging.at_origination.column")
    if capital is not None:
        category.setdefault(capital.class_, "capital.class")
        if capital.turnover is not None:
            number.setdefault(capital.turnover, "capital.turnover")
        if capital.long_run.column is not None:
            number.setdefault(capital.long_run.column, "capital.long_run.column")
    for i, overlay in enumerate(adjustments.overlays if adjustments is not None else ()):
        for name in overlay.where:
            category.setdefault(name, f"adjustments.overlays#{i + 1}.where")
    return category, number
