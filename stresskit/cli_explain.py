"""``stresskit explain`` and ``stresskit reverse``: options to keys of the study's section ``analyses``."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from cyclopts import Parameter

from stresskit.cli_options import AsJson, Models, Out, Replace, StudyPath, say
from stresskit.cli_what_if import WhatIf
from stresskit.core.errors import UsageError


def _pairs(texts: list[str] | None, option: str) -> dict[str, str] | None:
    """``column=value`` texts as a mapping. Raises UsageError for one without an equals sign."""
    out = {}
    for text in texts or ():
        column, sign, value = text.partition("=")
        if not (sign and column.strip() and value.strip()):
            raise UsageError(f"{option} {text!r}: expected name=value, such as product=floating")
        out[column.strip()] = value.strip()
    return out or None


def explain(
    study: StudyPath,
    *,
    from_: Annotated[
        str | None,
        Parameter(name="--from", help="scenario to start from; default: baseline, or the first one"),
    ] = None,
    to: Annotated[
        str | None, Parameter(help="scenario to arrive at; default: the one with the largest loss")
    ] = None,
    group: Annotated[
        list[str] | None,
        Parameter(negative=(), help="variables moved together, as name=variable,variable; may be repeated"),
    ] = None,
    matrix: Annotated[
        bool | None,
        Parameter(help="split each variable's part over channels as well; default: where it is quick"),
    ] = None,
    out: Out = None,
    models: Models = None,
    replace: Replace = False,
    what_if: WhatIf = None,
    json: AsJson = False,
) -> None:
    """Split the difference of two scenarios' losses over macro variables and channels, adding up exactly.

    Example: stresskit explain study.yaml --to deep_recession --out why
    """
    from stresskit.cli_analyses import ask

    groups = _pairs(group, "--group")
    changes = {
        "from": from_,
        "to": to,
        "matrix": matrix,
        "groups": None
        if groups is None
        else {g: [v.strip() for v in names.split(",")] for g, names in groups.items()},
    }
    ask(
        study,
        "attribution",
        changes,
        out=out,
        models=models,
        replace=replace,
        json=json,
        say=say,
        what_if=what_if,
    )


def reverse(
    study: StudyPath,
    *,
    loss_rise: Annotated[
        str | None, Parameter(help="expected loss above the reference scenario's, such as 50%")
    ] = None,
    el: Annotated[float | None, Parameter(help="expected loss as an amount")] = None,
    pd_12m: Annotated[
        str | None, Parameter(name="--pd-12m", help="mean 12-month PD of the segment, such as 8%")
    ] = None,
    capital: Annotated[
        float | None,
        Parameter(help="capital figure that losses and 8% of the risk-weighted amount are to use up"),
    ] = None,
    loss: Annotated[
        Literal["lifetime", "12m"] | None,
        Parameter(help="which loss --loss-rise and --el mean; default: lifetime"),
    ] = None,
    segment: Annotated[
        list[str] | None,
        Parameter(negative=(), help="these loans alone, as column=value; may be repeated"),
    ] = None,
    within: Annotated[
        float | None, Parameter(help="largest distance from the VAR's forecast, standard deviations")
    ] = None,
    periods: Annotated[
        int | None, Parameter(help="macro periods in which the path is free; default: three years")
    ] = None,
    starts: Annotated[int | None, Parameter(help="points to search from; default: 3")] = None,
    surface: Annotated[
        str | None, Parameter(help="two variables for the loss surface as one,other; or none")
    ] = None,
    out: Out = None,
    models: Models = None,
    replace: Replace = False,
    what_if: WhatIf = None,
    json: AsJson = False,
) -> None:
    """Find the most plausible path whose loss, capital use or segment PD reaches a threshold; write it as a scenario.

    Example: stresskit reverse study.yaml --loss-rise 50% --out mildest
    """
    from stresskit.cli_analyses import GONE, ask

    pair = (
        None if surface is None else surface if surface == "none" else [v.strip() for v in surface.split(",")]
    )
    changes: dict[str, Any] = {
        "loss_rise": loss_rise,
        "el": el,
        "pd_12m": pd_12m,
        "capital": None if capital is None else {"amount": capital},
        "loss": loss,
        "segment": _pairs(segment, "--segment"),
        "within": within,
        "periods": periods,
        "starts": starts,
        "surface": pair,
    }
    if any(x is not None for x in (loss_rise, el, pd_12m, capital)):
        # the threshold of the command takes the place of the study's
        changes |= {n: GONE for n in ("loss_rise", "el", "pd_12m", "capital") if changes[n] is None}
    ask(
        study, "reverse", changes, out=out, models=models, replace=replace, json=json, say=say, what_if=what_if
    )  # fmt: skip
