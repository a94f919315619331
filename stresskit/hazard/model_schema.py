"""JSON Schema (draft 2020-12) of a saved hazard, built from the classes that the file is written from."""

from __future__ import annotations

from dataclasses import MISSING, fields
from types import NoneType
from typing import Any, get_args, get_type_hints

from stresskit.core.values import FeatureDefinition
from stresskit.hazard.covariance import KINDS
from stresskit.hazard.estimation import Estimation
from stresskit.hazard.facts import FitFacts
from stresskit.hazard.saved import FORMAT, READABLE, TERM_KINDS
from stresskit.hazard.tail import AgeTail
from stresskit.hazard.usable import Gate
from stresskit.spec.schema import DIALECT
from stresskit.spec.terms import HazardSpec

#: Kinds of covariance that every saved model has.
ALWAYS = ("model_expected", "model_observed", "loan", "period")
_NUMBER = {"type": "number"}
_COUNT = {"type": "integer", "minimum": 0}
_PLAIN: dict[Any, dict[str, Any]] = {
    bool: {"type": "boolean"}, int: {"type": "integer"}, float: _NUMBER, str: {"type": "string"}, NoneType: {"type": "null"},
}  # fmt: skip


def model_schema() -> dict[str, Any]:
    """JSON Schema of the text that ``HazardFit.to_json`` writes, and of all versions that ``from_json`` reads."""
    spec = HazardSpec.model_json_schema(by_alias=True)
    definitions = spec.pop("$defs", {})
    properties: dict[str, Any] = {
        "format": {"const": FORMAT},
        "version": {"enum": list(READABLE)},
        "spec": spec,
        "design": _closed(
            {
                "intercept": {"type": "boolean"},
                "terms": {
                    "type": "array",
                    "items": {"anyOf": [_term(kind, cls) for kind, cls in TERM_KINDS.items()]},
                },
            }
        ),
        "facts": _from_class(FitFacts)
        | {"description": "see hazard.facts.FitFacts; counts and ranges, no rows"},
        "labels": {"type": "array", "items": {"type": "string"}},
        "coefficients": {"type": "array", "items": _NUMBER},
        "covariances": _covariances(),
        "estimation": _from_class(Estimation),
        "gates": {"type": "array", "items": _from_class(Gate)},
        "tail": _from_class(AgeTail),
        "features": {
            "type": "object",
            "additionalProperties": _from_class(FeatureDefinition),
            "description": "macro feature -> how it was made, see core.values.FeatureDefinition",
        },
    }
    later = {"estimation", "features", "gates", "tail"}
    return {
        "$schema": DIALECT,
        "title": "Saved hazard",
        **_closed(properties, optional=later),
        "$defs": definitions,
    }


def _closed(properties: dict[str, Any], *, optional: set[str] | None = None) -> dict[str, Any]:
    """An object of these properties and no other."""
    required = [name for name in properties if name not in (optional or set())]
    return {"type": "object", "properties": properties, "required": required, "additionalProperties": False}


def _term(kind: str, cls: type[Any]) -> dict[str, Any]:
    inner = _from_class(cls)
    inner["properties"] = {"kind": {"const": kind}, **inner["properties"]}
    inner["required"] = ["kind", *inner["required"]]
    return inner


def _from_class(cls: type[Any]) -> dict[str, Any]:
    """The plain form of a frozen dataclass: fields with a default may be left out."""
    hints = get_type_hints(cls)
    own = [f for f in fields(cls) if f.init]
    optional = {f.name for f in own if f.default is not MISSING or f.default_factory is not MISSING}
    return _closed({f.name: _of_type(hints[f.name]) for f in own}, optional=optional)


def _of_type(hint: Any) -> dict[str, Any]:
    if hint in _PLAIN:
        return dict(_PLAIN[hint])
    inner = get_args(hint)
    if len(inner) == 2 and inner[1] is Ellipsis:
        return {"type": "array", "items": _of_type(inner[0])}
    if len(inner) == 2 and inner[0] is str:  # macro feature -> (lowest, highest)
        return {
            "type": "object",
            "additionalProperties": {"type": "array", "items": _NUMBER, "minItems": 2, "maxItems": 2},
        }
    if inner and all(isinstance(v, str) for v in inner):
        return {"enum": list(inner)}
    if inner:
        return {"anyOf": [_of_type(v) for v in inner]}
    raise TypeError(f"no JSON form for {hint!r}")


def _covariances() -> dict[str, Any]:
    row = {"type": "array", "items": {"type": ["number", "null"]}}
    matrix = {"type": "array", "items": row}
    matrices = _closed(dict.fromkeys(KINDS, matrix), optional={str(kind) for kind in KINDS} - set(ALWAYS))
    clusters = _closed({"loan": _COUNT, "period": _COUNT})
    return _closed(
        {"matrices": matrices, "clusters": clusters, "lag": _COUNT, "repaired": _COUNT},
        optional={"lag", "repaired"},
    )
