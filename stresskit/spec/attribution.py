"""The section ``analyses.attribution``."""

from __future__ import annotations

from pydantic import Field, model_validator

from stresskit.spec.base import ErrorAt, Identifier, Strict


class Attribution(Strict):
    """Split of the difference between two scenarios over macro variables and over channels of the loss."""

    from_: Identifier | None = Field(
        None, alias="from", description="scenario to start from; default: baseline, or the first one"
    )
    to: Identifier | None = Field(
        None, description="scenario to arrive at; default: the one with the largest lifetime loss"
    )
    groups: dict[Identifier, tuple[Identifier, ...]] = Field(
        default_factory=dict,
        description="name -> macro variables that are moved together and share one part of the difference, such as "
        "{rates: [policy_rate, mortgage_rate]}; at most 10 variables and groups can be told apart",
    )
    matrix: bool | None = Field(
        None,
        description="whether each variable's part is split over the channels as well; default: where that takes at most "
        "256 projections",
    )

    @model_validator(mode="after")
    def _once(self) -> Attribution:
        seen: dict[str, str] = {}
        for group, names in self.groups.items():
            if not names:
                raise ErrorAt(f"group {group!r} has no variable", "groups", group)
            for i, name in enumerate(names):
                if name in seen:
                    raise ErrorAt(f"{name!r} is in group {seen[name]!r} already", "groups", group, i)
                seen[name] = group
        return self
