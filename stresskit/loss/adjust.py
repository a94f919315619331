"""Floors and overlays on the expected losses of one scenario, after the model and beside its own figures."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import Portfolio
from stresskit.spec.provisions import Adjustments, Floors, Overlay

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Step:
    """One floor or overlay: which loans it touches (n,), and every loan's expected losses after it (n,)."""

    kind: str
    name: str
    reason: str
    touched: Bools
    el_12m: Floats
    el_lifetime: Floats


def adjusted(
    portfolio: Portfolio, loans: Mapping[str, Floats], adjustments: Adjustments, scenario: str
) -> tuple[Step, ...]:
    """Floors first, then the overlays that apply in ``scenario``, each on the result of the one before.

    loans  measures of :class:`stresskit.loss.assess.LossResult`
    """
    now = loans["el_12m"], loans["el_lifetime"]
    steps: list[Step] = []
    for step in _floors(portfolio, loans, adjustments.floors):
        steps.append(step)
        now = step.el_12m, step.el_lifetime
    for overlay in adjustments.overlays:
        touched = matches(portfolio, overlay)
        if overlay.scenarios and scenario not in overlay.scenarios:
            touched = np.zeros(portfolio.n_loans, dtype=bool)
        change = [_changed(values, portfolio, touched, overlay) for values in now]
        now = (
            change[0] if overlay.on != "el_lifetime" else now[0],
            change[1] if overlay.on != "el_12m" else now[1],
        )
        steps.append(Step("overlay", overlay.name, overlay.reason, touched, *now))
    return tuple(steps)


def matches(portfolio: Portfolio, overlay: Overlay) -> Bools:
    """(n,) loans that have one of the stated values in every stated column."""
    hit = np.ones(portfolio.n_loans, dtype=bool)
    for column, values in overlay.where.items():
        hit &= np.isin(texts(portfolio.static[column]), list(values))
    return hit


def texts(column: NDArray[np.generic]) -> NDArray[np.str_]:
    """A loan column as text: whole numbers without a decimal point."""
    if column.dtype.kind == "f":
        return np.array([f"{v:g}" for v in column], dtype=str)
    return column.astype(str)


def _changed(values: Floats, portfolio: Portfolio, touched: Bools, overlay: Overlay) -> Floats:
    if overlay.multiply is not None:
        return np.where(touched, values * overlay.multiply, values)
    base = np.where(touched, portfolio.balance, 0.0)
    among = np.where(touched, portfolio.counts, 0.0)
    total = float(base.sum())
    if not touched.any():
        return values
    share = base / total if total > 0 else among / float(among.sum())
    return values + float(overlay.add or 0.0) * share


def _floors(portfolio: Portfolio, loans: Mapping[str, Floats], floors: Floors) -> Sequence[Step]:
    """LGD, then PD. The LGD floor scales both losses; the PD floor adds what the next 12 months lack to both."""
    year, life = loans["el_12m"], loans["el_lifetime"]
    exposed = loans["exposed_lifetime"]
    lgd = np.divide(life, exposed, out=np.zeros_like(life), where=exposed > 0)
    steps = []
    if floors.lgd is not None:
        low = (lgd < floors.lgd) & (exposed > 0)
        factor = np.where(low & (lgd > 0), floors.lgd / np.where(lgd > 0, lgd, 1.0), 1.0)
        # with an LGD of 0 there is no loss to scale: lifetime exposure, and the next year's part of lifetime PD
        none = low & (lgd <= 0)
        part = np.divide(
            loans["pd_12m"], loans["pd_lifetime"], out=np.zeros_like(lgd), where=loans["pd_lifetime"] > 0
        )
        year = np.where(none, floors.lgd * exposed * part, year * factor)
        life = np.where(none, floors.lgd * exposed, life * factor)
        lgd = np.where(low, floors.lgd, lgd)
        steps.append(Step("floor", "lgd", f"LGD at least {floors.lgd:g}", low, year, life))
    if floors.pd_12m is not None:
        pd = loans["pd_12m"]
        low = pd < floors.pd_12m
        # without a default there is no exposure at default to scale: the balance stands in
        raised = np.where(
            pd > 0, year * floors.pd_12m / np.where(pd > 0, pd, 1.0), floors.pd_12m * lgd * portfolio.balance
        )
        more = np.where(low, raised - year, 0.0)
        year, life = year + more, life + more
        steps.append(Step("floor", "pd_12m", f"12-month PD at least {floors.pd_12m:g}", low, year, life))
    return steps
