"""Invented evidence on the fits of the sample study: every table with its columns, one verdict of every status."""

from __future__ import annotations

import numpy as np
import pandas as pd

from stresskit.core.period import Frequency, format_period, parse_period
from stresskit.evidence import verdicts as ask
from stresskit.evidence.collect import Evidence
from stresskit.evidence.verdicts import Verdict

START = parse_period("2016-01", Frequency("month"))


def sample_evidence(
    causes: tuple[str, ...] = ("default", "payoff"),
    *,
    levels: tuple[str, ...] = ("coast", "inland", "north"),
    terms: tuple[str, ...] = ("unemployment_change", "house_price_growth"),
    periods: tuple[str, ...] | None = None,
) -> Evidence:
    """Evidence with one "look at" and one "note" per cause; without ``terms`` there are no lag profiles."""
    months = periods or tuple(format_period(START + t, Frequency("month")) for t in range(60))
    tables: dict[str, list[pd.DataFrame]] = {}
    found: list[Verdict] = []
    for cause in causes:
        rng = np.random.default_rng(len(cause))
        parts = {
            "actual_expected": _compared(rng, months, levels),
            "totals": _totals(),
            "survival": _survival(),
            "residuals": pd.DataFrame({"period": months, "residual": rng.normal(size=len(months))}),
            "autocorrelation": _memory(rng),
            "calibration": _calibration(),
            "deciles": _deciles(),
            "auc": _auc(),
            "stability": _stability(terms),
        }
        if terms:
            parts["lag_profile"] = pd.concat(
                [_profile(t, 4 + k) for k, t in enumerate(terms)], ignore_index=True
            )
        for name, table in parts.items():
            table.insert(0, "cause", cause)
            tables.setdefault(name, []).append(table)
        found += [
            Verdict(cause, ask.MATCH, "Yes by age and region.", "in order"),
            Verdict(cause, ask.SHOCKS, "Yes (chi-square 90.0 on 59, p = 0.005).", "note"),
            Verdict(
                cause,
                ask.MEMORY,
                "No: Ljung-Box 30.1 on 12 lags, p = 0.0027; outside the band: lag 1.",
                "look at",
            ),
            Verdict(cause, ask.STABLE.format("2019-06"), "Too few periods.", "not possible"),
        ]
    joined = {name: pd.concat(frames, ignore_index=True) for name, frames in tables.items()}
    return Evidence(joined, tuple(found))


def _compared(rng: np.random.Generator, months: tuple[str, ...], levels: tuple[str, ...]) -> pd.DataFrame:
    groups = {
        "period": months,
        "age": ("1-12", "13-24", "25-60", "61"),
        "cohort": tuple(str(y) for y in range(2010, 2016)),
        "predicted": tuple(f"{k} of 10" for k in range(1, 11)),
        "region": levels,
    }
    rows = []
    for by, labels in groups.items():
        for k, label in enumerate(labels):
            expected = 20.0 + 3.0 * k if by != "region" or k else 0.2
            events = float(rng.poisson(expected))
            half = 1.96 * expected**0.5
            rows.append(
                (by, label, 5000.0, events, expected, events / expected, events / 5000, 0.001, 0.009, expected / 5000,
                 (events - expected) / expected**0.5, (events - expected) / expected**0.5, max(expected - half, 0), expected + half)
            )  # fmt: skip
    names = ["by", "group", "at_risk", "events", "expected", "ratio", "actual_rate", "lower", "upper", "fitted_rate",
             "z_binomial", "z_shock", "low_events", "high_events"]  # fmt: skip
    return pd.DataFrame(rows, columns=names)


def _totals() -> pd.DataFrame:
    rows = [
        ("period", 60, 58, 90.0, 57, 0.005, np.nan, 0.2),
        ("age", 4, 4, 3.1, 3, 0.3765, 0.4012, 0.2),
        ("cohort", 6, 6, 9.0, 5, 0.1091, np.nan, 0.2),
        ("predicted", 10, 10, 12.0, 8, 0.1512, 0.2, 0.2),
        ("region", 3, 3, 0.0, 0, np.nan, np.nan, 0.2),
    ]
    names = ["by", "groups", "pooled_to", "chi2", "df", "p_value", "p_clustered", "shock_sd"]
    return pd.DataFrame(rows, columns=names)


def _survival() -> pd.DataFrame:
    age = np.arange(1, 61)
    fitted, observed = np.exp(-0.01 * age), np.exp(-0.0098 * age)
    lower = np.where(age == 1, np.nan, observed - 0.02)
    return pd.DataFrame(
        {"age": age, "at_risk": 900.0, "events": 4.0, "observed": observed, "lower": lower, "upper": lower + 0.04,
         "fitted": fitted, "gap": observed - fitted, "z_binomial": 0.3, "z_shock": np.where(age == 1, np.nan, 0.2)}
    )  # fmt: skip


def _memory(rng: np.random.Generator) -> pd.DataFrame:
    value = np.concatenate([[0.5], 0.1 * rng.normal(size=11)])
    return pd.DataFrame(
        {"lag": np.arange(1, 13), "autocorrelation": value, "of_deviance": value, "band": 0.25, "ljung_box": 30.1, "p_value": 0.0027, "periods": 60}
    )  # fmt: skip


def _calibration() -> pd.DataFrame:
    return pd.DataFrame(
        {"term": ["intercept", "slope", "level"], "ideal": [0.0, 1.0, 0.0], "estimate": [-1.0, 0.8, 0.1], "se": 0.1,
         "lower": [-2.0, 0.6, -0.1], "upper": [0.0, 1.0, 0.3], "p_value": 0.05, "periods": 30}
    )  # fmt: skip


def _deciles() -> pd.DataFrame:
    predicted = 0.0005 * 1.5 ** np.arange(10)
    events = np.round(2000 * predicted)
    events[0] = 0.0
    return pd.DataFrame(
        {"band": np.arange(1, 11), "at_risk": 2000.0, "events": events, "expected": 2000 * predicted, "predicted": predicted,
         "actual": events / 2000, "lower": 0.6 * predicted, "upper": 1.7 * predicted}
    )  # fmt: skip


def _auc() -> pd.DataFrame:
    return pd.DataFrame(
        {"sample": ["all periods", "all periods", "out of time"], "horizon": [1, 12, 12], "auc": [0.71, 0.69, np.nan],
         "se": 0.01, "lower": [0.69, 0.67, np.nan], "upper": [0.73, 0.71, np.nan], "cases": [90.0, 80.0, 0.0],
         "event_periods": [50, 40, 0], "landmarks": [59, 5, 0]}
    )  # fmt: skip


def _profile(term: str, best: int) -> pd.DataFrame:
    lag = np.arange(-3, 10)
    behind = 1.2 * (lag - best) ** 2.0
    llf = np.where(lag == 9, np.nan, -900.0 - behind)
    behind = np.where(lag == 9, np.nan, behind)
    return pd.DataFrame(
        {"term": term, "shift": lag - 1, "lag": lag, "llf": llf, "behind": behind, "behind_scaled": behind / 1.5,
         "coef": np.where(lag < 0, -0.2, 0.3), "se_period": 0.1, "best": lag == best, "study": lag == 1}
    )  # fmt: skip


def _stability(terms: tuple[str, ...]) -> pd.DataFrame:
    names = ["intercept", "age[1]", *terms, "product[floating]", "region[north]"]
    macro = [n in terms for n in names]
    held = [n == "region[north]" for n in names]
    frame = pd.DataFrame(
        {"term": names, "macro": macro, "before": 0.4, "se_before": 0.1, "after": 1.1, "se_after": 0.12}
    )
    frame["difference"] = 0.7
    frame["z"] = 0.7 / np.hypot(0.1, 0.12)
    frame = frame.assign(p_value=0.0001, joint_p=0.002 if terms else np.nan, held=held)
    frame.loc[frame["held"], ["se_before", "se_after", "z", "p_value"]] = np.nan
    return frame.assign(events_before=400.0, events_after=380.0, periods_before=30, periods_after=30)
