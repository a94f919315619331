"""``stresskit bands``: options to keys of the study's section ``analyses.bands``."""

from __future__ import annotations

from typing import Annotated

from cyclopts import Parameter

from stresskit.cli_options import AsJson, Models, Out, Replace, StudyPath, say
from stresskit.cli_what_if import WhatIf
from stresskit.core.errors import UsageError


def fraction(text: str | None, option: str) -> float | None:
    """``1%`` or ``0.01`` as a fraction. Raises UsageError for anything else."""
    if text is None:
        return None
    plain = text.strip()
    try:
        value = float(plain.removesuffix("%"))
    except ValueError:
        raise UsageError(
            f"{option} {text!r}: expected a percentage such as 1% or a fraction such as 0.01"
        ) from None
    return value / 100.0 if plain.endswith("%") else value


def bands(
    study: StudyPath,
    *,
    draws: Annotated[
        int | None, Parameter(help="joint draws; default: as many as the precision needs")
    ] = None,
    precision: Annotated[
        str | None, Parameter(help="Monte Carlo error of a band's end, such as 1% of the book's loss")
    ] = None,
    seed: Annotated[int | None, Parameter(help="seed of all draws")] = None,
    scenario: Annotated[
        list[str] | None,
        Parameter(negative=(), help="scenario to draw around, may be repeated; default: all"),
    ] = None,
    out: Out = None,
    models: Models = None,
    replace: Replace = False,
    what_if: WhatIf = None,
    json: AsJson = False,
) -> None:
    """How wide the stressed figures are, and what makes them wide: coefficients, shocks of periods, paths, LGD.

    Example: stresskit bands study.yaml --precision 1% --out bands
    """
    from stresskit.cli_analyses import ask

    changes = {
        "draws": draws,
        "precision": fraction(precision, "--precision"),
        "seed": seed,
        "scenarios": scenario,
    }
    ask(study, "bands", changes, out=out, models=models, replace=replace, json=json, say=say, what_if=what_if)
