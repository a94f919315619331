"""Options of one analysis asked by itself, as its record keeps them and as they are read back."""

from __future__ import annotations

import json
from typing import Any

from stresskit.core.errors import UsageError
from stresskit.runs.manifest import MANIFEST, Manifest
from stresskit.runs.record import digest_text
from stresskit.spec.analyses import Analyses


def options_record(key: str, spec: Any) -> dict[str, Any]:
    """key, options and their digest: every option as resolved, defaults included.

    spec  the part of the study's section ``analyses`` that was used, the command's options put over it
    """
    options = spec.model_dump(by_alias=True, mode="json")
    return {"key": key, "options": options, "digest": options_digest(options)}


def options_digest(options: Any) -> str:
    """sha256 of the options as one line of JSON with sorted keys."""
    return digest_text(json.dumps(options, ensure_ascii=False, sort_keys=True))


def options_changed(manifest: Manifest) -> bool:
    """Whether the options in a record are others than those of the digest beside them."""
    asked = manifest.asked_analysis
    return asked is not None and options_digest(asked["options"]) != asked["digest"]


def recorded_options(manifest: Manifest) -> tuple[str, Any]:
    """Key and section of the analysis that a folder holds.

    Raises UsageError for a record without them, and for options that this stresskit does not know.
    """
    asked = manifest.asked_analysis
    if asked is None:
        raise UsageError(
            f"{manifest.folder} holds one analysis asked by itself, and its record does not keep the options it was asked "
            "with, as an older stresskit wrote it: ask it again, or name it under analyses in the study, run the study, and "
            "verify the run"
        )
    key = str(asked["key"])
    try:
        spec = getattr(Analyses.model_validate_json(json.dumps({key: asked["options"]})), key)
    except ValueError as error:
        raise UsageError(f"{manifest.folder / MANIFEST}: asked.analysis: {in_words(error, 0, key)}") from None
    return key, spec


def in_words(error: ValueError, skip: int, whole: str) -> str:
    """What is wrong with each option of a section that was refused, or the error as it says itself.

    skip   names that a place begins with and that are not said
    whole  said in the place of no name at all
    """
    problems: list[Any] = getattr(error, "errors", list)()
    told = "; ".join(
        f"{'.'.join(str(p) for p in e['loc'][skip:]) or whole}: {e['msg'].removeprefix('Value error, ')}"
        for e in problems
    )
    return told or str(error)
