"""Bands of a book of lines that stand for several loans, against those of the lines written out loan by loan."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from stresskit.analyses.bands.compress import amounts
from stresskit.analyses.bands.engine import MEASURES, TOGETHER, Drawn
from stresskit.analyses.bands.maker import told
from stresskit.core.values import Portfolio
from stresskit.runs.records import Analysis
from stresskit.runs.setting import Setting
from stresskit.spec.bands import Bands
from tests.analyses.test_bands import drawn_of, study_of, with_book
from tests.analyses.world import setting_of
from tests.cli.small_study import reworded

#: Relative; lines and loans differ in the order in which sums are added.
EXACT = 1e-9
AMOUNTS = ("price", "drawable", "due")
EXPOSURE, LGD = (
    "  exposure: {schedule: annuity}\n",
    "  lgd: {by: product, values: {fixed: 0.3, floating: 0.45}}\n",
)
#: Amounts that compression can scale with the balance, and some that it cannot.
KINDS = {
    "ratio": (
        (LGD, "  lgd: {collateral: {value: price, haircut: 0.2, cost: 0.05, floor: 0.1}}\n"),
        ("loss:\n", "moving: {ltv: {balance_over_value: {value: price}}}\nloss:\n"),
        ("      - {age: log}\n", "      - {age: log}\n      - {loan: ltv}\n"),
    ),
    "limits": (
        (
            EXPOSURE,
            "  exposure:\n    by: product\n    values:\n      fixed: {schedule: annuity, balloon: due}\n"
            "      floating: {schedule: revolving, limit: drawable, ccf: 0.5}\n",
        ),
    ),
}
SCALED = {"ratio": ("price",), "limits": None}
TOLERANCE = {"ratio": 0.001, "limits": 0.02}


@pytest.fixture(scope="module", params=list(KINDS))
def setting(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Setting:
    folder = tmp_path_factory.mktemp("counted")
    study_of(folder, horizon=18)
    loans = pd.read_csv(folder / "loans.csv", dtype={"month": str, "opened": str, "matures": str})
    most = loans.groupby("id")["owed"].transform("max")
    share = 0.5 + loans["id"].str[1:].astype(int) % 7 / 10.0
    loans = loans.assign(price=most / share, drawable=most, due=0.1 * most * share)
    loans.to_csv(folder / "loans.csv", index=False)
    study = folder / "study.yaml"
    study.write_text(reworded(study.read_text(), *KINDS[request.param]))
    found = setting_of(study)
    # a column with two uses is scaled once
    assert amounts(found) == SCALED[request.param]
    return found


def pair(book: Portfolio, n: int, seed: int) -> tuple[Portfolio, Portfolio]:
    """(n lines drawn from a book, the same written out loan by loan); rates and sizes of their own, more loans where PDs are high."""
    rng = np.random.default_rng(seed)
    at = rng.integers(0, book.n_loans, n)
    count = rng.integers(1, 4, n) + 2 * (book.static["product"][at] == "floating")
    rate, size = rng.uniform(0.01, 0.1, n), rng.lognormal(0.0, 0.7, n)
    ids = np.array([f"Z{i:05d}" for i in range(n)], dtype=object)
    each = np.repeat(np.arange(n), count)
    alone = np.array([f"{ids[i]}-{k}" for k, i in enumerate(each, 10_000)], dtype=object)

    def made(rows: np.ndarray, names: np.ndarray, times: np.ndarray, counts: np.ndarray | None) -> Portfolio:
        source, scale = at[rows], size[rows] * times
        static = {k: c[source] for k, c in book.static.items()}
        static |= {k: static[k] * scale for k in AMOUNTS if k in static}
        return Portfolio(
            book.frequency, book.as_of, names, book.age[source], book.remaining[source], book.balance[source] * scale,
            rate[rows], static, counts,
        )  # fmt: skip

    lines = made(np.arange(n), ids, count.astype(float), count.astype(float))
    return lines, made(each, alone, np.ones(each.size), None)


def gap(one: Drawn, other: Drawn) -> float:
    """Largest relative difference of any figure in any draw."""
    assert one.sets.keys() == other.sets.keys()
    return max(
        float(np.abs(np.divide(one.sets[k], s, out=np.ones_like(s), where=s > 0.0) - 1.0).max())
        for k, s in other.sets.items()
    )


def test_every_draw_is_that_of_the_lines_written_out_compressed_or_not(setting: Setting) -> None:
    lines, loans = (with_book(setting, book) for book in pair(setting.portfolio, 300, 3))
    drawn, most = {}, TOLERANCE["limits" if amounts(setting) is None else "ratio"]
    for tolerance in (None, most):
        # fewer draws than a study may ask for: each one is compared
        spec = Bands(source_draws=0, tolerance=tolerance).model_copy(update={"draws": 40})
        one, other = drawn_of(lines, spec), drawn_of(loans, spec, threads=2)
        assert gap(one, other) < EXACT
        np.testing.assert_allclose(one.point, other.point, rtol=EXACT)
        np.testing.assert_array_equal(one.layout.loans, other.layout.loans)
        assert one.compression.used == other.compression.used == (tolerance is not None)
        assert one.compression.alike == other.compression.loans == loans.portfolio.n_loans
        drawn[tolerance] = one, spec
    few = drawn[most][0]
    # more than half of the lines: how far a book is compressed goes by loans, else these boxes would not be those
    assert 150 < few.compression.standing < few.compression.loans == 300
    assert 0.0 < few.compression.error <= most
    book = [few.layout.place(0, m) for m in MEASURES]
    exact = drawn[None][0].sets[TOGETHER][:, :, book]
    # three draws were measured; among forty some lie a little further off
    assert np.abs(few.sets[TOGETHER][:, :, book] / exact - 1.0).max() < 2 * most
    _check_words(told(*drawn[None]), told(*drawn[most]), loans.portfolio.n_loans)
    _check_centre(few, lines)


def _check_words(whole: Analysis, few: Analysis, loans: int) -> None:
    """Notes and facts tell lines from loans."""
    assert (
        f"Every one of 300 lines, which stand for {loans:,} loans, is projected in every draw." in whole.notes
    )
    standing = few.facts["lines_projected"]
    assert any(n.startswith(f"{standing} of 300 lines stand for {loans:,} loans; full") for n in few.notes)
    assert (few.facts["loans"], few.facts["lines"]) == (loans, 300)
    assert "loans_projected" not in few.facts


def _check_centre(drawn: Drawn, setting: Setting) -> None:
    """The point is the mean over loans, not over lines, and amounts are those of the lines."""
    found, count = setting.along([setting.reference()])[0].loans, setting.portfolio.counts
    pd_, el = drawn.point[0, :4][[1, 3]]
    assert pd_ == pytest.approx(np.average(found["pd_lifetime"], weights=count), rel=1e-12)
    assert abs(pd_ / found["pd_lifetime"].mean() - 1.0) > 1e-3
    assert el == pytest.approx(found["el_lifetime"].sum(), rel=1e-12)


def test_lines_alike_are_joined_without_error(setting: Setting) -> None:
    """30 contracts in 300 lines of 3 loans each: one line of a contract stands for all of them."""
    book = setting.portfolio
    at = np.repeat(np.arange(30), 10)
    n, count = at.size, np.full(at.size, 3.0)
    ids = np.array([f"Z{i:05d}" for i in range(n)], dtype=object)
    lines = Portfolio(
        book.frequency, book.as_of, ids, book.age[at], book.remaining[at], book.balance[at], book.rate[at],
        {k: c[at] for k, c in book.static.items()}, count,
    )  # fmt: skip
    drawn = drawn_of(with_book(setting, lines), Bands(draws=100, source_draws=0))
    assert drawn.compression.used
    assert drawn.compression.standing <= 30
    assert drawn.compression.error < 1e-11
