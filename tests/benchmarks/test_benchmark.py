"""The benchmark's pieces at tiny size: every participant finds the same coefficients. Nothing is timed here."""

from __future__ import annotations

import importlib.util
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from stresskit.core.values import RiskSet
from tests.benchmarks.matrices import dense
from tests.benchmarks.panel import START, Shape, make_panel
from tests.benchmarks.plan import Case, plan
from tests.benchmarks.tables import AGREEMENT, Line, apart, figures, plot_growth, worst_difference
from tests.benchmarks.worker import measure, measure_exp

TINY = Shape(12_000)
HAVE_GLUM = importlib.util.find_spec("glum") is not None
needs_glum = pytest.mark.skipif(not HAVE_GLUM, reason="glum is in the optional extra `bench`")


def _line(who: str, link: str, shape: Shape) -> Line:
    return Line(Case("peers", who, link, shape, 1), [measure(who, link, shape)])


@pytest.mark.parametrize("link", ["cloglog", "logit"])
@pytest.mark.parametrize(
    "who",
    ["ours-2", "statsmodels", *(pytest.param(w, marks=needs_glum) for w in ("glum-dense", "glum-split"))],
)
def test_everybody_finds_the_same_coefficients(who: str, link: str) -> None:
    ours, other = _line("ours", link, TINY), _line(who, link, TINY)
    assert len(ours.params) == 24
    assert apart(ours, other) < AGREEMENT
    assert other.runs[0]["rows"] == ours.runs[0]["rows"] >= TINY.rows
    assert worst_difference([ours, other]) == apart(ours, other)
    assert {f["who"] for f in figures([ours, other])} == {"ours", who}


@pytest.mark.parametrize("who", ["statsmodels", pytest.param("glum-split", marks=needs_glum)])
@pytest.mark.parametrize(
    "shape", [replace(TINY, moving=True), replace(TINY, crossed=True)], ids=["moving", "crossed"]
)
def test_the_variants_are_the_same_model(shape: Shape, who: str) -> None:
    assert apart(_line("ours", "cloglog", shape), _line(who, "cloglog", shape)) < AGREEMENT


def test_the_book_is_what_it_says() -> None:
    risk_set, features = make_panel(TINY)
    again, _ = make_panel(TINY)
    assert isinstance(risk_set, RiskSet)
    np.testing.assert_array_equal(risk_set.stay_exit, again.stay_exit)
    assert TINY.rows <= risk_set.n_rows < TINY.rows + 2 * TINY.term
    first = risk_set.stay_origin + risk_set.stay_entry + 1
    assert first.min() >= START
    assert (risk_set.stay_origin + risk_set.stay_exit).max() < features.start + features.n_periods
    late, events = (risk_set.stay_entry > 0) & (first > START), risk_set.stay_cause == 1
    assert 0.03 < late.mean() < 0.3
    assert 0 < events.sum() < 0.3 * events.size
    x, y, names = dense(TINY, risk_set, features, constant=True)
    assert x.shape == (risk_set.n_rows, len(names)) == (y.size, 24)
    assert y.sum() == events.sum()
    assert make_panel(replace(TINY, loans=50))[0].n_loans == 50


def test_simulated_defaults_follow_the_hazard_they_were_drawn_from() -> None:
    """Coefficients of the loan columns within four standard errors of the truth."""
    found = measure("ours", "cloglog", Shape(200_000))["params"]
    for name, truth in (("x0", 0.4), ("x1", -0.3), ("x2", 0.2), ("m0", 0.35), ("m1", -0.25)):
        assert abs(found[name] - truth) < 4 * 0.045


def test_the_plan_and_the_plot(tmp_path: Path) -> None:
    quick, full = plan(quick=True, rows=None, large_rows=None), plan(quick=False, rows=None, large_rows=None)
    assert {c.shape.rows for c in full if c.group == "peers"} == {5_000_000}
    assert {c.shape.rows for c in quick if c.group == "peers"} == {500_000}
    assert {c.shape.rows for c in full if c.group == "large"} == {50_000_000}
    lines = [Line(c, [{"cpu": 1.0 + c.at, "rows": 1.0}]) for c in full if c.group.startswith("by ")]
    plot_growth(lines, tmp_path / "a.svg")
    plot_growth(lines, tmp_path / "b.svg")
    assert (tmp_path / "a.svg").read_bytes() == (tmp_path / "b.svg").read_bytes()
    assert measure_exp(1000)["wall"] > 0.0
