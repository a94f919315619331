"""The vectorised truth against a plain loop that reads only truth.json and macro.csv."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pandas as pd
import pytest

from stresskit.core.period import Frequency, parse_period
from stresskit.demo.economy import Economy, place_linear
from stresskit.demo.truth import Truth, joint_probabilities, loan_parts, monthly_features, true_odds
from tests.demo.conftest import Written


def plain_feature(macro: pd.DataFrame, rule: dict[str, Any], year: int, month: int) -> float:
    """One feature in one month, straight from the rule's words, by dictionary and by hand."""
    value = dict(zip(macro["period"], macro[rule["of"]], strict=True))

    def back(label: str, quarters: int) -> str:
        n = int(label[:4]) * 4 + int(label[5]) - 1 - quarters
        return f"{n // 4}Q{n % 4 + 1}"

    def on_quarter(label: str) -> float:
        now, then = value[back(label, rule["lag"])], value[back(label, rule["lag"] + rule["over"])]
        return math.log(now / then) if rule["transform"] == "log_growth" else now - then

    this = f"{year}Q{(month - 1) // 3 + 1}"
    position = (month - 1) % 3
    if position == 2:
        return on_quarter(this)
    step = (position + 1) / 3
    return on_quarter(back(this, 1)) * (1 - step) + on_quarter(this) * step


def plain_probabilities(
    truth: dict[str, Any], loan: dict[str, Any], features: dict[str, float]
) -> tuple[float, float]:
    d, p, age = truth["default"], truth["payoff"], loan["age"]
    floating = 1.0 if loan["product"] == "floating" else 0.0
    u, g, r = (features[n] for n in ("unemployment_change", "house_price_growth", "policy_rate_change"))
    x = age / d["peak_age"]
    eta_d = (
        d["intercept"]
        + d["height"] * x * math.exp(1 - x)
        + d["floating"] * floating
        + d["ltv_at_start"] * loan["ltv_at_start"]
        + d["income_cover"] * loan["income_cover"]
        + d["unemployment_change"] * u
        + d["floating_unemployment_change"] * floating * u
        + d["house_price_growth"] * g
        + d["policy_rate_change"] * r
    )
    eta_p = (
        p["intercept"]
        + p["rise"] * (1 - math.exp(-age / p["rise_age"]))
        + p["floating"] * floating
        + p["policy_rate_change"] * r
    )
    given_not_p, given_not_d = 1 - math.exp(-math.exp(eta_d)), 1 - math.exp(-math.exp(eta_p))
    odds_d, odds_p = given_not_p / (1 - given_not_p), given_not_d / (1 - given_not_d)
    return odds_d / (1 + odds_d + odds_p), odds_p / (1 + odds_d + odds_p)


def economy_of(macro: pd.DataFrame) -> Economy:
    start = parse_period(str(macro["period"].iloc[0]), Frequency.QUARTER)
    return Economy(start, {c: macro[c].to_numpy(dtype=float) for c in macro.columns[1:]})


def test_vectorised_probabilities_equal_the_plain_loop(small: Written) -> None:
    clean = small.loans[~small.loans["loan_id"].isin(small.spoiled())]
    rows = clean.iloc[:: len(clean) // 60]
    start, end = 2016 * 12, 2025 * 12 + 11
    features = monthly_features(economy_of(small.macro), start=start, end=end)
    truth = Truth()
    assert len(rows) >= 60
    for row in rows.to_dict("records"):
        year, month = row["month"].year, row["month"].month
        ordinal = year * 12 + month - 1
        age = ordinal - (row["opened"].year * 12 + row["opened"].month - 1) + 1
        floating = np.array([row["product"] == "floating"])
        parts = loan_parts(
            truth,
            floating=floating,
            ltv=np.array([row["ltv_at_start"]]),
            cover=np.array([row["income_cover"]]),
        )
        odds = true_odds(truth, features, ordinal, age=np.array([age]), floating=floating, fixed_parts=parts)
        fast = [float(p[0]) for p in joint_probabilities(*odds)]
        by_hand = {
            n: plain_feature(small.macro, rule, year, month) for n, rule in small.truth["features"].items()
        }
        slow = plain_probabilities(small.truth, {**row, "age": age}, by_hand)
        assert fast == pytest.approx(slow, rel=1e-12)


def test_placement_is_linear_between_quarter_ends() -> None:
    """Values 0, 3, 9 at the ends of three quarters: thirds of the way in each month."""
    quarter = parse_period("2020Q1", Frequency.QUARTER)
    first = parse_period("2020-03", Frequency.MONTH)
    placed = place_linear(np.array([0.0, 3.0, 9.0]), quarter, first, first + 6)
    assert placed.tolist() == pytest.approx([0, 1, 2, 3, 5, 7, 9])


def test_placement_refuses_months_outside_the_history() -> None:
    quarter = parse_period("2020Q1", Frequency.QUARTER)
    first = parse_period("2020-03", Frequency.MONTH)
    with pytest.raises(ValueError, match="outside"):
        place_linear(np.array([0.0, 3.0]), quarter, first - 1, first)
    with pytest.raises(ValueError, match="outside"):
        place_linear(np.array([0.0, 3.0]), quarter, first, first + 4)
