"""A backtest of lines that stand for several loans, against that of the lines written out loan by loan."""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from stresskit.analyses.bands.predictive import predictive_draws
from stresskit.analyses.observed import LOST, MATURED, SURVIVED, incidence
from stresskit.analyses.past_cells import quantiles
from stresskit.evidence.pd_tests import binomial_p
from tests.cli.pools import same, written_out
from tests.cli.small_study import reworded, write_small_study
from tests.program import stresskit

TERM = "      - {loan: product, as: category, reference: fixed}\n"
CUTOFFS = ("2018-12", "2019-06", "2019-12")


def write_pair(folder: Path) -> None:
    """Folders ``lines`` and ``loans``; some loans are lost from sight in the middle of 2019, others right after a cut-off."""
    for kind in ("lines", "loans"):
        (folder / kind).mkdir()
        study = write_small_study(folder / kind, loans=300)
        panel = pd.read_csv(study.parent / "loans.csv")
        number = panel["id"].str[1:].astype(int)
        lost = (number % 7 == 3) & (panel["month"] > "2019-09") | (number % 11 == 5) & (
            panel["month"] > "2019-06"
        )
        panel, number = panel[~lost], number[~lost]
        panel["n"] = np.array([1, 2, 3, 5])[number % 4]
        text = reworded(
            study.read_text(), (TERM, f"{TERM}      - {{interaction: [product, unemployment_change]}}\n")
        )
        if kind == "lines":
            panel["owed"] *= panel["n"]
            text = reworded(text, ("rate: interest}", "rate: interest, count: n}"))
        else:
            panel = written_out(panel, amounts=())
        panel.to_csv(study.parent / "loans.csv", index=False)
        study.write_text(text)


def demand_same(lines: pd.DataFrame, loans: pd.DataFrame, what: str) -> None:
    """Every column alike: text and kinds of numbers as they are, numbers as in pools.same."""
    same(lines, loans, what, atol=1e-12)
    assert lines.dtypes.tolist() == loans.dtypes.tolist(), what


@pytest.mark.slow
def test_every_table_is_that_of_the_lines_written_out(tmp_path: Path) -> None:
    write_pair(tmp_path)
    told: list[dict[str, Any]] = []
    asked = [word for date in CUTOFFS for word in ("--cutoff", date)]
    for kind in ("lines", "loans"):
        done = stresskit("backtest", "study.yaml", *asked, "--out", "out", "--json", cwd=tmp_path / kind)
        assert done.returncode == 0, done.stderr
        told.append(json.loads(done.stdout))
    files = sorted(p.name for p in (tmp_path / "loans" / "out").glob("*.csv"))
    assert {
        "calibration.csv",
        "groups.csv",
        "payoff_scores.csv",
        "periods.csv",
        "ranking.csv",
        "totals.csv",
    } <= set(files)
    for file in files:
        demand_same(*(pd.read_csv(tmp_path / k / "out" / file) for k in ("lines", "loans")), file)
    for key in ("answer", "notes", "cautions"):
        assert told[0][key] == told[1][key]
    # what is compared is there: lines of several loans, loans not seen again, loans lost later, amounts at default
    out = tmp_path / "lines" / "out"
    assert (pd.read_csv(out / "summary.csv")["loans"] > 300).any()
    assert pd.read_csv(out / "totals.csv")["lost_loans"].gt(0).any()
    assert pd.read_csv(out / "groups.csv")["loss_at_model_lgd"].gt(0).any()
    assert any(
        re.match("2019-06: [1-9][0-9]* loans of the book have no row", note) for note in told[0]["notes"]
    )


def test_quantiles_are_those_of_the_values_written_out() -> None:
    rng = np.random.default_rng(7)
    shares = np.arange(1, 10) / 10
    for n in range(1, 60):
        values = rng.choice(rng.normal(size=1 + n // 2), n)
        count = rng.integers(1, 6, n).astype(np.float64)
        assert (
            quantiles(values, shares, count) == np.quantile(np.repeat(values, count.astype(int)), shares)
        ).all()
        assert (quantiles(values, shares, None) == np.quantile(values, shares)).all()


def test_quantiles_of_fractional_counts_rise_and_part_the_loans() -> None:
    rng = np.random.default_rng(8)
    values, count = rng.normal(size=4000), rng.uniform(0.05, 0.6, 4000)
    edges = quantiles(values, np.arange(1, 10) / 10, count)
    share = np.bincount(np.searchsorted(edges, values, side="right"), count, 10) / count.sum()
    assert np.allclose(share, 0.1, atol=1.5 / count.sum())


def test_incidence_is_that_of_the_loans_written_out() -> None:
    rng = np.random.default_rng(9)
    end, outcome = rng.integers(1, 9, 200), rng.choice([1, 2, LOST, MATURED, SURVIVED], 200)
    count = rng.integers(1, 5, 200).astype(np.float64)
    each = count.astype(int)
    found = incidence(end, outcome, 1, 8, count)
    assert np.allclose(found, incidence(np.repeat(end, each), np.repeat(outcome, each), 1, 8), rtol=1e-13)
    # a share does not change with the unit in which loans are counted, nor where all of them have gone
    gone = np.where(outcome <= 0, 1, outcome)
    assert np.allclose(incidence(end, outcome, 1, 8, 0.1 * count), found, rtol=1e-12)
    assert incidence(end, gone, 1, 8, 0.1 * count)[-1] == pytest.approx(
        count[gone == 1].sum() / count.sum(), rel=1e-12
    )


def test_the_binomial_test_of_fractional_numbers_lies_between_whole_ones() -> None:
    """Whole numbers keep their tails; between them the tails move without a jump."""
    p = np.array([0.01, 0.1, 0.4])
    upper, lower = binomial_p(np.full(3, 2.5), np.full(3, 20.0), p)
    low, high = (
        binomial_p(np.full(3, 2.0), np.full(3, 20.0), p),
        binomial_p(np.full(3, 3.0), np.full(3, 20.0), p),
    )
    assert ((high[0] < upper) & (upper < low[0])).all()
    assert ((low[1] < lower) & (lower < high[1])).all()
    near = binomial_p(np.full(3, 2.0 + 1e-9), np.full(3, 20.0 + 1e-9), p)
    assert np.allclose(near, low, rtol=1e-6)
    # no default, and nothing but defaults
    assert binomial_p(0.0, 2.5, 0.1)[0] == 1.0
    assert binomial_p(2.5, 2.5, 0.1)[1] == 1.0


def test_draws_of_a_fractional_number_at_risk_keep_their_mean() -> None:
    there = np.array([0.3, 1.4, 2.6, 0.0])
    drawn = predictive_draws(there * 0.2, at_risk=there, draws=40_000)
    error = np.sqrt(there * 0.2 / 40_000)
    assert (np.abs(drawn.mean(axis=0) - there * 0.2) <= 5 * error).all()
