"""A run made again from its record, and every output set against the one in the folder."""

from __future__ import annotations

import tempfile
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

from stresskit.analyses.options import options_changed, recorded_options
from stresskit.core.errors import OutputError, StresskitError
from stresskit.repeat.differences import FileComparison, compare_file
from stresskit.repeat.rebuild import Again, Inputs, changed_texts, check_inputs, inputs_of, run_again
from stresskit.runs.build import build
from stresskit.runs.manifest import (
    MANIFEST,
    TIMES,
    Manifest,
    Outputs,
    check_outputs,
    is_text_of,
    read_manifest,
)
from stresskit.runs.record import versions

Say = Callable[[str], None]
#: Outputs that people look at first stand first.
_FIRST = ("summary.csv", "coefficients.csv", "models/", "paths.csv", "years.csv", "reconciliation.csv")


def _silent(_: str) -> None:
    return None


@dataclass(frozen=True, slots=True)
class Change:
    """Something that is not as it was at the run.

    kind   input, text, output or version
    what   the file, text or package
    words  one sentence
    fatal  whether the run can not be said to come out because of it
    """

    kind: Literal["input", "text", "output", "version"]
    what: str
    words: str
    fatal: bool


@dataclass(frozen=True, slots=True)
class Verification:
    """What came of making a run again.

    bitwise  whether bytes had to agree: the versions and the build are those of the run
    changes  what is not as it was, worst first
    files    every output, before and now; empty when the run could not be made again
    failure  why it could not, "" when it could
    outputs  files of the folder against their digests
    inputs   input files against their digests
    """

    folder: Path
    study: str
    as_of: str
    bitwise: bool
    changes: tuple[Change, ...]
    files: tuple[FileComparison, ...]
    failure: str
    outputs: Outputs
    inputs: Inputs

    @property
    def ok(self) -> bool:
        """Whether the run came out: nothing it rests on was changed, and every output agrees."""
        return (
            not self.failure
            and not any(c.fatal for c in self.changes)
            and bool(self.files)
            and all(f.agrees for f in self.files)
        )

    @property
    def moved(self) -> tuple[FileComparison, ...]:
        return tuple(f for f in self.files if not f.agrees)

    @property
    def sentence(self) -> str:
        """The outcome in one sentence."""
        n = len(self.files)
        if self.ok:
            same = sum(f.status == "same bytes" for f in self.files)
            if same == n:
                return f"It comes out: all {n} files have the same bytes."
            largest = max(f.largest for f in self.files)
            others = (
                f"in the others no figure moved by more than {largest:.1e} of itself"
                if largest
                else ("the others differ in rounding only")
            )
            return f"It comes out within the tolerance between builds: {same} of {n} files have the same bytes; {others}."
        if self.failure:
            return f"It could not be made again: {self.failure}"
        if self.moved:
            figures = sum(f.count for f in self.moved)
            return f"It does not come out: {figures:,} differences in {len(self.moved)} of {n} files."
        return "It does not come out as recorded, though no figure of the re-run differs."


def verify(
    run: str | Path,
    *,
    inputs: str | Path | None = None,
    out: str | Path | None = None,
    say: Say = _silent,
) -> Verification:
    """Make a run again from its own record and compare every output.

    run     folder that run, project, demo, fit, evidence, lgd, search or one of the analyses wrote
    inputs  the folder of the study's input files, when they are not where they were
    out     keeps what was made again in this folder

    Raises UsageError when the folder is none that stresskit wrote, or its manifest has another format.
    """
    manifest = read_manifest(run)
    if manifest.kind == "analysis":
        recorded_options(manifest)
    if out is not None and Path(out).exists():
        raise OutputError(f"{out} exists already; choose another --out")
    base = inputs_of(manifest, inputs)
    say("digests")
    outputs, found = check_outputs(manifest), check_inputs(manifest, base)
    texts = changed_texts(manifest)
    changes = [
        *_outputs(outputs),
        *_texts(texts),
        *_options(manifest),
        *_inputs(found, manifest),
        *_versions(manifest),
    ]
    failure = _hopeless(manifest, found, texts)
    files: tuple[FileComparison, ...] = ()
    bitwise = not any(c.kind == "version" for c in changes)
    if not failure:
        try:
            again = run_again(manifest, base, say=say)
            changes += _new_inputs(again, manifest)
            files = _compared(manifest, again, bitwise=bitwise, out=out, say=say)
        except OutputError:
            raise
        except StresskitError as e:
            failure = str(e)
    changes += _beside(manifest, base)
    changes.sort(key=lambda c: not c.fatal)
    return Verification(
        manifest.folder,
        str(manifest.plain["study"]),
        str(manifest.plain["as_of"]),
        bitwise,
        tuple(changes),
        files,
        failure,
        outputs,
        found,
    )


def _compared(
    manifest: Manifest, again: Again, *, bitwise: bool, out: str | Path | None, say: Say
) -> tuple[FileComparison, ...]:
    if out is not None:
        again.write(Path(out))
    say("writing")
    with tempfile.TemporaryDirectory(prefix="stresskit-verify-") as folder:
        place = Path(folder) / "again"
        again.as_before(place)
        say("comparing")
        now = {f.relative_to(place).as_posix() for f in place.rglob("*") if f.is_file()} - {MANIFEST, TIMES}
        names = sorted({*manifest.outputs, *now}, key=_rank)
        drawn_by = manifest.versions.get("matplotlib") == versions().get("matplotlib")
        there = [n for n in names if n in now or n in manifest.outputs]
        return tuple(compare_file(n, manifest.folder, place, exact=bitwise, pictures=drawn_by) for n in there)


def _rank(name: str) -> tuple[int, str]:
    return next((k for k, start in enumerate(_FIRST) if name.startswith(start)), len(_FIRST)), name


def _hopeless(manifest: Manifest, inputs: Inputs, texts: tuple[str, ...]) -> str:
    """Why there is no use in trying, "" when there is."""
    given = manifest.plain["inputs_given"]
    if given:
        return (
            f"{', '.join(given)} came from memory, not from files, when the run was made: there is nothing to read it from. "
            "Save it beside the study, name it there, and run again"
        )
    if inputs.missing:
        return f"{len(inputs.missing)} of {inputs.count} input files are missing"
    if texts:
        return f"{MANIFEST} does not hold the texts that were run any more"
    if options_changed(manifest):
        return f"{MANIFEST} does not hold the options that were asked any more"
    if manifest.models_given and not list((manifest.folder / "models").glob("*.json")):
        return "the models that the run was given are not in its folder any more"
    return ""


def _outputs(found: Outputs) -> list[Change]:
    edited = "was changed after the run: its sha256 is not the one in the record"
    out = [Change("output", n, f"output {n} {edited}", True) for n in found.edited]
    out += [Change("output", n, f"output {n} is missing from the folder", True) for n in found.missing]
    out += [
        Change("output", n, f"file {n} was not written by the run: it is not looked at", False)
        for n in found.added
    ]
    return out


def _texts(names: tuple[str, ...]) -> list[Change]:
    out = []
    for name in names:
        whose = "of the study" if name == "study" else f"of scenario {name}"
        words = (
            f"the text {whose} in {MANIFEST} was changed after the run: its sha256 is not the one beside it"
        )
        out.append(Change("text", name, words, True))
    return out


def _options(manifest: Manifest) -> list[Change]:
    if not options_changed(manifest):
        return []
    words = f"the options of the analysis in {MANIFEST} were changed after the run: their sha256 is not the one beside them"
    return [Change("text", "options", words, True)]


def _inputs(found: Inputs, manifest: Manifest) -> list[Change]:
    out = []
    for name in found.missing:
        near = "; name the folder that holds the inputs now with --inputs" if not found.changed else ""
        out.append(
            Change("input", name, f"input {name} is missing: there is no {found.base / name}{near}", True)
        )
    for name, (before, now) in found.changed.items():
        words = f"input {name} was changed after the run: sha256 {before[:12]} then, {now[:12]} now"
        out.append(Change("input", name, words, True))
    return out


def _new_inputs(again: Again, manifest: Manifest) -> list[Change]:
    return [
        Change(
            "input", n, f"input {n} is new: the study's pattern finds it now, and did not at the run", True
        )
        for n in sorted(set(again.inputs) - set(manifest.inputs))
    ]


def _versions(manifest: Manifest) -> list[Change]:
    """Differences of versions and build, one each; none of them is a failure by itself."""
    now, out = versions(), []
    for name in sorted({*manifest.versions, *now}):
        before, after = manifest.versions.get(name, "not recorded"), now.get(name, "not recorded")
        if before != after:
            out.append(Change("version", name, f"{name} {before} at the run, {after} now", False))
    here = build()
    then: Mapping[str, Any] = manifest.plain["build"]
    if then.get("code") != here["code"]:
        words = (
            f"stresskit's own code: sha256 {str(then.get('code'))[:12]} at the run, {here['code'][:12]} now"
        )
        out.append(Change("version", "code", words, False))
    for key, what in (("blas", "linear algebra library"), ("cpu", "instruction sets of the processor")):
        if then.get(key) != here[key]:
            words = f"{what}: {_brief(then.get(key))} at the run, {_brief(here[key])} now"
            out.append(Change("version", key, words, False))
    return out


def _brief(value: Any) -> str:
    if isinstance(value, list) and value and isinstance(value[0], dict):
        return ", ".join(
            " ".join(str(v.get(k, "")) for k in ("internal_api", "version", "architecture")).strip()
            for v in value
        )
    return ", ".join(map(str, value)) if isinstance(value, list) and value else "not recorded"


def _beside(manifest: Manifest, base: Path) -> list[Change]:
    """Study and scenario files beside the inputs that say something else by now: told, but the kept text was run."""
    kept = [("study", str(manifest.plain["study_file"]), str(manifest.plain["study_digest"]))]
    kept += [(f"scenario {s.name}", s.file, s.digest) for s in manifest.scenarios if not s.what_if]
    out = []
    for whose, name, digest in kept:
        file = base / name
        try:
            same = not file.is_file() or is_text_of(file.read_text(encoding="utf-8"), digest)
        except (OSError, ValueError):
            same = False
        if not same:
            words = f"{name} was changed after the run; the text of the {whose} as it was then was run again"
            out.append(Change("text", name, words, False))
    return out
