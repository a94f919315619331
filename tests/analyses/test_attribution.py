"""Attribution of a small study: parts that add up, shares checked by projections in all orders, and what is refused."""

from __future__ import annotations

from itertools import permutations
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.analyses.ask import analyse
from stresskit.analyses.games import cast
from stresskit.analyses.mixed import with_channels, with_variables
from stresskit.analyses.reads import channel_reads
from stresskit.core.errors import UsageError
from stresskit.core.period import Frequency
from stresskit.core.values import GIVEN, ScenarioPath
from stresskit.loss.book import Route
from stresskit.report.analysis import section
from stresskit.runs.records import Analysis
from stresskit.runs.setting import Setting
from stresskit.spec.attribution import Attribution
from tests.analyses.var_world import var_setting, with_contracts
from tests.analyses.world import setting_of


@pytest.fixture(scope="module")
def setting(tmp_path_factory: pytest.TempPathFactory) -> Setting:
    return var_setting(tmp_path_factory.mktemp("attribution"))


@pytest.fixture(scope="module")
def found(setting: Setting) -> Analysis:
    return analyse(setting, "attribution")


def lifetime(setting: Setting, path: ScenarioPath) -> float:
    return float(setting.along([path])[0].loans["el_lifetime"].sum())


def parts(found: Analysis, table: str, column: str) -> pd.Series:
    frame = found.table(table)
    return frame[frame[column] != "difference"].set_index(column)["el_lifetime"]


def test_shares_are_the_mean_over_all_orders_of_changing_the_paths(setting: Setting, found: Analysis) -> None:
    """By another route: a walk per order, each step one whole projection of the book."""
    base, slump = setting.path("baseline"), setting.path("slump")
    names = ["unemployment_rate", "house_price_index", "policy_rate"]
    want = dict.fromkeys(names, 0.0)
    known = {(): lifetime(setting, base)}
    orders = list(permutations(names))
    for order in orders:
        there: tuple[str, ...] = ()
        for name in order:
            after = tuple(sorted((*there, name)))
            if after not in known:
                known[after] = lifetime(setting, with_variables(base, slump, after, "walk"))
            want[name] += (known[after] - known[there]) / len(orders)
            there = after
    got = parts(found, "variables", "variable")
    for name in names:
        assert got[name] == pytest.approx(want[name], rel=1e-9)
    alone = found.table("variables").set_index("variable")
    for name in names:
        assert alone.loc[name, "el_alone"] == pytest.approx(known[(name,)] - known[()], rel=1e-9)
        others = tuple(sorted(set(names) - {name}))
        full = known[tuple(sorted(names))]
        assert alone.loc[name, "el_removed"] == pytest.approx(full - known[others], rel=1e-9)


def test_every_split_adds_up_to_the_difference_of_the_two_runs(setting: Setting, found: Analysis) -> None:
    results = setting.along([setting.path("baseline"), setting.path("slump")])
    change = {
        m: float(results[1].loans[m].sum() - results[0].loans[m].sum()) for m in ("el_lifetime", "el_12m")
    }
    for table, column in (("variables", "variable"), ("channels", "channel")):
        frame = found.table(table).set_index(column)
        for measure, want in change.items():
            mine = frame.drop("difference")[measure].sum()
            assert mine == pytest.approx(want, rel=1e-9)
            assert frame.loc["difference", measure] == pytest.approx(want, rel=1e-9)
    matrix = found.table("matrix").set_index("variable")
    rows = matrix.drop("difference")
    channels = [c for c in matrix.columns if c != "el_lifetime"]
    np.testing.assert_allclose(rows[channels].sum(axis=1), rows["el_lifetime"], rtol=1e-9)
    np.testing.assert_allclose(
        rows["el_lifetime"], parts(found, "variables", "variable")[rows.index], rtol=1e-9
    )
    by_channel = parts(found, "channels", "channel")
    for c in channels:
        name = c.removeprefix("el_").replace("_", " ")
        assert rows[c].sum() == pytest.approx(by_channel[name], rel=1e-9)
    factors = found.table("factors")
    for column in ("el_by_totals", "el_by_segment_and_period"):
        assert factors[column].sum() == pytest.approx(change["el_lifetime"], rel=1e-9)


@pytest.mark.parametrize(("kind", "column"), [("variables", "variable"), ("channels", "channel")])
def test_years_and_segments_add_up_to_the_whole(found: Analysis, kind: str, column: str) -> None:
    whole = parts(found, kind, column)
    years, segments = found.table(f"years_{kind}"), found.table(f"segments_{kind}")
    for name, value in whole.items():
        if value == 0.0:
            continue
        c = f"el_{str(name).replace(' ', '_')}"
        assert years[c].sum() == pytest.approx(value, rel=1e-9)
        for _, rows in segments.groupby("by"):
            assert rows[c].sum() == pytest.approx(value, rel=1e-9)
    for frame in (years, segments):
        names = [
            c
            for c in frame.columns
            if c not in ("year", "by", "segment", "el_before", "el_after", "el_difference")
        ]
        np.testing.assert_allclose(
            frame[names].sum(axis=1), frame["el_difference"], rtol=1e-9, atol=1e-9 * abs(whole.sum())
        )


def test_the_default_channel_is_the_one_that_reads_unemployment(setting: Setting, found: Analysis) -> None:
    """A mixture made by hand: default hazards on the stressed path, early repayment on the other."""
    base, other = (setting.route(setting.path(n)) for n in ("baseline", "slump"))
    mixed = with_channels(base, other, ["default"])
    results = setting.book.along([base, mixed, other])
    el = [float(r.loans["el_lifetime"].sum()) for r in results]
    table = found.table("channels").set_index("channel")
    assert table.loc["default", "el_alone"] == pytest.approx(el[1] - el[0], rel=1e-9)
    assert table.loc["early repayment", "el_removed"] == pytest.approx(el[2] - el[1], rel=1e-9)
    assert table.loc["default", "el_lifetime"] != pytest.approx(el[2] - el[0], rel=1e-3)
    assert (found.table("channels").set_index("channel").loc[["LGD", "exposure", "discounting"]] == 0.0).all(
        axis=None
    )


@pytest.fixture(scope="module")
def contracted(tmp_path_factory: pytest.TempPathFactory) -> Setting:
    return setting_of(with_contracts(tmp_path_factory.mktemp("contracts")))


def test_each_channel_moves_its_own_part_of_the_product(contracted: Setting) -> None:
    """EL = sum of q x LGD x EAD x D, loan by loan with numpy: each factor from the path that its channel is on."""
    setting = contracted
    base, other = (setting.route(setting.path(n)) for n in ("baseline", "slump"))
    book = setting.portfolio
    everyone, steps = np.arange(book.n_loans), setting.book.horizon

    def factors(route: Route, hazards: dict[str, Route]) -> dict[str, np.ndarray]:
        fits = {c: setting.fits[c] for c in ("default", "payoff")}
        odds = {}
        for cause, fit in fits.items():
            features = hazards[cause].features
            first = book.as_of + 1 - features.start
            values = np.stack([features.column(n)[first : first + steps] for n in fit.feature_names], axis=1)
            loan = fit.loan_part(book.static, book.n_loans, book.loan_ids)
            eta = np.empty((book.n_loans, steps))
            for i in everyone:
                cell = fit.cell_part(book.age[i] + 1 + np.arange(steps), values, fit.feature_names)
                eta[i] = loan.s[i] + cell.z + cell.V @ loan.U[i]
            odds[cause] = np.expm1(np.exp(eta)) * (np.arange(steps) < book.remaining[:, None])
        stay = 1 / (1 + odds["default"] + odds["payoff"])
        before = np.cumprod(np.column_stack([np.ones(book.n_loans), stay]), axis=1)[:, :-1]
        tile = route.contracts.tile(everyone, steps)
        rates = np.log1p(tile.rates() / 12)
        return {
            "q": before * stay * odds["default"],
            "exposure": tile.exposures() * (np.arange(steps) < book.remaining[:, None]),
            "discount": np.exp(-(np.cumsum(rates, axis=1) - 0.5 * rates)),
        }

    for channels in (
        ["exposure"],
        ["discount"],
        ["lgd"],
        ["default", "discount"],
        ["payoff", "lgd", "exposure"],
    ):
        pick = {
            c: other if c in channels else base for c in ("default", "payoff", "lgd", "exposure", "discount")
        }
        q = factors(base, {"default": pick["default"], "payoff": pick["payoff"]})["q"]
        exposure = factors(pick["exposure"], {"default": base, "payoff": base})["exposure"]
        discount = factors(pick["discount"], {"default": base, "payoff": base})["discount"]
        lgd = pick["lgd"].lgd.tile(everyone, steps, exposure)
        want = float((q * exposure * discount * lgd).sum())
        mixed = setting.book.along([with_channels(base, other, channels)])[0]
        assert float(mixed.loans["el_lifetime"].sum()) == pytest.approx(want, rel=1e-10), channels


def test_five_channels_and_their_matrix_add_up(contracted: Setting) -> None:
    found = analyse(contracted, "attribution")
    assert found.facts["channels"] == ["default", "payoff", "lgd", "exposure", "discount"]
    by_channel = parts(found, "channels", "channel")
    assert (by_channel != 0).all()
    losses = [lifetime(contracted, contracted.path(n)) for n in ("baseline", "slump")]
    assert by_channel.sum() == pytest.approx(losses[1] - losses[0], rel=1e-9)
    matrix = found.table("matrix").set_index("variable").drop("difference")
    # rates follow the policy rate alone: what prices do through exposure is what both do together, shared in halves
    assert abs(matrix.loc["house_price_index", "el_exposure"]) < 0.2 * abs(
        matrix.loc["policy_rate", "el_exposure"]
    )
    np.testing.assert_allclose(
        matrix[[c for c in matrix.columns if c != "el_lifetime"]].sum(axis=0).to_numpy(),
        by_channel[["default", "early repayment", "LGD", "exposure", "discounting"]].to_numpy(),
        rtol=1e-9,
    )


def test_a_variable_that_nothing_reads_has_exactly_no_part_and_is_named(
    tmp_path: Path, found: Analysis
) -> None:
    setting = var_setting(tmp_path, payoff_reads_rate=False)
    assert "policy_rate" not in channel_reads(setting)["payoff"]
    other = analyse(setting, "attribution")
    table = other.table("variables").set_index("variable")
    assert (table.loc["policy_rate"] == 0.0).all()
    assert other.facts["not_read"] == ["policy_rate"]
    assert any(
        "policy_rate differs between the scenarios, but no hazard, contract or LGD of this study reads it: its part is exactly 0."
        in n
        for n in other.notes
    )
    assert found.facts["not_read"] == []


def test_the_order_of_scenarios_and_of_variables_changes_no_bit(setting: Setting, found: Analysis) -> None:
    turned = analyse(setting, "attribution", Attribution.model_validate({"from": "slump", "to": "baseline"}))
    one, other = (parts(a, "variables", "variable") for a in (found, turned))
    np.testing.assert_allclose(one, -other[one.index], rtol=1e-9)
    path, slump = setting.path("baseline"), setting.path("slump")

    def shuffled(p: ScenarioPath) -> ScenarioPath:
        names = list(p.values)[::-1]
        return ScenarioPath(
            p.name,
            p.weight,
            p.frequency,
            p.start,
            {n: p.values[n] for n in names},
            {n: p.flags[n] for n in names},
        )

    read = list(path.values)
    assert cast(path, slump, read, {}) == cast(shuffled(path), shuffled(slump), read[::-1], {})


def test_a_group_is_moved_as_one_and_has_the_parts_of_its_variables_together(
    setting: Setting, found: Analysis
) -> None:
    spec = Attribution.model_validate({"groups": {"prices_and_rates": ("house_price_index", "policy_rate")}})
    grouped = parts(analyse(setting, "attribution", spec), "variables", "variable")
    single = parts(found, "variables", "variable")
    assert set(grouped.index) == {"prices_and_rates", "unemployment_rate"}
    assert grouped.sum() == pytest.approx(single.sum(), rel=1e-9)
    # not the sum of the two parts to the digit: with whom they are moved together differs
    assert grouped["prices_and_rates"] == pytest.approx(
        single["house_price_index"] + single["policy_rate"], rel=0.1
    )


def test_elasticities_are_slopes_of_the_loss(setting: Setting, found: Analysis) -> None:
    table = found.table("elasticities").set_index(["scenario", "variable"])
    path = setting.path("slump")
    small = 1e-3
    for variable, moved in (
        ("unemployment_rate", path.values["unemployment_rate"] + small),
        ("house_price_index", path.values["house_price_index"] * (1 + 0.01 * small)),
    ):
        higher = ScenarioPath(
            path.name, None, path.frequency, path.start, {**path.values, variable: moved}, path.flags
        )
        slope = (lifetime(setting, higher) - lifetime(setting, path)) / small
        assert table.loc[("slump", variable), "el_per_one_more"] == pytest.approx(slope, rel=5e-3)


def test_the_answer_names_parts_in_points_of_the_starting_loss(found: Analysis) -> None:
    table = found.table("variables").set_index("variable")
    points = table.loc["unemployment_rate", "points"]
    assert f"{points:.1f} points come from unemployment rate" in found.answer
    assert f"Of the {table.loc['difference', 'points']:.1f}% rise" in found.answer


def test_the_report_draws_parts_from_where_the_last_one_ended(found: Analysis) -> None:
    shown = section(found)
    waterfall = shown.pictures[0].panels[0]
    assert [r.label for r in waterfall.rows] == [
        "baseline", "unemployment_rate", "house_price_index", "policy_rate", "slump",
    ]  # fmt: skip
    assert waterfall.rows[1].value.startswith("+")
    assert waterfall.rows[3].value.startswith("−")
    again = section(found)
    assert [str(p.svg) for q in again.pictures for p in q.panels] == [
        str(p.svg) for q in shown.pictures for p in q.panels
    ]


def many(count: int) -> tuple[ScenarioPath, ScenarioPath]:
    names = [f"v{k:02d}" for k in range(count)]
    flags = {n: np.full(4, GIVEN) for n in names}
    paths = [
        ScenarioPath(s, None, Frequency.QUARTER, 10, {n: np.full(4, x) for n in names}, flags)
        for s, x in (("calm", 1.0), ("storm", 2.0))
    ]
    return paths[0], paths[1]


def test_more_variables_than_can_be_told_apart_are_refused_with_the_remedy() -> None:
    start, end = many(11)
    with pytest.raises(
        UsageError,
        match=r"^11 variables differ between calm and storm and are read, which would take 2\^11 projections; at most 10 can be "
        r"told apart: put some together under attribution.groups, such as groups: \{v00_and_v01: \[v00, v01\]\}$",
    ):
        cast(start, end, list(start.values), {})
    assert len(cast(start, end, list(start.values), {"two": ("v00", "v01")}).players) == 10


@pytest.mark.parametrize(
    ("spec", "message"),
    [
        ({"to": "slum"}, "no scenario 'slum'; did you mean 'slump'? (scenarios: baseline, slump)"),
        (
            {"to": "baseline"},
            "attribution: baseline is both where to start and where to arrive; name another scenario",
        ),
        (
            {"groups": {"g": ("unemployment",)}},
            "attribution.groups.g: there is no variable 'unemployment'; did you mean 'unemployment_rate'? "
            "(variables: house_price_index, policy_rate, unemployment_rate)",
        ),
    ],
)
def test_bad_requests_say_what_is_wrong(setting: Setting, spec: dict[str, object], message: str) -> None:
    with pytest.raises(UsageError) as caught:
        analyse(setting, "attribution", Attribution.model_validate(spec))
    assert str(caught.value) == message


def test_scenarios_that_differ_in_nothing_that_is_read_are_refused(tmp_path: Path) -> None:
    setting = var_setting(tmp_path, payoff_reads_rate=False)
    base = setting.path("baseline")
    only = with_variables(base, setting.path("slump"), ["policy_rate"], "rates_only")
    data = setting.data
    changed = Setting(
        setting.file, type(data)(**{f: getattr(data, f) for f in data.__dataclass_fields__} | {"paths": (base, only)}),
        setting.fitted, setting.fits, setting.recovery, setting.cells, setting.book,
    )  # fmt: skip
    with pytest.raises(
        UsageError, match="do not differ in any variable that a hazard, a contract or the LGD reads"
    ):
        analyse(changed, "attribution")


def test_lines_of_python_do_the_same(setting: Setting, found: Analysis) -> None:
    assert sk.__version__
    again = analyse(setting, "attribution")
    pd.testing.assert_frame_equal(again.table("variables"), found.table("variables"))
