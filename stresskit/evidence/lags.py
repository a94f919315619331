"""Lead/lag profile: would the likelihood have a macro term earlier or later than the study does?"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.errors import NumericError, UsageError
from stresskit.core.period import Frequency, convert
from stresskit.core.values import FeatureTable, MacroHistory, RiskSet
from stresskit.hazard.diagnostics import actual_expected
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.macro.features import build_features
from stresskit.spec.study import Macro

Floats = NDArray[np.float64]

SHIFTS = tuple(range(-4, 9))
#: Log-likelihood units within which lags are not told apart.
SUPPORT = 2.0


def lag_profile(
    fit: HazardFit,
    risk_set: RiskSet,
    features: FeatureTable,
    *,
    macro: Macro,
    history: MacroHistory,
    shifts: Sequence[int] = SHIFTS,
    terms: Sequence[str] | None = None,
) -> pd.DataFrame:
    """Refits with each macro term's lag changed by ``shifts`` macro periods, the other terms as they are.

    Columns cause, term, shift, lag, llf, behind, behind_scaled, coef, se_period, rows, events, best, study.
    lag            in macro periods; below 0 it is a lead
    behind         highest log-likelihood of the term's profile less this one. All refits of a term use the
                   same rows, those on which every shift has a value: likelihoods compare on the same rows only
    behind_scaled  the same over the overdispersion of calendar periods (Pearson, at least 1), because a
                   shock common to a period makes its rows count less (Wedderburn 1974, Biometrika 61);
                   NaN where the best lag has events in a period without expected ones
    best, study    the highest row; the row of the study's own lag
    ``terms`` restricts the profile to some of the fit's macro features.

    A refit that is refused (rank, separation) has llf NaN. Shifts that leave fewer than half of the
    rows with every shift known are not tried. Terms that the fit does not have give no rows.
    """
    if 0 not in shifts:
        raise UsageError("shifts must contain 0, the study's own lag")
    out = []
    for name in fit.design.features if terms is None else terms:
        if name not in macro.features:
            raise UsageError(f"no macro feature {name!r} in the macro section: {', '.join(macro.features)}")
        columns = {s: _shifted(macro, history, features, name, s) for s in shifts}
        columns = _supported(columns, risk_set, features.start)
        known = _known(list(columns.values()))
        table = [
            _refit(fit, risk_set, features, name, s, np.where(known[:, None], c, np.nan))
            for s, c in columns.items()
        ]
        out.append(_judged(table, fit, name, macro.features[name].lag))
    return pd.concat(out, ignore_index=True) if out else pd.DataFrame(columns=_COLUMNS)


_COLUMNS = [
    "cause", "term", "shift", "lag", "llf", "behind", "behind_scaled", "coef", "se_period", "rows", "events",
    "best", "study",
]  # fmt: skip


def _shifted(macro: Macro, history: MacroHistory, features: FeatureTable, name: str, shift: int) -> Floats:
    """(periods, columns) the feature on the rows of ``features`` with ``shift`` more macro periods of lag; NaN where
    unknown. A feature that goes by a loan column has a column for each level.

    A history that begins ``shift`` periods later has every value that much later, whatever the
    transform and placement; so leads need no lag below 0 in the study's language.
    """
    one = macro.model_copy(update={"features": {name: macro.features[name]}})
    moved = replace(history, start=history.start + shift)
    reach = int(
        _last_model_period(moved.end + macro.features[name].lag, history.frequency, features.frequency)
    )
    out = np.full((features.n_periods, len(features.columns_of(name))), np.nan)
    end = min(reach, features.start + features.n_periods - 1)
    if end >= features.start:
        table = build_features(one, moved, model=features.frequency, start=features.start, end=end)
        out[: table.n_periods] = table.values
    return out


def _last_model_period(macro_period: int, macro: Frequency, model: Frequency) -> int:
    return int(convert(macro_period, macro, model))


def _supported(columns: dict[int, Floats], risk_set: RiskSet, start: int) -> dict[int, Floats]:
    """Outermost shifts dropped, the longest first, while they leave fewer than half of the rows."""
    kept = dict(columns)
    all_rows = _rows(risk_set, _known([columns[0]]), start)
    while len(kept) > 1:
        if _rows(risk_set, _known(list(kept.values())), start) >= 0.5 * all_rows:
            break
        kept.pop(max(kept, key=abs))
    return kept


def _known(columns: list[Floats]) -> NDArray[np.bool_]:
    return np.asarray(np.isfinite(np.column_stack(columns)).all(axis=1))


def _rows(risk_set: RiskSet, known: NDArray[np.bool_], start: int) -> float:
    """Weight of the rows in periods ``start, start + 1, ...`` where ``known`` holds."""
    begin = risk_set.stay_origin + risk_set.stay_entry
    end = risk_set.stay_origin + risk_set.stay_exit
    running = np.concatenate(([0.0], np.cumsum(known)))
    low, high = (np.clip(x + 1 - start, 0, known.size) for x in (begin, end))
    return float((risk_set.weight * (running[high] - running[low])).sum())


def _refit(
    fit: HazardFit, risk_set: RiskSet, features: FeatureTable, name: str, shift: int, columns: Floats
) -> dict[str, object]:
    values = np.array(features.values)
    values[:, [features.names.index(c) for c in features.columns_of(name)]] = columns
    # The feature is no longer what the study defines, so no definition goes with it.
    table = replace(features, values=values, definitions={})
    row: dict[str, object] = {"shift": shift}
    try:
        again = fit_hazard(fit.spec, risk_set, table, cause=fit.cause)
    except NumericError:
        return row | dict.fromkeys(("llf", "coef", "se_period", "rows", "events", "dispersion"), np.nan)
    period = actual_expected(again, risk_set, table)
    pearson = _pearson(period["events"].to_numpy(), period["expected"].to_numpy())
    return row | {
        "llf": again.llf,
        "coef": float(again.params[name]),
        "se_period": float(again.standard_errors("period")[name]),
        "rows": again.nobs,
        "events": again.n_events,
        # max keeps a first argument that is NaN: a size of shocks that is not known stays so
        "dispersion": max(pearson / max(len(period) - len(fit.design.features) - 1, 1), 1.0),
    }


def _pearson(events: Floats, expected: Floats) -> float:
    """Sum of (events - expected)^2 / expected; NaN with events where none is expected, periods without either add nothing."""
    some = expected > 0.0
    if (events[~some] > 0.0).any():
        return float("nan")
    return float(((events[some] - expected[some]) ** 2 / expected[some]).sum())


def _judged(rows: list[dict[str, object]], fit: HazardFit, name: str, lag: int) -> pd.DataFrame:
    table = pd.DataFrame(rows)
    table.insert(0, "cause", fit.cause)
    table.insert(1, "term", name)
    table["lag"] = lag + table["shift"]
    top = table["llf"].max()
    table["behind"] = top - table["llf"]
    table["best"] = table["llf"] == top
    table["study"] = table["shift"] == 0
    scale = table.loc[table["best"], "dispersion"].max() if table["best"].any() else 1.0
    table["behind_scaled"] = table["behind"] / scale
    return table[_COLUMNS]
