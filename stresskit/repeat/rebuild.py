"""A run from its own record: texts from manifest.json, inputs where they lie now."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from stresskit.analyses.ask import analyse
from stresskit.analyses.options import recorded_options
from stresskit.analyses.whole import whole_result
from stresskit.core.errors import UsageError
from stresskit.report.analysis_folder import write_analysis
from stresskit.report.folder import write_run
from stresskit.runs.api import Prepared, StudyFile, checked_setting, fit, prepare
from stresskit.runs.evidence import split_period, study_evidence, write_evidence
from stresskit.runs.folder import read_models, write_model_folder
from stresskit.runs.manifest import Manifest, is_text_of
from stresskit.runs.record import digest_file
from stresskit.runs.recovery import estimate_recovery, fit_recovery
from stresskit.runs.recovery_folder import write_recovery
from stresskit.search.api import search_specifications
from stresskit.search.folder import write_search
from stresskit.spec.load import Loaded, kept_scenario, scenario_from_text, search_from_text, study_from_text
from stresskit.spec.scenario import ScenarioSpec, TableMapping
from stresskit.spec.what_if import parse_what_if

Say = Callable[[str], None]
#: Writes what was computed again into a folder that does not exist yet.
Write = Callable[[Path], object]


def inputs_of(manifest: Manifest, moved_to: str | Path | None) -> Path:
    """The folder that a run's inputs are looked for in. Raises UsageError when there is none."""
    if moved_to is not None:
        base = Path(moved_to)
        if not base.is_dir():
            raise UsageError(f"--inputs: {base} is not a folder")
        return base
    base_or_none = manifest.inputs_folder
    if base_or_none is None:
        raise UsageError(
            f"{manifest.folder} does not say where its inputs lay; name their folder with --inputs"
        )
    return base_or_none


@dataclass(frozen=True, slots=True)
class Inputs:
    """Input files of a run beside its record, names relative to ``base``.

    changed  name -> (sha256 at the run, sha256 now)
    missing  recorded, not there
    """

    base: Path
    changed: dict[str, tuple[str, str]]
    missing: tuple[str, ...]
    count: int

    @property
    def sound(self) -> bool:
        return not (self.changed or self.missing)


def check_inputs(manifest: Manifest, base: Path) -> Inputs:
    """Digests of a run's input files against its record."""
    changed: dict[str, tuple[str, str]] = {}
    missing = []
    for name, digest in sorted(manifest.inputs.items()):
        file = base / name
        if not file.is_file():
            missing.append(name)
        elif (now := digest_file(file)) != digest:
            changed[name] = (digest, now)
    return Inputs(base, changed, tuple(missing), len(manifest.inputs))


def changed_texts(manifest: Manifest) -> tuple[str, ...]:
    """Texts in manifest.json that are not those of their digests: "study", or the name of a scenario."""
    found = [] if is_text_of(manifest.study_text, str(manifest.plain["study_digest"])) else ["study"]
    return (*found, *(s.name for s in manifest.scenarios if not is_text_of(s.text, s.digest)))


def rebuilt(manifest: Manifest, base: Path) -> StudyFile:
    """The study and its scenarios as they were run, what-ifs included; files are looked for in ``base``.

    Raises TextError for a text that this stresskit does not read any more.
    """
    loaded = study_from_text(manifest.study_text, base / str(manifest.plain["study_file"]))
    loaded = replace(loaded, digest=str(manifest.plain["study_digest"]))
    scenarios: list[Loaded[ScenarioSpec | TableMapping]] = []
    for s in manifest.scenarios:
        if s.what_if:
            said = parse_what_if(s.what_if)
            scenarios.append(scenario_from_text(s.text, Path(s.file), said))
        else:
            scenarios.append(replace(kept_scenario(s.text, base / s.file), digest=s.digest))
    return StudyFile(loaded.model, loaded, tuple(scenarios), base)


@dataclass(frozen=True, slots=True)
class Again:
    """What a folder's command computes now.

    write      writes it truthfully
    as_before  writes it with the versions of the record in place of today's, so that only results can differ
    inputs     file name -> sha256, as read this time
    """

    write: Write
    as_before: Write
    inputs: dict[str, str]


def run_again(manifest: Manifest, base: Path, *, say: Say) -> Again:
    """Everything that a folder of results holds, computed again from its recorded texts and the inputs in ``base``.

    Raises what reading, fitting and projecting raise.
    """
    say("reading")
    file = rebuilt(manifest, base)
    data = prepare(file)
    write: Callable[[Path, bool], object] = {
        "run": _run, "models": _models, "evidence": _evidence, "recovery": _recovery, "search": _search,
        "analysis": _analysis,
    }[manifest.kind](manifest, file, data, say)  # fmt: skip
    return Again(lambda out: write(out, False), lambda out: write(out, True), dict(data.digests))


def _command(manifest: Manifest) -> list[str]:
    return [str(word) for word in manifest.plain["command"]]


def _run(manifest: Manifest, file: StudyFile, data: Prepared, say: Say) -> Callable[[Path, bool], object]:
    fits = (
        read_models(manifest.folder, untouched=False) if manifest.models_given else fit(file, data, say=say)
    )
    result = whole_result(file, data, fits, evidence=manifest.asked_evidence, say=say)
    before = replace(result, record={**result.record, "versions": dict(sorted(manifest.versions.items()))})
    return lambda out, as_before: write_run(
        before if as_before else result, fits, out, command=_command(manifest)
    )


def _models(manifest: Manifest, file: StudyFile, data: Prepared, say: Say) -> Callable[[Path, bool], object]:
    fits = fit(file, data, say=say)
    return lambda out, _: write_model_folder(fits, file, data, out, command=_command(manifest), replace=False)


def _evidence(
    manifest: Manifest, file: StudyFile, data: Prepared, say: Say
) -> Callable[[Path, bool], object]:
    asked: Any = manifest.plain.get("asked", {})
    split = asked.get("split")
    found = study_evidence(file, data, fit(file, data, say=say), split=split_period(file, split), say=say)
    return lambda out, _: write_evidence(found, file, data, out, command=_command(manifest), split=split)


def _recovery(
    manifest: Manifest, file: StudyFile, data: Prepared, say: Say
) -> Callable[[Path, bool], object]:
    if data.workouts is None:
        raise UsageError(f"{manifest.folder} holds recovery tables, and its study has no section recovery")
    found = estimate_recovery(file.study, data.workouts, say=say)
    fits = fit_recovery(file.study, data.workouts, data.history, frequency=file.frequency)
    return lambda out, _: write_recovery(found, fits, file, data, out, command=_command(manifest))


def _analysis(
    manifest: Manifest, file: StudyFile, data: Prepared, say: Say
) -> Callable[[Path, bool], object]:
    key, spec = recorded_options(manifest)
    fits = (
        read_models(manifest.folder, untouched=False) if manifest.models_given else fit(file, data, say=say)
    )
    setting, _ = checked_setting(file, data, fits, say=say)
    say(key.replace("_", " "))
    found = analyse(setting, key, spec, say=say)
    return lambda out, _: write_analysis(found, setting, spec, out, command=_command(manifest))


def _search(manifest: Manifest, file: StudyFile, data: Prepared, say: Say) -> Callable[[Path, bool], object]:
    asked: Any = manifest.plain["search"]
    say("searching")
    text = search_from_text(str(asked["text"]), file.base / str(asked["file"]))
    result = search_specifications(file, data, text)
    return lambda out, _: write_search(result, out, command=_command(manifest))
