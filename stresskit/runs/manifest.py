"""manifest.json of a folder of results: its form, and reading it back."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType
from typing import Any, Literal, cast, get_args

from stresskit.core.errors import UsageError
from stresskit.runs.record import digest_file, digest_text

#: Format of manifest.json; raised when a field that must be there comes, or one goes or changes its meaning. 1 had no kind,
#: place and build. ``asked.analysis`` came within 2: a folder without it is read all the same.
FORMAT = 2
MANIFEST, TIMES = "manifest.json", "times.json"
#: Which command's results a folder holds.
Kind = Literal["run", "models", "evidence", "recovery", "search", "analysis"]
KINDS: tuple[str, ...] = get_args(Kind)

_TYPES: Mapping[str, type] = MappingProxyType(
    {
        "study": str, "as_of": str, "study_file": str, "study_text": str, "study_digest": str, "scenarios": list,
        "inputs": dict, "inputs_given": list, "versions": dict, "seeds": dict, "command": list, "place": dict,
        "build": dict, "outputs": dict,
    }
)  # fmt: skip

_ANALYSIS: Mapping[str, type] = MappingProxyType({"key": str, "options": dict, "digest": str})
_NO_ANALYSIS: Mapping[str, Any] = {"key": "", "options": {}, "digest": ""}


@dataclass(frozen=True, slots=True)
class ScenarioText:
    """A scenario as run: ``file`` is relative to the study's folder; ``what_if`` are the lines that it was made of."""

    name: str
    file: str
    digest: str
    text: str
    what_if: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Manifest:
    """The record of a folder, checked as far as reading needs.

    folder   where it lies
    plain    the whole of manifest.json
    """

    folder: Path
    kind: Kind
    plain: Mapping[str, Any]
    scenarios: tuple[ScenarioText, ...]

    @property
    def study_text(self) -> str:
        return str(self.plain["study_text"])

    @property
    def inputs(self) -> Mapping[str, str]:
        """File name relative to the study's folder -> sha256."""
        return cast(Mapping[str, str], self.plain["inputs"])

    @property
    def outputs(self) -> Mapping[str, str]:
        """File name relative to this folder -> sha256."""
        return cast(Mapping[str, str], self.plain["outputs"])

    @property
    def versions(self) -> Mapping[str, str]:
        return cast(Mapping[str, str], self.plain["versions"])

    @property
    def inputs_folder(self) -> Path | None:
        """Where the inputs lay as seen from the folder; None when that was not recorded."""
        at = self.plain["place"].get("inputs")
        return None if at is None else (self.folder.resolve() / at).resolve()

    @property
    def models_given(self) -> bool:
        """Whether the models were fitted before and handed to the run."""
        return bool(self.plain.get("models", {}).get("given", False))

    @property
    def asked_evidence(self) -> bool:
        return bool(self.plain.get("asked", {}).get("evidence", False))

    @property
    def asked_analysis(self) -> Mapping[str, Any] | None:
        """key, options and digest of the analysis that was asked by itself; None where the record does not keep them."""
        return cast(Mapping[str, Any] | None, self.plain.get("asked", {}).get("analysis"))


def read_manifest(folder: str | Path) -> Manifest:
    """The record of a folder of results. Raises UsageError for what is none, or of a format that is not read."""
    place = Path(folder)
    file = place / MANIFEST
    if not place.is_dir():
        raise UsageError(f"{place} is not a folder: name a run folder, as `stresskit run` writes it")
    try:
        plain = json.loads(file.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise UsageError(f"{place} is not a run folder: it has no {MANIFEST}") from None
    except (OSError, ValueError) as e:
        raise UsageError(f"{place} is not a run folder: {MANIFEST} cannot be read ({e})") from None
    if not isinstance(plain, dict) or "study_digest" not in plain or "outputs" not in plain:
        raise UsageError(f"{place} is not a run folder: its {MANIFEST} was not written by stresskit")
    if plain.get("format") != FORMAT:
        older = isinstance(plain.get("format"), int) and plain["format"] < FORMAT
        remedy = (
            "it was written by an older stresskit and does not say where the inputs lay; run the study again"
            if older
            else "it was written by a newer stresskit; use that one"
        )
        raise UsageError(
            f"{file} has format {plain.get('format')!r}, and this stresskit reads {FORMAT}: {remedy}"
        )
    _check(plain, file)
    return Manifest(place, plain["kind"], MappingProxyType(plain), _scenarios(plain["scenarios"], file))


def _check(plain: Mapping[str, Any], file: Path) -> None:
    for key, kind in _TYPES.items():
        if not isinstance(plain.get(key), kind):
            found = "missing" if key not in plain else f"a {type(plain[key]).__name__}"
            raise UsageError(f"{file}: {key} is {found}, expected a {kind.__name__}: it was changed by hand")
    if plain.get("kind") not in KINDS:
        raise UsageError(f"{file}: kind is {plain.get('kind')!r}, expected one of {', '.join(KINDS)}")
    for key in ("inputs", "outputs", "versions"):
        if not all(isinstance(v, str) for v in plain[key].values()):
            raise UsageError(f"{file}: {key} holds something else than text: it was changed by hand")
    asked = plain.get("asked", {})
    one = asked.get("analysis", _NO_ANALYSIS) if isinstance(asked, dict) else None
    if not (isinstance(one, dict) and all(isinstance(one.get(k), t) for k, t in _ANALYSIS.items())):
        raise UsageError(
            f"{file}: asked is not an object in which analysis has key, options and digest: it was changed by hand"
        )


def _scenarios(plain: Sequence[Any], file: Path) -> tuple[ScenarioText, ...]:
    try:
        return tuple(
            ScenarioText(
                str(s["name"]), str(s["file"]), str(s["digest"]), str(s["text"]), tuple(s.get("what_if", ()))
            )
            for s in plain
        )
    except (KeyError, TypeError, AttributeError):
        raise UsageError(
            f"{file}: scenarios is not a list of names, files, digests and texts: it was changed by hand"
        ) from None


def is_text_of(text: str, digest: str) -> bool:
    """Whether a text is that of the digest; a byte order mark at the file's start is not part of the text."""
    return digest in (digest_text(text), digest_text("\ufeff" + text))


@dataclass(frozen=True, slots=True)
class Outputs:
    """Outputs of a folder beside its record; names relative to the folder, sorted.

    edited   bytes are not those that were recorded
    missing  recorded, not there
    added    there, not recorded
    """

    edited: tuple[str, ...]
    missing: tuple[str, ...]
    added: tuple[str, ...]

    @property
    def sound(self) -> bool:
        return not (self.edited or self.missing)


def check_outputs(manifest: Manifest) -> Outputs:
    """Digests of a folder's files against its record."""
    there = {f.relative_to(manifest.folder).as_posix() for f in manifest.folder.rglob("*") if f.is_file()}
    known = manifest.outputs
    return Outputs(
        edited=tuple(sorted(n for n in known if n in there and digest_file(manifest.folder / n) != known[n])),
        missing=tuple(sorted(n for n in known if n not in there)),
        added=tuple(sorted(there - {*known, MANIFEST, TIMES})),
    )
