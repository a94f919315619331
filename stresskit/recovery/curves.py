"""Recovery curves weighted by amount: every unit of currency is an individual that is recovered, cured or still owed.

n_u = amount still unrecovered at the start of workout period u on cases under observation in u; d_u = discounted
recoveries in u; c_u = amount cured in u. S(u) = prod (1 - (d_k + c_k) / n_k) is the share of the amount at default
that is neither recovered nor cured after u: the product limit (Kaplan & Meier 1958) with money for individuals, tied
exits exact, and cures as a competing exit (Aalen & Johansen 1978). Expected loss rate of a new default:
LGD = S(U) + cure_loss * F_cure(U), U the declared end of workout.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.errors import NumericError, UsageError
from stresskit.core.values import frozen
from stresskit.recovery.cases import CURE, OPEN, Workouts, grouped

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Cases are resampled this many sets at a time.
_BATCH = 64


@dataclass(frozen=True, slots=True)
class RecoveryCurve:
    """One segment's curve; arrays over workout periods 1 .. U unless stated.

    segment    label, "" for all cases
    cases      number of cases, open and closed; ``open_cases`` of them open
    amount     owed at default (or at late entry), all cases
    cases_observed (U,)  cases under observation in the period
    at_risk, recovered, cured (U,)  n_u, d_u, c_u
    unresolved (U + 1,)  S(0) = 1, S(1), .. S(U)
    cured_share (U + 1,) F_cure
    cost (U + 1,)        cumulative discounted cost per unit owed at default, on cases under observation
    cure_loss            share of a cured amount that counts as lost
    last_supported       last workout period with the stated number of cases under observation; recovery after it is
                         taken as none, so that the loss is rather too high than too low
    """

    segment: str
    cases: int
    open_cases: int
    amount: float
    cases_observed: Ints
    at_risk: Floats
    recovered: Floats
    cured: Floats
    unresolved: Floats
    cured_share: Floats
    cost: Floats
    cure_loss: float
    last_supported: int

    def __post_init__(self) -> None:
        for f in fields(self):
            value = getattr(self, f.name)
            if isinstance(value, np.ndarray):
                object.__setattr__(self, f.name, frozen(value))

    @property
    def lgd(self) -> float:
        """Expected loss rate of a new default, costs apart."""
        return float(self.unresolved[-1] + self.cure_loss * self.cured_share[-1])

    def loss_rate_from(self, period: int) -> float:
        """Expected loss per unit still unrecovered and not cured after ``period`` workout periods; NaN when none is left."""
        left = self.unresolved[period]
        if left <= 0.0:
            return float("nan")
        later = self.unresolved[-1] + self.cure_loss * (self.cured_share[-1] - self.cured_share[period])
        return float(later / left)

    def frame(self) -> pd.DataFrame:
        """A row per workout period 0 .. U."""
        blank = np.array([np.nan])
        return pd.DataFrame(
            {
                "segment": self.segment,
                "period": np.arange(self.unresolved.size),
                "cases_observed": np.concatenate([blank, self.cases_observed]),
                "at_risk": np.concatenate([blank, self.at_risk]),
                "recovered": np.concatenate([blank, self.recovered]),
                "cured": np.concatenate([blank, self.cured]),
                "unresolved": self.unresolved,
                "cured_share": self.cured_share,
                "cost": self.cost,
                "loss_rate_from_here": [self.loss_rate_from(u) for u in range(self.unresolved.size)],
                "supported": np.arange(self.unresolved.size) <= self.last_supported,
            }
        )


@dataclass(frozen=True, slots=True)
class _Sums:
    """(n, U) summands of one set of cases: at risk, recovered, cured, under observation, costs, owed while observed."""

    at_risk: Floats
    recovered: Floats
    cured: Floats
    present: Floats
    cost: Floats
    owed: Floats


def _summands(w: Workouts, weight: Floats) -> _Sums:
    period = np.arange(1, w.end + 1)[None, :]
    left = w.unrecovered()
    here = (period > w.entered[:, None]) & (period <= w.at_risk_until[:, None])
    scale = weight[:, None]
    cured = np.zeros((w.n_cases, w.end))
    at = np.flatnonzero((w.kind == CURE) & (w.closed > 0) & (w.closed <= w.observed))
    # A cured amount leaves at the end of its period, after that period's recoveries.
    cured[at, w.closed[at] - 1] = left[at, w.closed[at]]
    observed = w.present()
    return _Sums(
        left[:, :-1] * here * scale, w.recovered * here * scale, cured * scale, here.astype(np.float64),
        w.costs * observed * scale, w.amount[:, None] * observed * scale,
    )  # fmt: skip


def _limit(at_risk: Floats, recovered: Floats, cured: Floats) -> tuple[Floats, Floats]:
    """S and F_cure over 0 .. U along the last axis; no exits where nothing is at risk."""
    some = at_risk > 0
    out = np.divide(recovered + cured, at_risk, out=np.zeros_like(at_risk), where=some)
    stay = np.cumprod(np.clip(1.0 - out, 0.0, 1.0), axis=-1)
    one = np.ones((*stay.shape[:-1], 1))
    survival = np.concatenate([one, stay], axis=-1)
    rate = np.divide(cured, at_risk, out=np.zeros_like(at_risk), where=some)
    share = np.concatenate([0.0 * one, np.cumsum(survival[..., :-1] * rate, axis=-1)], axis=-1)
    return survival, share


def recovery_curve(
    w: Workouts, *, segment: str = "", cure_loss: float = 0.0, support: int = 1, by: str = "amount"
) -> RecoveryCurve:
    """The curve of all cases of ``w``.

    by       "amount": every unit of currency counts alike; "cases": every case does (its recovered share)
    support  cases that must be under observation for a period's recovery rate to count

    Raises UsageError for another ``by``, NumericError when the first workout period already lacks support.
    """
    if by not in ("amount", "cases"):
        raise UsageError(f"by is 'amount' or 'cases', not {by!r}")
    weight = np.ones(w.n_cases) if by == "amount" else 1.0 / w.amount
    s = _summands(w, weight)
    observed = np.asarray(s.present.sum(axis=0)).astype(np.int64)
    # Cured cases leave the count; a period is supported by the cases whose fate in it is known.
    known = w.present().sum(axis=0)
    short = np.flatnonzero(known < support)
    last = int(short[0]) if short.size else w.end
    if last == 0:
        raise NumericError(
            f"segment {segment or 'all cases'!r}: {int(known[0]) if w.end else 0} cases are observed in the first workout "
            f"period, {support} are asked for; join segments, or lower recovery.support"
        )
    open_after = np.arange(w.end) >= last
    at_risk, recovered, cured = (x.sum(axis=0) for x in (s.at_risk, s.recovered, s.cured))
    survival, share = _limit(at_risk, np.where(open_after, 0.0, recovered), np.where(open_after, 0.0, cured))
    owed = s.owed.sum(axis=0)
    cost = np.divide(s.cost.sum(axis=0), owed, out=np.zeros(w.end), where=owed > 0)
    return RecoveryCurve(
        segment, w.n_cases, int((w.kind == OPEN).sum()), float((w.amount * weight).sum()), observed, at_risk,
        recovered, cured, survival, share, np.concatenate([[0.0], np.cumsum(cost)]), cure_loss, last,
    )  # fmt: skip


def curves_by(
    w: Workouts, columns: tuple[str, ...], *, cure_loss: float = 0.0, support: int = 1, by: str = "amount"
) -> dict[str, RecoveryCurve]:
    """ "" (all cases), then every value of the crossed columns, sorted."""
    out = {"": recovery_curve(w, cure_loss=cure_loss, support=support, by=by)}
    if columns:
        for label, at in grouped(w.labels(columns)).items():
            out[label] = recovery_curve(
                w.select(at), segment=label, cure_loss=cure_loss, support=support, by=by
            )
    return out


@dataclass(frozen=True, slots=True)
class Bands:
    """Resampled whole cases (Efron 1981), amounts and flows together; quantiles over the sets.

    resamples       number of sets
    lower, upper    (U + 1,) of S(u)
    lgd             (resamples,) LGD of every set
    lgd_lower, lgd_upper, lgd_se
    """

    resamples: int
    level: float
    lower: Floats
    upper: Floats
    lgd: Floats
    lgd_lower: float
    lgd_upper: float
    lgd_se: float


def resampled(
    w: Workouts,
    curve: RecoveryCurve,
    *,
    resamples: int,
    rng: np.random.Generator,
    level: float = 0.9,
) -> Bands:
    """Bands of ``curve``, which was made from ``w``: n cases drawn from n with replacement, ``resamples`` times.

    Errors by counting units of currency would be far too small: a case's units share its fate.
    Raises UsageError for fewer than 20 sets or a level outside (0, 1).
    """
    if resamples < 20 or not 0.0 < level < 1.0:
        raise UsageError(
            f"bands need at least 20 resampled sets and a level in (0, 1), not {resamples} and {level}"
        )
    s = _summands(w, np.ones(w.n_cases))
    n, supported = w.n_cases, np.arange(w.end) < curve.last_supported
    survival, share = np.empty((resamples, w.end + 1)), np.empty(resamples)
    for start in range(0, resamples, _BATCH):
        size = min(_BATCH, resamples - start)
        drawn = rng.integers(0, n, size=(size, n))
        times = np.stack([np.bincount(row, minlength=n) for row in drawn]).astype(np.float64)
        # einsum, not a library product: its order of addition does not depend on threads.
        parts = [np.einsum("bi,iu->bu", times, x) for x in (s.at_risk, s.recovered, s.cured)]
        some, cured = _limit(parts[0], parts[1] * supported, parts[2] * supported)
        survival[start : start + size], share[start : start + size] = some, cured[:, -1]
    lgd = survival[:, -1] + curve.cure_loss * share
    tail = (1.0 - level) / 2.0
    lower, upper = np.quantile(survival, [tail, 1.0 - tail], axis=0)
    low, high = np.quantile(lgd, [tail, 1.0 - tail])
    return Bands(
        resamples,
        level,
        frozen(lower),
        frozen(upper),
        frozen(lgd),
        float(low),
        float(high),
        float(lgd.std(ddof=1)),
    )


def open_case_estimates(
    w: Workouts, curves: dict[str, RecoveryCurve], columns: tuple[str, ...]
) -> pd.DataFrame:
    """A row per open case: recovered so far, expected loss of the rest (its segment's curve from here on), loss rate.

    loss_rate is per unit owed at default, costs apart.
    """
    at = np.flatnonzero(w.kind == OPEN)
    labels, left = w.labels(columns), w.unrecovered()
    rows = []
    for i in at:
        seen = int(w.observed[i])
        curve = curves[str(labels[i])]
        rate = curve.loss_rate_from(seen)
        rest = float(left[i, seen])
        loss = rest * (0.0 if np.isnan(rate) else rate)
        rows.append(
            (
                str(w.case_ids[i]),
                str(labels[i]),
                seen,
                float(w.amount[i]),
                float(w.amount[i]) - rest,
                rest,
                loss,
                loss / float(w.amount[i]),
            )
        )
    columns_ = [
        "case",
        "segment",
        "periods_in_default",
        "amount",
        "recovered",
        "unrecovered",
        "expected_loss",
        "loss_rate",
    ]
    return pd.DataFrame(rows, columns=columns_)
