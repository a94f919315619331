"""``stresskit backtest`` and ``stresskit model-choice``: options to keys of the study's section ``analyses``."""

from __future__ import annotations

from typing import Annotated

from cyclopts import Parameter

from stresskit.cli_options import AsJson, Models, Out, Replace, StudyPath, say
from stresskit.cli_what_if import WhatIf


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
        say=say,
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
        say=say,
        what_if=what_if,
    )
