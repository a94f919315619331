"""Loan parts block by block with levels looked up: the bits of the sum over all columns of the design, messages of the whole book."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from stresskit.core.coded import coded, coder
from stresskit.core.errors import DataError
from stresskit.core.period import Frequency
from stresskit.core.values import Portfolio, RiskSet, no_features
from stresskit.hazard import loan_side
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.spec.terms import HazardSpec

MONTH, AS_OF = Frequency.MONTH, 24_000
TERMS: list[dict[str, Any]] = [
    {"age": "linear"}, {"loan": "x", "transform": "standardise"}, {"loan": "kind", "as": "category", "reference": "b"},
    {"loan": "w", "transform": "log"}, {"loan": "zone", "as": "category", "reference": "2"}, {"offset": "push"},
    {"interaction": ["x", "kind"]}, {"interaction": ["kind", "zone"]}, {"interaction": ["zone", "age"]}, {"interaction": ["x", "age"]},
]  # fmt: skip


def columns(n: int, seed: int) -> dict[str, Any]:
    rng = np.random.default_rng(seed)
    return {
        "x": rng.normal(size=n), "w": rng.uniform(0.5, 2.0, n), "push": rng.normal(0.0, 0.2, n),
        "kind": rng.choice(np.array(["a", "b", "c"], dtype=object), n), "zone": rng.integers(1, 4, n).astype(float),
    }  # fmt: skip


@pytest.fixture(scope="module")
def fit() -> HazardFit:
    rng, n = np.random.default_rng(2), 1500
    entry = rng.integers(0, 10, n)
    leave = entry + rng.integers(1, 20, n)
    risk_set = RiskSet(
        MONTH, ("default",), np.array([f"L{i}" for i in range(n)], dtype=object), columns(n, 1), np.arange(n),
        AS_OF - leave, entry, leave, (rng.random(n) < 0.3).astype(np.int64), np.ones(n),
    )  # fmt: skip
    return fit_hazard(
        HazardSpec.model_validate({"terms": TERMS}, strict=False),
        risk_set,
        no_features(MONTH, AS_OF - 40, 41),
    )


def portfolio(n: int, **changed: Any) -> Portfolio:
    ones = np.ones(n)
    ids = np.array([f"P{i:05d}" for i in range(n)], dtype=object)
    return Portfolio(
        MONTH, AS_OF, ids, ones.astype(int), ones.astype(int), ones, ones, columns(n, 3) | changed
    )


def column_by_column(fit: HazardFit, book: Portfolio) -> tuple[np.ndarray, np.ndarray]:
    """s and U from the whole matrix of the loan side, every column multiplied."""
    design, n = fit.design, book.n_loans
    alone = (design.index["loan"] >= 0) & (design.index["age"] < 0) & (design.index["feature"] < 0)
    matrix = design.matrix("loan", book.static, n)
    s = design.offset("loan", book.static, n)
    for j in np.flatnonzero(alone):
        s += fit.coefficients[j] * matrix[:, design.index["loan"][j]]
    mixed = np.unique(design.index["loan"][(design.index["loan"] >= 0) & ~alone])
    return s, matrix[:, mixed]


@pytest.mark.parametrize("threads", [1, 2])
@pytest.mark.parametrize("with_codes", [False, True])
def test_the_bits_of_all_columns(
    fit: HazardFit, monkeypatch: pytest.MonkeyPatch, threads: int, with_codes: bool
) -> None:
    monkeypatch.setattr(loan_side, "AT_A_TIME", 97)
    book = portfolio(1000)
    s, u = column_by_column(fit, book)
    found = fit.loan_part(
        book.static, 1000, book.loan_ids, coder=coder(book) if with_codes else None, threads=threads
    )
    np.testing.assert_array_equal(found.s, s)
    np.testing.assert_array_equal(found.U, u)
    assert u.shape[1] == 3  # two zones and x, with age


@pytest.mark.parametrize(
    ("column", "values", "words"),
    [
        ("kind", {3: "new", 990: "other"}, r"2 cases have levels not seen at estimation: 'new', 'other' \(first: P00003, P00990\)"),
        ("zone", {7: 9.0, 8: 9.0, 500: 9.0}, "3 cases have levels not seen at estimation: '9'"),
        ("x", {1: np.nan, 600: np.inf, 999: np.nan}, r"3 values that are not finite numbers \(first: P00001, P00600, P00999\)"),
        ("w", {2: 0.0, 900: -1.0}, "2 values <= 0"),
        ("push", {5: np.nan, 700: np.nan}, "2 values that are not finite"),
    ],
)  # fmt: skip
def test_messages_count_the_whole_book(
    fit: HazardFit, monkeypatch: pytest.MonkeyPatch, column: str, values: dict[int, Any], words: str
) -> None:
    monkeypatch.setattr(loan_side, "AT_A_TIME", 100)
    bad = columns(1000, 3)[column]
    for place, value in values.items():
        bad[place] = value
    book = portfolio(1000, **{column: bad})
    for columns_as_codes in (None, coder(book)):
        with pytest.raises(DataError, match=words):
            fit.loan_part(book.static, 1000, book.loan_ids, coder=columns_as_codes, threads=2)


def test_codes_of_columns_with_missing_values() -> None:
    text = np.array(["b", None, "a", "b", np.nan, "a"], dtype=object)
    number = np.array([2.0, np.nan, 2.0, -0.0, 0.0, np.nan])
    book = portfolio(6, text=text, number=number)
    found = coded(book, "text")
    assert found.values[found.codes].tolist()[:1] + found.values[found.codes].tolist()[2:4] == ["b", "a", "b"]
    assert found.codes[1] == found.codes[4] == len(found.values) - 1
    assert len(found.values) == 3
    number_codes = coded(book, "number")
    np.testing.assert_array_equal(number_codes.values[number_codes.codes], number)
    assert number_codes.codes[1] == number_codes.codes[5]
    assert coded(book, "text") is found  # looked at once
    with pytest.raises(KeyError):
        coded(book, "nothing")
