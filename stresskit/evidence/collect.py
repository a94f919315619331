"""All the evidence on a study's fits as one frozen value."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from types import MappingProxyType

import pandas as pd

from stresskit.core.errors import DataError, NumericError
from stresskit.core.period import format_period
from stresskit.core.values import FeatureTable, MacroHistory, RiskSet
from stresskit.evidence import verdicts
from stresskit.evidence.actual import comparison, period_tally
from stresskit.evidence.calibration import calibration, deciles
from stresskit.evidence.lags import SHIFTS, lag_profile
from stresskit.evidence.ranking import auc_by_horizon
from stresskit.evidence.residuals import residual_tables
from stresskit.evidence.rows import fit_rows, window
from stresskit.evidence.stability import median_event_period, stability
from stresskit.evidence.survival import MINIMUM_AT_RISK, survival_table
from stresskit.evidence.verdicts import Verdict
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.spec.study import Macro

TABLES = (
    "actual_expected", "totals", "survival", "residuals", "autocorrelation", "calibration", "deciles", "auc",
    "lag_profile", "stability",
)  # fmt: skip
IN_SAMPLE, OUT_OF_TIME = "all periods", "out of time"


@dataclass(frozen=True, slots=True)
class Questions:
    """What to ask.

    columns   static loan columns to compare by, besides those of the fit
    split     last period (ordinal) before the break; default: each cause's median event period
    horizons  of the AUC, in periods; default 1, 2 and 3 years
    shifts    of the lag profile, in macro periods
    minimum_at_risk  loans at risk at every age of the survival comparison
    """

    columns: tuple[str, ...] = ()
    split: int | None = None
    horizons: tuple[int, ...] | None = None
    shifts: tuple[int, ...] = SHIFTS
    minimum_at_risk: float = MINIMUM_AT_RISK


@dataclass(frozen=True, slots=True, eq=False)
class Evidence:
    """tables: name -> frame with a ``cause`` column, names as in TABLES; verdicts in the order of the questions."""

    tables: Mapping[str, pd.DataFrame]
    verdicts: tuple[Verdict, ...]

    def __post_init__(self) -> None:
        object.__setattr__(self, "tables", MappingProxyType(dict(self.tables)))

    def verdict_table(self) -> pd.DataFrame:
        """cause, status, asked, found."""
        rows = [(v.cause, v.status, v.asked, v.found) for v in self.verdicts]
        return pd.DataFrame(rows, columns=["cause", "status", "asked", "found"])


@dataclass(slots=True)
class _Gathered:
    """Tables and verdicts of one cause as they come."""

    cause: str
    tables: dict[str, list[pd.DataFrame]] = field(default_factory=dict)
    verdicts: list[Verdict] = field(default_factory=list)

    def add(self, **tables: pd.DataFrame) -> None:
        for name, table in tables.items():
            self.tables.setdefault(name, []).append(table)

    def ask(self, asked: str, work: Callable[[], Verdict]) -> None:
        """The verdict of ``work``, or that the data cannot answer, with the reason."""
        try:
            self.verdicts.append(work())
        except (NumericError, DataError) as error:
            self.verdicts.append(verdicts.not_possible(self.cause, asked, str(error).splitlines()[0]))


def evidence(
    fits: Mapping[str, HazardFit],
    risk_set: RiskSet,
    features: FeatureTable | None = None,
    *,
    macro: Macro | None = None,
    history: MacroHistory | None = None,
    questions: Questions | None = None,
    say: Callable[[str], None] | None = None,
) -> Evidence:
    """Every table of this room for every fit, with a verdict per question.

    fits, risk_set, features  the fits and what they were estimated on
    macro, history            needed for the lag profile; without them it is left out
    questions                 see :class:`Questions`
    say                       told what is under way

    A question that the data cannot answer gets the verdict "not possible" with the reason, no error.
    """
    asked = Questions() if questions is None else questions
    tables: dict[str, list[pd.DataFrame]] = {name: [] for name in TABLES}
    found: list[Verdict] = []
    for cause, fit in fits.items():
        if say is not None:
            say(f"evidence on {cause}")
        gathered = _Gathered(cause)
        _against_data(gathered, fit, risk_set, features, asked)
        _over_time(gathered, fit, risk_set, features, asked)
        if macro is not None and history is not None and features is not None:
            for name in fit.design.features:
                _lag(gathered, fit, risk_set, features, _Shifted(name, macro, history, asked.shifts))
        for name, frames in gathered.tables.items():
            tables[name] += frames
        found += gathered.verdicts
    joined = {name: pd.concat(frames, ignore_index=True) for name, frames in tables.items() if frames}
    return Evidence(joined, tuple(found))


def _against_data(
    g: _Gathered, fit: HazardFit, risk_set: RiskSet, features: FeatureTable | None, asked: Questions
) -> None:
    rows = fit_rows(fit, risk_set, features)
    columns = [c for c in (*asked.columns, *fit.loan_columns) if c in risk_set.static]
    sums = period_tally(rows, columns)
    compared = comparison(rows, sums)
    g.add(actual_expected=compared.table, totals=compared.totals)
    shock = compared.shock_sd**2
    g.ask(verdicts.MATCH, lambda: verdicts.on_groups(g.cause, compared.totals))
    g.ask(verdicts.SHOCKS, lambda: verdicts.on_shocks(g.cause, compared.totals))

    def needs_shock() -> None:
        if compared.no_shock:
            raise NumericError(compared.no_shock)

    def survival() -> Verdict:
        needs_shock()
        table = survival_table(rows, sums.groups["age"], shock, minimum_at_risk=asked.minimum_at_risk)
        g.add(survival=table)
        return verdicts.on_survival(g.cause, table)

    def memory() -> Verdict:
        needs_shock()
        residuals, table = residual_tables(rows, sums.groups["period"], shock)
        g.add(residuals=residuals, autocorrelation=table)
        return verdicts.on_memory(g.cause, table)

    g.ask(verdicts.SURVIVAL, survival)
    g.ask(verdicts.MEMORY, memory)


def _over_time(
    g: _Gathered, fit: HazardFit, risk_set: RiskSet, features: FeatureTable | None, asked: Questions
) -> None:
    """Calibration and ranking on periods after the split by coefficients from before it; stability across it."""
    split = asked.split
    if split is None:
        split = median_event_period(fit_rows(fit, risk_set, features).rows)
    label = format_period(split, risk_set.frequency)
    later: list[tuple[HazardFit, RiskSet]] = []

    def out_of_time() -> Verdict:
        earlier = fit_hazard(fit.spec, window(risk_set, last=split), features, cause=fit.cause)
        rest = window(risk_set, first=split + 1)
        table = calibration(earlier, rest, features)
        later.append((earlier, rest))
        g.add(calibration=table, deciles=deciles(earlier, rest, features))
        return verdicts.on_out_of_time(g.cause, table, label)

    def ranking() -> Verdict:
        samples = [(IN_SAMPLE, fit, risk_set), *((OUT_OF_TIME, f, r) for f, r in later)]
        parts = []
        for name, by, on in samples:
            part = auc_by_horizon(by, on, features, horizons=asked.horizons)
            part.insert(1, "sample", name)
            parts.append(part)
        g.add(auc=pd.concat(parts, ignore_index=True))
        return verdicts.on_ranking(g.cause, g.tables["auc"][0])

    def stable() -> Verdict:
        table = stability(fit, risk_set, features, split=split)
        g.add(stability=table)
        return verdicts.on_stability(g.cause, table, label)

    g.ask(verdicts.OUT_OF_TIME, out_of_time)
    g.ask(verdicts.RANKING, ranking)
    g.ask(verdicts.STABLE.format(label), stable)


@dataclass(frozen=True, slots=True)
class _Shifted:
    """One term's profile: what to shift and by how much."""

    name: str
    macro: Macro
    history: MacroHistory
    shifts: Sequence[int]


def _lag(g: _Gathered, fit: HazardFit, risk_set: RiskSet, features: FeatureTable, term: _Shifted) -> None:
    def profile() -> Verdict:
        table = lag_profile(
            fit,
            risk_set,
            features,
            macro=term.macro,
            history=term.history,
            shifts=term.shifts,
            terms=(term.name,),
        )
        g.add(lag_profile=table)
        return verdicts.on_lag(g.cause, table)

    g.ask(verdicts.LAG.format(term.name), profile)
