"""Where the change of expected loss between two runs comes from: one thing after the other is changed, and the book
projected again.

The order is fixed: inputs, models, scenarios, then the rest of the study's text. Each effect is the difference of two
neighbouring projections, so that the effects add up to the whole change. Another order would give other parts.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import Any

import pandas as pd

from stresskit.core.errors import StresskitError
from stresskit.repeat.compare_tables import read_table
from stresskit.repeat.rebuild import changed_texts, check_inputs, inputs_of, rebuilt
from stresskit.runs.api import StudyFile, prepare, project
from stresskit.runs.build import build
from stresskit.runs.folder import read_models
from stresskit.runs.manifest import Manifest, check_outputs
from stresskit.runs.record import versions
from stresskit.runs.saved_models import SavedModels
from stresskit.spec.study import Study

Say = Callable[[str], None]
Part = str
INPUTS, MODELS, SCENARIOS, REST, BUILD = (
    "inputs",
    "models",
    "scenarios",
    "rest of the study",
    "versions and build",
)
#: What is changed together, one group after the other; the second order where scenarios of one run do not fit the date of the other.
ORDERS: tuple[tuple[tuple[Part, ...], ...], ...] = (
    ((INPUTS,), (MODELS,), (SCENARIOS,), (REST,)),
    ((INPUTS, SCENARIOS), (MODELS,), (REST,)),
    ((INPUTS, SCENARIOS, MODELS), (REST,)),
)
#: Keys of a study that belong to a part; all others are the rest.
_OF: Mapping[str, Part] = {
    "frequency": INPUTS, "as_of": INPUTS, "loans": INPUTS, "portfolio": INPUTS, "macro": INPUTS, "recovery": INPUTS,
    "hazards": MODELS, "moving": MODELS, "rates": MODELS, "scenarios": SCENARIOS,
}  # fmt: skip
_LOSSES = ("el_12m", "el_lifetime")
_KEYS = ["scenario", "by", "segment"]


class NoBridge(Exception):
    """There can be no bridge; the message says why."""


@dataclass(frozen=True, slots=True)
class Bridge:
    """The change of expected loss in steps.

    table   scenario, by, segment, step, what, el_12m, el_lifetime: start (run a), an effect per step, end (run b)
    steps   what each step changes, in order
    joined  why some parts could not be told apart; "" when all could
    """

    table: pd.DataFrame
    steps: tuple[str, ...]
    joined: str


@dataclass(frozen=True, slots=True)
class _Side:
    """One run: its texts, models and figures."""

    letter: str
    manifest: Manifest
    file: StudyFile
    fits: SavedModels
    figures: pd.DataFrame


def bridge_between(
    one: Manifest,
    two: Manifest,
    *,
    inputs_a: str | Path | None = None,
    inputs_b: str | Path | None = None,
    say: Say,
) -> Bridge:
    """The steps from run a to run b. Raises NoBridge when the inputs of either are not at hand as they were."""
    a, b = _side("a", one, inputs_a), _side("b", two, inputs_b)
    if not set(a.figures.index).intersection(b.figures.index):
        raise NoBridge("the runs have no scenario in common")
    changed = _changed_parts(a, b)
    reasons: list[str] = []
    for order in ORDERS:
        groups = [tuple(p for p in group if p in changed) for group in order]
        try:
            return _along(a, b, [g for g in groups if g], reasons, say)
        except StresskitError as e:
            reasons.append(str(e).splitlines()[0])
    raise NoBridge(f"the runs could not be mixed: {reasons[-1]}")


def _side(letter: str, manifest: Manifest, moved_to: str | Path | None) -> _Side:
    if manifest.plain["inputs_given"]:
        raise NoBridge(
            f"tables of run {letter} came from memory ({', '.join(manifest.plain['inputs_given'])})"
        )
    if changed_texts(manifest):
        raise NoBridge(f"texts in the record of run {letter} were changed after the run")
    try:
        inputs = check_inputs(manifest, inputs_of(manifest, moved_to))
    except StresskitError as e:
        raise NoBridge(str(e)) from None
    if not inputs.sound:
        first = (*inputs.missing, *inputs.changed)[0]
        how = "missing" if inputs.missing else "changed since"
        raise NoBridge(
            f"inputs of run {letter} are not at hand as they were: {first} is {how} in {inputs.base} "
            f"(name the folder that holds them with --inputs-{letter})"
        )
    outputs = check_outputs(manifest)
    touched = [
        n for n in (*outputs.edited, *outputs.missing) if n == "summary.csv" or n.startswith("models/")
    ]
    if touched:
        raise NoBridge(f"{touched[0]} of run {letter} was changed after the run")
    try:
        file = rebuilt(manifest, inputs.base)
        fits = read_models(manifest.folder)
    except StresskitError as e:
        raise NoBridge(f"run {letter} can not be read any more: {str(e).splitlines()[0]}") from None
    table = read_table(manifest.folder, "summary.csv", _LOSSES)
    return _Side(letter, manifest, file, fits, table.set_index(_KEYS)[list(_LOSSES)])


def _changed_parts(a: _Side, b: _Side) -> set[Part]:
    out = set()
    for name in Study.model_fields:
        if name != "scenarios" and getattr(a.file.study, name) != getattr(b.file.study, name):
            out.add(_OF.get(name, REST))
    if dict(a.manifest.inputs) != dict(b.manifest.inputs):
        out.add(INPUTS)
    if {k: f.to_json() for k, f in a.fits.items()} != {k: f.to_json() for k, f in b.fits.items()}:
        out.add(MODELS)
    if [s.text for s in a.file.scenarios] != [s.text for s in b.file.scenarios]:
        out.add(SCENARIOS)
    return out


def _along(
    a: _Side, b: _Side, groups: Sequence[tuple[Part, ...]], reasons: Sequence[str], say: Say
) -> Bridge:
    """Figures after each group of parts was taken from b; the last one is run b itself."""
    build_a, build_b = (_other_build(s.manifest) for s in (a, b))
    if len(groups) <= 1 and _same_build(a.manifest, b.manifest):
        # nothing in between has to be projected, so this build plays no part
        build_a = build_b = False
    start = _projected(a, b, set(), say) if build_a else a.figures
    end = _projected(a, b, {INPUTS, MODELS, SCENARIOS, REST}, say) if build_b else b.figures
    states, done = [start], set[Part]()
    for k, group in enumerate(groups):
        done |= set(group)
        states.append(end if k == len(groups) - 1 else _projected(a, b, done, say))
    steps = [" and ".join(group) for group in groups]
    effects = [after - before for before, after in pairwise(states)]
    if build_a or build_b:
        steps.append(BUILD)
        effects.append((start - a.figures) + (b.figures - end))
    whole = pd.concat(
        [_rows(a.figures, 0, "run a")]
        + [_rows(e, k, what) for k, (what, e) in enumerate(zip(steps, effects, strict=True), start=1)]
        + [_rows(b.figures, len(steps) + 1, "run b")],
        ignore_index=True,
    )
    # rows that every projection has: a segment or scenario of one run alone has no change to be split
    shared = set(a.figures.index)
    for state in (*states, end, b.figures):
        shared &= set(state.index)
    keep = [key in shared for key in whole[_KEYS].itertuples(index=False, name=None)]
    place = {key: k for k, key in enumerate(a.figures.index)}
    whole = whole[keep]
    order = [place[key] for key in whole[_KEYS].itertuples(index=False, name=None)]
    whole = whole.assign(_at=order).sort_values(["_at", "step"], kind="stable").drop(columns="_at")
    why = f"{steps[0]} could not be told apart: {reasons[-1]}" if reasons and groups else ""
    return Bridge(whole.reset_index(drop=True), tuple(steps), why)


def _rows(figures: pd.DataFrame, step: int, what: str) -> pd.DataFrame:
    out = figures.reset_index()
    out.insert(3, "step", step)
    out.insert(4, "what", what)
    return out


def _same_build(one: Manifest, two: Manifest) -> bool:
    keys = ("code", "blas", "cpu")
    return dict(one.versions) == dict(two.versions) and all(
        one.plain["build"].get(k) == two.plain["build"].get(k) for k in keys
    )


def _other_build(manifest: Manifest) -> bool:
    """Whether the run was made by other versions or on another build than this one."""
    here = build()
    then: Mapping[str, Any] = manifest.plain["build"]
    return dict(manifest.versions) != versions() or any(
        then.get(k) != here[k] for k in ("code", "blas", "cpu")
    )


def _projected(a: _Side, b: _Side, done: set[Part], say: Say) -> pd.DataFrame:
    """Losses of a run of which the parts in ``done`` are b's and all others a's."""

    def side(part: Part) -> _Side:
        return b if part in done else a

    say(f"projecting with {', '.join(sorted(done)) or 'nothing'} of b")
    study = _mixed(a.file.study, b.file.study, done)
    data_of = side(INPUTS).file
    file = replace(
        data_of,
        study=study,
        loaded=replace(data_of.loaded, model=study),
        scenarios=side(SCENARIOS).file.scenarios,
    )
    result = project(file, prepare(file), side(MODELS).fits)
    return result.summary.set_index(_KEYS)[list(_LOSSES)]


def _mixed(a: Study, b: Study, done: set[Part]) -> Study:
    """The study of a with the keys of some parts from b. Macro features and recovery hazards go with the models."""
    out = a.model_copy(update={n: getattr(b, n) for n in Study.model_fields if _OF.get(n, REST) in done})
    models = b if MODELS in done else a
    if out.macro is not None and models.macro is not None:
        out = out.model_copy(
            update={"macro": out.macro.model_copy(update={"features": models.macro.features})}
        )
    if out.recovery is not None and models.recovery is not None:
        hazards = {"hazard": models.recovery.hazard, "cure_hazard": models.recovery.cure_hazard}
        out = out.model_copy(update={"recovery": out.recovery.model_copy(update=hazards)})
    return out
