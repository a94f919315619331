"""Draws of LGD: workouts resampled, a recovery regression's coefficients, or a declared standard error."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray
from scipy.special import betaincinv, ndtr

from stresskit.analyses.bands.coefficients import CoefficientSpread, coefficient_spread
from stresskit.core.errors import UsageError
from stresskit.core.values import Portfolio
from stresskit.hazard.result import HazardFit
from stresskit.loss.lgd import lgd_per_loan
from stresskit.recovery.cases import Workouts, crossed_labels
from stresskit.recovery.curves import RecoveryCurve, resampled
from stresskit.recovery.regression import CURED, RECOVERED
from stresskit.runs.recovery import recovery_lgd
from stresskit.runs.setting import Setting
from stresskit.spec.exposure import CollateralLgd
from stresskit.spec.study import ConstantLgd, RecoveryLgd, SegmentLgd

Floats = NDArray[np.float64]

SOURCE = 4


class LgdSpread(Protocol):
    """What LGD is drawn from: numbers of a whole batch, of which each draw has its row."""

    def numbers(self, seed: int, batch: int, size: int) -> list[Any]: ...


@dataclass(frozen=True, slots=True, eq=False)
class StatedSpread:
    """LGD with a declared standard error: a beta distribution around each value, all moved by one number."""

    se: float

    def numbers(self, seed: int, batch: int, size: int) -> list[Any]:
        return list(np.random.default_rng([seed, SOURCE, batch]).standard_normal(size))

    def values(self, setting: Setting) -> Callable[[Any], Floats]:
        """number -> (n,) LGD. The mean is the declared LGD; one of 0 or 1 stays."""
        rule = setting.file.study.loss.lgd
        assert isinstance(rule, ConstantLgd | SegmentLgd)
        levels, place = np.unique(lgd_per_loan(rule, setting.portfolio), return_inverse=True)
        spread = levels * (1.0 - levels) / self.se**2 - 1.0
        if (spread[(levels > 0.0) & (levels < 1.0)] <= 0.0).any():
            raise UsageError(
                f"bands.lgd_se {self.se:g} is too large for an LGD of {levels[spread <= 0.0].max():g}: no distribution between 0 and 1 "
                "has this mean and this standard error"
            )

        def at(z: Any) -> Floats:
            inner = (levels > 0.0) & (levels < 1.0)
            out = levels.copy()
            a, b = levels[inner] * spread[inner], (1.0 - levels[inner]) * spread[inner]
            out[inner] = betaincinv(a, b, ndtr(float(z)))
            return np.asarray(out[np.ravel(place)])

        return at


@dataclass(frozen=True, slots=True, eq=False)
class CurveSpread:
    """LGD of recovery curves from resampled workouts, each segment by itself (recovery.curves.resampled)."""

    curves: Mapping[str, RecoveryCurve]
    workouts: Mapping[str, Workouts]

    def numbers(self, seed: int, batch: int, size: int) -> list[Any]:
        found = {}
        for k, (name, curve) in enumerate(self.curves.items()):
            rng = np.random.default_rng([seed, SOURCE, batch, k])
            found[name] = resampled(self.workouts[name], curve, resamples=max(size, 20), rng=rng).lgd
        return [{name: float(lgd[i]) for name, lgd in found.items()} for i in range(size)]

    def values(self, setting: Setting) -> Callable[[Any], Floats]:
        """segment -> LGD, to (n,) LGD with costs and floor as the study declares; the costs do not vary."""
        centre = static_recovery(setting)
        plain = {name: curve.lgd for name, curve in self.curves.items()}
        rule = setting.file.study.loss.lgd
        assert isinstance(rule, RecoveryLgd)
        labels, place, cost = _labels_of(setting)
        assert centre.size == place.size

        def at(drawn: Any) -> Floats:
            lgd = np.array([drawn.get(name, plain.get(name, np.nan)) for name in labels])
            return np.asarray(np.clip(lgd[place] + cost, rule.floor, 1.0))

        return at


@dataclass(frozen=True, slots=True, eq=False)
class HazardSpread:
    """LGD of recovery regressions: coefficients drawn from their covariance clustered by case, jointly normal in each.

    To first order what resampling whole cases and fitting again would give.
    """

    spread: CoefficientSpread
    fits: Mapping[str, HazardFit]

    def numbers(self, seed: int, batch: int, size: int) -> list[Any]:
        rng = np.random.default_rng([seed, SOURCE, batch])
        return list(rng.standard_normal((size, self.spread.normals)))


def _labels_of(setting: Setting) -> tuple[list[str], NDArray[np.int64], Floats]:
    """Recovery segments of the book, the place of each loan's, and (n,) costs."""
    assert setting.recovery is not None
    rule, spec, n = setting.file.study.loss.lgd, setting.recovery.spec, setting.portfolio.n_loans
    assert isinstance(rule, RecoveryLgd)
    curves = setting.recovery.curves
    if spec.by:
        from_columns = _crossed(setting.portfolio, spec.by)
        names, place = np.unique(from_columns, return_inverse=True)
        labels = [str(v) for v in names]
    else:
        labels, place = [""], np.zeros(n, dtype=np.int64)
    cost = np.zeros(len(labels))
    if rule.costs:
        cost = np.array([float(curves.get(v, curves[""]).cost[-1]) for v in labels])
    place = np.ravel(place).astype(np.int64)
    return labels, place, cost[place]


def _crossed(portfolio: Portfolio, by: tuple[str, ...]) -> NDArray[Any]:
    return np.asarray(crossed_labels(portfolio.static, by, portfolio.n_loans).astype(str))


def static_recovery(setting: Setting) -> Floats:
    """(n,) LGD from recovery curves as the projection uses it."""
    rule = setting.file.study.loss.lgd
    assert isinstance(rule, RecoveryLgd)
    assert setting.recovery is not None
    n = setting.portfolio.n_loans
    source = recovery_lgd(
        rule,
        setting.recovery,
        setting.fitted,
        setting.portfolio,
        setting.data.features,
        horizon=setting.data.horizon,
    )
    return np.asarray(source.tile(np.arange(n), 1, np.ones((n, 1))), dtype=np.float64).reshape(n)


def lgd_spread(setting: Setting, se: float | None) -> tuple[LgdSpread | None, str]:
    """What LGD is drawn from, and in words how, or why not. Raises UsageError for an lgd_se that has no use."""
    rule = setting.file.study.loss.lgd
    if se is not None and not isinstance(rule, ConstantLgd | SegmentLgd):
        raise UsageError(
            "bands.lgd_se is for a constant LGD or one by segment; this study's loss.lgd is another kind"
        )
    if isinstance(rule, ConstantLgd | SegmentLgd):
        if se is None:
            return (
                None,
                "LGD is a declared number and nobody stated its error (bands.lgd_se): it does not vary",
            )
        return StatedSpread(
            se
        ), f"LGD varies around the declared numbers with the stated standard error of {se:.1%} of EAD"
    if isinstance(rule, CollateralLgd) or setting.recovery is None:
        return (
            None,
            "LGD is a collateral shortfall: it moves with the path alone, the error of haircut and cost is not known",
        )
    if rule.recovery == "curve":
        data = setting.recovery
        labels = data.data.workouts.labels(data.spec.by)
        parts = {
            n: data.data.workouts if not n else data.data.workouts.select(labels == n) for n in data.curves
        }
        return CurveSpread(data.curves, parts), (
            f"LGD curves from {data.data.workouts.n_cases:,} workouts, whole cases resampled within each segment"
        )
    fits = {c: setting.fitted[c] for c in (RECOVERED, CURED) if c in setting.fitted}
    words = (
        f"coefficients of the recovery regressions, clustered by case ({setting.recovery.data.workouts.n_cases:,} workouts): to "
        "first order what resampling whole cases gives"
    )
    return HazardSpread(coefficient_spread(fits, {}, "loan"), fits), words
