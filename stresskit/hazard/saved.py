"""A fit as versioned JSON: no pickle, no rows of customers, floats by their shortest exact form.

Layout, version 2::

    format, version        "stresskit hazard", 2
    spec                   the hazard as the study states it
    design                 intercept, terms: what each term learned (knots, levels, centres, scales)
    facts                  see hazard.facts.FitFacts
    labels, coefficients   (k,)
    covariances            matrices: kind -> (k, k), null where there is none, kinds on request only where the
                           spec asked; clusters, lag, repaired: see hazard.covariance.Covariances
    gates                  list of name, passed, asked, found, remedy: see hazard.usable.Gate
    features               column of a macro feature (one for each level where it goes by a loan column) -> how it was
                           made, see core.values.FeatureDefinition; no such key where no
                           feature is read or the feature table did not say how they were made
    estimation             see hazard.estimation.Estimation; no such key after plain maximum likelihood
    tail                   see hazard.tail.AgeTail; no such key when the baseline keeps its last value

Version 1 had neither gates nor features nor lag nor repaired, and of the covariances only the first four kinds. It is
read; its gates count as not recorded, and how its features were made as not known.

The schema: hazard.model_schema, published as docs/model-schema.json.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import MISSING, asdict, fields
from typing import TYPE_CHECKING, Any, get_type_hints

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import StresskitError, TextError
from stresskit.core.values import FeatureDefinition
from stresskit.hazard.covariance import KINDS, ON_REQUEST, Covariances
from stresskit.hazard.design import Design
from stresskit.hazard.estimation import estimation_from
from stresskit.hazard.facts import FitFacts
from stresskit.hazard.sound import (
    check_covariances,
    check_design,
    check_estimation,
    check_facts,
    check_gates,
    strict_json,
)
from stresskit.hazard.tail import AgeTail
from stresskit.hazard.terms import (
    AgeFunction,
    AgeSpline,
    AgeSteps,
    Crossing,
    KeyedMacro,
    LoanCategory,
    LoanNumber,
    MacroNumber,
    Offset,
)
from stresskit.hazard.usable import UNKNOWN, Gate, gate_plain
from stresskit.spec.terms import HazardSpec

if TYPE_CHECKING:
    from stresskit.hazard.result import HazardFit

FORMAT, VERSION = "stresskit hazard", 2
READABLE = (1, VERSION)

TERM_KINDS: dict[str, type[Any]] = {
    t.kind: t
    for t in (
        AgeSpline,
        AgeSteps,
        AgeFunction,
        LoanNumber,
        LoanCategory,
        MacroNumber,
        KeyedMacro,
        Crossing,
        Offset,
    )
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
        "covariances": {
            "matrices": matrices,
            "clusters": dict(fit.covariances.clusters),
            "lag": fit.covariances.lag,
            "repaired": fit.covariances.repaired,
        },
        "gates": [gate_plain(g) for g in fit.gates],
    }
    if fit.definitions:
        document["features"] = {name: asdict(made) for name, made in fit.definitions.items()}
    if not fit.estimation.plain:
        document["estimation"] = fit.estimation.document()
    if fit.tail is not None:
        document["tail"] = {f.name: getattr(fit.tail, f.name) for f in fields(fit.tail)}
    return json.dumps(document, indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def fit_from_text(text: str) -> dict[str, Any]:
    """Arguments of HazardFit from JSON text. Raises TextError that names the place."""
    try:
        document = strict_json(text)
    except ValueError as error:
        raise TextError(f"saved hazard: not JSON ({error})") from None
    if not isinstance(document, dict) or document.get("format") != FORMAT:
        raise TextError(f'saved hazard: expected a JSON object with "format": "{FORMAT}"')
    version = document.get("version")
    if version not in READABLE or isinstance(version, bool | float):
        raise TextError(
            f"saved hazard: version {version!r}, this stresskit reads versions {' and '.join(map(str, READABLE))}. "
            "Use the stresskit that wrote it, or fit again."
        )
    extra = set(document) - {
        "format",
        "version",
        "spec",
        "design",
        "facts",
        "labels",
        "coefficients",
        "covariances",
    }
    extra -= {"tail", "estimation"} if version == 1 else {"tail", "estimation", "gates", "features"}
    if extra:
        raise TextError(f"saved hazard: unknown keys {', '.join(sorted(extra))}")
    spec = _guard("spec", lambda: HazardSpec.model_validate_json(json.dumps(document["spec"])))
    design = _guard("design", lambda: _design(document["design"]))
    if list(design.labels) != document.get("labels"):
        raise TextError(
            f"saved hazard: labels are {document.get('labels')}, the design gives {list(design.labels)}; the file was changed"
        )
    k = design.k
    parts = {
        "facts": _guard("facts", lambda: _facts(document["facts"])),
        "coefficients": _guard("coefficients", lambda: _coefficients(document["coefficients"], k)),
        "covariances": _guard("covariances", lambda: _covariances(document["covariances"], k, version)),
        "gates": (UNKNOWN,) if version == 1 else _guard("gates", lambda: _gates(document["gates"])),
        "estimation": _guard(
            "estimation", lambda: estimation_from(document.get("estimation", {}), design.labels)
        ),
        "tail": _guard("tail", lambda: _tail(document.get("tail"), spec)),
        "definitions": _guard("features", lambda: _definitions(document.get("features", {}), design)),
    }
    _guard("design", lambda: check_design(design, spec))
    _guard("facts", lambda: check_facts(parts["facts"], design))
    _guard("covariances", lambda: check_covariances(parts["covariances"], parts["facts"]))
    _guard("gates", lambda: check_gates(parts["gates"]))
    _guard("estimation", lambda: check_estimation(parts["estimation"], spec))
    return {"spec": spec, "design": design, **parts}


def _guard(where: str, make: Callable[[], Any]) -> Any:
    """make(), with what can go wrong in a damaged file told as one kind of error with its place."""
    try:
        return make()
    except (
        KeyError,
        TypeError,
        ValueError,
        OverflowError,
        AttributeError,
        IndexError,
        StresskitError,
    ) as error:
        what = f"no key {error}" if isinstance(error, KeyError) else str(error)
        raise TextError(f"saved hazard: {where}: {what}") from None


def _plain(matrix: NDArray[np.float64]) -> list[list[float | None]]:
    return [[float(v) if np.isfinite(v) else None for v in row] for row in matrix]


def _coefficients(values: Any, k: int) -> NDArray[np.float64]:
    """(k,) finite numbers: neither null nor text passes for one."""
    out = _array([_typed(float, v, "a coefficient") for v in values], (k,))
    if not np.isfinite(out).all():
        raise ValueError(f"{int((~np.isfinite(out)).sum())} of {k} are not finite")
    return out


def _array(values: Any, shape: tuple[int, ...]) -> NDArray[np.float64]:
    out = np.array(values, dtype=np.float64)
    if out.shape != shape:
        raise ValueError(f"shape {out.shape}, expected {shape}")
    return out


def _term_plain(term: Any) -> dict[str, Any]:
    return {"kind": term.kind} | {
        f.name: getattr(term, f.name) for f in fields(term) if getattr(term, f.name) != f.default
    }


def _design(plain: dict[str, Any]) -> Design:
    terms = []
    for entry in plain["terms"]:
        kind = entry["kind"]
        if kind not in TERM_KINDS:
            raise ValueError(f"unknown kind of term {kind!r}, expected one of {', '.join(TERM_KINDS)}")
        terms.append(_build(TERM_KINDS[kind], {key: v for key, v in entry.items() if key != "kind"}))
    return Design(_typed(bool, plain["intercept"], "intercept"), tuple(terms))


def _build(cls: type[Any], values: dict[str, Any]) -> Any:
    """An instance from plain values, each of the declared type and none missing or unknown."""
    hints = get_type_hints(cls)
    wanted = {f.name for f in fields(cls) if f.init and f.default is MISSING}
    known = {f.name for f in fields(cls) if f.init}
    if not wanted <= set(values) <= known:
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
    later = {"supported_age", "count"}  # not in the first models of version 1; only of fits with counts
    if set(plain) | later != wanted or plain.get("count", "?") == "":
        raise ValueError(f"keys {sorted(plain)}, expected {sorted(wanted)}")
    values = {n: _typed(hints[n], v, n) for n, v in plain.items() if n != "feature_ranges"}
    if values.get("supported_age") == 0:
        raise ValueError("supported_age is 0; a file that does not know it leaves it out")
    return FitFacts(**values, feature_ranges=ranges)


def _definitions(plain: Any, design: Design) -> dict[str, FeatureDefinition]:
    if not isinstance(plain, dict):
        raise ValueError(f"{plain!r}, expected an object")
    wanted = design.sources("feature")
    if plain and set(plain) != set(wanted):
        raise ValueError(f"keys {sorted(plain)}, the design reads {sorted(wanted)}")
    return {name: _build(FeatureDefinition, dict(plain[name])) for name in wanted if plain}


def _tail(plain: dict[str, Any] | None, spec: HazardSpec) -> AgeTail | None:
    age = spec.age_term()
    wanted = "hold" if age is None else age.beyond
    if (plain is None) != (wanted == "hold"):
        raise ValueError(f"{'no tail' if plain is None else 'a tail'}, but the spec says beyond: {wanted}")
    if plain is None:
        return None
    tail: AgeTail = _build(AgeTail, plain)
    if (tail.family, tail.link) != (wanted, spec.link):
        raise ValueError(f"{tail.family} with {tail.link}, the spec says {wanted} with {spec.link}")
    if not (tail.shape > 0.0 and tail.scale > 0.0 and tail.join >= 1):
        raise ValueError(f"shape {tail.shape:g}, scale {tail.scale:g}, join {tail.join}: all must be above 0")
    return tail


def _covariances(plain: dict[str, Any], k: int, version: int) -> Covariances:
    # A model of version 1 that is saved again has no more than it had.
    optional = {*ON_REQUEST, "period_hac"}
    unknown = sorted(set(plain["matrices"]) - set(KINDS))
    if unknown:
        raise ValueError(f"unknown kinds {', '.join(unknown)}, expected {', '.join(KINDS)}")
    wanted = [kind for kind in KINDS if kind not in optional or kind in plain["matrices"]]
    matrices = {kind: _array(plain["matrices"][kind], (k, k)) for kind in wanted}
    clusters = {name: _typed(int, plain["clusters"][name], name) for name in ("loan", "period")}
    more = {} if version == 1 else {name: _typed(int, plain[name], name) for name in ("lag", "repaired")}
    return Covariances(matrices, clusters, **more)


def _gates(plain: Any) -> tuple[Gate, ...]:
    if not isinstance(plain, list):
        raise ValueError(f"{plain!r}, expected a list")
    return tuple(_build(Gate, dict(entry)) for entry in plain)
