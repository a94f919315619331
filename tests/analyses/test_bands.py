"""Bands of a whole study: closed forms, compression, common random numbers, threads, words."""

from __future__ import annotations

import tempfile
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

import stresskit as sk
from stresskit.analyses.ask import analyse
from stresskit.analyses.bands.compress import amounts, compressed, importance, layout, stand
from stresskit.analyses.bands.draws import Spreads, batch_of, spreads_of
from stresskit.analyses.bands.engine import CHECKED, TOGETHER, Drawn, Projector, layout_of, run_draws
from stresskit.analyses.bands.macro import path_spread
from stresskit.analyses.bands.maker import chosen_paths
from stresskit.analyses.bands.shocks import PeriodShocks
from stresskit.analyses.bands.world import world_of
from stresskit.core.errors import NumericError, UsageError
from stresskit.core.values import FILLED, GIVEN, Portfolio, ScenarioPath
from stresskit.runs.setting import Setting, set_up
from stresskit.spec.bands import Bands
from tests.analyses.world import setting_of
from tests.cli.small_study import write_small_study

VAR = "  var: {variables: {unemployment_rate: difference, policy_rate: difference}, lags: 1, floors: {unemployment_rate: 0}}\n"


def study_of(folder: Path, *, var: bool = True, horizon: int | None = None) -> Setting:
    path = write_small_study(folder)
    frame = (folder / "macro.csv").read_text().splitlines()
    rng = np.random.default_rng(1)
    lines = [frame[0]] + [
        f"{x.rsplit(',', 1)[0]},{2.0 + v:.3f}" for x, v in zip(frame[1:], rng.normal(0, 0.2, 28), strict=True)
    ]
    (folder / "macro.csv").write_text("\n".join(lines) + "\n")
    text = path.read_text()
    if var:
        text = text.replace("hazards:\n", VAR + "hazards:\n", 1)
    if horizon:
        text = text.replace("as_of: 2020-12\n", f"as_of: 2020-12\nhorizon: {horizon}\n")
    path.write_text(text)
    return setting_of(path)


@pytest.fixture(scope="module")
def setting(tmp_path_factory: pytest.TempPathFactory) -> Setting:
    return study_of(tmp_path_factory.mktemp("bands"))


@pytest.fixture(scope="module")
def one_step(tmp_path_factory: pytest.TempPathFactory) -> Setting:
    return study_of(tmp_path_factory.mktemp("one"), horizon=1)


def drawn_of(setting: Setting, spec: Bands, spreads: Spreads | None = None, threads: int = 1) -> Drawn:
    paths = chosen_paths(setting, spec)
    return run_draws(setting, paths, spreads or spreads_of(setting, paths, spec), spec, threads=threads)


def nothing(setting: Setting) -> Spreads:
    return Spreads(None, None, None, None, {})


def with_book(setting: Setting, book: Portfolio) -> Setting:
    loans = replace(setting.data.loans, portfolio=book)
    return set_up(setting.file, replace(setting.data, loans=loans), setting.fitted)


# ---- closed forms


def test_one_period_shock_on_one_period_has_the_quantiles_of_the_transformed_normal(
    one_step: Setting,
) -> None:
    """PD of a loan in one period given u is 1 - exp(-Lambda e^u) over the competing exit: the p-quantile is that at u_p."""
    one = with_book(one_step, _first(one_step.portfolio, 1))
    sd = 0.4
    shocks = PeriodShocks(("default",), np.array([sd]), np.array([0.0]), np.eye(1), {"default": 60})
    spec = Bands(draws=1500, source_draws=0, tolerance=None)
    drawn = drawn_of(one, spec, replace(nothing(one), periods=shocks))
    place = drawn.layout.place(0, "pd_lifetime")
    for s, path in enumerate(chosen_paths(one, spec)):
        found = drawn.sets[TOGETHER][:, s, place]
        for p in (0.05, 0.5, 0.95):
            u = -0.5 * sd**2 + sd * stats.norm.ppf(p)
            shift = {"default": np.array([u])}
            want = float(one.book.along([replace(one.route(path), shift=shift)])[0].loans["pd_lifetime"][0])
            density = np.sqrt(p * (1 - p) / found.size) / stats.norm.pdf(stats.norm.ppf(p)) * sd * want
            assert np.quantile(found, p) == pytest.approx(want, abs=4 * density)
            assert want == pytest.approx(_by_hand(one, path, u), rel=1e-12)


def _by_hand(setting: Setting, path: ScenarioPath, u: float) -> float:
    """o_d / (1 + o_d + o_p) of the first loan in the first step, from the fits' predictions."""
    book, features = setting.portfolio, setting.features(path)
    odds = {}
    for cause, fit in setting.fits.items():
        side = fit.loan_part(book.static, book.n_loans, book.loan_ids)
        values = np.array([[features.column(n)[0] for n in fit.feature_names]]).reshape(1, -1)
        cell = fit.cell_part(np.array([book.age[0] + 1]), values, fit.feature_names)
        eta = side.s[0] + cell.z[0] + side.U[0] @ cell.V[0] + (u if cause == "default" else 0.0)
        odds[cause] = np.expm1(np.exp(eta))
    return float(odds["default"] / (1.0 + sum(odds.values())))


def test_small_coefficient_errors_give_the_delta_method(setting: Setting) -> None:
    """Standard deviation of the lifetime PD against gradient and covariance, the gradient by projecting again."""
    spec = Bands(draws=400, source_draws=0, tolerance=None, sources=("coefficients",))
    spreads = spreads_of(setting, chosen_paths(setting, spec), spec)
    assert spreads.coefficients is not None
    small = replace(spreads.coefficients, factor=spreads.coefficients.factor * 0.02, df=float("inf"))
    drawn = drawn_of(setting, spec, replace(spreads, coefficients=small))
    path, gradient = setting.reference(), []
    for cause, fit in setting.fits.items():
        for j in range(fit.coefficients.size):
            move = np.zeros(fit.coefficients.size)
            move[j] = 1e-4
            ends = []
            for sign in (1, -1):
                fits = dict(setting.fitted) | {
                    cause: replace(fit, coefficients=fit.coefficients + sign * move)
                }
                ends.append(float(setting.with_fits(fits).along([path])[0].loans["pd_lifetime"].mean()))
            gradient.append((ends[0] - ends[1]) / 2e-4)
    g = np.array(gradient)
    want = float(np.sqrt(g @ small.covariance() @ g))
    found = drawn.sets[TOGETHER][:, 0, drawn.layout.place(0, "pd_lifetime")].std(ddof=1)
    assert found == pytest.approx(want, rel=4 / np.sqrt(2 * 400))


def test_a_level_of_the_path_that_the_hazard_reads_linearly_has_the_normal_quantiles(
    setting: Setting,
) -> None:
    """Deviations of a filled variable are normal with the conditional forecast's sd, those of stated values 0."""
    model = setting.data.var
    assert model is not None
    path = setting.reference()
    half = {n: np.where(np.arange(path.horizon) < 4, GIVEN, FILLED) for n in model.names}
    path = replace(
        path,
        flags=half,
        stated={},
        values={n: path.values.get(n, np.full(path.horizon, 2.0)) for n in model.names},
    )
    spread = path_spread(model, path, vary_stated=False)
    assert not spread.factor[:4].any()
    u = np.random.default_rng(3).standard_normal((4000, spread.factor.shape[2]))
    drawn = np.array([spread.at(row).values["policy_rate"][5] for row in u])
    np.testing.assert_array_equal(spread.at(u[0]).values["policy_rate"][:4], path.values["policy_rate"][:4])
    sd = float(np.sqrt((spread.factor[5, model.names.index("policy_rate")] ** 2).sum()))
    want = stats.norm(path.values["policy_rate"][5], sd)
    assert stats.kstest(drawn, want.cdf).pvalue > 0.001
    free = path_spread(model, path, vary_stated=True)
    assert (np.sqrt((free.factor**2).sum(axis=2))[0] > 0).all()


# ---- centre, common random numbers, threads, order


def test_without_variance_every_draw_is_the_point_estimate(setting: Setting) -> None:
    shocks = PeriodShocks(("default",), np.zeros(1), np.zeros(1), np.eye(1), {"default": 60})
    drawn = drawn_of(setting, Bands(draws=100, source_draws=0), replace(nothing(setting), periods=shocks))
    np.testing.assert_array_equal(
        drawn.sets[TOGETHER], np.broadcast_to(drawn.point, drawn.sets[TOGETHER].shape)
    )
    result = sk.project(setting.file, setting.data, setting.fitted)
    book = result.summary[result.summary["by"] == ""].set_index("scenario")
    for s, name in enumerate(drawn.scenarios):
        for m in ("pd_12m", "pd_lifetime", "el_12m", "el_lifetime"):
            assert drawn.point[s, drawn.layout.place(0, m)] == pytest.approx(book.loc[name, m], rel=1e-12)


def test_a_scenario_less_itself_is_exactly_nothing_in_every_draw(setting: Setting) -> None:
    path = setting.path("slump")
    twin = replace(path, name="twin")
    spec = Bands(draws=100, source_draws=100, stated="vary", lgd_se=0.03)
    both = replace(setting, data=replace(setting.data, paths=(path, twin)))
    drawn = run_draws(both, [path, twin], spreads_of(both, [path, twin], spec), spec)
    assert set(drawn.spreads.sources) == {"coefficients", "periods", "macro", "lgd"}
    for draws in drawn.sets.values():
        np.testing.assert_array_equal(draws[:, 0], draws[:, 1])
        assert draws.std(axis=0).max() > 0.0


def test_threads_and_the_order_of_loans_change_no_bit(setting: Setting, tmp_path: Path) -> None:
    spec = Bands(draws=100, source_draws=20, lgd_se=0.03)
    one, two = drawn_of(setting, spec, threads=1), drawn_of(setting, spec, threads=2)
    for name, draws in one.sets.items():
        np.testing.assert_array_equal(draws, two.sets[name])
    study_of(tmp_path)
    lines = (tmp_path / "loans.csv").read_text().splitlines()
    order = np.random.default_rng(5).permutation(len(lines) - 1)
    (tmp_path / "loans.csv").write_text("\n".join([lines[0], *(lines[1 + i] for i in order)]) + "\n")
    other = drawn_of(setting_of(tmp_path / "study.yaml"), spec)
    np.testing.assert_array_equal(one.sets[TOGETHER], other.sets[TOGETHER])


def test_draws_do_not_depend_on_how_many_follow(setting: Setting) -> None:
    few = drawn_of(setting, Bands(draws=100, source_draws=0)).sets[TOGETHER]
    more = drawn_of(setting, Bands(draws=260, source_draws=0)).sets[TOGETHER]
    np.testing.assert_array_equal(few, more[:100])
    assert not np.array_equal(few, drawn_of(setting, Bands(draws=100, source_draws=0, seed=1)).sets[TOGETHER])


def test_segments_add_up_to_the_book_in_every_draw(setting: Setting) -> None:
    drawn = drawn_of(setting, Bands(draws=100, source_draws=0))
    how = drawn.layout
    el = drawn.sets[TOGETHER][
        :, :, [how.place(g, "el_lifetime") for g, (by, _) in enumerate(how.groups) if by == "product"]
    ]
    np.testing.assert_allclose(
        el.sum(axis=2), drawn.sets[TOGETHER][:, :, how.place(0, "el_lifetime")], rtol=1e-12
    )
    years = drawn.sets[TOGETHER][:, :, how.first_year :].sum(axis=2)
    np.testing.assert_allclose(years, drawn.sets[TOGETHER][:, :, how.place(0, "el_lifetime")], rtol=1e-12)


# ---- compression


def _first(book: Portfolio, n: int) -> Portfolio:
    return _taken(book, np.arange(n))


def _taken(book: Portfolio, at: np.ndarray) -> Portfolio:
    ids = np.array([f"Z{i:06d}" for i in range(at.size)], dtype=object)
    static = {name: column[at] for name, column in book.static.items()}
    return Portfolio(
        book.frequency,
        book.as_of,
        ids,
        book.age[at],
        book.remaining[at],
        book.balance[at],
        book.rate[at],
        static,
    )


def _errors_of(setting: Setting, spec: Bands, count: int) -> tuple[float, int]:
    """(largest relative difference of any figure in a few draws from full projections, loans that stand)."""
    paths = chosen_paths(setting, spec)
    spreads = spreads_of(setting, paths, spec)
    how = layout_of(setting)
    whole = world_of(setting, paths, spreads, snap=False)
    centre = whole.results(None, frozenset())
    columns = whole.figures(centre)
    chosen = stand(setting, layout(setting, centre), importance(setting, centre[0]), centre[0], count)
    small = Projector(world_of(compressed(setting, chosen), paths, spreads, snap=True), how, columns)
    full, worst = Projector(whole, how, columns), 0.0
    for draw in batch_of(spreads, setting.book.horizon, 3, 0)[:CHECKED]:
        a, b = (p.figures(draw, frozenset(spreads.sources)) for p in (full, small))
        worst = max(worst, float(np.abs(b / np.where(a > 0, a, 1.0) - (a > 0)).max()))
    return worst, chosen.loan.size


def test_equal_loans_collapse_without_error(setting: Setting) -> None:
    book = setting.portfolio
    repeated = with_book(setting, _taken(book, np.repeat(np.arange(40), np.arange(1, 41))))
    error, standing = _errors_of(repeated, Bands(lgd_se=0.05), 60)
    assert standing <= 40
    assert error < 1e-11


@cache
def _shared() -> Setting:
    # a fixture would be printed whole by hypothesis
    with tempfile.TemporaryDirectory() as folder:
        return study_of(Path(folder))


@settings(max_examples=8, deadline=None, derandomize=True)
@given(seed=st.integers(0, 10_000), count=st.sampled_from([60, 120]))
def test_compression_error_stays_within_its_bound(seed: int, count: int) -> None:
    """Books of random loans, rates and balances of their own: figures of draws stay near those of all loans."""
    setting, rng = _shared(), np.random.default_rng(seed)
    book = _taken(setting.portfolio, rng.integers(0, setting.portfolio.n_loans, 1500))
    book = replace(book, balance=rng.lognormal(9.0, 1.0, 1500), rate=rng.uniform(0.01, 0.1, 1500))
    error, standing = _errors_of(with_book(setting, book), Bands(lgd_se=0.05), count)
    assert standing <= 2 * count
    assert error < 0.02 * (60 / count) ** 0.5


def test_the_engine_keeps_to_the_tolerance_and_says_what_it_measured(setting: Setting) -> None:
    book = _taken(setting.portfolio, np.random.default_rng(8).integers(0, setting.portfolio.n_loans, 3000))
    big = with_book(setting, replace(book, rate=np.random.default_rng(9).uniform(0.01, 0.1, 3000)))
    drawn = drawn_of(big, Bands(draws=100, source_draws=0, tolerance=0.01))
    assert drawn.compression.used
    assert drawn.compression.error <= 0.01
    whole = drawn_of(big, Bands(draws=100, source_draws=0, tolerance=None))
    assert whole.compression.standing == 3000
    book_places = [drawn.layout.place(0, m) for m in ("pd_lifetime", "el_lifetime")]
    gap = np.abs(drawn.sets[TOGETHER] / whole.sets[TOGETHER] - 1.0)[:, :, book_places]
    # three draws were measured; among a hundred some lie a little further off
    assert gap.max() < 3 * 0.01
    np.testing.assert_allclose(drawn.point, whole.point, rtol=1e-12)
    assert amounts(big) == ()


# ---- words and refusals


def test_the_analysis_answers_in_words_with_tables_and_facts(setting: Setting) -> None:
    found = analyse(setting, "bands", Bands(draws=100, source_draws=100, lgd_se=0.05))
    assert found.answer.startswith("With 90% probability the lifetime loss under slump lies between ")
    assert "What makes it wide: " in found.answer
    assert "It exceeds that under baseline by " in found.answer
    loss = found.table("loss")
    assert (loss["el_low"] < loss["el_median"]).all()
    assert (loss["el_median"] < loss["el_high"]).all()
    assert (loss["el_mc_error"] > 0).all()
    sources = found.table("sources")
    assert list(sources["source"].unique()) == [
        "together",
        "coefficients",
        "period shocks",
        "LGD",
    ] or "macro path" in set(sources["source"])
    assert found.facts["seed"] == 20251231
    assert found.facts["draws"] == 100
    gaps = found.table("difference")
    assert list(gaps["scenario"].unique()) == ["slump"]
    # what scenarios share cancels in a difference, so it is narrower than two unpaired bands
    alone = loss.set_index(["scenario", "horizon"])["el_sd"]
    assert gaps["el_sd"].iloc[1] < np.hypot(alone["slump", "lifetime"], alone["baseline", "lifetime"])


def test_more_precision_takes_more_draws(setting: Setting) -> None:
    loose = drawn_of(setting, Bands(precision=0.05, source_draws=0))
    tight = drawn_of(setting, Bands(precision=0.015, source_draws=0))
    assert loose.sets[TOGETHER].shape[0] < tight.sets[TOGETHER].shape[0]
    assert tight.reached <= 0.015


def test_what_cannot_be_drawn_is_refused_in_words(setting: Setting) -> None:
    with pytest.raises(NumericError) as caught:
        analyse(setting, "bands", Bands(sources=("lgd",)))
    assert str(caught.value).splitlines()[0] == (
        "nothing varies, so there is no band. coefficients: not asked for; period shocks: not asked for; macro path: not asked for; "
        "LGD: LGD is a declared number and nobody stated its error (bands.lgd_se): it does not vary"
    )
    with pytest.raises(UsageError, match=r"no scenario 'slumb'; did you mean 'slump'\?"):
        analyse(setting, "bands", Bands(scenarios=("slumb",)))
    with pytest.raises(UsageError, match=r"^bands.lgd_se 0.49 is too large for an LGD of 0.3"):
        analyse(setting, "bands", Bands(sources=("lgd",), lgd_se=0.49, draws=100))


def test_a_study_without_a_var_says_so(tmp_path: Path) -> None:
    plain = study_of(tmp_path, var=False)
    found = analyse(plain, "bands", Bands(draws=100, source_draws=0))
    assert (
        "Macro path: left out: the study declares no macro.var, so nothing says how paths vary."
        in found.notes
    )
