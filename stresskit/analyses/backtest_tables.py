"""Tables of a backtest from what was found at each cut-off."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.analyses.backtest_date import MODEL, RIVALS, Dated
from stresskit.analyses.observed import LOST
from stresskit.core.errors import UsageError
from stresskit.core.period import format_period
from stresskit.evidence.pd_tests import binomial_p, hosmer_lemeshow, jeffreys_p, two_sided
from stresskit.hazard.diagnostics import jeffreys
from stresskit.kernels.blocks import totals
from stresskit.runs.tables import whole_number, whole_numbers

Floats = NDArray[np.float64]


def _ratio(top: float, bottom: float) -> float:
    return top / bottom if bottom > 0 else float("nan")


def _until(d: Dated) -> str:
    return format_period(d.past.cutoff + d.past.steps, d.past.setting.file.frequency)


def summary_row(d: Dated) -> pd.DataFrame:
    """One cut-off in one row: shares of its loans that default by the end of the comparison, rolled forward."""
    row: dict[str, Any] = {"cutoff": d.past.label, "until": _until(d), "loans": whole_number(d.seen.loans)}
    row["pd_actual"] = float(d.actual["default"][-1])
    row[f"pd_{MODEL}"] = d.seen.mean(d.model.rolled.pd)
    for name, then in d.then.items():
        row[f"pd_then_{name}"] = d.seen.mean(then.pd)
    for name in RIVALS:
        row[f"pd_{name.replace(' ', '_')}"] = d.seen.mean(d.said[name].rolled.pd)
    return pd.DataFrame([row])


def total_row(d: Dated) -> pd.DataFrame:
    """One cut-off in one row: defaults and those expected, given who was there, with the model's band."""
    defaults, expected = float(_by_period(d).sum()), float(d.model.given["default"].expected.sum())
    row = {
        "cutoff": d.past.label,
        "periods": d.past.steps,
        "defaults": defaults,
        "expected": expected,
        "expected_low": float(d.band.total[0]),
        "expected_high": float(d.band.total[1]),
        "error_share": _ratio(expected, defaults) - 1.0,
        "coverage_90": float(d.band.inside(_by_period(d)).mean()),
        "lost_loans": whole_number(d.seen.lost),
        "failed_gates": ", ".join(d.past.failed),
    }
    return pd.DataFrame([row])


def _by_period(d: Dated) -> Floats:
    found: Floats = d.seen.counts("default", np.zeros(d.seen.n, dtype=np.int64), 1)[0]
    return found


def period_rows(d: Dated) -> pd.DataFrame:
    """Actual and expected by period after the cut-off."""
    h, frequency = d.past.steps, d.past.setting.file.frequency
    model = d.model
    out: dict[str, Any] = {
        "cutoff": d.past.label,
        "period": [format_period(d.past.cutoff + k, frequency) for k in range(1, h + 1)],
        "at_risk": model.given["default"].at_risk.sum(axis=0),
        "defaults": _by_period(d),
        "expected": model.given["default"].expected.sum(axis=0),
        "expected_low": d.band.by_period[0],
        "expected_high": d.band.by_period[1],
        "projected": model.rolled.flows["default"].sum(axis=0),
    }
    for name in RIVALS:
        out[f"expected {name}"] = d.said[name].given["default"].expected.sum(axis=0)
    whole = np.zeros(d.seen.n, dtype=np.int64)
    if "payoff" in model.given:
        out |= {
            "payoffs": d.seen.counts("payoff", whole, 1)[0],
            "payoffs_expected": model.given["payoff"].expected.sum(axis=0),
        }
        out["payoffs_projected"] = model.rolled.flows["payoff"].sum(axis=0)
    out |= _money(d, lambda cells: cells.sum(axis=0))
    out["pd_actual"] = d.actual["default"]
    for name in (MODEL, *RIVALS):
        out[f"pd_{name.replace(' ', '_')}"] = (
            d.said[name].rolled.flows["default"].sum(axis=0).cumsum() / d.seen.loans
        )
    for name, then in d.then.items():
        out[f"pd_then_{name}"] = then.flows["default"].sum(axis=0).cumsum() / d.seen.loans
    return pd.DataFrame(out)


def _money(d: Dated, add: Any) -> dict[str, Any]:
    r = d.model.rolled
    amounts = d.seen.amounts(d.cells.code, d.cells.count)
    if r.amount is None or r.loss is None:
        return {}
    return {
        "balance_defaulted": add(amounts),
        "balance_projected": add(r.amount),
        "loss_at_model_lgd": add(d.realised_loss),
        "loss_projected": add(r.loss),
    }


def group_rows(d: Dated) -> pd.DataFrame:
    """Actual and expected over the whole comparison by segment, cohort, year on book and tenth of predicted risk."""
    frames = []
    for g in d.cells.groups:

        def add(cells: Floats, g: Any = g) -> Floats:
            return np.asarray(g.total(cells).sum(axis=1))

        size = len(g.labels)
        code = g.index[d.cells.code]
        out: dict[str, Any] = {
            "cutoff": d.past.label,
            "by": g.by or "portfolio",
            "group": list(g.labels),
            "loans": whole_numbers(totals(code, d.seen.book.counts, size)),
            "at_risk": add(d.model.given["default"].at_risk),
            "defaults": add(d.seen.counts("default", d.cells.code, d.cells.count)),
            "expected": add(d.model.given["default"].expected),
            "projected": add(d.model.rolled.flows["default"]),
        }
        for name in RIVALS:
            out[f"expected {name}"] = add(d.said[name].given["default"].expected)
        if "payoff" in d.model.given:
            out["payoffs"] = add(d.seen.counts("payoff", d.cells.code, d.cells.count))
            out["payoffs_expected"] = add(d.model.given["payoff"].expected)
            out["payoffs_projected"] = add(d.model.rolled.flows["payoff"])
        out |= _money(d, add)
        frames.append(pd.DataFrame(out))
    return pd.concat(frames, ignore_index=True)


def score_rows(d: Dated, cause: str = "default") -> pd.DataFrame:
    """Mean log-likelihood per loan-period of each model, and the model's lead over it; no rows for a cause without hazard.

    lead_se: a ratio of sums over calendar periods, which are taken as independent clusters (Diebold and Mariano 1995,
    without lags); NaN for fewer than two periods.
    """
    out = []
    if cause in d.model.given:
        found = d.model.given[cause]
        rows = found.at_risk.sum(axis=0)
        total = float(rows.sum())
        for name in (MODEL, *RIVALS):
            llf = d.said[name].given[cause].llf
            lead = found.llf - llf
            mean = float(lead.sum()) / total
            rest = lead - mean * rows
            t = int((rows > 0).sum())
            se = float(np.sqrt(t / (t - 1.0) * (rest**2).sum())) / total if t > 1 else float("nan")
            own = name == MODEL
            expected = float(d.said[name].given[cause].expected.sum())
            actual = d.seen.exits(cause)
            out.append(
                {
                    "cutoff": d.past.label, "said_by": name, "rows": total, f"{cause}s": actual, "expected": expected,
                    "error_share": _ratio(expected, actual) - 1.0, "log_score": float(llf.sum()) / total,
                    "lead_of_model": float("nan") if own else mean, "lead_se": float("nan") if own else se,
                    "periods": t,
                }
            )  # fmt: skip
    return pd.DataFrame(out)


def calibration_rows(d: Dated) -> pd.DataFrame:
    """Cumulative PD of the model against defaults: one year and the whole comparison, by book, segment and tenth of risk.

    Loans lost from sight before the horizon are not in it. All tests take loans as independent given the path.
    """
    year = d.past.setting.file.frequency.per_year
    horizons = [("1 year", year, d.model.rolled.pd_year)] if year < d.past.steps else []
    horizons.append(("all", d.past.steps, d.model.rolled.pd))
    frames, each = [], d.seen.book.counts
    for words, h, pd_of in horizons:
        kept = ~((d.seen.outcome == LOST) & (d.seen.end < h))
        hit = d.seen.did("default") & (d.seen.end <= h) & kept
        for g in d.cells.groups:
            if g.by in ("cohort", "year on book"):
                continue
            code, size = g.index[d.cells.code], len(g.labels)
            n = totals(code[kept], each[kept], size)
            e = totals(code[kept], each[kept] * pd_of[kept], size)
            defaults = totals(code[hit], each[hit], size)
            at = np.flatnonzero(n > 0)
            p = e[at] / n[at]
            upper, lower = binomial_p(defaults[at], n[at], p)
            low, high = jeffreys(defaults[at], n[at])
            hl = _hosmer_lemeshow(defaults[at], n[at], e[at]) if g.by == "predicted risk" else float("nan")
            frames.append(
                pd.DataFrame(
                    {
                        "cutoff": d.past.label, "horizon": words, "by": g.by or "portfolio", "group": [g.labels[i] for i in at],
                        "loans": whole_numbers(n[at]), "defaults": defaults[at], "pd_predicted": p, "pd_actual": defaults[at] / n[at],
                        "pd_low": low, "pd_high": high, "jeffreys_p": jeffreys_p(defaults[at], n[at], p),
                        "binomial_p": two_sided(upper, lower), "hosmer_lemeshow_p": hl,
                    }
                )
            )  # fmt: skip
    return pd.concat(frames, ignore_index=True)


def _hosmer_lemeshow(defaults: Floats, loans: Floats, expected: Any) -> float:
    try:
        return hosmer_lemeshow(defaults, loans, expected)[2]
    except UsageError:
        return float("nan")


def auc_rows(d: Dated) -> pd.DataFrame:
    """AUC of the model's ranking at the cut-off, by horizon in periods."""
    out = d.auc.drop(columns=["cause", "landmarks"]).copy()
    out.insert(0, "cutoff", d.past.label)
    return out


def joined(found: Sequence[Dated], make: Any) -> pd.DataFrame:
    return pd.concat([make(d) for d in found], ignore_index=True) if found else pd.DataFrame()


def payoff_score_rows(d: Dated) -> pd.DataFrame:
    return score_rows(d, "payoff")
