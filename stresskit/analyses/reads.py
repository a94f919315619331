"""Who reads which macro variable: what each channel of the loss takes from a path."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

from stresskit.core.values import FeatureTable
from stresskit.hazard.result import HazardFit
from stresskit.recovery.regression import REGRESSIONS
from stresskit.runs.setting import Setting
from stresskit.spec.exposure import CollateralLgd
from stresskit.spec.study import RecoveryLgd, Study

#: Channels through which a path reaches the loss, in the order in which they are told.
DEFAULT, PAYOFF, LGD, EXPOSURE, DISCOUNT = "default", "payoff", "lgd", "exposure", "discount"
CHANNELS = (DEFAULT, PAYOFF, LGD, EXPOSURE, DISCOUNT)
WORDS = {DEFAULT: "default", PAYOFF: "early repayment", LGD: "LGD", EXPOSURE: "exposure", DISCOUNT: "discounting"}  # fmt: skip


def channel_reads(setting: Setting) -> dict[str, tuple[str, ...]]:
    """Channel -> macro variables that it reads in this study, sorted; a channel without any cannot move.

    A hazard reads what its macro features and its moving columns are made of, and with a moving column that takes a
    balance also what balances follow. LGD reads collateral indices or the features of the recovery hazards.
    """
    study = setting.file.study
    features = setting.features(setting.reference())
    exposure = _places(study, ("rates",)) | _places(study, ("loss", "exposure"))
    lgd: set[str] = set()
    if isinstance(study.loss.lgd, CollateralLgd):
        lgd = _places(study, ("loss", "lgd"))
    elif isinstance(study.loss.lgd, RecoveryLgd) and study.loss.lgd.recovery == "hazard":
        for cause in REGRESSIONS.values():
            if cause in setting.fitted:
                lgd |= _of_features(setting.fitted[cause], features)
    found = {
        DEFAULT: _hazard(setting, "default", features, exposure),
        PAYOFF: _hazard(setting, "payoff", features, exposure),
        LGD: lgd,
        EXPOSURE: exposure,
        DISCOUNT: _places(study, ("rates",)) if study.loss.discount == "rate_path" else set[str](),
    }
    return {name: tuple(sorted(found[name])) for name in CHANNELS}


def read_variables(reads: Mapping[str, Iterable[str]]) -> tuple[str, ...]:
    """Every variable that any channel reads, sorted."""
    return tuple(sorted({v for names in reads.values() for v in names}))


def _hazard(setting: Setting, cause: str, features: FeatureTable, exposure: set[str]) -> set[str]:
    fit = setting.fits.get(cause)
    if fit is None:
        return set()
    out = _of_features(fit, features)
    for name in fit.moving_columns:
        # balances on top of indices: which columns take one is not asked, naming too many costs nothing
        out |= _places(setting.file.study, ("moving", name)) | exposure
    return out


def _of_features(fit: HazardFit, features: FeatureTable) -> set[str]:
    return {features.definitions[name].of for name in fit.feature_names}


def _places(study: Study, place: tuple[str, ...]) -> set[str]:
    """Variables that the study reads at a place or below it."""
    return {u.variable for u in study.contract_variables() if u.place[: len(place)] == place}
