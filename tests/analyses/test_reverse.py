"""Reverse stress against closed forms, simulation and projections of the paths that it writes."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy.special import ndtr

import stresskit as sk
from stresskit.analyses.ask import analyse
from stresskit.analyses.free_path import FreePaths, free_paths, resolved
from stresskit.analyses.nearest import Search, nearest
from stresskit.analyses.reads import channel_reads, read_variables
from stresskit.analyses.reverse import _Slopes
from stresskit.analyses.thresholds import Measured, measured
from stresskit.core.errors import UsageError
from stresskit.core.period import Frequency
from stresskit.core.values import GIVEN, ScenarioPath
from stresskit.macro.var import VarModel, forecast
from stresskit.report.analysis import section
from stresskit.runs.records import Analysis
from stresskit.runs.setting import Setting
from stresskit.scenario.plausibility import assess_paths
from stresskit.spec.reverse import Reverse
from tests import program
from tests.analyses.var_world import var_setting, write_var_study
from tests.analyses.world import setting_of


@pytest.fixture(scope="module")
def setting(tmp_path_factory: pytest.TempPathFactory) -> Setting:
    return var_setting(tmp_path_factory.mktemp("reverse"))


@pytest.fixture(scope="module")
def found(setting: Setting) -> Analysis:
    return analyse(setting, "reverse", spec({"loss_rise": "30%"}))


def spec(text: dict[str, object]) -> Reverse:
    return Reverse.model_validate_json(json.dumps(text))


def slopes_of(setting: Setting, asked: Reverse, periods: int) -> _Slopes:
    free = free_paths(setting, setting.reference(), periods=periods, rules=None)
    target = measured(setting, asked)
    target.threshold = 1.3 * float(target([setting.reference()])[0])
    names = read_variables(channel_reads(setting))
    read = [i for i, v in enumerate(free.model.names) if v in names]
    return _Slopes(free, target, read, lambda _: None)


# ---- a linear loss of a VAR(1): everything is known ----------------------------------------------


def known_model() -> VarModel:
    rng = np.random.default_rng(4)
    return VarModel(
        ("a", "b"), ("level", "difference"), Frequency.QUARTER, 100, "fixed", np.array([0.1, 0.0]),
        np.array([[[0.6, 0.1], [0.0, 0.3]]]), np.array([[1.0, 0.3], [0.3, 0.5]]), np.array([[0.2, -0.1]]),
        np.array([0.2, 3.0]), rng.normal(size=(40, 2)), 0.6, {},
    )  # fmt: skip


def test_a_linear_loss_of_a_var_has_the_optimum_of_the_closed_form() -> None:
    """log figure = w'y: the nearest path beyond c is mean + S w (c - w'm) / w'S w at distance (c - w'm) / sqrt(w'S w)."""
    model, n = known_model(), 6
    made = forecast(model, n)
    w = np.random.default_rng(5).normal(size=2 * n) * 0.1
    base = ScenarioPath(
        "base",
        None,
        Frequency.QUARTER,
        101,
        {v: np.zeros(n) for v in "ab"},
        {v: np.full(n, GIVEN) for v in "ab"},
    )
    none = (np.zeros(0), np.zeros(0))
    free = FreePaths(None, base, model, made, {"a": none, "b": none}, None)  # type: ignore[arg-type]

    def of(paths: list[ScenarioPath]) -> np.ndarray:
        return np.array([np.exp(w @ np.column_stack([p.values["a"], p.values["b"]]).ravel()) for p in paths])

    threshold = 2.0
    target = Measured("test", False, of, threshold)
    slopes = _Slopes(free, target, [0, 1], lambda _: None)
    search = Search(2 * n, slopes.value, slopes.gradient, np.zeros((0, 2 * n)), np.zeros(0), slopes.rough)
    got = nearest(search, np.zeros(2 * n))
    assert got is not None
    s = made.factor @ made.factor.T
    gap = np.log(threshold) - w @ made.mean.ravel()
    assert gap > 0
    assert got.distance == pytest.approx(gap / np.sqrt(w @ s @ w), rel=1e-4)
    want = made.mean.ravel() + s @ w * gap / (w @ s @ w)
    # the search stops where a step of 1 % of the distance is all that is left, and takes it
    np.testing.assert_allclose(
        free.working(got.u).ravel(), want, atol=1e-2 * np.abs(want - made.mean.ravel()).max()
    )


# ---- on a study ----------------------------------------------------------------------------------


def test_gradients_are_central_differences_of_the_log_loss(setting: Setting) -> None:
    slopes = slopes_of(setting, spec({}), 6)
    rng = np.random.default_rng(8)
    u = 0.4 * rng.normal(size=slopes.free.size)
    g = slopes.gradient(u, float(slopes.value(u[None])[0]))
    for _ in range(3):
        way = rng.normal(size=u.size)
        way /= np.linalg.norm(way)
        two = slopes.value(np.stack([u + 1e-3 * way, u - 1e-3 * way]))
        assert float(g @ way) == pytest.approx(float(two[0] - two[1]) / 2e-3, rel=1e-2, abs=2e-4)


def test_the_free_path_is_what_its_own_text_resolves_to(setting: Setting) -> None:
    rules = {
        "unemployment_rate": {"revert_to": 4.0, "over": 3},
        "house_price_index": {"grow_by": "2%"},
        "policy_rate": "hold",
    }
    for given in (None, rules, "baseline"):
        free = free_paths(setting, setting.reference(), periods=7, rules=given)
        y = free.working(0.7 * np.random.default_rng(3).normal(size=free.size))
        text = free.text(y, name="drawn", head=("A path.",), notes={"purpose": "a test"})
        read = resolved(setting, text)
        made = free.path(y)
        for v in free.model.names:
            np.testing.assert_allclose(read.values[v], made.values[v], rtol=1e-7)
            np.testing.assert_array_equal(read.flags[v], made.flags[v])
        assert read.stated == made.stated


def test_the_path_found_reaches_the_threshold_at_the_distance_told(setting: Setting, found: Analysis) -> None:
    best = found.table("solutions").iloc[0]
    path = resolved(setting, found.files["reverse.yaml"])
    loss, base = (float(r.loans["el_lifetime"].sum()) for r in setting.along([path, setting.reference()]))
    assert loss == pytest.approx(1.3 * base, rel=1e-6)
    assert loss == pytest.approx(best["el_figure"], rel=1e-12)
    assert setting.data.var is not None
    judged = assess_paths(setting.data.var, [path])[0]
    assert judged.whole.distance.d2 == pytest.approx(best["d2"], rel=1e-9)
    assert found.facts["projections"] < 200
    assert found.facts["reference_figure"] == pytest.approx(base, rel=1e-12)


def test_no_path_nearby_reaches_it_from_less_far(setting: Setting, found: Analysis) -> None:
    """Points on the sphere just inside, all round the one found: none gets there; the largest of many is near it."""
    slopes = slopes_of(setting, spec({}), int(found.facts["periods"]))
    free, d = slopes.free, float(found.facts["distance"])
    path = resolved(setting, found.files["reverse.yaml"])
    y = np.column_stack(
        [
            np.log(path.values[v][: free.periods])
            if t == "log_difference"
            else path.values[v][: free.periods]
            for v, t in zip(free.model.names, free.model.transforms, strict=True)
        ]
    )
    u = np.linalg.solve(free.found.factor, (y - free.found.mean).ravel())
    assert float(np.linalg.norm(u)) == pytest.approx(d, rel=1e-6)
    rng = np.random.default_rng(6)
    around = u + 0.3 * d * rng.normal(size=(120, u.size)) / np.sqrt(u.size)
    inside = 0.98 * d * around / np.linalg.norm(around, axis=1)[:, None]
    assert (slopes.value(inside) < 0.0).all()


@pytest.mark.slow
def test_the_share_of_paths_beyond_is_that_of_a_simulation(setting: Setting) -> None:
    """Paths drawn from the VAR: the share whose loss is at least the threshold beside Φ(-d), to first order."""
    found = analyse(setting, "reverse", spec({"loss_rise": "8%", "surface": "none", "starts": 1}))
    d, draws = float(found.facts["distance"]), 800
    slopes = slopes_of(setting, spec({}), int(found.facts["periods"]))
    slopes.target.threshold = float(found.facts["threshold"])
    values = slopes.value(np.random.default_rng(11).normal(size=(draws, slopes.free.size)))
    share, want = float((values >= 0.0).mean()), float(ndtr(-d))
    assert 0.5 < d < 3.0
    # four standard errors of the simulation, and a tenth for the curvature that first order leaves out
    assert share == pytest.approx(want, abs=4 * np.sqrt(want * (1 - want) / draws) + 0.1 * want)


def test_within_a_distance_that_does_not_reach_it_says_so_and_how_far_one_gets(setting: Setting) -> None:
    asked = spec({"loss_rise": "30%", "within": 1.0, "surface": "none"})
    found = analyse(setting, "reverse", asked)
    assert not found.facts["reached"]
    assert "cannot be reached within 1 standard deviations of the VAR's forecast" in found.answer
    worst = found.table("solutions").set_index("scenario").loc["worst_within"]
    assert worst["distance"] <= 1.0 + 1e-6
    slopes = slopes_of(setting, asked, int(found.facts["periods"]))
    ways = np.random.default_rng(9).normal(size=(150, slopes.free.size))
    ways /= np.linalg.norm(ways, axis=1)[:, None]
    others = np.exp(slopes.value(ways)) * slopes.target.threshold
    assert worst["el_figure"] > others.max()
    # and what is reached at that distance is what a search for that figure finds there
    again = analyse(
        setting, "reverse", spec({"el": float(worst["el_figure"]), "surface": "none", "starts": 1})
    )
    assert again.facts["distance"] == pytest.approx(1.0, rel=2e-3)


def test_a_segment_reaches_its_own_pd_and_floors_hold(setting: Setting) -> None:
    book = setting.portfolio.static["product"].astype(str) == "fixed"
    now = float(setting.along([setting.reference()])[0].loans["pd_12m"][book].mean())
    asked = spec(
        {"pd_12m": f"{150 * now:.4f}%", "segment": {"product": "fixed"}, "periods": 6, "surface": "none"}
    )
    found = analyse(setting, "reverse", asked)
    path = resolved(setting, found.files["reverse.yaml"])
    reached = float(setting.along([path])[0].loans["pd_12m"][book].mean())
    assert reached == pytest.approx(1.5 * now, rel=1e-5)
    assert "mean 12-month PD of product fixed of" in found.answer
    for v, floor in (("unemployment_rate", 0.0), ("policy_rate", 0.0)):
        assert path.values[v].min() >= floor


def test_a_floor_that_binds_is_respected_and_costs_distance(tmp_path: Path, found: Analysis) -> None:
    study = write_var_study(tmp_path)
    # house prices may not fall below their last value: the loss has to come from elsewhere
    study.write_text(study.read_text().replace("policy_rate: 0}", "policy_rate: 0, house_price_index: 150}"))
    bound = analyse(setting_of(study), "reverse", spec({"loss_rise": "30%", "surface": "none"}))
    frame = bound.table("paths")
    mine = frame[(frame["scenario"] == "reverse") & (frame["variable"] == "house_price_index")]
    assert mine["value"].min() >= 150.0 - 1e-9
    assert bound.facts["distance"] >= found.facts["distance"] - 1e-4


def test_the_surface_holds_the_reference_and_grows_towards_the_path(found: Analysis) -> None:
    surface = found.table("surface")
    first, second, kind = surface.columns
    start = surface[(surface[first] == 0) & (surface[second] == 0)][kind]
    assert float(start.iloc[0]) == pytest.approx(found.facts["reference_figure"], rel=1e-12)
    assert float(surface[kind].iloc[-1]) == surface[kind].max()
    assert len(surface) == found.facts["projections_surface"] == 49


def test_the_report_shows_paths_with_history_and_the_surface(found: Analysis) -> None:
    shown = section(found)
    assert [p.key for p in shown.pictures] == ["reverse-paths", "reverse-surface"]
    assert [p.title for p in shown.pictures[0].panels] == [
        "unemployment_rate",
        "house_price_index",
        "policy_rate",
    ]
    assert {m.name for m in shown.pictures[0].legend} == {"reverse", "baseline", "slump", "VAR forecast"}
    assert "Infinity" not in str(shown.pictures[1].panels[0].svg)


@pytest.mark.parametrize(
    ("asked", "message"),
    [
        (
            {"el": 1000.0},
            r"^reached already: the lifetime expected loss of the whole book is [\d,]+ along baseline, and the threshold is 1,000; "
            "give a higher one$",
        ),
        (
            {"pd_12m": "50%", "segment": {"produkt": "fixed"}},
            r"^segment: the book has no column 'produkt'; did you mean 'product'\? \(columns: place, product\)$",
        ),
        (
            {"segment": {"product": "fixd"}},
            r"^segment: no loan has product 'fixd'; did you mean 'fixed'\? \(values: fixed, floating\)$",
        ),
        (
            {"capital": {"amount": 1e6}},
            r"^a capital threshold needs risk-weighted amounts, and the study has no section capital: add one \(see capital.md\), or "
            "give a loss$",
        ),
        (
            {"surface": ["unemployment_rate", "polcy_rate"]},
            r"^surface: 'polcy_rate' is no variable of macro.var that is read; did you mean 'policy_rate'\? \(there are "
            r"unemployment_rate, house_price_index, policy_rate\)$",
        ),
        (
            {"reference": "slmp"},
            r"^no scenario 'slmp'; did you mean 'slump'\? \(scenarios: baseline, slump\)$",
        ),
    ],
)
def test_bad_requests_say_what_is_wrong(setting: Setting, asked: dict[str, object], message: str) -> None:
    with pytest.raises(UsageError, match=message):
        analyse(setting, "reverse", spec(asked))


def test_a_study_without_a_var_is_told_to_declare_one(setting: Setting) -> None:
    data = type(setting.data)(
        **{f: getattr(setting.data, f) for f in setting.data.__dataclass_fields__} | {"var": None}
    )
    bare = Setting(
        setting.file, data, setting.fitted, setting.fits, setting.recovery, setting.cells, setting.book
    )
    with pytest.raises(
        UsageError, match=r"needs the study's VAR, which says how plausible a path is: declare macro\.var"
    ):
        analyse(bare, "reverse")


@pytest.mark.slow
def test_the_scenario_written_gives_the_same_loss_again_through_the_command_line(tmp_path: Path) -> None:
    study = write_var_study(tmp_path)

    def stresskit(*words: str) -> dict[str, object]:
        done = program.stresskit(*words, "--json", cwd=tmp_path)
        assert done.returncode == 0, done.stderr
        told: dict[str, object] = json.loads(done.stdout)
        return told

    told = stresskit("reverse", "study.yaml", "--loss-rise", "30%", "--surface", "none", "--out", "mildest")
    scenario = (tmp_path / "mildest/reverse.yaml").read_text()
    (tmp_path / "reverse.yaml").write_text(scenario)
    study.write_text(
        study.read_text().replace("scenarios: [baseline.yaml,", "scenarios: [reverse.yaml, baseline.yaml,")
    )
    result = stresskit("run", "study.yaml", "--no-evidence", "--out", "run")
    book = {r["scenario"]: r for r in result["summary"] if r["by"] == ""}  # type: ignore[attr-defined]
    facts: dict[str, float] = told["facts"]  # type: ignore[assignment]
    assert book["reverse"]["el_lifetime"] == pytest.approx(facts["figure_reached"], rel=1e-12)
    assert book["reverse"]["el_lifetime"] == pytest.approx(1.3 * book["baseline"]["el_lifetime"], rel=1e-6)
    judged = pd.read_csv(tmp_path / "run/plausibility/scenarios.csv").set_index(["scenario", "span"])
    assert judged.loc[("reverse", "whole path"), "d2"] == pytest.approx(facts["d2"], rel=1e-9)


def test_capital_is_used_up_by_losses_and_what_is_asked_for_the_rest(tmp_path: Path) -> None:
    capital = "\ncapital: {class: product, stressed_weight: 1.0, values: {fixed: other_retail, floating: other_retail}}\n"
    setting = var_setting(tmp_path, more=capital)
    file, data = setting.file, setting.data
    found = analyse(
        setting,
        "reverse",
        spec({"capital": {"amount": 700_000.0, "ratio": "10%"}, "surface": "none", "starts": 1}),
    )
    path = resolved(setting, found.files["reverse.yaml"])
    assert found.facts["figure"] == "use of capital"
    # by another route: the year view of a whole run with the path in place of the slump
    changed = type(data)(**{f: getattr(data, f) for f in data.__dataclass_fields__} | {"paths": (path,)})
    years = sk.project(file, changed, setting.fitted).years
    assert years is not None
    whole = years[(years["by"] == "") & (years["scenario"] == path.name)]
    used = whole["loss"].fillna(0).cumsum() + 0.1 * whole["rwa"]
    assert float(used.max()) == pytest.approx(700_000.0, rel=1e-6)
