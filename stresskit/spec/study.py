"""study.yaml as frozen models. Units, defaults and meanings are in the field descriptions."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Discriminator, Field, Tag, model_validator

from stresskit.core.values import level_column
from stresskit.spec.analyses import Analyses
from stresskit.spec.base import (
    ErrorAt,
    Finite,
    FrequencyName,
    Identifier,
    Name,
    PeriodText,
    Strict,
    Words,
    meant,
)
from stresskit.spec.contract import RATE_UNITS, ColumnUse, VariableUse, column_uses, variable_uses
from stresskit.spec.exposure import Collateral, CollateralLgd, Exposure, Fraction
from stresskit.spec.moving import MovingColumn, PaymentOver, Rates
from stresskit.spec.provisions import Adjustments, Capital, Staging, YearView
from stresskit.spec.recovery import Recovery
from stresskit.spec.terms import HazardSpec, LoanTerm, MacroTerm
from stresskit.spec.var import Var

Policy = Literal["reject", "leave_out", "keep"]


class LoanColumns(Strict):
    """Which column plays which role. Only the roles that a layout needs have to be named."""

    loan: Name = Field(description="loan identifier")
    period: Name | None = Field(None, description="panel: the row's period")
    origination: Name = Field(description="period or date of origination")
    maturity: Name | None = Field(None, description="contract maturity, period or date")
    term_months: Name | None = Field(None, description="contract term in months, instead of maturity")
    balance: Name | None = Field(
        None, description="outstanding balance at the end of the row's period (panel) or at as_of (spells)"
    )
    amount: Name | None = Field(
        None, description="amount at origination; spells without a balance roll it down by the schedule"
    )
    rate: Name | None = Field(None, description="nominal annual interest rate, see rate_unit")
    count: Name | None = Field(
        None,
        description="number of loans alike that a line stands for, the same in all its rows; amounts are those of the whole line. See counts.md",
    )
    entry: Name | None = Field(
        None, description="spells: first period under observation (late entry), default origination"
    )
    last_seen: Name | None = Field(
        None,
        description="spells: last period in which the loan was seen performing; default: to maturity, observed_until or as_of, whichever is first",
    )


class PanelOutcome(Strict):
    """Panel: a status column and the codes that mean an exit."""

    column: Name = Field(description="column with the status at the end of the row's period")
    default: tuple[str, ...] = Field(min_length=1, description="codes that mean default")
    payoff: tuple[str, ...] = Field((), description="codes that mean full early repayment")
    performing: tuple[str, ...] = Field(
        (),
        description="when given, any other code is an unknown status; else anything that is not an exit is performing",
    )


class FlagOutcome(Strict):
    """Panel: a 0/1 column per exit."""

    default_flag: Name = Field(description="0/1 column: defaulted in the row's period")
    payoff_flag: Name | None = Field(None, description="0/1 column: repaid early in the row's period")


class SpellOutcome(Strict):
    """Spells: a column with the kind of exit and a date column per kind."""

    column: Name = Field(description="column with the kind of exit")
    default: tuple[str, ...] = Field(min_length=1, description="codes that mean default")
    payoff: tuple[str, ...] = Field((), description="codes that mean full repayment")
    performing: tuple[str, ...] = Field((), description="codes of loans without an exit")
    default_date: Name = Field(description="column with the date or period of default")
    payoff_date: Name | None = Field(None, description="column with the date or period of payoff")
    undated_payoff: Literal["observed_to_maturity", "leave_out", "reject"] = Field(
        "reject",
        description="a payoff without a date: treat the loan as performing to its contract end, leave it out, or stop",
    )
    default_after_maturity: Literal["date_at_maturity", "keep", "leave_out", "reject"] = Field(
        "reject", description="a default dated after the contract end"
    )


def _outcome_kind(value: object) -> str:
    keys = set(value) if isinstance(value, dict) else set(getattr(type(value), "model_fields", ()))
    if "default_flag" in keys:
        return "flags"
    return "spells" if "default_date" in keys else "panel"


Outcome = Annotated[
    Annotated[PanelOutcome, Tag("panel")]
    | Annotated[FlagOutcome, Tag("flags")]
    | Annotated[SpellOutcome, Tag("spells")],
    Discriminator(_outcome_kind),
]


class Loans(Strict):
    """The loan history: where it is, how it is laid out, what its columns mean."""

    file: Name = Field(description=".parquet or .csv: a file, a glob or a folder, relative to the study file")
    layout: Literal["panel", "spells"] = Field(
        description="panel: a row per loan and period; spells: a row per loan"
    )
    columns: LoanColumns = Field(description="which column plays which role")
    outcome: Outcome = Field(description="how the file says default, payoff and performing")
    segments: tuple[Name, ...] = Field((), description="loan columns that results are broken down by")
    counter_starts: PeriodText | None = Field(
        None, description="period columns hold integer counters and 1 means this period"
    )
    rate_unit: Literal["fraction", "percent"] = Field(
        "fraction", description="fraction: 0.045 is 4.5 %; percent: 4.5 is 4.5 %"
    )
    assume: dict[Literal["rate"], Finite] = Field(
        default_factory=dict, description="value used for a role that has no column; reported"
    )
    static: tuple[Name, ...] = Field(
        (), description="further loan columns to carry along, constant over a loan's life"
    )
    varying: tuple[Name, ...] = Field(
        (),
        description="panel columns that change over time, reported at the end of their own period: a row uses the value of the row before",
    )
    lagged: tuple[Name, ...] = Field(
        (),
        description="panel columns that change over time and already hold the value known at the start of the row's period",
    )
    first_row: Literal["entry", "at_risk"] = Field(
        "entry",
        description="panel: a loan first seen after its first period on book shows its entry in that row (not at risk in it), or was already at risk in it",
    )
    observed_until: PeriodText | None = Field(
        None, description="last period in which exits were recorded; later loan life is not observed"
    )
    rules: dict[str, Policy] = Field(
        default_factory=dict,
        description="quality rule code -> policy, where the default policy is not wanted",
    )
    memory_limit: Annotated[str, Field(pattern=r"^\d+(MB|GB)$"), Words("a size such as 500MB or 2GB")] = (
        Field("2GB", description="most memory that reading and sorting the file may use")
    )

    @model_validator(mode="after")
    def _roles(self) -> Loans:
        c = self.columns
        if self.layout == "panel" and c.period is None:
            raise ErrorAt("layout 'panel' needs columns.period", "columns")
        if (self.layout == "spells") != isinstance(self.outcome, SpellOutcome):
            raise ErrorAt(
                "layout 'spells' needs outcome with default_date; layout 'panel' needs outcome with column or default_flag",
                "outcome",
            )
        if c.maturity is not None and c.term_months is not None:
            raise ErrorAt("give columns.maturity or columns.term_months, not both", "columns", "term_months")
        for i, name in enumerate(self.segments):
            if name in self.segments[:i]:
                raise ErrorAt(f"segment {name!r} is stated twice", "segments", i)
        if self.layout == "spells" and (self.varying or self.lagged):
            raise ErrorAt(
                "layout 'spells' has one row per loan and cannot hold varying or lagged columns",
                "varying" if self.varying else "lagged",
            )
        return self


class PortfolioSpec(Strict):
    """The book to project."""

    from_: Literal["last_seen", "contract"] = Field(
        "last_seen",
        alias="from",
        description="last_seen: loans seen performing at as_of. contract: loans without a dated exit whose contract runs beyond as_of are ASSUMED on book, balance by schedule",
    )
    file: Name | None = Field(
        None, description="the book as a file of its own, a row per loan; columns as in loans.columns"
    )


class MacroVariable(Strict):
    """One macro variable: unit, and how its values become model-period values."""

    unit: Literal["percent", "fraction", "index", "level"] = Field(
        description="unit of the values; checked against them and shown on plots"
    )
    place: Literal["linear", "step"] | None = Field(
        None, description="needed when macro periods are longer than model periods"
    )
    column: Name | None = Field(None, description="column in the macro file, default: the variable's name")
    rate: Literal["per_period", "annualised", "year_on_year"] | None = Field(
        None,
        description="for a variable that is itself a growth rate (percent or fraction): which one, so that scenarios "
        "may state another",
    )

    @model_validator(mode="after")
    def _rate_is_a_share(self) -> MacroVariable:
        if self.rate is not None and self.unit in ("index", "level"):
            raise ErrorAt(
                f"rate says what kind of growth rate a variable in percent or fraction is; this one is {'an index' if self.unit == 'index' else 'a level'}",
                "rate",
            )
        return self


class Feature(Strict):
    """What a hazard reads: a transform of a variable, in MACRO periods, then a lag, then placement."""

    of: Name | Annotated[dict[Name, Name], Field(min_length=1)] = Field(
        description="a variable under macro.variables; with by: level of the loan column -> variable, such as "
        "{north: house_price_north, south: house_price_south}"
    )
    by: Name | None = Field(
        default=None,
        description="a static loan column, such as a region: a loan reads the variable that of gives for its level. "
        "See regional.md",
    )
    transform: Literal["level", "difference", "growth", "log_growth", "year_on_year", "moving_average"] = (
        Field(
            "level",
            description="x is the variable, k is over. level: x(t); difference: x(t) - x(t-k); growth: x(t)/x(t-k) - 1; "
            "log_growth: log of x(t)/x(t-k); year_on_year: growth over one year; moving_average: mean of the last k values",
        )
    )
    over: Annotated[int, Field(ge=1, le=400)] = Field(1, description="span in macro periods")
    lag: Annotated[int, Field(ge=0, le=400)] = Field(0, description="macro periods")

    @model_validator(mode="after")
    def _key(self) -> Feature:
        if isinstance(self.of, str) and self.by is not None:
            raise ErrorAt("by needs of as a mapping of the column's levels to variables", "by")
        if not isinstance(self.of, str) and self.by is None:
            raise ErrorAt(
                "of maps levels to variables, so the feature needs by: the loan column whose levels these are",
                "of",
            )
        return self

    @property
    def variables(self) -> tuple[str, ...]:
        """Variables that are read, each once."""
        return (self.of,) if isinstance(self.of, str) else tuple(dict.fromkeys(self.of.values()))

    @property
    def variable(self) -> str:
        """The variable of a feature that is the same for all loans."""
        if not isinstance(self.of, str):
            raise ValueError(f"a feature by {self.by} has a variable for each level")
        return self.of

    def columns(self, name: str) -> dict[str, Feature]:
        """Column of a feature table -> the feature of one variable it holds; levels sorted."""
        if isinstance(self.of, str):
            return {name: self}
        one = {level: self.model_copy(update={"of": self.of[level], "by": None}) for level in sorted(self.of)}
        return {level_column(name, level): feature for level, feature in one.items()}


class Macro(Strict):
    """Macro history and features."""

    file: Name = Field(description="CSV file, a row per period, relative to the study file")
    period: Name = Field("period", description="name of the period column")
    only: dict[Name, tuple[str, ...]] = Field(
        default_factory=dict, description="keep rows whose column holds one of these values"
    )
    variables: dict[Identifier, MacroVariable] = Field(
        min_length=1, description="variables to read, by the name that the study uses"
    )
    features: dict[Identifier, Feature] = Field(
        default_factory=dict, description="what hazards may use, by name"
    )
    var: Var | None = Field(
        None, description="VAR that says how plausible scenarios are and fills what they leave out"
    )

    @model_validator(mode="after")
    def _var_known(self) -> Macro:
        for name in self.var.variables if self.var is not None else ():
            if name not in self.variables:
                raise ErrorAt(
                    f"no macro variable {name!r}{meant(name, self.variables)} "
                    f"(macro.variables: {', '.join(sorted(self.variables))})",
                    "var",
                    "variables",
                    name,
                )
        return self

    def columns(self) -> dict[str, Feature]:
        """Column of a feature table -> the feature of one variable it holds, of all features."""
        return {c: one for name, feature in self.features.items() for c, one in feature.columns(name).items()}

    def keys(self) -> dict[str, str]:
        """Feature -> loan column, of the features that go by one."""
        return {name: f.by for name, f in self.features.items() if f.by is not None}


class ConstantLgd(Strict):
    """One LGD for all loans."""

    constant: Fraction = Field(description="loss given default as a fraction of exposure at default")


class SegmentLgd(Strict):
    """LGD by the values of one loan column."""

    by: Name = Field(description="loan column")
    values: dict[str, Fraction] = Field(
        min_length=1,
        description="value of the column -> loss given default, a fraction of exposure at default",
    )


class RecoveryLgd(Strict):
    """LGD by recovery time, from the workouts under ``recovery``."""

    recovery: Literal["curve", "hazard"] = Field(
        description="curve: the recovery curve of the loan's segment; hazard: the fitted recovery hazard, along the scenario's path after the default"
    )
    costs: bool = Field(True, description="whether the workouts' costs per unit owed at default are added")
    floor: Fraction = Field(0.0, description="lowest LGD used, a fraction of exposure at default")


def _lgd_kind(value: object) -> str:
    keys = set(value) if isinstance(value, dict) else set(getattr(type(value), "model_fields", ()))
    return next((kind for kind in ("constant", "collateral", "recovery") if kind in keys), "segment")


Lgd = Annotated[
    Annotated[ConstantLgd, Tag("constant")]
    | Annotated[SegmentLgd, Tag("segment")]
    | Annotated[CollateralLgd, Tag("collateral")]
    | Annotated[RecoveryLgd, Tag("recovery")],
    Discriminator(_lgd_kind),
]


class Loss(Strict):
    """Money on the projection."""

    exposure: Exposure = Field(Exposure(), description="exposure at default")
    lgd: Lgd = Field(description="loss given default")
    discount: Literal["rate", "rate_path", "none"] | Annotated[float, Field(ge=-0.05, le=1)] = Field(
        "rate",
        description="rate: each loan's own effective rate at as_of; rate_path: the rate in force in each period, where rates "
        "float; a number: one effective annual rate; none",
    )
    timing: Literal["mid", "end"] = Field(
        "mid", description="a default in a period is discounted from its middle or from its end"
    )


class Study(Strict):
    """One study: loans, macro, hazards, loss, scenarios."""

    study: Identifier = Field(description="name of the study, shown on every output")
    frequency: FrequencyName = Field(description="length of one model period")
    as_of: PeriodText = Field(description="last observed period; the projection starts in the next one")
    loans: Loans = Field(description="loan history")
    portfolio: PortfolioSpec = Field(
        default_factory=lambda: PortfolioSpec.model_validate({}), description="loans to project"
    )
    macro: Macro | None = Field(
        None, description="macro history and features; without it no hazard can use macro features"
    )
    hazards: dict[Literal["default", "payoff"], HazardSpec] = Field(
        description="one hazard per cause; default is required"
    )
    recovery: Recovery | None = Field(
        None, description="workouts of defaulted loans; loss.lgd can be taken from them"
    )
    moving: dict[Name, MovingColumn] = Field(
        default_factory=dict,
        description="loan columns that change along a path, by the name that hazards use; see moving-columns.md",
    )
    rates: Rates | None = Field(None, description="which loans have a floating rate; default: all are fixed")
    loss: Loss = Field(description="exposure, loss given default, discounting")
    scenarios: tuple[Name, ...] = Field(
        min_length=1, description="scenario files, relative to the study file"
    )
    horizon: Annotated[int, Field(ge=1, le=1200)] | None = Field(
        None, description="cap on projected periods; default: contract maturity"
    )
    breakdowns: tuple[Annotated[tuple[Name, ...], Field(min_length=1)], ...] = Field(
        (),
        description="year view: breakdowns, each a list of loan columns; default: every segment column by itself",
    )
    years: YearView | None = Field(
        None, description="year view; made with its defaults when breakdowns, staging or capital ask for it"
    )
    staging: Staging | None = Field(None, description="impairment stages; default: none")
    capital: Capital | None = Field(None, description="risk-weighted amounts, an estimate; default: none")
    adjustments: Adjustments | None = Field(None, description="floors and overlays after the model")
    analyses: Analyses | None = Field(
        None,
        description="questions asked of the result: where it comes from, how sure it is, what would break it",
    )

    @property
    def collateral(self) -> Collateral | None:
        return self.loss.lgd.collateral if isinstance(self.loss.lgd, CollateralLgd) else None

    @property
    def moving_in_use(self) -> dict[str, MovingColumn]:
        """Moving columns that a hazard reads, in the order of the text."""
        read = {name for hazard in self.hazards.values() for name in hazard.loan_columns()}
        return {name: column for name, column in self.moving.items() if name in read}

    def contract_variables(self) -> tuple[VariableUse, ...]:
        """Macro variables that moving columns in use, rates, exposure and LGD read."""
        return tuple(variable_uses(self.moving_in_use, self.rates, self.loss.exposure, self.collateral))

    def contract_columns(self) -> tuple[ColumnUse, ...]:
        """Loan columns that these sections read, beyond the roles."""
        amount = self.loans.columns.amount
        return tuple(column_uses(self.moving_in_use, self.rates, self.loss.exposure, self.collateral, amount))

    @model_validator(mode="after")
    def _contracts(self) -> Study:
        known = self.macro.variables if self.macro else {}
        for use in variable_uses(self.moving, self.rates, self.loss.exposure, self.collateral):
            if use.variable not in known:
                raise ErrorAt(
                    f"no macro variable {use.variable!r}{meant(use.variable, known)} "
                    f"(macro.variables: {', '.join(sorted(known)) or 'none'})",
                    *use.place,
                )
            if use.as_rate and known[use.variable].unit not in RATE_UNITS:
                raise ErrorAt(
                    f"{use.variable!r} has the unit {known[use.variable].unit}; a rate is a percent or a fraction",
                    *use.place,
                )
        due = [n for n, c in self.moving_in_use.items() if isinstance(c, PaymentOver)]
        if due and self.years is not None and self.years.constant:
            raise ErrorAt(
                f"a hazard reads {due[0]!r}, a payment over income, and where repaid balance is replaced at once no payment is "
                "defined: leave constant out, or the column",
                "years", "balance_sheet",
            )  # fmt: skip
        for cause, hazard in self.hazards.items():
            for i, term in enumerate(hazard.terms):
                if isinstance(term, LoanTerm) and term.loan in self.moving and term.as_ == "category":
                    raise ErrorAt(
                        f"{term.loan!r} is a number that moves along the path, not a category",
                        "hazards", cause, "terms", i, "as",
                    )  # fmt: skip
        for below, schedule in self.loss.exposure.schedules():
            fraction = isinstance(schedule.balloon, float) and schedule.balloon > 0
            if fraction and self.loans.columns.amount is None:
                raise ErrorAt(
                    "a fraction is taken of the amount at origination: name loans.columns.amount, or a column with the "
                    "amount due at maturity",
                    "loss", "exposure", *below, "balloon",
                )  # fmt: skip
        return self

    @model_validator(mode="after")
    def _consistent(self) -> Study:
        if "default" not in self.hazards:
            raise ErrorAt("hazards needs 'default'", "hazards")
        known = set(self.macro.features) if self.macro else set()
        declared: list[tuple[tuple[str, ...], HazardSpec]] = [
            (("hazards", cause), hazard) for cause, hazard in self.hazards.items()
        ]
        for name, regression in self.recovery_hazards().items():
            declared.append((("recovery", name), regression))
        for place, hazard in declared:
            for i, term in enumerate(hazard.terms):
                if isinstance(term, MacroTerm) and term.macro not in known:
                    raise ErrorAt(
                        f"no macro feature {term.macro!r}{meant(term.macro, known)} "
                        f"(macro.features: {', '.join(sorted(known)) or 'none'})",
                        *place,
                        "terms",
                        i,
                        "macro",
                    )
        if self.macro:
            for name, feature in self.macro.features.items():
                _check_variables(self.macro, name, feature)
                if feature.by in (*self.loans.varying, *self.loans.lagged):
                    raise ErrorAt(
                        f"{feature.by!r} changes over time (loans.{'varying' if feature.by in self.loans.varying else 'lagged'}), "
                        "and a feature goes by a column that stays the same over a loan's life",
                        "macro", "features", name, "by",
                    )  # fmt: skip
        if self.staging and self.capital and self.capital.stays_years not in (None, self.staging.stays_years):
            raise ErrorAt(
                "staging.stays_years says otherwise; give it in one of the two", "capital", "stays_years"
            )
        return self

    @model_validator(mode="after")
    def _recovery(self) -> Study:
        lgd = self.loss.lgd
        if isinstance(lgd, RecoveryLgd):
            if self.recovery is None:
                raise ErrorAt(
                    "lgd from recovery needs the section recovery: the workouts", "loss", "lgd", "recovery"
                )
            if lgd.recovery == "hazard" and self.recovery.hazard is None:
                raise ErrorAt("lgd from the recovery hazard needs recovery.hazard", "loss", "lgd", "recovery")
        return self

    def recovery_hazards(self) -> dict[str, HazardSpec]:
        """Key under ``recovery`` -> regression, those that are declared."""
        if self.recovery is None:
            return {}
        found = {"hazard": self.recovery.hazard, "cure_hazard": self.recovery.cure_hazard}
        return {key: spec for key, spec in found.items() if spec is not None}


def _check_variables(macro: Macro, name: str, feature: Feature) -> None:
    """Every variable is declared; those of one feature have one unit and one placement, for it has one coefficient."""
    named = {(): feature.of} if isinstance(feature.of, str) else {(k,): v for k, v in feature.of.items()}
    for level, variable in named.items():
        if variable not in macro.variables:
            raise ErrorAt(
                f"no macro variable {variable!r}{meant(variable, macro.variables)} "
                f"(macro.variables: {', '.join(sorted(macro.variables))})",
                "macro", "features", name, "of", *level,
            )  # fmt: skip
    first = next(iter(named.values()))
    for level, variable in named.items():
        for what in ("unit", "place"):
            mine, others = (getattr(macro.variables[v], what) for v in (variable, first))
            if mine != others:
                raise ErrorAt(
                    f"{variable!r} has {what}: {mine or 'none'} and {first!r} has {what}: {others or 'none'}; the variables of one "
                    f"feature share one coefficient, so they need one {what}",
                    "macro", "features", name, "of", *level,
                )  # fmt: skip
