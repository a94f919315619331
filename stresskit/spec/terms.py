"""Terms of a hazard: age, loan columns, macro features, interactions, offset."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Discriminator, Field, Tag, model_validator

from stresskit.spec.base import ErrorAt, Finite, Name, Sign, Strict, meant


class AgeTerm(Strict):
    """Baseline over age on book.

    spline: natural cubic spline with ``knots`` interior knots (number: at quantiles of event ages) or at
    the ages listed. steps: one level per band; ``bands`` lists the last age of each band but the last
    (no bands: every observed age is its own level). linear, log, quadratic: the named function of age.
    """

    age: Literal["spline", "steps", "linear", "log", "quadratic"] = Field(description="shape of the baseline")
    knots: Annotated[int, Field(ge=1, le=30)] | tuple[Finite, ...] | None = Field(
        None, description="spline: number of interior knots (default 5), or the ages at which they stand"
    )
    bands: tuple[Annotated[int, Field(ge=1)], ...] | None = Field(
        None, description="steps: last age of each band but the last, rising; default: every observed age by itself"
    )
    beyond: Literal["hold"] = Field("hold", description="rule for ages beyond those observed")

    @model_validator(mode="after")
    def _shape(self) -> AgeTerm:
        if self.knots is not None and self.age != "spline":
            raise ErrorAt("knots belong to age: spline", "knots")
        if self.bands is not None and self.age != "steps":
            raise ErrorAt("bands belong to age: steps", "bands")
        if self.bands is not None and list(self.bands) != sorted(set(self.bands)):
            raise ErrorAt("bands must rise", "bands")
        return self


class LoanTerm(Strict):
    """A loan column as number or category."""

    loan: Name = Field(description="loan column")
    as_: Literal["number", "category"] = Field("number", alias="as", description="how the column enters")
    transform: Literal["none", "standardise", "log"] = Field(
        "none", description="number: standardise subtracts the mean and divides by the standard deviation of the estimation rows"
    )
    reference: str | None = Field(None, description="category that the others are compared with; default: the most frequent")
    expect: Sign | None = Field(None, description="number: expected sign of the coefficient; another sign is reported")

    @model_validator(mode="after")
    def _kind(self) -> LoanTerm:
        if self.as_ == "category" and (self.transform != "none" or self.expect is not None):
            raise ValueError("transform and expect belong to numbers, not categories")
        if self.as_ == "number" and self.reference is not None:
            raise ErrorAt("reference belongs to as: category", "reference")
        return self


class MacroTerm(Strict):
    """A macro feature, by its name under macro.features."""

    macro: Name = Field(description="a feature under macro.features")
    transform: Literal["none", "standardise"] = Field("none", description="as for loan columns")
    expect: Sign | None = Field(None, description="expected sign of the coefficient; another sign is reported")


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


class HazardSpec(Strict):
    """One binary regression for one cause."""

    link: Literal["cloglog", "logit"] = Field(
        "cloglog", description="cloglog: grouped proportional hazards; logit: log odds of a period"
    )
    terms: tuple[Term, ...] = Field(description="terms of the linear predictor, each named once")
    intercept: bool = Field(True, description="false with age: steps gives every band its own level")
    covariance: Literal["period", "loan", "model"] = Field("period", description="standard errors shown first: clustered by period, by loan, or model-based")

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
                            "terms", i, "interaction", j,
                        )
        return self

    def macro_features(self) -> tuple[str, ...]:
        return tuple(t.macro for t in self.terms if isinstance(t, MacroTerm))

    def loan_columns(self) -> tuple[str, ...]:
        return tuple(t.loan if isinstance(t, LoanTerm) else t.offset for t in self.terms if isinstance(t, LoanTerm | OffsetTerm))


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
