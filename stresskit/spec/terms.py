"""Terms of a hazard: age, loan columns, macro features, interactions, offset."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Discriminator, Field, Tag, model_validator

from stresskit.spec.base import ErrorAt, Finite, Name, Sign, Strict, Words, meant


class AgeTerm(Strict):
    """Baseline over age on book.

    spline: natural cubic spline with ``knots`` interior knots (number: at quantiles of event ages) or at
    the ages listed; the last knot is ``until`` and the curve is constant from there. steps: one level per
    band; ``bands`` lists the last age of each band but the last (no bands: every observed age is its own level). linear, log, quadratic: the named
    function of age. The fit uses all rows; predictions past the last supported age (``support``) follow ``beyond``.
    """

    age: Literal["spline", "steps", "linear", "log", "quadratic"] = Field(description="shape of the baseline")
    knots: Annotated[int, Field(ge=1, le=30)] | tuple[Finite, ...] | None = Field(
        None, description="spline: number of interior knots (default 5), or the ages at which they stand"
    )
    bands: tuple[Annotated[int, Field(ge=1)], ...] | None = Field(
        None,
        description="steps: last age of each band but the last, rising; default: every observed age by itself",
    )
    support: Annotated[int, Field(ge=1)] | None = Field(
        None,
        description="number at risk (sum of weights) that makes an age count as observed; the last such age is the last supported one. Default: 50, or a twentieth of the largest number at risk at any age when that is fewer",
    )
    until: Annotated[int, Field(ge=2)] | None = Field(
        None,
        description="spline: age of the last knot, the curve is constant beyond it. Default: the last supported age that has at least 20 events (or a twentieth of all, when that is fewer) at it or later",
    )
    beyond: Literal["hold", "weibull", "loglogistic"] = Field(
        "hold",
        description="rule for ages beyond the last supported one (spline: beyond its last knot). hold: its value; weibull, loglogistic: a tail fitted on the hazard at later supported ages, joined without a step",
    )
    tail_from: Annotated[int, Field(ge=1)] | None = Field(
        None,
        description="weibull, loglogistic: first age the tail is fitted on; default: the age by which half of the events at supported ages fell",
    )

    @model_validator(mode="after")
    def _shape(self) -> AgeTerm:
        if self.knots is not None and self.age != "spline":
            raise ErrorAt("knots belong to age: spline", "knots")
        if self.bands is not None and self.age != "steps":
            raise ErrorAt("bands belong to age: steps", "bands")
        if self.bands is not None and list(self.bands) != sorted(set(self.bands)):
            raise ErrorAt("bands must rise", "bands")
        if self.until is not None and self.age != "spline":
            raise ErrorAt("until belongs to age: spline", "until")
        if self.tail_from is not None and self.beyond == "hold":
            raise ErrorAt("tail_from belongs to beyond: weibull or loglogistic", "tail_from")
        return self


class LoanTerm(Strict):
    """A loan column as number or category."""

    loan: Name = Field(description="loan column")
    as_: Literal["number", "category"] = Field("number", alias="as", description="how the column enters")
    transform: Literal["none", "standardise", "log"] = Field(
        "none",
        description="number: standardise subtracts the mean and divides by the standard deviation of the estimation rows",
    )
    reference: str | None = Field(
        None, description="category that the others are compared with; default: the most frequent"
    )
    expect: Sign | None = Field(
        default=None, description="number: expected sign of the coefficient; another sign is reported"
    )
    bound: Sign | None = Field(
        default=None,
        description="number: sign that the coefficient is held to (or 0); the fit without bounds is shown beside",
    )

    @model_validator(mode="after")
    def _kind(self) -> LoanTerm:
        if self.as_ == "category" and (self.transform != "none" or self.expect is not None):
            raise ValueError("transform and expect belong to numbers, not categories")
        if self.as_ == "category" and self.bound is not None:
            raise ErrorAt("bound belongs to as: number", "bound")
        _agree(self.expect, self.bound)
        if self.as_ == "number" and self.reference is not None:
            raise ErrorAt("reference belongs to as: category", "reference")
        return self


class MacroTerm(Strict):
    """A macro feature, by its name under macro.features."""

    macro: Name = Field(description="a feature under macro.features")
    transform: Literal["none", "standardise"] = Field("none", description="as for loan columns")
    expect: Sign | None = Field(
        default=None, description="expected sign of the coefficient; another sign is reported"
    )
    bound: Sign | None = Field(default=None, description="as for loan columns")

    @model_validator(mode="after")
    def _signs(self) -> MacroTerm:
        _agree(self.expect, self.bound)
        return self


def _agree(expect: Sign | None, bound: Sign | None) -> None:
    if expect is not None and bound is not None and expect != bound:
        raise ErrorAt(f"bound is {bound}, but expect is {expect}", "bound")


class InteractionTerm(Strict):
    """Product of two terms that stand in the list by themselves, by their names (column, feature or 'age')."""

    interaction: tuple[Name, Name] = Field(description="names of two terms of the same hazard")


class OffsetTerm(Strict):
    """A numeric loan column added to the linear predictor with coefficient 1; demanded at prediction."""

    offset: Name = Field(description="numeric loan column")


_KEYS = ("age", "loan", "macro", "interaction", "offset")
_KINDS: dict[type, str] = {
    AgeTerm: "age",
    LoanTerm: "loan",
    MacroTerm: "macro",
    InteractionTerm: "interaction",
    OffsetTerm: "offset",
}


def _term_kind(value: object) -> str | None:
    if isinstance(value, dict):
        found = [k for k in _KEYS if k in value]
        return found[0] if found else None
    return _KINDS.get(type(value))


Term = Annotated[
    Annotated[AgeTerm, Tag("age")]
    | Annotated[LoanTerm, Tag("loan")]
    | Annotated[MacroTerm, Tag("macro")]
    | Annotated[InteractionTerm, Tag("interaction")]
    | Annotated[OffsetTerm, Tag("offset")],
    Discriminator(
        _term_kind,
        custom_error_type="term",
        custom_error_message="a term starts with one of: age, loan, macro, interaction, offset",
    ),
]


#: Gates whose failure leaves a fit that can be looked at; the others stop the fit.
SoftGate = Literal[
    "actual_expected", "levels", "macro_range", "events_per_coefficient", "periods", "recorded"
]
Reason = Annotated[
    str, Field(min_length=10, max_length=500), Words("a reason in words, at least 10 characters")
]


class HazardSpec(Strict):
    """One binary regression for one cause."""

    link: Literal["cloglog", "logit"] = Field(
        "cloglog", description="cloglog: grouped proportional hazards; logit: log odds of a period"
    )
    terms: tuple[Term, ...] = Field(description="terms of the linear predictor, each named once")
    intercept: bool = Field(True, description="false with age: steps gives every band its own level")
    ridge: Annotated[float, Field(ge=0, allow_inf_nan=False)] = Field(
        0.0,
        description="penalty ridge/2 * (coefficient * standard deviation of its column)^2, summed over all columns but "
        "the intercept and the age baseline; 0: none",
    )
    ridge_age: bool = Field(False, description="whether the ridge is on the age baseline too")
    bias_reduction: Literal["none", "firth"] = Field(
        "none",
        description="firth: estimates without their first-order bias, for rare events; finite under separation",
    )
    when_separated: Literal["refuse", "pool", "ridge", "firth"] = Field(
        "refuse",
        description="levels without events (or without survivors): refuse the fit; pool: join such a level with the "
        "reference and such a step with its neighbour; ridge: let the stated ridge keep it finite; firth: bias_reduction "
        "for this fit",
    )
    covariance: Literal["period", "period_hac", "period_jackknife", "two_way", "loan", "model"] = Field(
        "period",
        description="standard errors shown first. period: clustered by calendar period; period_hac: the same, robust to serial "
        "correlation between periods (Newey-West); period_jackknife: by leaving out one period at a time, for few or uneven "
        "periods; two_way: by loan and by period; loan: clustered by loan; model: from the expected information",
    )
    hac_lag: Annotated[int, Field(ge=0, le=400)] | None = Field(
        None,
        description="period_hac: lag in model periods; default: floor(4 (T/100)^(2/9)), T the number of periods",
    )
    accept: dict[SoftGate, Reason] = Field(
        default_factory=dict,
        description="gates that this fit may fail and still be projected, each with the reason; kept in the record and "
        "printed as a caution. See gates.md",
    )

    @model_validator(mode="after")
    def _once(self) -> HazardSpec:
        names = [term_name(t) for t in self.terms]
        doubled = sorted({n for n in names if names.count(n) > 1})
        if doubled:
            second = [i for i, n in enumerate(names) if n == doubled[0]][1]
            raise ErrorAt(f"stated twice: {', '.join(doubled)}", "terms", second)
        for i, t in enumerate(self.terms):
            if isinstance(t, InteractionTerm):
                for j, side in enumerate(t.interaction):
                    if side not in names:
                        raise ErrorAt(
                            f"interaction of {side!r}: no such term{meant(side, names)} (terms: {', '.join(names)})",
                            "terms",
                            i,
                            "interaction",
                            j,
                        )
        return self

    @model_validator(mode="after")
    def _errors(self) -> HazardSpec:
        if self.hac_lag is not None and self.covariance != "period_hac":
            raise ErrorAt(
                f"hac_lag belongs to covariance: period_hac, and covariance is {self.covariance}", "hac_lag"
            )
        return self

    @model_validator(mode="after")
    def _estimator(self) -> HazardSpec:
        if self.when_separated == "ridge" and self.ridge == 0.0:
            raise ErrorAt("the choice ridge needs a ridge above 0", "when_separated")
        if self.ridge_age and self.ridge == 0.0:
            raise ErrorAt("ridge_age needs a ridge above 0", "ridge_age")
        if self.ridge_age and not self.intercept:
            raise ErrorAt(
                "ridge_age needs an intercept: without one the age baseline is the level of the hazard",
                "ridge_age",
            )
        firth = (
            "bias_reduction"
            if self.bias_reduction == "firth"
            else "when_separated"
            if self.when_separated == "firth"
            else ""
        )
        if firth and self.ridge > 0.0:
            raise ErrorAt("firth and ridge are two penalties: state one", firth)
        bounded = [term_name(t) for t in self.terms if isinstance(t, LoanTerm | MacroTerm) and t.bound]
        if firth and bounded:
            raise ErrorAt(f"firth cannot be had with bounds ({', '.join(bounded)}): state one", firth)
        return self

    @model_validator(mode="after")
    def _one_baseline(self) -> HazardSpec:
        tailed = [i for i, t in enumerate(self.terms) if isinstance(t, AgeTerm) and t.beyond != "hold"]
        crossed = [
            i
            for i, t in enumerate(self.terms)
            if isinstance(t, InteractionTerm) and "age" in term_name(t).split(":")
        ]
        if tailed and crossed:
            raise ErrorAt(
                "a fitted tail needs one baseline for all loans, and an interaction with age gives several; use beyond: hold",
                "terms", tailed[0], "beyond",
            )  # fmt: skip
        return self

    def age_term(self) -> AgeTerm | None:
        return next((t for t in self.terms if isinstance(t, AgeTerm)), None)

    def macro_features(self) -> tuple[str, ...]:
        return tuple(t.macro for t in self.terms if isinstance(t, MacroTerm))

    def loan_columns(self) -> tuple[str, ...]:
        return tuple(
            t.loan if isinstance(t, LoanTerm) else t.offset
            for t in self.terms
            if isinstance(t, LoanTerm | OffsetTerm)
        )


def term_name(term: AgeTerm | LoanTerm | MacroTerm | InteractionTerm | OffsetTerm) -> str:
    """The name by which a term is known in messages, interactions and coefficient names."""
    if isinstance(term, AgeTerm):
        return "age"
    if isinstance(term, LoanTerm):
        return term.loan
    if isinstance(term, MacroTerm):
        return term.macro
    if isinstance(term, OffsetTerm):
        return f"offset({term.offset})"
    return ":".join(term.interaction)
