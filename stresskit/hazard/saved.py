"""A fit as versioned JSON: no pickle, no rows of customers, floats by their shortest exact form.

Layout, version 1::

    format, version        "stresskit hazard", 1
    spec                   the hazard as the study states it
    design                 intercept, terms: what each term learned (knots, levels, centres, scales)
    facts                  see hazard.facts.FitFacts
    labels, coefficients   (k,)
    covariances            matrices: kind -> (k, k), null where there is none; clusters
"""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import MISSING, fields
from typing import TYPE_CHECKING, Any, get_type_hints

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import StresskitError, TextError
from stresskit.hazard.covariance import KINDS, Covariances
from stresskit.hazard.design import Design
from stresskit.hazard.facts import FitFacts
from stresskit.hazard.terms import (
    AgeFunction,
    AgeSpline,
    AgeSteps,
    Crossing,
    LoanCategory,
    LoanNumber,
    MacroNumber,
    Offset,
)
from stresskit.spec.terms import HazardSpec

if TYPE_CHECKING:
    from stresskit.hazard.result import HazardFit

FORMAT, VERSION = "stresskit hazard", 1

_TERMS: dict[str, type[Any]] = {
    t.kind: t
    for t in (AgeSpline, AgeSteps, AgeFunction, LoanNumber, LoanCategory, MacroNumber, Crossing, Offset)
}


def fit_to_text(fit: HazardFit) -> str:
    """The fit as JSON text."""
    matrices = {k: _plain(m) for k, m in fit.covariances.matrices.items()}
    document = {
        "format": FORMAT,
        "version": VERSION,
        "spec": fit.spec.model_dump(mode="json", by_alias=True),
        "design": {"intercept": fit.design.intercept, "terms": [_term_plain(t) for t in fit.design.terms]},
        "facts": fit.facts.plain(),
        "labels": list(fit.design.labels),
        "coefficients": fit.coefficients.tolist(),
        "covariances": {"matrices": matrices, "clusters": dict(fit.covariances.clusters)},
    }
    return json.dumps(document, indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def fit_from_text(text: str) -> dict[str, Any]:
    """Arguments of HazardFit from JSON text. Raises TextError that names the place."""
    try:
        document = json.loads(text)
    except json.JSONDecodeError as error:
        raise TextError(f"saved hazard: not JSON ({error})") from None
    if not isinstance(document, dict) or document.get("format") != FORMAT:
        raise TextError(f'saved hazard: expected a JSON object with "format": "{FORMAT}"')
    if document.get("version") != VERSION:
        raise TextError(
            f"saved hazard: version {document.get('version')!r}, this stresskit reads version {VERSION}. "
            "Use the stresskit that wrote it, or fit again."
        )
    extra = set(document) - {"format", "version", "spec", "design", "facts", "labels", "coefficients", "covariances"}
    if extra:
        raise TextError(f"saved hazard: unknown keys {', '.join(sorted(extra))}")
    spec = _guard("spec", lambda: HazardSpec.model_validate_json(json.dumps(document["spec"])))
    design = _guard("design", lambda: _design(document["design"]))
    if list(design.labels) != document.get("labels"):
        raise TextError(
            f"saved hazard: labels are {document.get('labels')}, the design gives {list(design.labels)}; the file was changed"
        )
    k = design.k
    return {
        "spec": spec,
        "design": design,
        "facts": _guard("facts", lambda: _facts(document["facts"])),
        "coefficients": _guard("coefficients", lambda: _array(document["coefficients"], (k,))),
        "covariances": _guard("covariances", lambda: _covariances(document["covariances"], k)),
    }


def _guard(where: str, make: Callable[[], Any]) -> Any:
    """make(), with what can go wrong in a damaged file told as one kind of error with its place."""
    try:
        return make()
    except (KeyError, TypeError, ValueError, AttributeError, IndexError, StresskitError) as error:
        what = f"no key {error}" if isinstance(error, KeyError) else str(error)
        raise TextError(f"saved hazard: {where}: {what}") from None


def _plain(matrix: NDArray[np.float64]) -> list[list[float | None]]:
    return [[float(v) if np.isfinite(v) else None for v in row] for row in matrix]


def _array(values: Any, shape: tuple[int, ...]) -> NDArray[np.float64]:
    out = np.array(values, dtype=np.float64)
    if out.shape != shape:
        raise ValueError(f"shape {out.shape}, expected {shape}")
    return out


def _term_plain(term: Any) -> dict[str, Any]:
    return {"kind": term.kind} | {f.name: getattr(term, f.name) for f in fields(term)}


def _design(plain: dict[str, Any]) -> Design:
    terms = []
    for entry in plain["terms"]:
        kind = entry["kind"]
        if kind not in _TERMS:
            raise ValueError(f"unknown kind of term {kind!r}, expected one of {', '.join(_TERMS)}")
        terms.append(_build(_TERMS[kind], {key: v for key, v in entry.items() if key != "kind"}))
    return Design(_typed(bool, plain["intercept"], "intercept"), tuple(terms))


def _build(cls: type[Any], values: dict[str, Any]) -> Any:
    """An instance from plain values, each of the declared type and none missing or unknown."""
    hints = get_type_hints(cls)
    wanted = {f.name for f in fields(cls) if f.init and f.default is MISSING}
    if set(values) != wanted:
        raise ValueError(f"{cls.__name__} has keys {sorted(values)}, expected {sorted(wanted)}")
    return cls(**{name: _typed(hints[name], value, name) for name, value in values.items()})


def _typed(hint: Any, value: Any, name: str) -> Any:
    """value as the plain type ``hint``: bool, int, float, str, or a tuple of one of these."""
    if hint in (tuple[float, ...], tuple[int, ...], tuple[str, ...]):
        if not isinstance(value, list):
            raise ValueError(f"{name} is {value!r}, expected a list")
        return tuple(_typed(hint.__args__[0], v, name) for v in value)
    allowed = (int, float) if hint is float else (hint,)
    if not isinstance(value, allowed) or (isinstance(value, bool) and hint is not bool):
        raise ValueError(f"{name} is {value!r}, expected {hint.__name__}")
    return float(value) if hint is float else value


def _facts(plain: dict[str, Any]) -> FitFacts:
    ranges = {str(k): (float(v[0]), float(v[1])) for k, v in plain["feature_ranges"].items()}
    hints = get_type_hints(FitFacts)
    wanted = {f.name for f in fields(FitFacts)}
    if set(plain) != wanted:
        raise ValueError(f"keys {sorted(plain)}, expected {sorted(wanted)}")
    values = {n: _typed(hints[n], v, n) for n, v in plain.items() if n != "feature_ranges"}
    return FitFacts(**values, feature_ranges=ranges)


def _covariances(plain: dict[str, Any], k: int) -> Covariances:
    matrices = {kind: _array(plain["matrices"][kind], (k, k)) for kind in KINDS}
    clusters = {name: _typed(int, plain["clusters"][name], name) for name in ("loan", "period")}
    return Covariances(matrices, clusters)
