"""Golden files of version 2: fits with weights, a pooled level, bounds, a tail and a feature by region."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.hazard.terms import KeyedMacro, LoanCategory
from tests.hazard.golden_cases import GOLDEN, LINKS

BOTH = pytest.mark.parametrize("link", sorted(LINKS))


def _text(link: str) -> str:
    return (GOLDEN / f"hazard_v2_{link}.json").read_text(encoding="utf-8")


def _cases() -> pd.DataFrame:
    return pd.read_csv(GOLDEN / "hazard_v2_predictions.csv", float_precision="round_trip")


@BOTH
def test_predictions_are_those_stored(link: str) -> None:
    """To the bit on the kind of processor they were made on; the last bits of exp and of a matrix product are a
    processor's own, so elsewhere to a few of them."""
    fit, cases = sk.HazardFit.from_json(_text(link)), _cases()
    np.testing.assert_allclose(fit.predict(cases), cases[link], rtol=2e-14)


@BOTH
def test_a_file_that_is_read_and_written_is_the_same_file(link: str) -> None:
    """Every number bit for bit: what this version keeps is what was written, and nothing is added."""
    fit = sk.HazardFit.from_json(_text(link))
    again = json.loads(fit.to_json())
    saved = json.loads(_text(link))
    assert saved["version"] == 2
    assert {key: again[key] for key in saved} == saved
    twice = sk.HazardFit.from_json(fit.to_json())
    assert twice.to_json() == fit.to_json()
    np.testing.assert_array_equal(twice.predict(_cases()), fit.predict(_cases()))


@BOTH
def test_the_files_hold_what_they_are_kept_for(link: str) -> None:
    fit = sk.HazardFit.from_json(_text(link))
    assert (fit.spec.link, fit.tail.family if fit.tail else "") == (link, LINKS[link][0])
    assert LINKS[link][1] in fit.covariances.matrices
    assert fit.at_bound == ("ltv",)
    assert fit.coefficient_table().set_index("term").loc["ltv", "coef_free"] > 1.0
    (keyed,) = (t for t in fit.design.terms if isinstance(t, KeyedMacro))
    assert (keyed.by, keyed.levels) == ("region", ("north", "south", "west"))
    grade = next(t for t in fit.design.terms if isinstance(t, LoanCategory))
    assert grade.pooled == ("rare",)
    assert fit.estimation.pooled
    assert fit.nobs > 1.5 * fit.facts.n_rows
    assert len(fit.gates) == 9
    assert fit.definitions["prices[west]"].of == "prices_west_index"
    ages = _cases()["age"]
    assert ((ages > fit.supported_age).any(), (ages < fit.supported_age).any()) == (True, True)


@BOTH
def test_the_parts_of_a_projection_add_up_to_the_stored_predictions(link: str) -> None:
    fit, cases = sk.HazardFit.from_json(_text(link)), _cases()
    n = len(cases)
    static = {name: cases[name].to_numpy() for name in fit.loan_columns}
    loans = fit.loan_part(static, n)
    cells = fit.cell_part(
        cases["age"].to_numpy(), cases[list(fit.feature_names)].to_numpy(), fit.feature_names
    )
    eta = loans.s + cells.z + (loans.U * cells.V).sum(axis=1)
    np.testing.assert_allclose(fit.link.probability(eta), cases[link], rtol=1e-12)
