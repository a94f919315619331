"""Colours that everybody can tell apart, pictures that leave matplotlib as they found it, numbers as text."""

from __future__ import annotations

import itertools
import math
import re
import sys
from pathlib import Path
from typing import Any

import matplotlib
import numpy as np
import pandas as pd
import pytest

from stresskit import report
from stresskit.report import figures, style
from stresskit.report import numbers as num
from stresskit.report.environment import breakable
from stresskit.report.svg import canvas, finish, percent_axis, settings
from stresskit.report.yearly import STAGES

# Machado, Oliveira & Fernandes (2009), IEEE TVCG 15(6), severity 1.0: what a dichromat sees, in linear RGB.
DICHROMACY = {
    "protan": [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]],
    "deutan": [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]],
    "tritan": [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]],
    "full": [[1, 0, 0], [0, 1, 0], [0, 0, 1]],
}  # fmt: skip


def linear(colour: str) -> np.ndarray:
    c = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255
    return np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)


def contrast(a: str, b: str) -> float:
    """WCAG 2 contrast ratio."""
    light, dark = sorted((float(linear(x) @ [0.2126, 0.7152, 0.0722]) for x in (a, b)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


def lab(rgb: np.ndarray) -> np.ndarray:
    """CIE L*a*b* (D65) of linear RGB."""
    xyz = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]) @ rgb
    f = [t ** (1 / 3) if t > 0.008856 else 7.787 * t + 16 / 116 for t in xyz / np.array([0.9505, 1.0, 1.089])]
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


#: Every colour that text has and every ground that it can stand on, from the style sheet; the test below keeps it whole.
TEXT = ("ink", "soft", "accent", "warn", "good")
GROUNDS = ("paper", "card", "wash")
#: The readout is the page turned round.
TURNED = (("paper", "ink"),)


def test_the_style_sheet_uses_no_other_colours_for_text_and_ground() -> None:
    css = (Path(report.__file__).parent / "templates" / "report.css").read_text(encoding="utf-8")
    text = set(re.findall(r"(?<![-\w])color:var\(--(\w+)\)", css))
    ground = set(re.findall(r"background:var\(--(\w+)\)", css))
    turned_text, turned_ground = zip(*TURNED, strict=True)
    assert text <= {*TEXT, *turned_text}
    assert ground <= {*GROUNDS, *turned_ground}
    # the two that are turned round stand in one rule, and together
    for words, behind in TURNED:
        rules = [r for r in re.findall(r"[^{}]*\{[^{}]*\}", css) if f"background:var(--{behind})" in r]
        assert rules
        assert all(f";color:var(--{words})" in r for r in rules)
        assert sum(f"color:var(--{words})" in r for r in re.findall(r"\{[^{}]*\}", css)) == len(rules)
    # no colour is written out, and nothing is made faint but the shadow of the switch's box
    assert re.findall(r"#[0-9a-fA-F]{3,8}\b(?=[;}])|\bopacity:", css) == []
    assert re.findall(r"rgb\([^)]*\)", css) == ["rgb(0 0 0/.25)"]


@pytest.mark.parametrize("shade", [0, 1], ids=["light", "dark"])
def test_text_and_lines_stand_out(shade: int) -> None:
    """WCAG 2.2, level AA: 4.5 for text (1.4.3), 3 for what a picture is read by (1.4.11)."""
    c = {name: pair[shade] for name, pair in style.COLOURS.items()}
    for text, ground in (*itertools.product(TEXT, GROUNDS), *TURNED):
        assert contrast(c[text], c[ground]) >= 4.5, (text, ground)
    for k in range(style.N_SCENARIO_COLOURS):
        assert contrast(c[f"s{k}"], c["card"]) >= 3.0, k
    # stages are told apart by lightness alone, so that a black and white print can be read
    for one, other in itertools.pairwise([colour for _, colour, _ in STAGES]):
        assert contrast(c[one], c[other]) >= 1.5, (one, other)


def test_columns_carry_the_mark_of_their_scenario() -> None:
    table = pd.DataFrame({"a": [3.0, 2.0, 0.0], "b": [1.0, 4.0, 1.0]}, index=[2026, 2027, 2028])
    svg = figures.year_panel(table, style.marks(["a", "b"]), divisor=1.0, bars=True, key="k", alt="words")
    # the axis is drawn first, then each scenario's columns and marks in groups of its own; a column of nothing has no mark
    groups = [(part[0], part.count("<use ")) for part in svg.split('<g data-s="')[1:]]
    assert {place: sum(n for p, n in groups if p == place) for place in "01"} == {"0": 2, "1": 3}


@pytest.mark.parametrize("sight", list(DICHROMACY))
@pytest.mark.parametrize("shade", [0, 1], ids=["light", "dark"])
def test_scenario_colours_are_told_apart(shade: int, sight: str) -> None:
    seen = [
        lab(np.clip(np.array(DICHROMACY[sight]) @ linear(style.COLOURS[f"s{k}"][shade]), 0, 1))
        for k in range(style.N_SCENARIO_COLOURS)
    ]
    for (i, a), (j, b) in itertools.combinations(enumerate(seen), 2):
        # 2.3 is a just noticeable difference; the first four scenarios are kept far from that.
        assert np.linalg.norm(a - b) >= (15 if max(i, j) < 4 else 9), (i, j)


def test_no_two_scenarios_share_colour_and_marker() -> None:
    marks = style.marks([f"s{k}" for k in range(42)])
    assert len({(m.colour, m.marker) for m in marks}) == 42
    mixed = style.marks(["a", "weighted", "b"])
    assert mixed[1].dotted
    assert (mixed[0].colour, mixed[2].colour) == ("s0", "s1")


def test_stand_ins_are_colours_of_their_own_and_all_replaced() -> None:
    stand_ins = [style.stand_in(n) for n in style.COLOURS]
    assert len(set(stand_ins)) == len(style.COLOURS)
    assert not set(stand_ins) & {c for pair in style.COLOURS.values() for c in pair}
    assert style.replace_stand_ins(" ".join(stand_ins)) == " ".join(f"var(--{n})" for n in style.COLOURS)


# ---- pictures ------------------------------------------------------------------------------------


def curve(**changes: Any) -> str:
    x = np.linspace(0, 3, 37)
    curves = {"baseline": (x, x / 100), "worse": (x, x / 40)}
    return figures.curve_panel(curves, style.marks(list(curves)), **({"key": "k", "alt": "words"} | changes))


def test_a_users_matplotlib_settings_change_nothing_and_are_kept() -> None:
    before = curve()
    changed = {
        "lines.linewidth": 9.0,
        "font.size": 30.0,
        "axes.facecolor": "red",
        "svg.fonttype": "path",
        "svg.hashsalt": None,
    }
    with matplotlib.rc_context(changed):
        assert curve() == before
        assert matplotlib.rcParams["font.size"] == 30.0
        assert matplotlib.rcParams["svg.fonttype"] == "path"
    assert "matplotlib.pyplot" not in sys.modules


def test_alt_text_is_escaped_and_ids_carry_the_key() -> None:
    svg = curve(key="abc", alt='<i> & "x"')
    assert 'aria-label="&lt;i&gt; &amp; &quot;x&quot;"' in svg
    assert set(re.findall(r' id="([^"-]*)-', svg)) == {"abc"}
    assert not re.findall(r' id="(?!abc-)', svg)


def test_two_scenarios_with_one_path_give_one_line() -> None:
    x = np.linspace(0, 3, 37)
    same = figures.curve_panel(
        {"a": (x, x / 9), "b": (x, x / 9)}, style.marks(["a", "b"]), key="k", alt="words"
    )
    lines = re.findall(r'<path d="([^"]*)"[^>]*stroke: var\(--s[01]\)', same)
    assert len(lines) == 2
    assert lines[0] == lines[1]


def path_frame(flags: list[str]) -> pd.DataFrame:
    periods = [f"2026Q{k}" for k in range(1, 5)][: len(flags)]
    return pd.DataFrame({"period": periods, "value": np.arange(len(flags), dtype=float), "flag": flags})


@pytest.mark.parametrize(
    ("flags", "solid", "dashed"),
    [
        (["given"] * 4, 1, 0),
        (["given", "given", "afterwards", "afterwards"], 1, 1),
        (["afterwards"] * 4, 0, 1),
        (["filled"] * 4, 0, 1),  # dash and dot
        (["filled", "filled", "afterwards", "afterwards"], 0, 2),
        (["given", "afterwards", "given", "given"], 1, 0),
    ],
)
def test_the_part_after_the_last_given_value_is_dashed(flags: list[str], solid: int, dashed: int) -> None:
    history = pd.DataFrame({"period": ["2025Q3", "2025Q4"], "value": [1.0, 0.5], "flag": "observed"})
    svg = figures.path_panel(history, {"a": path_frame(flags)}, style.marks(["a"]), key="k", alt="words")
    styles = [
        m for m in re.findall(r'style="([^"]*)"', svg) if "stroke: var(--s0)" in m and "stroke-width: 2" in m
    ]
    assert sum("stroke-dasharray" in m for m in styles) == dashed
    assert len(styles) == solid + dashed
    assert svg.count("var(--ink)") == 1


def test_a_forecast_band_is_shaded_and_does_not_squeeze_the_paths() -> None:
    history = pd.DataFrame({"period": ["2025Q3", "2025Q4"], "value": [1.0, 0.5], "flag": "observed"})
    wide = pd.DataFrame({"period": ["2026Q1", "2026Q2"], "low": [-500.0, -900.0], "high": [500.0, 900.0]})
    paths = {"a": path_frame(["given"] * 4)}
    plain = figures.path_panel(history, paths, style.marks(["a"]), key="k", alt="words")
    banded = figures.path_panel(history, paths, style.marks(["a"]), forecast=wide, key="k", alt="words")
    assert "fill: var(--band)" not in plain
    assert "fill: var(--band)" in banded
    labels = [float(t.replace("−", "-")) for t in re.findall(r">([-−]?\d+\.?\d*)</text>", banded)]
    assert max(abs(v) for v in labels if abs(v) < 1900) < 10


def test_filled_values_show_the_ends_of_their_band() -> None:
    history = pd.DataFrame({"period": ["2025Q3", "2025Q4"], "value": [1.0, 0.5], "flag": "observed"})
    frame = path_frame(["filled"] * 4)
    banded = frame.assign(low=frame["value"] - 1, high=frame["value"] + 1)
    count = [
        figures.path_panel(history, {"a": f}, style.marks(["a"]), key="k", alt="words").count(
            "stroke: var(--s0)"
        )
        for f in (frame, banded)
    ]
    assert count[1] == count[0] + 2


def test_a_path_without_history() -> None:
    empty = pd.DataFrame({"period": [], "value": [], "flag": []})
    svg = figures.path_panel(
        empty, {"a": path_frame(["given"] * 3)}, style.marks(["a"]), key="k", alt="words"
    )
    assert "var(--s0)" in svg
    assert "var(--ink)" not in svg


def test_an_axis_of_tiny_shares_is_readable() -> None:
    with settings():
        figure, axes = canvas(300, 200)
        axes.plot([0, 1], [0, 3e-5])
        axes.set_ylim(0, 3e-5)
        percent_axis(axes)
        svg = finish(figure, key="k", alt="words")
    shown = [float(label) for label in re.findall(r">([^<>]*)%<", svg)]
    assert len(shown) >= 3
    assert shown == sorted(set(shown))
    assert 0.002 < shown[-1] <= 0.003


# ---- numbers -------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("shown", "expected"),
    [
        (num.percent(0.012345), "1.23%"),
        (num.percent(0.0), "0.00%"),
        (num.percent(0.00001), "<0.01%"),
        (num.percent(-0.00001), ">−0.01%"),
        (num.percent(-0.5, 1), "−50.0%"),
        (num.percent(math.nan), "–"),
        (num.percent(None), "–"),
        (num.percent(12.5, 0), "1,250%"),
        (num.amount(1234567.8), "1,234,568"),
        (num.amount(0.2), "<1"),
        (num.amount(-0.2), ">−1"),
        (num.amount(0), "0"),
        (num.amount(-1234.5, 1), "−1,234.5"),
        (num.amount(math.inf), "–"),
        (num.count(1234567), "1,234,567"),
        (num.count(pd.NA), "–"),
        (num.plain(-0.0), "0.00"),
        (num.plain(0.000012345), "1.23e-05"),
        (num.plain(-1234.567), "−1,234.57"),
        (num.p_value(0.00001), "<0.0001"),
        (num.p_value(0.04321), "0.0432"),
        (num.signed("1.0"), "+1.0"),
        (num.signed("−1.0"), "−1.0"),
        (num.signed("0.00%"), "0.00%"),
        (num.signed("<0.01%"), "+<0.01%"),
        (num.short(1_340_640_000), "1.34 billion"),
        (num.short(59_820_000), "59.8 million"),
        (num.short(177_000_000), "177 million"),
        (num.short(-1_500), "−1.50 thousand"),
        (num.short(0), "0"),
        (num.short(0.123), "0.12"),
    ],
)
def test_numbers_for_people(shown: str, expected: str) -> None:
    assert shown == expected


def test_long_names_may_break_at_their_joints_only() -> None:
    assert breakable("a_b/c<d>") == "a_<wbr>b/<wbr>c&lt;d&gt;"
    assert breakable("+61.5%") == "+61.5%"
