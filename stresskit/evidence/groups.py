"""Events, expected events and what their difference varies by, summed over groups of rows."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.optimize import brentq

from stresskit.core.errors import NumericError, UsageError
from stresskit.core.period import format_period
from stresskit.evidence.rows import Block, FitRows
from stresskit.hazard.levels import as_text
from stresskit.kernels.blocks import totals

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: A numeric column becomes this many bands of about equal rows at risk; a category keeps this many levels.
NUMBER_BANDS, MOST_LEVELS = 5, 20
#: Groupings that are no loan column; a column of such a name is told apart by a word.
OWN_GROUPINGS = ("period", "age", "cohort", "predicted")
#: Events further from those expected than this many binomial variances, squared, are no matter of a common shock.
_BEYOND_SHOCKS = 1e100
#: Fields of :class:`Grouped` that have a row for each group.
_SUMS = ("at_risk", "events", "expected", "variance", "jacobian", "residual_by_period", "expected_by_period")


@dataclass(frozen=True, slots=True, eq=False)
class Grouping:
    """A partition of the rows.

    ordered  neighbouring labels are neighbours in time, age or size
    code     block -> (n,) group of each row
    """

    by: str
    labels: tuple[str, ...]
    ordered: bool
    code: Callable[[Block], Ints]


@dataclass(frozen=True, slots=True, eq=False)
class Grouped:
    """Sums of a grouping with G groups over T periods, k coefficients.

    at_risk, events, expected, variance   (G,), variance is the sum of p (1 - p): 0 where every p is 0 or 1 in double precision
    jacobian           (G, k) derivative of ``expected`` by the coefficients
    residual_by_period, expected_by_period   (G, T)
    """

    by: str
    labels: tuple[str, ...]
    ordered: bool
    at_risk: Floats
    events: Floats
    expected: Floats
    variance: Floats
    jacobian: Floats
    residual_by_period: Floats
    expected_by_period: Floats

    def merged(self, code: Ints, labels: Sequence[str]) -> Grouped:
        """Groups added up: ``code`` (G,) is the new group of each old one."""
        pool = np.zeros((len(labels), code.size))
        pool[code, np.arange(code.size)] = 1.0
        sums = [pool @ getattr(self, name) for name in _SUMS]
        return Grouped(self.by, tuple(labels), self.ordered, *sums)

    @property
    def certain(self) -> NDArray[np.bool_]:
        """(G,) groups without variance: the fit leaves none of their rows to chance, so there is nothing to test."""
        return np.asarray(~(self.variance > 0.0), dtype=np.bool_)

    @property
    def contradicted(self) -> NDArray[np.bool_]:
        """(G,) groups without variance whose events are not those expected: impossible by the fit, and yet they were."""
        return np.asarray(self.certain & (self.events != self.expected), dtype=np.bool_)

    def uncertain(self) -> Grouped:
        """Without the groups that have no variance."""
        if not self.certain.any():
            return self
        at = np.flatnonzero(~self.certain)
        sums = [getattr(self, name)[at] for name in _SUMS]
        return Grouped(self.by, tuple(self.labels[g] for g in at), self.ordered, *sums)

    def present(self) -> Grouped:
        """Without the groups that have no rows."""
        at = np.flatnonzero(self.at_risk > 0.0)
        code = np.zeros(self.at_risk.size, dtype=np.int64)
        code[at] = np.arange(at.size)
        return self.merged(code, [self.labels[g] for g in at])


@dataclass(frozen=True, slots=True, eq=False)
class Tally:
    """Sums of every grouping; scores (T, k) of the coefficients by period; rows_by_period (T,)."""

    groups: dict[str, Grouped]
    scores: Floats
    rows_by_period: Floats

    @property
    def n_periods(self) -> int:
        return int((self.rows_by_period > 0.0).sum())


def tally(rows: FitRows, groupings: Sequence[Grouping]) -> Tally:
    """Every grouping in one pass over the rows."""
    k, t = rows.k, rows.n_periods
    size = [len(g.labels) for g in groupings]
    sums = [{n: np.zeros(s) for n in ("at_risk", "events", "expected", "variance")} for s in size]
    jacobian = [np.zeros((s, k)) for s in size]
    residual, expected = [np.zeros(s * t) for s in size], [np.zeros(s * t) for s in size]
    scores, at_risk = np.zeros((t, k)), np.zeros(t)
    for block in rows.blocks():
        score, slope = rows.scores(block)
        w, d, e = block.weight, block.weight * block.event, block.weight * block.p
        values = {"at_risk": w, "events": d, "expected": e, "variance": block.variance}
        at_risk += _sum(block.period, w, t)
        by_column = block.x * (w * slope)[:, None]
        for j in range(k):
            scores[:, j] += _sum(block.period, block.x[:, j] * (w * score), t)
        for g, grouping in enumerate(groupings):
            code = grouping.code(block)
            for name, value in values.items():
                sums[g][name] += _sum(code, value, size[g])
            for j in range(k):
                jacobian[g][:, j] += _sum(code, by_column[:, j], size[g])
            cell = code * t + block.period
            residual[g] += _sum(cell, d - e, size[g] * t)
            expected[g] += _sum(cell, e, size[g] * t)
    groups = {
        g.by: Grouped(
            g.by, g.labels, g.ordered, sums[i]["at_risk"], sums[i]["events"], sums[i]["expected"],
            sums[i]["variance"], jacobian[i], residual[i].reshape(-1, t), expected[i].reshape(-1, t),
        ).present()
        for i, g in enumerate(groupings)
    }  # fmt: skip
    return Tally(groups, scores, at_risk)


def _sum(code: Ints, value: Floats, size: int) -> Floats:
    out: Floats = np.bincount(code, weights=value, minlength=size).astype(np.float64, copy=False)
    return out


# ---- groupings


def by_period(rows: FitRows) -> Grouping:
    labels = [format_period(rows.first_period + t, rows.frequency) for t in range(rows.n_periods)]
    return Grouping("period", tuple(labels), True, lambda b: b.period)


def by_age(rows: FitRows) -> Grouping:
    labels = [str(a) for a in range(rows.rows.largest_age + 1)]
    return Grouping("age", tuple(labels), True, lambda b: b.age)


def by_cohort(rows: FitRows) -> Grouping:
    """Calendar year of the first period on book."""
    year = (rows.rows.origin + 1) // rows.frequency.per_year
    first = int(year.min())
    labels = [str(y) for y in range(first, int(year.max()) + 1)]
    return Grouping("cohort", tuple(labels), True, lambda b: (year - first)[b.stay])


def by_column(rows: FitRows, name: str) -> Grouping:
    """A static loan column: levels of a category (the smallest pooled beyond MOST_LEVELS), bands of a number."""
    r = rows.rows
    static, at_risk = r.static, totals(r.loan, r.weight * (r.exit - r.entry), r.n_loans)
    if name not in static:
        raise UsageError(f"no static loan column {name!r}; there are: {', '.join(static) or 'none'}")
    column = static[name]
    numeric = column.dtype.kind in "fiu"
    if numeric and np.unique(column).size > NUMBER_BANDS:
        code, labels = _bands(np.asarray(column, dtype=np.float64), at_risk)
    else:
        code, labels = _levels(as_text(column), at_risk)
    by = f"{name} (loan column)" if name in OWN_GROUPINGS else name
    return Grouping(by, tuple(labels), numeric, lambda b: code[b.loan])


def _bands(x: Floats, at_risk: Floats) -> tuple[Ints, list[str]]:
    order = np.argsort(x, kind="stable")
    running = np.cumsum(at_risk[order])
    at = np.searchsorted(running, running[-1] * np.arange(1, NUMBER_BANDS) / NUMBER_BANDS, side="left")
    edges = np.unique(x[order][at])
    code = np.searchsorted(edges, x, side="left")
    text = [f"{e:.4g}" for e in edges]
    between = [f"{a} to {b}" for a, b in pairwise(text)]
    return code.astype(np.int64), [f"up to {text[0]}", *between, f"above {text[-1]}"]


def _levels(x: NDArray[Any], at_risk: Floats) -> tuple[Ints, list[str]]:
    code, levels = pd.factorize(x, sort=True)
    labels = [str(v) for v in levels]
    if len(labels) > MOST_LEVELS:
        size = np.bincount(code, weights=at_risk)
        kept = np.sort(np.argsort(-size, kind="stable")[: MOST_LEVELS - 1])
        new = np.full(size.size, MOST_LEVELS - 1)
        new[kept] = np.arange(kept.size)
        code, labels = new[code], [*(labels[i] for i in kept), "all others"]
    return code.astype(np.int64), labels


def by_prediction(rows: FitRows, bands: int = 10) -> Grouping:
    """Tenths of the rows by predicted probability, lowest first."""
    edges = predictor_quantiles(rows, bands)
    labels = tuple(f"{i + 1} of {edges.size + 1}" for i in range(edges.size + 1))
    return Grouping("predicted", labels, True, lambda b: np.searchsorted(edges, b.eta, side="right"))


def predictor_quantiles(rows: FitRows, bands: int) -> Floats:
    """Inner edges of ``bands`` equal parts of the rows by linear predictor, exact to 1/1024 in it."""
    low, step = -64.0, 1.0 / 1024.0
    count = np.zeros(int(96.0 / step))
    for block in rows.blocks():
        cell = ((block.eta - low) / step).clip(0, count.size - 1).astype(np.int64)
        count += np.bincount(cell, weights=block.weight, minlength=count.size)
    running = np.cumsum(count)
    at = np.searchsorted(running, running[-1] * np.arange(1, bands) / bands, side="left")
    return np.unique(low + step * (at + 1.0))


# ---- pooling of thin groups, shocks of periods


def pooled(grouped: Grouped, minimum: float) -> Grouped:
    """Groups with fewer than ``minimum`` expected events joined: to neighbours when ordered, else to one."""
    expected = grouped.expected
    if grouped.ordered:
        code = np.zeros(expected.size, dtype=np.int64)
        held, group = 0.0, 0
        for g, e in enumerate(expected):
            code[g] = group
            held += float(e)
            if held >= minimum:
                group, held = group + 1, 0.0
        if held > 0.0 and group > 0:
            code[code == group] = group - 1
    else:
        thin = expected < minimum
        order = np.flatnonzero(~thin)
        code = np.full(expected.size, order.size)
        code[order] = np.arange(order.size)
        if thin.any() and expected[thin].sum() < minimum and order.size:
            code[thin] = int(np.argmin(expected[order]))
    labels = [
        " + ".join(_ends([grouped.labels[g] for g in np.flatnonzero(code == c)]))
        for c in range(int(code.max()) + 1)
    ]
    return grouped.merged(code, labels)


def _ends(labels: list[str]) -> list[str]:
    return labels if len(labels) <= 2 else [labels[0], "...", labels[-1]]


def equal_bands(grouped: Grouped, bands: int) -> Grouped:
    """Neighbouring groups joined to ``bands`` bands of about equal expected events."""
    share = (np.cumsum(grouped.expected) - 0.5 * grouped.expected) / grouped.expected.sum()
    _, code = np.unique(np.floor(share * bands).astype(np.int64), return_inverse=True)
    labels = []
    for c in range(int(code.max()) + 1):
        inside = [grouped.labels[g] for g in np.flatnonzero(code == c)]
        labels.append(inside[0] if len(inside) == 1 else f"{inside[0]}-{inside[-1]}")
    return grouped.merged(code.astype(np.int64), labels)


def shock_variance(period: Grouped, used_df: int) -> float:
    """Variance s2 of a relative shock common to all rows of a period: Var(events) = V + s2 * expected^2.

    Moment estimate: sum of residual^2 / (V + s2 * E^2) equals its degrees of freedom (Breslow 1984,
    Applied Statistics 33); 0 when the residuals vary no more than binomially.

    used_df  degrees of freedom that the fit has used up between periods
    """
    return relative_variance(period.events, period.expected, period.variance, used_df)


def relative_variance(events: Floats, expected: Floats, variance: Floats, used_df: int) -> float:
    """:func:`shock_variance` of counts by period, each (T,).

    Periods without variance have nothing to add and are left out, of the degrees of freedom too.

    Raises NumericError where a period has events of which the fit expects next to none: no shock explains them.
    """
    if (variance <= 0.0).any():
        at = variance > 0.0
        events, expected, variance = events[at], expected[at], variance[at]
    df = events.size - used_df
    square = (events - expected) ** 2

    beyond = np.flatnonzero(square > _BEYOND_SHOCKS * variance)
    if df > 0 and beyond.size:
        raise NumericError(
            f"no shock of calendar periods explains {beyond.size} of them (the first has {events[beyond[0]]:g} events, "
            f"{expected[beyond[0]]:.3g} expected); look at the offset or the columns that put the prediction there"
        )

    def excess(s2: float) -> float:
        return float((square / (variance + s2 * expected**2)).sum()) - df

    if df <= 0 or excess(0.0) <= 0.0:
        return 0.0
    high = 1.0
    while excess(high) > 0.0:
        high *= 4.0
    return float(brentq(excess, 0.0, high, xtol=1e-12))


def period_columns(rows: FitRows) -> int:
    """Coefficients that a period's own level can be fitted by: intercept and terms with a macro feature, but not at a bound."""
    fit = rows.fit
    held = np.isin(np.array(fit.design.labels), np.array(fit.at_bound, dtype=str))
    return int(((fit.design.index["feature"] >= 0) & ~held).sum()) + 1
