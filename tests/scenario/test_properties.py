"""What holds for every scenario: same text, same bits; afterwards rules; shocks that do nothing; an oracle by another route."""

from __future__ import annotations

import math
import tempfile
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stresskit.core.values import AFTERWARDS, GIVEN, ScenarioPath
from tests.scenario.world import HISTORY, resolved

number = st.floats(-50.0, 50.0).map(lambda x: round(x, 3))
positive = st.floats(1.0, 500.0).map(lambda x: round(x, 3))
stated = st.lists(number, min_size=1, max_size=6)
QUARTERS = [f"{2026 + i // 4}Q{i % 4 + 1}" for i in range(40)]


def listed(values: list[float]) -> str:
    return "[" + ", ".join(repr(v) for v in values) + "]"


def text(name: str, u: str, afterwards: str | None = "hold", hpi: str = "{values: [150.0]}") -> str:
    rule = "" if afterwards is None else f"afterwards: {{u: {afterwards}}}\n"
    return f"scenario: {name}\nstarts: 2026Q1\npaths:\n  u: {u}\n  hpi: {hpi}\n{rule}"


def run(*texts: str, horizon: int = 30) -> dict[str, ScenarioPath]:
    with tempfile.TemporaryDirectory() as folder:
        return dict(resolved(Path(folder), *texts, horizon=horizon))


def bits(path: ScenarioPath) -> tuple[bytes, ...]:
    return tuple(path.values[v].tobytes() + path.flags[v].tobytes() for v in sorted(path.values))


rules = st.one_of(
    st.just("hold"),
    st.just("baseline"),
    st.builds(lambda t, n: f"{{revert_to: {t!r}, over: {n}}}", number, st.integers(1, 12)),
    st.builds(lambda n: f"{{revert_to: long_run_mean, over: {n}}}", st.integers(1, 12)),
    st.builds(lambda t, n: f"{{revert_to: {t!r}, half_life: {n}}}", number, st.sampled_from([0.5, 1, 3.5])),
    st.sampled_from(
        ["{back_to: baseline}", "{back_to: baseline, over: 3}", "{back_to: baseline, half_life: 2}"]
    ),
)
#: Rules that the baseline itself may have.
own_rules = rules.filter(lambda rule: "baseline" not in rule)
shocks = st.one_of(
    st.builds(lambda v: f"{{values: {listed(v)}}}", stated),
    st.builds(lambda v, t: f"{{add_to: baseline, values: {listed(v)}, then: {t}}}", stated, st.sampled_from(["hold", "zero"])),
    st.builds(lambda v, t: f"{{multiply: baseline, values: {listed(v)}, then: {t}}}", stated, st.sampled_from(["hold", "one"])),
    st.builds(
        lambda p, a, b: f"{{change_from: baseline, peak_points: {p!r}, at: {QUARTERS[a]}, back_by: {QUARTERS[a + b]}}}",
        number, st.integers(0, 8), st.integers(1, 12),
    ),
    st.builds(
        lambda p, a, h: f"{{change_from: baseline, peak_points: {p!r}, at: {QUARTERS[a]}, half_life: {h}}}",
        number, st.integers(0, 8), st.sampled_from([0.5, 1, 2.5]),
    ),
    st.builds(lambda x, a: f"{{reach: {x!r}, at: {QUARTERS[a]}}}", number, st.integers(0, 8)),
    st.builds(
        lambda x, a, b: f"{{reach: {x!r}, at: {QUARTERS[a]}, back_to: baseline, back_by: {QUARTERS[a + b]}}}",
        number, st.integers(0, 8), st.integers(1, 12),
    ),
    st.builds(lambda a: f"{{hold: history, until: {QUARTERS[a]}}}", st.integers(0, 8)),
)  # fmt: skip
baselines = st.builds(lambda v: text("baseline", f"{{values: {listed(v)}}}"), stated)


@settings(max_examples=40, deadline=None)
@given(baseline=baselines, shock=shocks, rule=rules)
def test_the_same_text_gives_the_same_bits_whatever_its_name_place_and_company(baseline, shock, rule):
    one, two = text("one", shock, rule), text("two", shock, rule)
    heir = "scenario: heir\nstarts: 2026Q1\nbased_on: one\n"
    first = run(baseline, one, two, heir)
    again = run(heir, two, baseline, one)
    assert (
        bits(first["one"])
        == bits(first["two"])
        == bits(first["heir"])
        == bits(again["one"])
        == bits(again["heir"])
    )


@settings(max_examples=40, deadline=None)
@given(baseline=baselines, shock=shocks, rule=rules, short=st.integers(27, 60))
def test_a_shorter_horizon_is_the_head_of_a_longer_one(baseline, shock, rule, short):
    whole, part = (run(baseline, text("s", shock, rule), horizon=h)["s"] for h in (120, short))
    assert whole.values["u"][: part.horizon].tobytes() == part.values["u"].tobytes()
    assert whole.flags["u"][: part.horizon].tobytes() == part.flags["u"].tobytes()


@settings(max_examples=60, deadline=None)
@given(values=stated, target=number, over=st.integers(1, 12))
def test_reverting_goes_straight_there_in_time_and_stays(values, target, over):
    path = run(
        text("s", f"{{values: {listed(values)}}}", f"{{revert_to: {target!r}, over: {over}}}"), horizon=90
    )["s"]
    u, last = path.values["u"], len(values) - 1
    assert u[: last + 1].tolist() == values
    assert (u[last + over :] == target).all()
    steps = np.diff(u[last : last + over + 1])
    np.testing.assert_allclose(steps, (target - values[-1]) / over, atol=1e-12)
    low, high = sorted((values[-1], target))
    assert ((u[last:] >= low - 1e-12) & (u[last:] <= high + 1e-12)).all()


@settings(max_examples=40, deadline=None)
@given(baseline=baselines, values=stated)
def test_hold_and_baseline_continue_as_they_say(baseline, values):
    given_values = f"{{values: {listed(values)}}}"
    paths = run(baseline, text("held", given_values), text("back", given_values, "baseline"))
    n = len(values)
    assert (paths["held"].values["u"][n:] == values[-1]).all()
    assert paths["back"].values["u"][n:].tobytes() == paths["baseline"].values["u"][n:].tobytes()
    for path in paths.values():
        flags = path.flags["u"]
        assert set(flags.tolist()) <= {GIVEN, AFTERWARDS}
        assert (np.diff(flags) >= 0).all()  # given first, afterwards last


@settings(max_examples=60, deadline=None)
@given(
    values=st.lists(st.one_of(number, st.just(-0.0)), min_size=1, max_size=6),
    rule=st.one_of(st.none(), own_rules),
    n=st.integers(1, 12),
    at=st.integers(0, 9),
)
def test_shocks_of_nothing_are_the_baseline_to_the_bit(values, rule, n, at):
    """Whatever the baseline's rule, whether the list is shorter or longer than the baseline's, over two levels."""
    none = (
        *(f"{{add_to: X, values: {[0] * n}, then: {t}}}" for t in ("hold", "zero")),
        *(f"{{multiply: X, values: {[1] * n}, then: {t}}}" for t in ("hold", "one")),
        f"{{change_from: X, peak_points: 0, at: {QUARTERS[at]}}}",
        f"{{change_from: X, peak_points: 0, at: {QUARTERS[at]}, back_by: {QUARTERS[at + n]}}}",
    )
    one = [text(f"one{i}", s.replace("X", "baseline"), None) for i, s in enumerate(none)]
    two = [
        text(f"two{i}", s.replace("X", f"one{i}"), None).replace("paths:", f"based_on: one{i}\npaths:")
        for i, s in enumerate(none)
    ]
    paths = run(text("baseline", f"{{values: {listed(values)}}}", rule), *one, *two)
    want = paths.pop("baseline").values["u"].tobytes()
    assert len(paths) == 2 * len(none)
    for path in paths.values():
        assert path.values["u"].tobytes() == want


@settings(max_examples=60, deadline=None)
@given(
    values=stated,
    rule=st.one_of(st.none(), own_rules),
    amounts=stated,
    then=st.sampled_from(["hold", "zero"]),
)
def test_a_shock_rides_on_the_complete_path_of_the_other_scenario(values, rule, amounts, then):
    """By the plain loop: amount after amount, then the last one or none, whatever the other path does."""
    base = text("baseline", f"{{values: {listed(values)}}}", rule)
    paths = run(base, text("s", f"{{add_to: baseline, values: {listed(amounts)}, then: {then}}}", None))
    for i, value in enumerate(paths["baseline"].values["u"]):
        amount = amounts[i] if i < len(amounts) else amounts[-1] if then == "hold" else 0.0
        assert paths["s"].values["u"][i] == value + amount
    assert paths["s"].stated["u"] == min(10, max(len(values), len(amounts)))
    # a value is given when everything that it rests on is
    assert paths["s"].flags["u"].tolist() == paths["baseline"].flags["u"].tolist()


@settings(max_examples=60, deadline=None)
@given(
    base=st.lists(positive, min_size=10, max_size=10),
    peak=st.integers(-90, 90),
    at=st.integers(0, 8),
    span=st.integers(1, 12),
)
def test_peak_and_back_against_a_plain_loop(base, peak, at, span):
    shock = f"{{change_from: baseline, peak: {peak}%, at: {QUARTERS[at]}, back_by: {QUARTERS[at + span]}}}"
    paths = run(
        text("baseline", "{values: [5]}", hpi=f"{{values: {listed(base)}}}"),
        text("s", "{values: [5]}", hpi=shock),
    )
    for i, value in enumerate(base):
        if i <= at:
            share = (i + 1) / (at + 1)
        else:
            share = max(0.0, 1 - (i - at) / span)
        assert paths["s"].values["hpi"][i] == pytest.approx(value * (1 + peak / 100 * share), rel=1e-12)


@settings(max_examples=30, deadline=None)
@given(values=stated, horizon=st.integers(1, 60))
def test_paths_are_complete_and_read_only(values, horizon):
    path = run(text("s", f"{{values: {listed(values)}}}"), horizon=horizon)["s"]
    assert path.start == HISTORY.end + 1
    assert path.horizon == -(-horizon // 3)
    for v in path.values:
        assert path.values[v].shape == path.flags[v].shape == (path.horizon,)
        assert np.isfinite(path.values[v]).all()
        with pytest.raises(ValueError, match="read-only"):
            path.values[v][0] = 1.0


def test_a_peak_after_the_horizon_is_climbed_as_far_as_the_horizon_goes() -> None:
    """A short book reads the first part of a path that a longer one reads further."""
    stress = text("stress", "{change_from: baseline, peak_points: 8, at: 2027Q4}").replace(
        "afterwards: {u: hold}\n", ""
    )
    base = text("baseline", "{values: [5.0]}")
    short, long = (run(base, stress, horizon=h)["stress"].values["u"] for h in (6, 30))
    assert short.tolist() == long[: short.size].tolist() == [6.0, 7.0]


growths = st.lists(st.integers(-50, 50), min_size=1, max_size=9)


@settings(max_examples=60, deadline=None)
@given(
    base=st.lists(positive, min_size=1, max_size=6),
    growth=growths,
    rate=st.sampled_from(["per_period", "annualised", "year_on_year"]),
    on=st.sampled_from(["history", "baseline"]),
)
def test_growth_against_a_plain_loop(base, growth, rate, on):
    """By the plain loop over logarithms: the level (or the distance to the other scenario) of a year of periods before."""
    shock = f"{{growth: [{', '.join(f'{g}%' for g in growth)}], rate: {rate}, on: {on}}}"
    paths = run(
        text("baseline", "{values: [5]}", hpi=f"{{values: {listed(base)}}}"),
        text("s", "{values: [5]}", hpi=shock),
    )
    logs = [math.log(x) for x in (142.0, 145.0, 147.0, 150.0)] if on == "history" else [0.0] * 4
    for g in growth:
        step = math.log1p(g / 100)
        logs.append(
            {
                "per_period": logs[-1] + step,
                "annualised": logs[-1] + step / 4,
                "year_on_year": logs[-4] + step,
            }[rate]
        )
    for i, value in enumerate(paths["s"].values["hpi"]):
        expected = math.exp(logs[min(4 + i, len(logs) - 1)])
        if on == "baseline":
            expected *= paths["baseline"].values["hpi"][i]
        assert value == pytest.approx(expected, rel=1e-10)


@settings(max_examples=40, deadline=None)
@given(
    rule=st.sampled_from(["{grow_by: 3%}", "{grow_by: -2.5%}", "{grow_by: long_run_mean}"]),
    base=st.lists(positive, min_size=1, max_size=6),
)
def test_growing_on_has_the_same_growth_in_every_period(rule, base):
    words = (
        text("s", "{values: [5]}", None, hpi=f"{{values: {listed(base)}}}") + f"afterwards: {{hpi: {rule}}}\n"
    )
    path = run(words)["s"].values["hpi"]
    yearly = {"{grow_by: 3%}": 1.03, "{grow_by: -2.5%}": 0.975}.get(
        rule, 150 / 140
    )  # 140 to 150 in four quarters
    after = path[len(base) - 1 :]
    np.testing.assert_allclose(after[1:] / after[:-1], yearly**0.25, rtol=1e-12)
