"""``stresskit backtest`` and ``stresskit model-choice``: options to keys of the study's section ``analyses``."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Annotated

from cyclopts import Parameter

from stresskit.cli_what_if import WhatIf

StudyPath = Annotated[Path, Parameter(help="the study's YAML file")]
Out = Annotated[Path | None, Parameter(help="folder to write tables and a report to; must not exist yet")]
Models = Annotated[Path | None, Parameter(help="fitted models to read instead of fitting the study")]
Replace = Annotated[bool, Parameter(negative=(), help="overwrite an earlier folder")]
AsJson = Annotated[bool, Parameter(name="--json", negative=(), help="print the result as JSON")]


def _say(what: str) -> None:
    """Progress on stderr, off when stderr is not a terminal."""
    if sys.stderr.isatty():
        print(what, file=sys.stderr)


def backtest(
    study: StudyPath,
    *,
    cutoff: Annotated[
        list[str] | None,
        Parameter(negative=(), help="last known period such as 2007-12; repeat it for more dates"),
    ] = None,
    steps: Annotated[
        int | None, Parameter(help="model periods compared; default: as far as the data reach")
    ] = None,
    publication: Annotated[
        int | None, Parameter(help="macro periods that pass before a value is published")
    ] = None,
    out: Out = None,
    models: Models = None,
    replace: Replace = False,
    what_if: WhatIf = None,
    json: AsJson = False,
) -> None:
    """Do the study again at past dates with what was known then, and compare with what came.

    Example: stresskit backtest study.yaml --cutoff 2007-12 --cutoff 2008-12
    """
    from stresskit.cli_analyses import ask

    changes = {"cutoffs": cutoff, "steps": steps, "publication": publication}
    ask(
        study,
        "backtest",
        changes,
        out=out,
        models=models,
        replace=replace,
        json=json,
        say=_say,
        what_if=what_if,
    )


def model_choice(
    study: StudyPath,
    *,
    scenario: Annotated[
        str | None, Parameter(help="the stressed scenario; default: the one with the largest loss")
    ] = None,
    search: Annotated[
        str | None, Parameter(help="search YAML beside the study, whose best specifications are tried")
    ] = None,
    top: Annotated[int | None, Parameter(help="how many of the search's best are tried")] = None,
    out: Out = None,
    models: Models = None,
    replace: Replace = False,
    what_if: WhatIf = None,
    json: AsJson = False,
) -> None:
    """Project the stressed loss again under other specifications of the model, one change at a time, everything refitted.

    Example: stresskit model-choice study.yaml
    """
    from stresskit.cli_analyses import ask

    changes = {"scenario": scenario, "search": search, "top": top}
    ask(
        study,
        "model_choice",
        changes,
        out=out,
        models=models,
        replace=replace,
        json=json,
        say=_say,
        what_if=what_if,
    )
