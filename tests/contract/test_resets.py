"""Resets worked by hand: floor, cap, months since origination, quarters."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from stresskit.contract.index import MacroLevels
from stresskit.contract.rates import rate_paths
from stresskit.core.errors import TextError
from stresskit.core.period import Frequency
from stresskit.core.values import MacroHistory, Portfolio, ScenarioPath
from tests.contract.books import study_of

TEXT = """\
study: resets
frequency: FREQUENCY
as_of: 2020Q4
loans:
  file: loans.csv
  layout: panel
  columns: {loan: id, period: month, origination: opened, maturity: matures, balance: owed, rate: interest}
  outcome: {column: state, default: [D]}
  rate_unit: percent
macro:
  file: macro.csv
  variables:
    policy_rate: {unit: percent, place: step}
hazards:
  default: {link: cloglog, terms: []}
rates: {floating: {index: policy_rate, margin: 1.0, floor: 2.0, cap: 5.0, reset_months: MONTHS}}
loss: {lgd: {constant: 0.4}}
scenarios: [one.yaml]
"""
#: Levels at the end of as_of and of the steps after it, in percent.
POLICY = [2.5, 0.2, 3.0, 6.0, 4.5, -1.0, 1.4]


def rates(
    tmp_path: Path, ages: list[int], *, months: int, frequency: Frequency = Frequency.QUARTER
) -> np.ndarray:
    study = study_of(tmp_path, TEXT.replace("FREQUENCY", frequency.value).replace("MONTHS", str(months)))
    as_of = 2020 * 4 + 3 if frequency is Frequency.QUARTER else 2020 * 12 + 11
    n = len(ages)
    book = Portfolio(
        frequency=frequency, as_of=as_of, loan_ids=np.array([f"L{i}" for i in range(n)], dtype=object),
        age=np.array(ages), remaining=np.full(n, 40), balance=np.full(n, 100.0), rate=np.full(n, 0.07), static={},
    )  # fmt: skip
    history = MacroHistory(
        frequency,
        as_of - 1,
        {"policy_rate": np.array([9.9, POLICY[0]])},
        {"policy_rate": "percent"},
        {"policy_rate": "step"},
    )
    path = ScenarioPath(
        "one", None, frequency, as_of + 1, {"policy_rate": np.array(POLICY[1:])},
        {"policy_rate": np.zeros(len(POLICY) - 1, dtype=np.int64)},
    )  # fmt: skip
    steps = len(POLICY) - 1
    paths = rate_paths(study, book, MacroLevels(history, path, frequency, as_of + steps))
    return paths.tile(np.arange(n), steps) * 100


def test_every_quarter_with_floor_and_cap(tmp_path: Path) -> None:
    """Start of step 1 sees 2.5 + 1; then 0.2 + 1 below the floor 2; 3 + 1; 6 + 1 above the cap 5; 4.5 + 1 too; -1 + 1."""
    found = rates(tmp_path, [5], months=3)
    np.testing.assert_allclose(found[0], [3.5, 2.0, 4.0, 5.0, 5.0, 2.0], rtol=1e-14)


def test_half_yearly_from_the_quarter_of_origination(tmp_path: Path) -> None:
    """Ages 5 and 6 at as_of: 5 quarters since origination in step 1 of the first, an odd number, so it resets in step 2."""
    found = rates(tmp_path, [5, 6], months=6)
    np.testing.assert_allclose(found[0], [7.0, 2.0, 2.0, 5.0, 5.0, 2.0], rtol=1e-14)
    np.testing.assert_allclose(found[1], [3.5, 3.5, 4.0, 4.0, 5.0, 5.0], rtol=1e-14)


def test_a_loan_that_starts_after_as_of_keeps_its_first_rate(tmp_path: Path) -> None:
    found = rates(tmp_path, [0], months=3)
    np.testing.assert_allclose(found[0], [7.0, 2.0, 4.0, 5.0, 5.0, 2.0], rtol=1e-14)


def test_loans_of_mixed_ages_are_those_of_each_age(tmp_path: Path) -> None:
    ages = [0, 1, 2, 7, 7, 30]
    together = rates(tmp_path, ages, months=6)
    for i, age in enumerate(ages):
        np.testing.assert_array_equal(together[i], rates(tmp_path, [age], months=6)[0])


def test_months_that_are_no_quarters_are_refused(tmp_path: Path) -> None:
    with pytest.raises(TextError, match=r"reset_months: 4 months are no whole number of quarters"):
        rates(tmp_path, [3], months=4)


def test_months_in_a_monthly_study(tmp_path: Path) -> None:
    found = rates(tmp_path, [1, 2], months=2, frequency=Frequency.MONTH)
    np.testing.assert_allclose(found[0], [7.0, 2.0, 2.0, 5.0, 5.0, 2.0], rtol=1e-14)
