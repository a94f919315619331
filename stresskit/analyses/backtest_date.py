"""One cut-off of a backtest: the model and its rivals on the same data, and what came."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.analyses.observed import LOST, Observed, incidence, observed
from stresskit.analyses.past import CAME, Past, done_again
from stresskit.analyses.past_cells import PastCells, past_cells
from stresskit.analyses.said import Rolled, Said, of_fits, of_rates, roll, rolled, segment_rates
from stresskit.core.errors import NumericError
from stresskit.evidence.groups import by_period, period_columns, shock_variance, tally
from stresskit.evidence.ranking import auc_from
from stresskit.evidence.rows import fit_rows
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.runs.setting import Setting
from stresskit.spec.backtest import Backtest
from stresskit.spec.terms import HazardSpec, InteractionTerm, MacroTerm, term_name

Floats = NDArray[np.float64]

MODEL, NO_MACRO, FLAT, LAST_YEAR = "model", "no macro", "flat rate", "last year"
RIVALS = (NO_MACRO, FLAT, LAST_YEAR)


@dataclass(frozen=True, slots=True, eq=False)
class Dated:
    """Everything found at one cut-off.

    said       model and rivals, by name, along what came
    then       scenario name -> the model's roll-forward along a scenario written then
    actual     cause -> (H,) cumulative incidence of what came (Aalen-Johansen)
    band       (2, H) 90% band of a period's defaults given who was there; (2,) of their sum
    shock_sd   relative standard deviation of the shock that loans of a period share, as the fit's own periods show it
    auc        table of evidence.ranking
    """

    past: Past
    seen: Observed
    cells: PastCells
    said: Mapping[str, Said]
    then: Mapping[str, Rolled]
    actual: Mapping[str, Floats]
    band: Floats
    total_band: Floats
    shock_sd: float
    auc: pd.DataFrame
    realised_loss: Floats

    @property
    def lost(self) -> int:
        return int((self.seen.outcome == LOST).sum())

    @property
    def model(self) -> Said:
        return self.said[MODEL]


def without_macro(spec: HazardSpec) -> HazardSpec:
    """The hazard without its macro terms and what is crossed with them."""
    gone = set(spec.macro_features())
    kept = tuple(
        t
        for t in spec.terms
        if not isinstance(t, MacroTerm) and not (isinstance(t, InteractionTerm) and gone & set(t.interaction))
    )
    return spec.model_copy(update={"terms": kept})


def at_cutoff(
    now: Setting, spec: Backtest, label: str, cutoff: int, steps: int, say: Callable[[str], None]
) -> Dated:
    """Raises DataError, NumericError or UsageError when the date is not possible, with the reason."""
    events = _events_before(now, cutoff)
    if events == 0:
        raise NumericError("no default before this date, so there is nothing to fit")
    say(f"{label}: reading and fitting what was known")
    past = done_again(
        now, cutoff, steps, publication=spec.publication, vintage=spec.vintages.get(label), scenarios=spec.scenarios_then.get(label, ()),
        pool=spec.when_separated == "pool",
    )  # fmt: skip
    seen = observed(past.setting.portfolio, now.data.loans, steps)
    came = past.setting.path(CAME)
    say(f"{label}: projecting {seen.n:,} loans over {steps} periods")
    none = np.zeros(seen.n, dtype=np.int64)
    predicted = roll(past.setting, seen.book, came, none, 1, money=False).loans["pd_lifetime"]
    segments = past.setting.file.study.loans.segments
    cells = past_cells(seen.book, segments, predicted)
    said = {MODEL: of_fits(MODEL, past.setting, seen, came, cells)}
    rival = _no_macro(past)
    said[NO_MACRO] = (
        said[MODEL] if rival is None else of_fits(NO_MACRO, rival, seen, came, cells, money=False)
    )
    risk_set, causes = past.setting.data.loans.risk_set, tuple(past.setting.fits)
    for name in (FLAT, LAST_YEAR):
        rates = segment_rates(risk_set, segments, seen.book, cells, causes, last_year=name == LAST_YEAR)
        said[name] = of_rates(name, rates, seen, cells)
    then = {
        p.name: rolled(past.setting, seen.book, p, cells, steps, money=False)
        for p in past.setting.data.paths
        if p.name != CAME
    }
    band, total, shock = _bands(past, said[MODEL])
    year = now.file.frequency.per_year
    horizons = [h for h in (year, 2 * year, 3 * year, 5 * year) if h < steps] + [steps]
    return Dated(
        past, seen, cells, said, then,
        {c: incidence(seen.end, seen.outcome, seen.causes.index(c) + 1, steps) for c in causes},
        band, total, float(np.sqrt(shock)),
        auc_from(past.fits["default"], seen.risk_set, past.setting.features(came), landmark=cutoff, horizons=horizons),
        _realised_loss(seen, said[MODEL].rolled, cells),
    )  # fmt: skip


def _events_before(now: Setting, cutoff: int) -> int:
    r = now.data.loans.risk_set
    return int(
        ((r.stay_cause == r.causes.index("default") + 1) & (r.stay_origin + r.stay_exit <= cutoff)).sum()
    )


def _no_macro(past: Past) -> Setting | None:
    """The past study without macro terms; None when it has none."""
    specs = past.setting.file.study.hazards
    if not any(s.macro_features() for s in specs.values()):
        return None
    fits: dict[str, HazardFit] = dict(past.setting.fitted)
    for cause, spec in specs.items():
        if spec.macro_features():
            fits[cause] = fit_hazard(
                without_macro(spec), past.setting.data.loans.risk_set, past.known, cause=cause
            )
    return past.setting.with_fits(fits)


def _bands(past: Past, said: Said) -> tuple[Floats, Floats, float]:
    """90% bands of defaults by period and of their sum, given who was there, and the variance of the common shock.

    Variance: binomial, the shock of a period (Breslow 1984, estimated on the fit's own periods and taken as independent
    between them), and the error of the coefficients.
    """
    fit, found = past.fits["default"], said.given["default"]
    own = fit_rows(fit, past.setting.data.loans.risk_set, past.known)
    shock = shock_variance(tally(own, [by_period(own)]).groups["period"], period_columns(own))
    expected = found.expected.sum(axis=0)
    jacobian = np.zeros((past.steps, fit.design.k)) if found.jacobian is None else found.jacobian
    covariance = fit.cov_params("period").to_numpy()
    if not np.isfinite(covariance).all():
        covariance = fit.cov_params("model_observed").to_numpy()
    chance = found.variance + shock * expected**2
    error = np.einsum("hk,kl,hl->h", jacobian, covariance, jacobian)
    whole = jacobian.sum(axis=0)
    half = 1.6448536269514722 * np.sqrt(chance + error)
    total = 1.6448536269514722 * float(np.sqrt(chance.sum() + whole @ covariance @ whole))
    band = np.stack([np.maximum(expected - half, 0.0), expected + half])
    middle = float(expected.sum())
    return band, np.array([max(middle - total, 0.0), middle + total]), shock


def _realised_loss(seen: Observed, model: Rolled, cells: PastCells) -> Floats:
    """(cells, H) balance at each actual default times the model's own LGD of that cell and step."""
    amounts = seen.amounts(cells.code, cells.count)
    if model.amount is None or model.loss is None:
        return np.full_like(amounts, np.nan)
    whole = model.amount.sum(axis=0), model.loss.sum(axis=0)
    lgd = np.divide(model.loss, model.amount, out=np.full_like(amounts, np.nan), where=model.amount > 0)
    mean = np.divide(whole[1], whole[0], out=np.zeros(amounts.shape[1]), where=whole[0] > 0)
    return amounts * np.where(np.isnan(lgd), mean, lgd)


def macro_terms(spec: HazardSpec) -> tuple[str, ...]:
    """Names of the macro terms, for words."""
    return tuple(term_name(t) for t in spec.terms if isinstance(t, MacroTerm))
