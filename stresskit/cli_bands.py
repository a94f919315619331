"""``stresskit bands``: options to keys of the study's section ``analyses.bands``."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Annotated

from cyclopts import Parameter

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


def _say(what: str) -> None:
    """Progress on stderr, off when stderr is not a terminal."""
    if sys.stderr.isatty():
        print(what, file=sys.stderr)


def bands(
    study: Annotated[Path, Parameter(help="the study's YAML file")],
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
    out: Annotated[
        Path | None, Parameter(help="folder to write tables and a report to; must not exist yet")
    ] = None,
    models: Annotated[
        Path | None, Parameter(help="fitted models to read instead of fitting the study")
    ] = None,
    replace: Annotated[bool, Parameter(negative=(), help="overwrite an earlier folder")] = False,
    what_if: WhatIf = None,
    json: Annotated[bool, Parameter(name="--json", negative=(), help="print the result as JSON")] = False,
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
    ask(
        study, "bands", changes, out=out, models=models, replace=replace, json=json, say=_say, what_if=what_if
    )
