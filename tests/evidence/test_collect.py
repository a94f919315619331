"""All the evidence together: sound books pass, unsound ones are caught by the question that should catch them."""

from __future__ import annotations

import dataclasses
import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from stresskit.evidence import verdicts
from stresskit.evidence.collect import TABLES, Evidence, Questions, evidence
from stresskit.evidence.rows import window
from tests.cli.small_study import write_small_study
from tests.evidence.world import START, TERMS, World, simulate
from tests.program import stresskit

FEW_SHIFTS = Questions(columns=("region",), shifts=(-1, 0, 1))


def ask(world: World, terms: tuple[dict, ...] | None = None, *, lags: bool = False) -> Evidence:
    fit = world.fit() if terms is None else world.fit(terms)
    more = {"macro": world.macro, "history": world.history} if lags else {}
    return evidence({"default": fit}, world.risk_set, world.features, questions=FEW_SHIFTS, **more)


def status(found: Evidence, asked: str) -> str:
    (one,) = [v.status for v in found.verdicts if v.asked.startswith(asked)]
    return one


def test_a_coefficient_at_its_bound_is_a_term_that_is_not_there() -> None:
    """Every answer on a fit with an active bound is the one on the fit without the term; the lag says that it is held."""
    world = simulate(5, loans=1200)
    bounded = (*TERMS[:3], {"macro": "m", "bound": "negative"})
    assert world.fit(bounded).at_bound == ("m",)
    ours, plain = ask(world, bounded, lags=True), ask(world, TERMS[:3])
    for name in ("totals", "actual_expected", "survival", "autocorrelation", "calibration", "deciles", "auc"):
        a, b = ours.tables[name], plain.tables[name]
        numbers = a.select_dtypes("number").columns
        np.testing.assert_allclose(a[numbers], b[numbers], rtol=1e-6, atol=1e-8, err_msg=name)
    kept = ours.tables["stability"].set_index("term")
    assert kept["held"].to_dict() == {t: t == "m" for t in kept.index}
    for column in ("before", "se_before", "after", "se_after", "z"):
        want = plain.tables["stability"].set_index("term")[column]
        np.testing.assert_allclose(kept[column].drop("m"), want, rtol=1e-5, atol=1e-7)
    (lag,) = [v for v in ours.verdicts if v.asked.startswith("Is the lag of m")]
    assert lag.found.endswith("At the study's lag the coefficient is held at its bound, 0.")
    assert "opposite" not in lag.found


@pytest.mark.slow
def test_sound_books_pass() -> None:
    """8 books, seven questions each: flags no more often than the significance says (99.9 % of binomial)."""
    flags, asked = 0, 0
    for seed in range(8):
        found = ask(simulate(800 + seed, loans=2000, level=-5.4))
        flags += sum(v.status == "look at" for v in found.verdicts)
        asked += len(found.verdicts)
        assert not any(v.status == "not possible" for v in found.verdicts)
    assert asked == 56
    assert flags <= stats.binom.ppf(0.999, asked, verdicts.SIGNIFICANCE)


@pytest.mark.parametrize("seed", [71, 72, 73])
def test_an_omitted_macro_term_leaves_memory(seed: int) -> None:
    world = simulate(seed, loans=4000, level=-5.4, memory=0.85)
    whole, lacking = (
        ask(world),
        ask(world, ({"age": "log", "support": 1}, {"loan": "x"}, {"loan": "product", "as": "category"})),
    )
    assert status(whole, verdicts.MEMORY) == "in order"
    assert status(lacking, verdicts.MEMORY) == "look at"
    assert status(lacking, verdicts.SHOCKS) == "note"
    assert lacking.tables["totals"]["shock_sd"].iloc[0] > 0.2


def test_an_omitted_loan_column_shows_in_its_groups() -> None:
    world = simulate(74, loans=3000, level=-5.4)
    fit = world.fit(({"age": "log", "support": 1}, {"loan": "x"}, {"macro": "m"}))
    found = evidence(
        {"default": fit}, world.risk_set, world.features, questions=Questions(columns=("product", "region"))
    )
    (verdict,) = [v for v in found.verdicts if v.asked == verdicts.MATCH]
    assert verdict.status == "look at"
    assert verdict.found.startswith("Not by product (p")
    assert "yes by age" in verdict.found


def test_a_model_without_ranking_power_is_told() -> None:
    world = simulate(75, loans=2500, level=-5.4, x_effect=0.0)
    found = ask(world, ({"macro": "m"},))
    assert status(found, verdicts.RANKING) == "look at"


def test_everything_is_there_and_frozen(sound: World) -> None:
    fits = {"default": sound.fit(), "payoff": sound.fit(cause="payoff")}
    found = evidence(
        fits, sound.risk_set, sound.features, macro=sound.macro, history=sound.history, questions=FEW_SHIFTS
    )
    assert tuple(found.tables) == TABLES
    for table in found.tables.values():
        assert set(table["cause"]) == {"default", "payoff"}
    assert len(found.verdicts) == 2 * 8
    assert list(found.verdict_table().columns) == ["cause", "status", "asked", "found"]
    with pytest.raises(dataclasses.FrozenInstanceError):
        found.verdicts = ()  # type: ignore[misc]
    with pytest.raises(TypeError):
        found.tables["auc"] = pd.DataFrame()  # type: ignore[index]


def test_what_the_data_cannot_answer_is_said(sound: World) -> None:
    short = window(sound.risk_set, first=START + 60, last=START + 71)
    world = dataclasses.replace(sound, risk_set=short)
    found = ask(world, ({"age": "log", "support": 1}, {"loan": "x"}))
    told = {v.asked: v for v in found.verdicts}
    assert told[verdicts.MEMORY].status == "not possible"
    assert "12 calendar periods" in told[verdicts.MEMORY].found
    (stable,) = [v for a, v in told.items() if a.startswith("Do the coefficients")]
    assert stable.status == "not possible"
    assert "autocorrelation" not in found.tables


def test_weights_count_as_loans(sound: World) -> None:
    """Weight 2 is the loan twice, in every figure that counts loans independently."""
    r = sound.risk_set
    twice = dataclasses.replace(r, weight=np.full(r.weight.shape, 2.0))
    n = r.loan_ids.size
    doubled = dataclasses.replace(
        r,
        loan_ids=np.array([f"{i}{c}" for c in "ab" for i in r.loan_ids], dtype=object),
        static={k: np.concatenate([v, v]) for k, v in r.static.items()},
        stay_loan=np.concatenate([r.stay_loan, r.stay_loan + n]),
        **{
            k: np.concatenate([getattr(r, k)] * 2)
            for k in ("stay_origin", "stay_entry", "stay_exit", "stay_cause", "weight")
        },
    )
    a, b = (ask(dataclasses.replace(sound, risk_set=s)) for s in (twice, doubled))
    for name in (
        "actual_expected",
        "totals",
        "survival",
        "autocorrelation",
        "calibration",
        "auc",
        "stability",
    ):
        pd.testing.assert_frame_equal(a.tables[name], b.tables[name], rtol=1e-6, atol=1e-7)
    assert a.verdicts == b.verdicts


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_small_study(tmp_path_factory.mktemp("bank"))


@pytest.mark.slow
def test_command_prints_verdicts_and_writes_a_whole_folder(study: Path) -> None:
    out = study.parent / "evidence"
    done = stresskit("evidence", study, "--out", out, "--split", "2019-06", cwd=study.parent)
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    assert "Do the coefficients hold before and after 2019-06?" in done.stdout
    assert "Is the lag of unemployment_change" in done.stdout
    names = {f.stem for f in out.glob("*.csv")}
    assert names == {*TABLES, "verdicts"}
    manifest = json.loads((out / "manifest.json").read_text())
    assert set(manifest["outputs"]) == {f.name for f in out.glob("*.csv")}
    assert set(pd.read_csv(out / "verdicts.csv")["cause"]) == {"default", "payoff"}
    again = stresskit("evidence", study, "--out", out, cwd=study.parent)
    assert again.returncode == 2
    assert "exists already" in again.stderr


def test_command_refuses_a_split_that_is_no_period(study: Path) -> None:
    done = stresskit("evidence", study, "--split", "summer", cwd=study.parent)
    assert done.returncode == 2
    assert "--split" in done.stderr
    assert "'summer' is not a period" in done.stderr
