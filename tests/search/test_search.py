"""A search on a book whose true driver is known, against plain recomputation."""

from __future__ import annotations

import dataclasses
import math
import warnings
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest
from statsmodels.tsa.stattools import adfuller, kpss

import stresskit as sk
from stresskit.core.errors import NumericError
from stresskit.core.period import Frequency, parse_period
from stresskit.core.values import FeatureTable
from stresskit.hazard.fit import fit_hazard
from stresskit.panel.rows import risk_set_from_rows
from stresskit.runs.api import Prepared, StudyFile
from stresskit.search.api import search_specifications
from stresskit.search.result import SearchResult
from stresskit.search.trial import log_likelihood
from stresskit.spec.terms import HazardSpec
from tests.search.conftest import WIDE
from tests.search.test_sample import rows_of
from tests.search.world import macro_frame, search_text

World = tuple[StudyFile, Prepared]
TRUE = "driver_difference2_lag2"


def row(result: SearchResult, *names: str) -> pd.Series:
    found = result.table[result.table["specification"] == " + ".join(names)]
    assert len(found) == 1
    return found.iloc[0]


def test_the_true_feature_comes_first(wide: SearchResult) -> None:
    best = wide.table.iloc[0]
    assert best["rank"] == 1
    assert best["specification"] == TRUE
    # the slope that the defaults were drawn with, within 4 standard errors
    term = wide.terms[(wide.terms["number"] == best["number"]) & (wide.terms["feature"] == TRUE)].iloc[0]
    assert abs(term["coef"] - 0.45) < 4 * term["se_period"] < 0.45
    assert best["oot_gain_total"] > 2 * best["oot_gain_se"] > 0


def test_every_specification_is_recorded_once_with_its_verdict(wide: SearchResult) -> None:
    # 9 features of 6 variables: 4 of driver, 1 of each other; pairs of different variables: 4 * 5 + 10
    assert wide.counts == (9, 30)
    assert sorted(wide.table["number"]) == list(range(1, 40))
    assert wide.table["specification"].is_unique
    assert (wide.table["reasons"] == "").tolist() == wide.table["accepted"].tolist()
    ranks = wide.table["rank"].dropna().tolist()
    assert ranks == list(range(1, wide.accepted + 1))
    gains = wide.table.loc[wide.table["accepted"], "oot_gain"]
    assert gains.is_monotonic_decreasing
    assert "39 specifications were tried (9 of 1 term, 30 of 2 terms)" in wide.notes[0]
    assert len(wide.windows) == (39 + 2) * 3


def test_every_rule_refuses_exactly_what_its_figure_says(wide: SearchResult) -> None:
    codes = {
        n: {part.split(": ")[0] for part in r.split("; ")}
        for n, r in wide.table.set_index("number")["reasons"].items()
    }
    wrong = wide.terms[
        ((wide.terms["expect"] == "positive") & (wide.terms["coef"] < 0))
        | ((wide.terms["expect"] == "negative") & (wide.terms["coef"] > 0))
    ]
    for _, r in wide.table.iterrows():
        fitted = r["error"] == ""
        assert ("fit" in codes[r["number"]]) == (not fitted)
        assert ("sign" in codes[r["number"]]) == (r["number"] in set(wrong["number"]))
        assert ("p_value" in codes[r["number"]]) == (fitted and not r["p_value"] <= 0.05)
        assert ("vif" in codes[r["number"]]) == (r["vif"] > 5)
        assert ("stationarity" in codes[r["number"]]) == (
            "walk" in r["specification"] or "flat" in r["specification"]
        )
        assert ("gain" in codes[r["number"]]) == (fitted and not r["oot_gain"] > 0)
    for rule, n in wide.refused.items():
        assert n == sum(rule in c for c in codes.values())
    assert {rule for rule, n in wide.refused.items() if n} == {
        "fit",
        "sign",
        "p_value",
        "vif",
        "stationarity",
        "gain",
    }


def test_a_wrong_sign_is_refused_though_it_fits_well(wide: SearchResult) -> None:
    mirror = row(wide, "mirror_difference2_lag2")
    assert not mirror["accepted"]
    assert mirror["p_value"] < 1e-6
    assert mirror["oot_gain"] > 0
    assert mirror["reasons"].startswith("sign: mirror_difference2_lag2 is -0.")
    assert mirror["reasons"].endswith("expected positive")


def test_a_collinear_pair_is_refused_by_vif(wide: SearchResult) -> None:
    pair = row(wide, TRUE, "twin_difference2_lag2")
    assert pair["vif"] > 10
    assert "vif: variance inflation" in pair["reasons"]
    assert row(wide, TRUE)["vif"] == 1.0


def test_a_random_walk_is_flagged_and_refused_when_required(wide: SearchResult) -> None:
    walk = row(wide, "walk_level_lag0")
    assert walk["stationarity"] == "walk_level_lag0 unit root"
    assert "stationarity: walk_level_lag0: unit root" in walk["reasons"]


def test_verdicts_refuse_nothing_unless_required(world: World, tmp_path: Path) -> None:
    text = "search: s\ncause: default\ncandidates: [{of: walk}]\nout_of_time: {folds: 2, window: 4}\n"
    only = search_specifications(*world, search_text(tmp_path, text)).table.iloc[0]
    assert only["stationarity"] == "walk_level_lag0 unit root"
    assert "stationarity" not in only["reasons"]


def test_what_cannot_be_fitted_is_recorded_with_the_message(wide: SearchResult, world: World) -> None:
    flat = wide.table[wide.table["specification"].str.contains("flat")]
    assert len(flat) == 9
    assert not flat["accepted"].any()
    assert flat["error"].str.contains("flat_level_lag0").all()
    assert flat["reasons"].str.startswith("fit: could not be fitted: ").all()
    assert wide.refused["fit"] == 9
    assert "9 of them could not be fitted" in wide.notes[0]


def test_adjusted_p_values_count_all_tried(wide: SearchResult) -> None:
    for _, r in wide.table.dropna(subset="p_value").iterrows():
        assert r["p_bonferroni"] == pytest.approx(min(1.0, 39 * r["p_value"]), rel=1e-12)
        assert r["p_value"] <= r["p_holm"] <= r["p_bonferroni"]


def test_stationarity_is_that_of_the_transformed_history(wide: SearchResult) -> None:
    """The feature's own series by pandas, tested by statsmodels; the same for every lag."""
    driver = pd.Series(macro_frame()["driver"])
    x = (driver - driver.shift(2)).dropna().to_numpy()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        a, k = adfuller(x, regression="c"), kpss(x, regression="c")
    mine = wide.features[wide.features["of"] == "driver"]
    assert len(mine) == 4
    for _, f in mine.iterrows():
        assert (f["adf"], f["adf_p"], f["kpss"], f["kpss_p"]) == (a[0], a[1], k[0], k[1])
        assert f["values"] == 66


def _plain_features() -> FeatureTable:
    """The true feature by pandas on the macro calendar, which is the model's."""
    macro = macro_frame()
    driver = pd.Series(macro["driver"])
    value = (driver - driver.shift(2)).shift(2)
    start = parse_period(macro["period"].iloc[0], Frequency.QUARTER)
    values = value.to_numpy()[:, None]
    return FeatureTable(Frequency.QUARTER, start, (TRUE,), values, np.zeros(values.shape, dtype=np.int64))


def _plain_score(rows: pd.DataFrame, spec: HazardSpec, cutoff: int, length: int) -> tuple[float, int]:
    """Fit to rows up to the cut-off, written out; log-likelihood of the rows after it, one by one."""
    features = _plain_features()
    train = risk_set_from_rows(
        rows[rows["period"] <= cutoff], loan="loan", age="age", event="event", period="period",
        static=("product", "score"), frequency="quarter",
    )  # fmt: skip
    fit = sk.fit_hazard(spec, train, features)
    after = rows[(rows["period"] > cutoff) & (rows["period"] <= cutoff + length)]
    total = 0.0
    b = fit.params
    oldest = rows.loc[rows["period"] <= cutoff, "age"].max()  # the study's rule beyond observed ages: hold
    for r in after.itertuples():
        eta = b["intercept"] + b["age[log]"] * math.log(min(r.age, oldest)) + b["score"] * r.score
        eta += b["product[floating]"] * (r.product == "floating")
        if TRUE in b.index:
            eta += b[TRUE] * features.column(TRUE)[r.period - features.start]
        total += math.log(-math.expm1(-math.exp(eta))) if r.event == 1 else -math.exp(eta)
    return total, len(after)


def test_out_of_time_score_is_that_of_a_plain_recomputation(wide: SearchResult, world: World) -> None:
    file, data = world
    rows = rows_of(data.loans.risk_set)
    base = {
        "link": "cloglog",
        "terms": [t.model_dump(by_alias=True) for t in file.study.hazards["default"].terms[:3]],
    }
    number = row(wide, TRUE)["number"]
    gain, scored = 0.0, 0
    for cutoff in ("2016Q2", "2017Q4", "2019Q2"):
        at = parse_period(cutoff, Frequency.QUARTER)
        without, n = _plain_score(rows, HazardSpec.model_validate_json(_json(base)), at, 6)
        spec = base | {"terms": [*base["terms"], {"macro": TRUE, "transform": "none"}]}
        with_term, _ = _plain_score(rows, HazardSpec.model_validate_json(_json(spec)), at, 6)
        ours = wide.windows[wide.windows["cutoff"] == cutoff].set_index("number")
        assert ours.loc[0, "llf"] == pytest.approx(without, rel=1e-8)
        assert ours.loc[number, "llf"] == pytest.approx(with_term, rel=1e-8)
        assert ours.loc[0, "rows"] == n
        assert ours.loc[number, "gain"] == pytest.approx((with_term - without) / n, rel=1e-5)
        gain, scored = gain + with_term - without, scored + n
    assert row(wide, TRUE)["oot_gain"] == pytest.approx(gain / scored, rel=1e-5)


def _json(spec: object) -> str:
    import json

    return json.dumps(spec)


def test_fit_is_that_of_the_pasted_winner(wide: SearchResult, world: World, tmp_path: Path) -> None:
    """Lines of ``winner`` put where its comments say: the study then fits to the same figures."""
    file, data = world
    lines = wide.winner.splitlines()
    split = next(
        i for i, line in enumerate(lines) if line.startswith("# under hazards.default.terms, instead of")
    )
    text = file.loaded.text
    for gone in (
        "      - {macro: driver_now, expect: positive}\n",
        "      - {macro: decoy_now}\n",
        "      - {interaction: [product, driver_now]}\n",
    ):
        assert gone in text
        text = text.replace(gone, "")
    text = text.replace("  features:\n", "  features:\n" + "\n".join(lines[1:split]) + "\n")
    text = text.replace(
        "      - {loan: score}\n", "      - {loan: score}\n" + "\n".join(lines[split + 1 :]) + "\n"
    )
    (tmp_path / "study.yaml").write_text(text)
    (tmp_path / "baseline.yaml").write_text((file.base / "baseline.yaml").read_text())
    study = sk.load_study(tmp_path / "study.yaml")
    again = sk.prepare(study, loans=_loans_of(data), macro=macro_frame())
    fit = sk.fit(study, again)["default"]
    assert fit.aic == pytest.approx(wide.table.iloc[0]["aic"], abs=1e-9)
    assert f"{TRUE} {fit.params[TRUE]:.6g}" == wide.table.iloc[0]["coefficients"]


def _loans_of(data: Prepared) -> pd.DataFrame:
    from tests.search.world import loan_frame

    return loan_frame(macro_frame(), 1200)


def test_study_as_written_stands_beside(wide: SearchResult, world: World) -> None:
    fit = sk.fit(*world)["default"]
    written = wide.references.set_index("specification").loc["study as written"]
    assert written["aic"] == pytest.approx(fit.aic, abs=1e-9)
    assert wide.references.iloc[0]["oot_gain"] == 0.0


def test_common_sample_leaves_out_early_rows_and_says_so(world: World, tmp_path: Path) -> None:
    """History begins 2004Q1: the level 24 quarters ago is known from 2010Q1 on, the book from 2009Q1."""
    text = "search: s\ncause: default\ncandidates: [{of: decoy, lags: [1, 24]}]\nout_of_time: {folds: 2, window: 4}\n"
    result = search_specifications(*world, search_text(tmp_path, text))
    rows = rows_of(world[1].loans.risk_set)
    first = parse_period("2010Q1", Frequency.QUARTER)
    used, gone = (rows["period"] >= first).sum(), (rows["period"] < first).sum()
    note = next(n for n in result.notes if n.startswith("All specifications"))
    assert f"the same {used:,} rows" in note
    assert "2010Q1 to 2020Q4" in note
    assert f"{gone:,} earlier rows" in note
    assert "decoy_level_lag24 cannot be computed before" in note
    # both lags see the same rows: their AIC differ from the reference by likelihood alone
    early = rows[rows["period"] >= first]
    base = HazardSpec.model_validate_json(
        '{"link": "cloglog", "terms": [{"age": "log", "support": 1}, {"loan": "product", "as": "category", "reference": "fixed"}, {"loan": "score"}]}'
    )
    plain = sk.fit_hazard(
        base,
        risk_set_from_rows(early, loan="loan", age="age", event="event", period="period", static=("product", "score"), frequency="quarter"),
    )  # fmt: skip
    assert result.references.iloc[0]["aic"] == pytest.approx(plain.aic, rel=1e-10)


def test_rank_by_aic(world: World, tmp_path: Path) -> None:
    text = WIDE.replace("search: drivers", "search: drivers\nrank_by: aic").replace(
        "most_terms: 2", "most_terms: 1"
    )
    result = search_specifications(*world, search_text(tmp_path, text))
    accepted = result.table[result.table["accepted"]]
    assert accepted["aic"].is_monotonic_increasing
    assert "Ranked by AIC" in result.notes[1]


def test_rules_that_are_switched_off_refuse_nothing(world: World, tmp_path: Path) -> None:
    rules = "rules: {sign: record, max_p: null, max_vif: null, gain: record}"
    text = WIDE.replace("rules: {stationarity: {require: both}}", rules).replace(
        "most_terms: 2", "most_terms: 1"
    )
    result = search_specifications(*world, search_text(tmp_path, text))
    assert result.refused == {
        "fit": 1,
        "sign": 0,
        "p_value": 0,
        "vif": 0,
        "stationarity": 0,
        "refit": 0,
        "gain": 0,
    }
    assert result.accepted == 8


def test_one_scored_period_claims_nothing_of_errors(world: World, tmp_path: Path) -> None:
    text = (
        "search: s\ncause: default\ncandidates: [{of: decoy, lags: [1, 2, 3]}]\nout_of_time: {folds: 1, window: 1}\n"
        "rules: {sign: record, max_p: null, max_vif: null, gain: record}\n"
    )
    told = " ".join(search_specifications(*world, search_text(tmp_path, text)).notes)
    assert "whose error one scored period does not tell; better in" in told
    assert "(one scored period tells no error of that)" in told
    assert "nan" not in told
    assert "standard errors behind" not in told


def test_a_certain_default_that_did_not_come_has_the_likelihood_of_its_predictor() -> None:
    rng = np.random.default_rng(2)
    rows = pd.DataFrame(
        {
            "loan": np.arange(300),
            "age": 1,
            "far": np.where(np.arange(300) < 3, 4.5, 0.0),
            "event": rng.random(300) < 0.2,
        }
    )
    spec = HazardSpec.model_validate({"link": "cloglog", "terms": [{"offset": "far"}]}, strict=False)
    risk_set = sk.risk_set_from_rows(rows, loan="loan", age="age", event="event", static=["far"])
    fit = fit_hazard(spec, risk_set)
    scored = pd.DataFrame({"age": 1, "far": [60.0 / 9.0, 4.0, 0.0]})
    event = np.array([False, False, True])
    window = SimpleNamespace(
        period=np.full(3, 101), cutoff=100, length=1, frame=scored, event=event, weight=np.ones(3)
    )
    features = FeatureTable(Frequency.MONTH, 0, (), np.empty((200, 0)), np.empty((200, 0), np.int64))
    x = np.exp(fit.coefficients[0] + scored["far"].to_numpy())
    want = -x[0] - x[1] + np.log(-np.expm1(-x[2]))
    assert np.exp(-x[0]) < 1e-20  # 1 - p is 0 in floating point
    assert log_likelihood(fit, window, features) == pytest.approx([want], rel=1e-12)  # type: ignore[arg-type]


def test_adjusted_p_can_be_the_rule(world: World, tmp_path: Path) -> None:
    """The decoy's p-value passes 0.4 as it is and not after Bonferroni for the 3 tried."""
    head = "search: s\ncause: default\ncandidates: [{of: decoy, lags: [1, 2, 3]}]\nout_of_time: {folds: 2, window: 4}\n"
    raw = search_specifications(*world, search_text(tmp_path, head + "rules: {max_p: 0.1, gain: record}\n"))
    adjusted = search_specifications(
        *world, search_text(tmp_path, head + "rules: {max_p: 0.1, p_value: bonferroni, gain: record}\n")
    )
    p = raw.table["p_value"].min()
    assert 0.1 / 3 < p < 0.1
    assert raw.accepted > adjusted.accepted == 0
    assert adjusted.refused["p_value"] == 3


def test_a_first_that_fails_a_gate_is_told(world: World, tmp_path: Path) -> None:
    """A variable with one episode may rank first; a study with it is not projected (docs/gates.md)."""
    file, data = world
    assert data.history is not None
    spike = np.zeros(data.history.n_periods)
    spike[30:36] = 1.0
    history = dataclasses.replace(data.history, values={**data.history.values, "flat": spike})
    off = "rules: {sign: record, max_p: null, max_vif: null, gain: record}\nout_of_time: {folds: 2, window: 4}\n"
    head = "search: s\ncause: default\nrank_by: aic\ncandidates:\n  - {of: flat}\n"
    result = search_specifications(
        file, dataclasses.replace(data, history=history), search_text(tmp_path, head + off)
    )
    assert row(result, "flat_level_lag0")["failed_gates"] == "macro_range"
    (note,) = [n for n in result.notes if "does not pass" in n]
    assert note.startswith("The first does not pass the gate macro_range:")
    assert note.endswith("None of those that satisfy every rule passes every gate.")
    result = search_specifications(
        file,
        dataclasses.replace(data, history=history),
        search_text(tmp_path, head + "  - {of: decoy}\n" + off),
    )
    order = result.table.set_index("specification")["rank"]
    told = [n for n in result.notes if "does not pass" in n]
    assert row(result, "decoy_now")["failed_gates"] == ""
    if order["flat_level_lag0"] == 1:
        assert told[0].endswith("The best that passes every gate is decoy_now (rank 2).")
    else:
        assert told == []


def test_a_sound_first_says_nothing_of_gates(wide: SearchResult) -> None:
    assert wide.table.iloc[0]["failed_gates"] == ""
    assert not [n for n in wide.notes if "does not pass" in n]


def test_a_refit_that_fails_is_recorded_and_refuses(
    world: World, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    import stresskit.search.trial as trial

    real = trial.fit_hazard
    rows = world[1].loans.risk_set.n_rows

    def fails(spec, risk_set, *args, **kwargs):  # type: ignore[no-untyped-def]
        if "decoy_level_lag1" in spec.macro_features() and risk_set.n_rows < 0.8 * rows:
            raise NumericError("no convergence, for the test")
        return real(spec, risk_set, *args, **kwargs)

    monkeypatch.setattr(trial, "fit_hazard", fails)
    text = "search: s\ncause: default\ncandidates: [{of: decoy, lags: [1, 2]}]\nout_of_time: {folds: 3, window: 6}\n"
    result = search_specifications(*world, search_text(tmp_path, text))
    bad = row(result, "decoy_level_lag1")
    assert math.isfinite(bad["aic"])
    assert math.isnan(bad["oot_gain"])
    assert "refit: refit up to 2016Q2: no convergence, for the test" in bad["reasons"]
    windows = result.windows[result.windows["number"] == bad["number"]]
    assert (windows["error"] != "").any()
    assert (windows["error"] == "").any()
    assert result.refused["refit"] == 1
    assert math.isfinite(row(result, "decoy_level_lag2")["oot_gain"])


def test_progress_counts_every_fit_to_the_end(world: World, tmp_path: Path) -> None:
    seen: list[tuple[int, int]] = []
    text = "search: s\ncause: default\ncandidates: [{of: decoy}, {of: flat}]\nout_of_time: {folds: 2, window: 4}\n"
    search_specifications(
        *world, search_text(tmp_path, text), progress=lambda done, of: seen.append((done, of))
    )
    # decoy_level_lag0 is the study's decoy_now; two specifications and two references, three fits each
    assert seen == [(i, 12) for i in range(13)]


def test_threads_change_no_figure(wide: SearchResult, world: World, tmp_path: Path) -> None:
    again = search_specifications(*world, search_text(tmp_path, WIDE), threads=2)
    pd.testing.assert_frame_equal(again.table, wide.table, check_exact=True)
    pd.testing.assert_frame_equal(again.windows, wide.windows, check_exact=True)
