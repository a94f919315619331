"""The demo folder holds what its README and truth.json say, and nothing else."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from stresskit.core.errors import UsageError
from stresskit.demo.bank import SCENARIOS, shipped_scenarios, write_demo
from stresskit.demo.dirt import DIRT, FEWEST_LOANS
from tests.demo.conftest import Written, read_demo


def clean(demo: Written) -> pd.DataFrame:
    return demo.loans[~demo.loans["loan_id"].isin(demo.spoiled())]


def months_between(later: pd.Series, earlier: pd.Series) -> pd.Series:
    """Whole months from one column of periods to another."""
    return (later.dt.year - earlier.dt.year) * 12 + later.dt.month - earlier.dt.month


def test_same_seed_same_bytes_other_seed_other_loans(tmp_path: Path) -> None:
    for name, seed in (("a", 7), ("b", 7), ("c", 8)):
        write_demo(tmp_path / name, seed=seed, loans=FEWEST_LOANS)
    files = sorted(p.relative_to(tmp_path / "a") for p in (tmp_path / "a").rglob("*") if p.is_file())
    assert {str(f) for f in files} == {
        "README.txt", "study.yaml", "truth.json", "macro.csv", "loans.parquet", "workouts.csv", "cashflows.csv", *(f"scenarios/{s}" for s in SCENARIOS),
    }  # fmt: skip
    for file in files:
        assert (tmp_path / "a" / file).read_bytes() == (tmp_path / "b" / file).read_bytes(), file
    assert (tmp_path / "a/loans.parquet").read_bytes() != (tmp_path / "c/loans.parquet").read_bytes()


def test_scenarios_are_the_shipped_ones(small: Written) -> None:
    for name in SCENARIOS:
        assert (small.folder / "scenarios" / name).read_bytes() == (shipped_scenarios() / name).read_bytes()


def test_the_book_is_as_described(full: Written) -> None:
    loans = full.loans
    assert loans["loan_id"].nunique() == 20_000
    assert set(loans["product"]) == {"fixed", "floating"}
    assert set(loans["region"]) == {"north", "coast", "valley", "islands"}
    assert loans["month"].max() == pd.Period("2025-12", "M")
    good = clean(full)
    assert good["month"].min() == pd.Period("2016-01", "M")
    assert good["ltv_at_start"].between(0.3, 0.98).all()
    assert good["annual_rate"].between(0.01, 0.10).all()
    assert (good["balance"] >= 0).all()
    first = good.groupby("loan_id").first()
    late = months_between(first["month"], first["opened"])
    assert (
        (first["month"] == pd.Period("2016-01", "M")) & (late > 0)
    ).sum() > 4000  # opened before the window
    bought = first[(late > 0) & (first["month"] > pd.Period("2016-01", "M"))]
    assert set(bought["month"].astype(str)) == {"2019-07"}
    assert len(bought) > 600


def test_outcomes_add_up_and_default_rates_are_plausible(full: Written) -> None:
    outcomes = full.truth["outcomes_before_spoiling"]
    assert sum(outcomes.values()) == 20_000
    assert 800 <= outcomes["default"] <= 2000
    assert min(outcomes["matured"], outcomes["payoff"], outcomes["on_book"]) > 2000
    assert outcomes["sold"] > 100
    last = clean(full).groupby("loan_id").last()
    gone = last[(last["month"] < last["month"].max()) & last["status"].isin(["C", "A"])]
    assert set(gone["month"].astype(str)) <= {"2018-02", "2022-05"}  # sold the month after, without an event
    assert 0 <= outcomes["sold"] - len(gone) <= len(full.spoiled())
    yearly = full.loans.groupby(full.loans["month"].dt.year)["status"].agg(lambda s: (s == "D").mean() * 12)
    assert 0.005 < yearly[2016] < 0.02
    assert yearly[2019] > 2 * yearly[2016]  # the recession shows


def test_events_end_a_loan_and_maturity_is_kept(full: Written) -> None:
    good = clean(full)
    follows = good["loan_id"].shift(-1) == good["loan_id"]
    assert not (good["status"].isin(["D", "P", "M"]) & follows).any()
    assert (good["month"] <= good["matures"]).all()
    matured = good["status"] == "M"
    assert (good.loc[matured, "month"] == good.loc[matured, "matures"]).all()
    at_end = good[good["month"] == good["matures"]]
    assert set(at_end["status"]) <= {"M", "D", "P"}


def test_balances_follow_the_annuity(full: Written) -> None:
    """Fixed loans seen from opening: balance after k of n payments is amount (1 - v^(n-k)) / (1 - v^n)."""
    good = clean(full)
    good = good[(good["product"] == "fixed") & good["status"].isin(["C", "A"])]
    first = good.groupby("loan_id").transform("first")
    k = months_between(good["month"], good["opened"])
    n = months_between(good["matures"], good["opened"])
    i = good["annual_rate"] / 12
    expected = first["balance"] * (1 - (1 + i) ** (k - n)) / (1 - (1 + i) ** -n)
    kept = first["month"] == first["opened"]
    assert kept.sum() > 50_000
    assert np.abs(good["balance"] - expected)[kept].max() < 0.011


def test_macro_ends_where_the_scenarios_begin(full: Written) -> None:
    macro = full.macro.set_index("period")
    assert macro.index[0] == "2006Q1"
    assert macro.index[-1] == "2025Q4"
    assert len(macro) == 80
    assert macro.loc["2025Q4"].tolist() == [5.0, 150.0, 2.5]
    window = macro.loc["2016Q1":]
    peak = window["unemployment_rate"].idxmax()
    assert window["unemployment_rate"].max() > window["unemployment_rate"].iloc[0] + 3
    assert "2017Q1" < peak < "2020Q4"
    assert (
        window["house_price_index"].loc["2017Q2":"2019Q4"].min()
        < 0.85 * window["house_price_index"].loc[:"2017Q2"].max()
    )


def test_every_kind_of_dirt_is_in_the_file_as_counted(full: Written) -> None:
    loans = full.loans
    spoiled = {kind: entry["loans"] for kind, entry in full.truth["spoiled"].items()}
    assert {kind: len(ids) for kind, ids in spoiled.items()} == {
        kind: count for kind, (count, _, _) in DIRT.items()
    }
    bad = _rows_in_trouble(loans)
    for kind, (count, rows, _) in DIRT.items():
        assert bad[kind]["loan_id"].nunique() == count, kind
        assert set(bad[kind]["loan_id"]) == set(spoiled[kind]), kind
        if kind not in ("category_once", "static_changes", "origination_changes"):
            assert len(bad[kind]) == count * rows, kind


def _rows_in_trouble(loans: pd.DataFrame) -> dict[str, pd.DataFrame]:
    """The bad rows of each kind, found from the file alone."""
    ordinals = {c: loans[c].dt.year * 12 + loans[c].dt.month for c in ("month", "opened", "matures")}
    loans = loans.assign(**ordinals)
    by_loan = loans.groupby("loan_id")
    month = loans["month"]
    same = loans["loan_id"] == loans["loan_id"].shift()
    event = loans["status"].isin(["D", "P"])
    after = same & event.groupby(loans["loan_id"]).cumsum().sub(event.astype(int)).gt(0)
    twice = loans.duplicated(["loan_id", "month"])
    exact = loans.duplicated()
    opened_as_of_row = loans["opened"] != by_loan["opened"].transform("first")
    gap = same & (month.diff() > 1)
    long_gap = loans[gap].loc[lambda d: d.index.repeat(month.diff()[gap].astype(int) - 1)]
    late_entry = loans["month"] > loans["opened"]
    return {
        "period_after_maturity": loans[loans["month"] > loans["matures"]],
        "after_event": loans[after],
        "event_in_first_row": loans[~same & event & late_entry],
        "period_before_origination": loans[loans["month"] < loans["opened"]],
        "category_once": loans[loans["region"] == "islands"],
        "duplicate_exact": loans[exact],
        "duplicate_conflicting": loans[twice & ~exact],
        "after_gap": long_gap,
        "origination_changes": loans[opened_as_of_row],
        "missing_amount": loans[loans["balance"].isna()],
        "negative_amount": loans[loans["balance"] < 0],
        "unknown_status": loans[loans["status"] == "X"],
        "static_changes": loans[by_loan["region"].transform("nunique") > 1],
    }


@pytest.mark.parametrize("seed", range(5))
def test_the_smallest_book_bears_every_kind(tmp_path: Path, seed: int) -> None:
    demo = read_demo(write_demo(tmp_path / "bank", seed=seed, loans=FEWEST_LOANS))
    assert demo.loans["loan_id"].nunique() == FEWEST_LOANS


def test_too_few_loans_and_foreign_folders_are_refused(tmp_path: Path) -> None:
    with pytest.raises(UsageError, match="at least 600"):
        write_demo(tmp_path / "bank", loans=10)
    assert not (tmp_path / "bank").exists()
    own = tmp_path / "own"
    own.mkdir()
    (own / "study.yaml").write_text("study: mine\n", encoding="utf-8")
    with pytest.raises(UsageError, match="overwrite"):
        write_demo(own, loans=FEWEST_LOANS)
    assert (own / "study.yaml").read_text(encoding="utf-8") == "study: mine\n"


def test_readme_states_the_counts(full: Written) -> None:
    text = (full.folder / "README.txt").read_text(encoding="utf-8")
    assert "invented" in text
    assert f"{len(full.loans):,} rows" in text
    for kind, (count, _, what) in DIRT.items():
        assert f"{count} x {kind}: {what}" in text


def test_scenarios_of_an_installed_wheel_come_first(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    package = tmp_path / "site" / "stresskit" / "demo"
    monkeypatch.setattr("stresskit.demo.bank.resources.files", lambda name: package)
    with pytest.raises(UsageError, match="install it again"):
        shipped_scenarios()
    (tmp_path / "site" / "scenarios").mkdir(parents=True)
    (package / "scenarios").mkdir(parents=True)
    for name in SCENARIOS:
        (tmp_path / "site" / "scenarios" / name).touch()
    assert shipped_scenarios() == tmp_path / "site" / "scenarios"
    for name in SCENARIOS:
        (package / "scenarios" / name).touch()
    assert shipped_scenarios() == package / "scenarios"
