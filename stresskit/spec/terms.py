"""Terms of a hazard: age, loan columns, macro features, interactions, offset."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Discriminator, Field, Tag, model_validator

from stresskit.spec.base import Finite, Name, Sign, Strict


class AgeTerm(Strict):
    """Baseline over age on book.

    spline: natural cubic spline with ``knots`` interior knots (number: at quantiles of event ages) or at
    the ages listed. steps: one level per band; ``bands`` lists the last age of each band but the last
    (no bands: every observed age is its own level). linear, log, quadratic: the named function of age.
    """

    age: Literal["spline", "steps", "linear", "log", "quadratic"]
    knots: Annotated[int, Field(ge=1, le=30)] | tuple[Finite, ...] | None = None
    bands: tuple[Annotated[int, Field(ge=1)], ...] | None = None
    beyond: Literal["hold"] = Field("hold", description="rule for ages beyond those observed")

    @model_validator(mode="after")
    def _shape(self) -> AgeTerm:
        if self.knots is not None and self.age != "spline":
            raise ValueError("knots belong to age: spline")
        if self.bands is not None and self.age != "steps":
            raise ValueError("bands belong to age: steps")
        if self.bands is not None and list(self.bands) != sorted(set(self.bands)):
            raise ValueError("bands must rise")
        return self


class LoanTerm(Strict):
    """A loan column as number or category."""

    loan: Name
    as_: Literal["number", "category"] = Field("number", alias="as")
    transform: Literal["none", "standardise", "log"] = "none"
    reference: str | None = Field(None, description="category that the others are compared with; default: the most frequent")
    expect: Sign | None = None

    @model_validator(mode="after")
    def _kind(self) -> LoanTerm:
        if self.as_ == "category" and (self.transform != "none" or self.expect is not None):
            raise ValueError("transform and expect belong to numbers, not categories")
        if self.as_ == "number" and self.reference is not None:
            raise ValueError("reference belongs to as: category")
        return self


class MacroTerm(Strict):
    """A macro feature, by its name under macro.features."""

    macro: Name
    transform: Literal["none", "standardise"] = "none"
    expect: Sign | None = None


class InteractionTerm(Strict):
    """Product of two terms that stand in the list by themselves, by their names (column, feature or 'age')."""

    interaction: tuple[Name, Name]


class OffsetTerm(Strict):
    """A numeric loan column added to the linear predictor with coefficient 1; demanded at prediction."""

    offset: Name


_KEYS = ("age", "loan", "macro", "interaction", "offset")


def _term_kind(value: object) -> str | None:
    if isinstance(value, dict):
        found = [k for k in _KEYS if k in value]
        return found[0] if found else None
    return {AgeTerm: "age", LoanTerm: "loan", MacroTerm: "macro", InteractionTerm: "interaction", OffsetTerm: "offset"}.get(type(value))  # type: ignore[arg-type]


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

    link: Literal["cloglog", "logit"] = "cloglog"
    terms: tuple[Term, ...]
    intercept: bool = Field(True, description="false with age: steps gives every band its own level")
    covariance: Literal["period", "loan", "model"] = Field("period", description="standard errors shown first: clustered by period, by loan, or model-based")

    @model_validator(mode="after")
    def _once(self) -> HazardSpec:
        names = [term_name(t) for t in self.terms]
        doubled = sorted({n for n in names if names.count(n) > 1})
        if doubled:
            raise ValueError(f"stated twice: {', '.join(doubled)}")
        for t in self.terms:
            if isinstance(t, InteractionTerm):
                for side in t.interaction:
                    if side not in names:
                        raise ValueError(f"interaction of {side!r}: no such term; terms are {names}")
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
