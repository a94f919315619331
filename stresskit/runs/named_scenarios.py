"""Scenarios that a study names elsewhere than in its list of files."""

from __future__ import annotations

from collections.abc import Sequence

from stresskit.spec.base import meant
from stresskit.spec.load import Loaded
from stresskit.spec.provisions import Reference
from stresskit.spec.study import Study


def check_named_scenarios(loaded: Loaded[Study], names: Sequence[str]) -> None:
    """TextError where an overlay or the conditions of a PD name a scenario that the study does not have."""
    study, told = loaded.model, ", ".join(names) or "none"
    for i, overlay in enumerate(() if study.adjustments is None else study.adjustments.overlays):
        for k, name in enumerate(overlay.scenarios):
            if name not in names:
                raise loaded.error(
                    ("adjustments", "overlays", i, "scenarios", k),
                    f"no scenario {name!r}{meant(name, names)} (scenarios: {told})",
                )
    references: dict[tuple[str, str], Reference] = {}
    if study.staging is not None:
        references["staging", "at_origination"] = study.staging.at_origination
    if study.capital is not None:
        references["capital", "long_run"] = study.capital.long_run
    for keys, reference in references.items():
        name = reference.conditions
        if reference.column is None and name not in ("mean", *names):
            raise loaded.error(
                (*keys, "conditions"), f"no scenario {name!r}{meant(name, ('mean', *names))} (mean, {told})"
            )
