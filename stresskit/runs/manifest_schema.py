"""JSON Schema (draft 2020-12) of manifest.json."""

from __future__ import annotations

from typing import Any

from stresskit.runs.manifest import FORMAT, KINDS
from stresskit.spec.analyses import Analyses
from stresskit.spec.schema import DIALECT

_TEXT = {"type": "string"}
_DIGEST = {"type": "string", "pattern": "^[0-9a-f]{64}$"}
_DIGESTS = {"type": "object", "additionalProperties": _DIGEST}


def _list(items: dict[str, Any]) -> dict[str, Any]:
    return {"type": "array", "items": items}


def _object(
    properties: dict[str, Any], *, optional: tuple[str, ...] = (), more: bool = False
) -> dict[str, Any]:
    required = [name for name in properties if name not in optional]
    return {"type": "object", "properties": properties, "required": required, "additionalProperties": more}


def _said(kind: dict[str, Any], words: str) -> dict[str, Any]:
    return kind | {"description": words}


def manifest_schema() -> dict[str, Any]:
    """Schema of the record of every kind of folder; keys that only some kinds have are optional."""
    scenario = _object(
        {
            "name": _TEXT,
            "file": _said(_TEXT, "relative to the study's folder; of a what-if: the name it would have"),
            "digest": _said(_DIGEST, "sha256 of the file's bytes"),
            "text": _said(_TEXT, "as run"),
            "what_if": _said(_list(_TEXT), "lines that the text was made of, when no file held it"),
            "title": _TEXT,
            "severity": _TEXT,
            "author_role": _TEXT,
            "approved_on": _TEXT,
            "notes": {"type": "object", "additionalProperties": _TEXT},
            "weight": {"type": "number"},
            "weighted": {"const": False},
        },
        optional=(
            "what_if",
            "title",
            "severity",
            "author_role",
            "approved_on",
            "notes",
            "weight",
            "weighted",
        ),
    )
    blas = {"type": "object", "additionalProperties": _TEXT}
    build = {
        "code": _said(_DIGEST, "sha256 over the source files of stresskit"),
        "blas": _said(_list(blas), "linear algebra libraries that were loaded, and the processor they chose their loops for"),
        "cpu": _said(_list(_TEXT), "instruction sets that numpy used"),
        "threads": _said({"type": "object", "additionalProperties": {"type": "integer"}}, "for information: no figure depends on them"),
    }  # fmt: skip
    analysis = _said(
        _object(
            {
                "key": _said({"enum": list(Analyses.model_fields)}, "as in the study's section analyses"),
                "options": _said({"type": "object"}, "all of its section, the command's options and defaults filled in"),
                "digest": _said(_DIGEST, "sha256 of the options as one line of JSON with sorted keys"),
            }
        ),
        "of one analysis asked by itself: what it was asked with; folders of older versions do not have it",
    )  # fmt: skip
    properties: dict[str, Any] = {
        "format": _said({"const": FORMAT}, "raised when a key that must be there comes, or one goes or changes its meaning"),
        "kind": _said({"enum": list(KINDS)}, "whose results the folder holds"),
        "study": _TEXT,
        "as_of": _TEXT,
        "study_file": _said(_TEXT, "name of the study's file"),
        "study_text": _said(_TEXT, "as run"),
        "study_digest": _said(_DIGEST, "sha256 of the file's bytes"),
        "scenarios": _list(scenario),
        "inputs": _said(_DIGESTS, "file name relative to the study's folder -> sha256"),
        "inputs_given": _said(_list(_TEXT), "tables that came from memory: no file and no digest stands for them"),
        "versions": _said({"type": "object", "additionalProperties": _TEXT}, "stresskit, Python, machine, every numeric library"),
        "seeds": _said({"type": "object", "additionalProperties": {"type": "integer"}}, "what drew random numbers -> its seed"),
        "seeds_note": _TEXT,
        "command": _said(_list(_TEXT), "words after `stresskit`, empty from Python"),
        "place": _object({"inputs": _said({"type": ["string", "null"]}, "the study's folder as seen from this one")}),
        "build": _object(build),
        "outputs": _said(_DIGESTS, "file name relative to this folder -> sha256; manifest.json and times.json are not among them"),
        "models": _said(
            _object({"given": {"type": "boolean"}, "digests": _DIGESTS}, optional=("digests",)),
            "whether the models were fitted before and handed over, and the sha256 of each one's text",
        ),
        "asked": _said(
            _object(
                {"evidence": {"type": "boolean"}, "split": {"type": ["string", "null"]}, "analysis": analysis},
                optional=("evidence", "split", "analysis"),
            ),
            "options that results depend on",
        ),
        "gates": _said(_list({"type": "object"}), "what each fit had to pass, and what was found"),
        "var": _said({"type": "object"}, "facts of the forecast that scenarios are held against"),
        "cautions": _list(_TEXT),
        "analyses": _said({"type": "object"}, "facts of the analyses that were asked for"),
        "search": _said({"type": "object"}, "text, digest and outcome of a search"),
    }  # fmt: skip
    some = ("models", "asked", "gates", "var", "cautions", "analyses", "search")
    return {
        "$schema": DIALECT,
        "title": "Record of a folder of results",
        **_object(properties, optional=some),
    }
