"""One cut-off of a backtest: the model and its rivals on the same data, and what came."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.analyses.observed import Observed, incidence, observed
from stresskit.analyses.past import CAME, Past, done_again
from stresskit.analyses.past_bands import PastBand, past_band
from stresskit.analyses.past_cells import PastCells, past_cells
from stresskit.analyses.said import Rolled, Said, of_fits, of_rates, roll, rolled, segment_rates
from stresskit.core.errors import NumericError
from stresskit.evidence.ranking import auc_from
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.runs.setting import Setting
from stresskit.spec.backtest import Backtest
from stresskit.spec.terms import HazardSpec, InteractionTerm, MacroTerm

Floats = NDArray[np.float64]

MODEL, NO_MACRO, FLAT, LAST_YEAR = "model", "no macro", "flat rate", "last year"
RIVALS = (NO_MACRO, FLAT, LAST_YEAR)


@dataclass(frozen=True, slots=True, eq=False)
class Dated:
    """Everything found at one cut-off.

    said       model and rivals, by name, along what came
    then       scenario name -> the model's roll-forward along a scenario written then
    actual     cause -> (H,) cumulative incidence of what came (Aalen-Johansen)
    band       the model's own band of defaults given who was there
    auc        table of evidence.ranking
    realised_loss  (cells, H) balance at each default that came times the model's LGD
    """

    past: Past
    seen: Observed
    cells: PastCells
    said: Mapping[str, Said]
    then: Mapping[str, Rolled]
    actual: Mapping[str, Floats]
    band: PastBand
    auc: pd.DataFrame
    realised_loss: Floats

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
    say(f"{label}: projecting {seen.loans:,.10g} loans over {steps} periods")
    none = np.zeros(seen.n, dtype=np.int64)
    predicted = roll(past.setting, seen.book, came, none, 1, money=False).loans["pd_lifetime"]
    # A column that changes over a loan's life is no segment here: a rate by segment needs one segment for a loan.
    known = past.setting.data.loans.risk_set.static
    segments = tuple(
        s for s in past.setting.file.study.loans.segments if s in known and s in seen.book.static
    )
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
    year = now.file.frequency.per_year
    horizons = [h for h in (year, 2 * year, 3 * year, 5 * year) if h < steps] + [steps]
    return Dated(
        past, seen, cells, said, then,
        {c: incidence(seen.end, seen.outcome, seen.causes.index(c) + 1, steps, seen.book.count) for c in causes},
        past_band(past, said[MODEL].given["default"]),
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


def _realised_loss(seen: Observed, model: Rolled, cells: PastCells) -> Floats:
    """(cells, H) balance at each actual default times the model's own LGD of that cell and step."""
    amounts = seen.amounts(cells.code, cells.count)
    if model.amount is None or model.loss is None:
        return np.full_like(amounts, np.nan)
    whole = model.amount.sum(axis=0), model.loss.sum(axis=0)
    lgd = np.divide(model.loss, model.amount, out=np.full_like(amounts, np.nan), where=model.amount > 0)
    mean = np.divide(whole[1], whole[0], out=np.zeros(amounts.shape[1]), where=whole[0] > 0)
    return amounts * np.where(np.isnan(lgd), mean, lgd)
