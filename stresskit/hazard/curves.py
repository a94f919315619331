"""Product limit, Nelson-Aalen and cumulative incidence of observed exits, with late entry and ties.

Everything here is exact for tied ages and says nothing about covariates: curves to lay beside a fit.
A case is at risk in ages (entry, exit]: an exit at the age of another case's entry does not count it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtri

from stresskit.core.errors import NumericError, UsageError
from stresskit.core.values import frozen
from stresskit.hazard.risk_counts import checked_cases, count_exits, presence, supported_from

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class CurveTable:
    """Product limit and cumulative hazard of one kind of exit, a row per age with exits.

    age (T,), at_risk (T,), events (T,)   weighted counts at that age
    survival, se, lower, upper (T,)       Kaplan & Meier 1958; Greenwood 1926; interval on log(-log S)
                                          (Kalbfleisch & Prentice 1980). se and interval are NaN where S = 0
    cumulative_hazard, its se (T,)        Nelson-Aalen sum d/Y and sqrt(sum d/Y^2) (Aalen 1978)
    condition_on   survival is that of a case alive at this age; -inf: from the beginning
    level          of the interval, e.g. 0.95
    last_age       largest age under observation; nothing is known beyond it
    emptied_at     age after which no one was at risk although others were later (late entry), else None:
                   what the curve shows from there on is no estimate, 0 for ever if the last ones left by
                   an exit. Condition on a later age
    stopped_at     age after which fewer than the stated minimum were at risk: the curve ends there; else None
    """

    age: Floats
    at_risk: Floats
    events: Floats
    survival: Floats
    se: Floats
    lower: Floats
    upper: Floats
    cumulative_hazard: Floats
    cumulative_hazard_se: Floats
    condition_on: float
    level: float
    last_age: float
    emptied_at: float | None
    stopped_at: float | None

    def __post_init__(self) -> None:
        _freeze(self)

    def at(self, ages: ArrayLike, *, hold: bool = False) -> pd.DataFrame:
        """The curve at these ages; NaN before condition_on and beyond what was observed, unless ``hold``."""
        columns = {"survival": (self.survival, 1.0), "se": (self.se, 0.0)}
        columns["cumulative_hazard"] = (self.cumulative_hazard, 0.0)
        return _steps(self, ages, columns, hold)

    def to_frame(self) -> pd.DataFrame:
        """The columns of shape (T,)."""
        return pd.DataFrame({f.name: getattr(self, f.name) for f in fields(self)[:9]})


@dataclass(frozen=True, slots=True)
class IncidenceTable:
    """Cumulative incidence of K competing exits (Aalen & Johansen 1978), a row per age with exits.

    causes (K,)                    names, in the order of the columns
    age (T,), at_risk (T,), events (T, K)
    survival, survival_se (T,)     free of every exit
    incidence, se, lower, upper (T, K)   se by the delta method on the multinomial exits of each age (the
                                   competing-risk form of Greenwood: Dinse & Larson 1986). With one interval
                                   per case and no late entry it is the infinitesimal jackknife (R survfit).
                                   Interval on log(-log F); NaN where F = 0
    condition_on, level, last_age, emptied_at, stopped_at: as in :class:`CurveTable`
    """

    causes: tuple[str, ...]
    age: Floats
    at_risk: Floats
    events: Floats
    survival: Floats
    survival_se: Floats
    incidence: Floats
    se: Floats
    lower: Floats
    upper: Floats
    condition_on: float
    level: float
    last_age: float
    emptied_at: float | None
    stopped_at: float | None

    def __post_init__(self) -> None:
        _freeze(self)

    @property
    def hazard(self) -> Floats:
        """(T, K) exits by cause over all at risk: d_c / Y."""
        return np.asarray(self.events / self.at_risk[:, None])

    @property
    def conditional_hazard(self) -> Floats:
        """(T, K) P(c | c or survive), what a cause-specific regression fits; NaN where no one else stayed."""
        others = self.events.sum(axis=1, keepdims=True) - self.events
        rest = self.at_risk[:, None] - others
        return np.asarray(np.divide(self.events, rest, out=np.full_like(rest, np.nan), where=rest > 0))

    def at(self, ages: ArrayLike, *, hold: bool = False) -> pd.DataFrame:
        """The curves at these ages; NaN before condition_on and beyond what was observed, unless ``hold``."""
        columns = {"survival": (self.survival, 1.0), "survival_se": (self.survival_se, 0.0)}
        for k, cause in enumerate(self.causes):
            columns[f"incidence_{cause}"] = (self.incidence[:, k], 0.0)
            columns[f"se_{cause}"] = (self.se[:, k], 0.0)
        return _steps(self, ages, columns, hold)

    def to_frame(self) -> pd.DataFrame:
        """A row per age: at_risk, survival, its se; per cause events, hazards, incidence, se, interval."""
        out = {n: getattr(self, n) for n in ("age", "at_risk", "survival", "survival_se")}
        for name in ("events", "hazard", "conditional_hazard", "incidence", "se", "lower", "upper"):
            table = getattr(self, name)
            out |= {f"{name}_{cause}": table[:, k] for k, cause in enumerate(self.causes)}
        return pd.DataFrame(out)


def product_limit(
    entry: ArrayLike,
    exit: ArrayLike,
    event: ArrayLike,
    *,
    condition_on: float | None = None,
    weight: ArrayLike | None = None,
    minimum_at_risk: float = 0.0,
    level: float = 0.95,
) -> CurveTable:
    """Product limit and Nelson-Aalen of cases at risk in (entry, exit] that leave at ``exit`` if ``event``.

    entry, exit, event  (n,) in the same unit of age; event 0/1 or False/True
    condition_on        survival given alive at this age: earlier exits and time at risk are left out
    weight              (n,) > 0, counts: weight 2 is the case twice
    minimum_at_risk     the curve ends at the age after which fewer are at risk; when that happens before
                        the risk set is at its largest, an error names the age to condition on
    level               of the confidence interval

    Raises UsageError for shapes and options, DataError for values that cannot be ages, events or weights,
    NumericError when no one is at risk after ``condition_on`` or the risk set is too small to begin with.
    """
    cases = checked_cases(entry, exit, event, 1, condition_on, weight)
    table = count_exits(cases, minimum_at_risk)
    y, d = table.at_risk, table.events[:, 0]
    survival, se = _greenwood(y, d)
    lower, upper = _log_log(survival, se, level)
    return CurveTable(
        table.age, y, d, survival, se, lower, upper, np.cumsum(d / y), np.sqrt(np.cumsum(d / y**2)),
        cases.start, level, table.last_age, table.emptied_at, table.stopped_at,
    )  # fmt: skip


def cumulative_incidence(
    entry: ArrayLike,
    exit: ArrayLike,
    cause: ArrayLike,
    *,
    causes: Sequence[str] = ("default", "payoff"),
    condition_on: float | None = None,
    weight: ArrayLike | None = None,
    minimum_at_risk: float = 0.0,
    level: float = 0.95,
) -> IncidenceTable:
    """Exact cumulative incidence by cause, tied exits included; cause 0 = none, k = causes[k - 1].

    Other arguments and errors as in :func:`product_limit`.
    """
    if not causes:
        raise UsageError("cumulative_incidence needs at least one name in causes")
    cases = checked_cases(entry, exit, cause, len(causes), condition_on, weight)
    table = count_exits(cases, minimum_at_risk)
    y, d = table.at_risk, table.events.sum(axis=1)
    survival, survival_se = _greenwood(y, d)
    before = np.concatenate([[1.0], survival[:-1]])[:, None]
    y2, d2 = y[:, None], table.events
    incidence = np.cumsum(before * d2 / y2, axis=0)
    # Sum over s <= t of the delta-method terms, with (F(t) - F(s)) multiplied out.
    g = _greenwood_terms(y, d)[:, None]
    cross = before * d2 / y2**2
    own = before**2 * d2 * (y2 - d2) / y2**3
    square = np.cumsum(g, axis=0) * incidence**2
    mixed = np.cumsum(g * incidence + cross, axis=0) * incidence
    rest = np.cumsum(g * incidence**2 + 2.0 * cross * incidence + own, axis=0)
    se = np.sqrt(np.maximum(square - 2.0 * mixed + rest, 0.0))
    lower, upper = _log_log(incidence, se, level)
    return IncidenceTable(
        tuple(causes), table.age, y, d2, survival, survival_se, incidence, se, lower, upper,
        cases.start, level, table.last_age, table.emptied_at, table.stopped_at,
    )  # fmt: skip


def incidence_from_hazards(conditional: ArrayLike) -> tuple[Floats, Floats]:
    """Survival (T,) and incidence (T, K) from P(c | c or survive) (T, K), period after period.

    The odds o_c = P/(1-P) compete exactly: survive 1/(1 + sum o), cause c o_c/(1 + sum o)
    (Begg & Gray 1984). P = 1 leaves no survivor; two causes with P = 1 in a period raise NumericError.
    """
    p = np.asarray(conditional, dtype=np.float64)
    if p.ndim != 2:
        raise UsageError(f"hazards must have the shape (periods, causes), got {p.shape}")
    bad = np.argwhere(~((p >= 0) & (p <= 1)))
    if bad.size:
        row, k = bad[0]
        raise UsageError(
            f"{len(bad)} hazards are no probabilities; first: {p[row, k]} in row {row}, cause {k}"
        )
    if ((p == 1).sum(axis=1) > 1).any():
        row = int(np.flatnonzero((p == 1).sum(axis=1) > 1)[0])
        raise NumericError(f"row {row}: two causes are certain in one period, their shares undefined")
    # Multiplied by prod(1 - p), so that p = 1 needs no infinity.
    spare = 1.0 - p
    others = [np.prod(np.delete(spare, k, axis=1), axis=1) for k in range(p.shape[1])]
    shares = p * np.stack(others, axis=1)
    stay = np.prod(spare, axis=1)
    total = stay + shares.sum(axis=1)
    survival = np.cumprod(stay / total)
    before = np.concatenate([[1.0], survival[:-1]])
    return survival, np.cumsum(before[:, None] * shares / total[:, None], axis=0)


def first_supported_age(
    entry: ArrayLike, exit: ArrayLike, *, minimum_at_risk: float, weight: ArrayLike | None = None
) -> float:
    """Smallest age to condition on so that ``minimum_at_risk`` are at risk from there to the risk set's peak.

    Raises NumericError when the risk set never reaches the minimum.
    """
    cases = checked_cases(entry, exit, np.zeros(np.shape(exit), dtype=np.int64), 1, None, weight)
    return supported_from(*presence(cases), minimum_at_risk)


def _greenwood_terms(y: Floats, d: Floats) -> Floats:
    """d / (Y (Y - d)), 0 where everyone left: there the factor that multiplies it is 0."""
    rest = y * (y - d)
    return np.divide(d, rest, out=np.zeros_like(d), where=rest > 0)


def _greenwood(y: Floats, d: Floats) -> tuple[Floats, Floats]:
    survival = np.asarray(np.cumprod(1.0 - d / y), dtype=np.float64)
    se = survival * np.sqrt(np.cumsum(_greenwood_terms(y, d)))
    return survival, np.where(survival > 0, se, np.nan)


def _log_log(p: Floats, se: Floats, level: float) -> tuple[Floats, Floats]:
    """Interval for a probability on the log(-log) scale; a curve still at 1 has no spread to show."""
    if not 0 < level < 1:
        raise UsageError(f"level must lie between 0 and 1, for example 0.95; got {level!r}")
    z = float(ndtri(0.5 + level / 2.0))
    inside = (p > 0) & (p < 1)
    q, spread = p[inside], se[inside] * z
    # Past exp(700) the limits are 0 and 1 to the last bit.
    spread = np.minimum(spread / (q * np.abs(np.log(q))), 700.0)
    lower = np.where(p == 1, 1.0, np.nan)
    upper = lower.copy()
    lower[inside], upper[inside] = q ** np.exp(spread), q ** np.exp(-spread)
    return lower, upper


def _steps(
    table: CurveTable | IncidenceTable, ages: ArrayLike, columns: dict[str, tuple[Floats, float]], hold: bool
) -> pd.DataFrame:
    """Right-continuous step functions at ``ages``, with their value before the first age with exits."""
    where = np.atleast_1d(np.asarray(ages, dtype=np.float64))
    index = np.searchsorted(table.age, where, "right")
    known = (where >= table.condition_on) & (hold | (where <= table.last_age))
    if table.stopped_at is not None and not hold:
        known &= where <= table.stopped_at
    out = {"age": where}
    for name, (values, before) in columns.items():
        out[name] = np.where(known, np.concatenate([[before], values])[index], np.nan)
    return pd.DataFrame(out)


def _freeze(table: CurveTable | IncidenceTable) -> None:
    for f in fields(table):
        value = getattr(table, f.name)
        if isinstance(value, np.ndarray):
            object.__setattr__(table, f.name, frozen(value))
