"""How a fit was estimated, where that is not plain maximum likelihood. Part of the saved model."""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import Any

MAXIMUM_LIKELIHOOD = "maximum likelihood"
RIDGE = "ridge"
FIRTH_LOGIT = "Firth, Jeffreys-penalised likelihood"
FIRTH_MEAN = "Firth, mean bias reduction"
METHODS = (MAXIMUM_LIKELIHOOD, RIDGE, FIRTH_LOGIT, FIRTH_MEAN)


@dataclass(frozen=True, slots=True)
class Estimation:
    """How a fit was estimated.

    method     one of METHODS
    weights    of the ridge, one per coefficient (hazard.penalty); empty without one
    penalty    added to the log-likelihood at the estimate: minus the ridge, or log sqrt(det information)
               under Jeffreys' prior; 0 where the method maximises no penalised likelihood
    effective  number of coefficients that the information criterion counts; None: all of them
    at_bound   labels of the coefficients at their bound
    free       coefficients of the fit without bounds, and free_llf its log-likelihood (with its ridge, if
               any); empty and None when the spec has no bounds
    separated  what parted events from the rest, where the spec says how to go on
    pooled     what was joined with what
    """

    method: str = MAXIMUM_LIKELIHOOD
    weights: tuple[float, ...] = ()
    penalty: float = 0.0
    effective: float | None = None
    at_bound: tuple[str, ...] = ()
    free: tuple[float, ...] = ()
    free_llf: float | None = None
    separated: tuple[str, ...] = ()
    pooled: tuple[str, ...] = ()

    @property
    def plain(self) -> bool:
        """Maximum likelihood with nothing to tell."""
        return self == PLAIN

    def document(self) -> dict[str, Any]:
        """As JSON holds it: only what is not the default."""
        out = {f.name: getattr(self, f.name) for f in fields(self) if getattr(self, f.name) != f.default}
        return {name: list(v) if isinstance(v, tuple) else v for name, v in out.items()}


PLAIN = Estimation()


def estimation_from(document: Any, labels: tuple[str, ...]) -> Estimation:
    """From :meth:`Estimation.document`. Raises ValueError for anything else."""
    if not isinstance(document, dict):
        raise ValueError(f"{document!r}, expected an object")
    known = {f.name for f in fields(Estimation)}
    unknown = sorted(set(document) - known)
    if unknown:
        raise ValueError(f"unknown keys {', '.join(unknown)}; known: {', '.join(sorted(known))}")
    texts = {n: tuple(_text(v, n) for v in _list(document, n)) for n in ("at_bound", "separated", "pooled")}
    numbers = {n: tuple(_number(v, n) for v in _list(document, n)) for n in ("weights", "free")}
    for name, values in numbers.items():
        if values and len(values) != len(labels):
            raise ValueError(f"{name} has {len(values)} values for {len(labels)} coefficients")
    strange = sorted(set(texts["at_bound"]) - set(labels))
    if strange:
        raise ValueError(f"at_bound names {', '.join(strange)}, which is no coefficient")
    method = document.get("method", MAXIMUM_LIKELIHOOD)
    if method not in METHODS:
        raise ValueError(f"method is {method!r}, expected one of {', '.join(METHODS)}")
    return Estimation(
        method=method,
        penalty=_number(document.get("penalty", 0.0), "penalty"),
        effective=_number(document["effective"], "effective") if "effective" in document else None,
        free_llf=_number(document["free_llf"], "free_llf") if "free_llf" in document else None,
        weights=numbers["weights"],
        free=numbers["free"],
        at_bound=texts["at_bound"],
        separated=texts["separated"],
        pooled=texts["pooled"],
    )


def _list(document: dict[str, Any], name: str) -> list[Any]:
    values = document.get(name, [])
    if not isinstance(values, list):
        raise ValueError(f"{name} is {values!r}, expected a list")
    return values


def _text(value: Any, name: str) -> str:
    if not isinstance(value, str):
        raise ValueError(f"{name} holds {value!r}, expected text")
    return value


def _number(value: Any, name: str) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise ValueError(f"{name} holds {value!r}, expected a number")
    return float(value)
