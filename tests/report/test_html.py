"""The report as a document: whole, offline, safe, repeatable, and its figures those of the result."""

from __future__ import annotations

import base64
import dataclasses
import hashlib
import itertools
import os
import re
import subprocess
import sys
from collections import Counter
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from stresskit.report import sections as section_list
from stresskit.report.blocks import Block, Part
from stresskit.report.headline import headline
from stresskit.report.html import render_report, write_report
from stresskit.report.sections import SECTIONS, Section
from stresskit.report.tables import Table, columns, row
from stresskit.report.workbook import write_workbook
from stresskit.runs.cautions import STANDING
from tests.report.page import Page, read
from tests.report.report_samples import sample

HERE = Path(__file__).resolve()
NASTY = (
    "<script>alert(1)</script>",
    "a\"b'c&d",
    "=SUM(A1)",
    "</table></svg><img src=x onerror=alert(2)>",
    "$x_1$ {{ 7*7 }}",
)

SMALL: dict[str, Any] = {"products": ("loan",), "regions": ("here", "there"), "steps": 12}
PLAIN: dict[str, Any] = {**SMALL, "macro": False}

CASES: dict[str, dict[str, Any]] = {
    "usual": {},
    "no macro": {**SMALL, "macro": False},
    "one scenario": {**SMALL, "scenarios": ("stagnation",), "weighted": False},
    "no payoff": {**SMALL, "payoff": False},
    "no weights": {**SMALL, "weighted": False},
    "no segments": {"breakdowns": False, "steps": 12},
    "one segment": {"products": ("loan",), "regions": ("here",), "steps": 12},
    "30 segments": {"regions": tuple(f"region {k:02d}" for k in range(15)), "steps": 24, "macro": False},
    "nothing left out": {**PLAIN, "left_out": False},
    "quarters": {"frequency": "quarter", "as_of": "2025Q3", "steps": 40, "products": ("loan",), "regions": ("here",)},
    "bare": {"macro": False, "payoff": False, "weighted": False, "breakdowns": False, "scenarios": ("only",), "left_out": False},
    "nasty names": {"products": NASTY[:2], "regions": NASTY[2:], "steps": 12},
    "one step": {**SMALL, "steps": 1},
}  # fmt: skip


@pytest.fixture(scope="module", params=list(CASES))
def rendered(request: pytest.FixtureRequest) -> tuple[str, str]:
    return request.param, render_report(sample(**CASES[request.param]))


@pytest.fixture(scope="module")
def usual() -> tuple[str, Page]:
    text = render_report(sample())
    return text, read(text)


def test_document_is_well_formed_and_its_references_hold(rendered: tuple[str, str]) -> None:
    _, text = rendered
    page = read(text)
    assert page.problems == []
    ids = Counter(t.attributes["id"] for t in page.tags if "id" in t.attributes)
    assert [i for i, n in ids.items() if n > 1] == []
    for tag in page.tags:
        for key in ("href", "xlink:href"):
            if key in tag.attributes:
                assert tag.attributes[key].startswith("#"), tag
                assert tag.attributes[key][1:] in ids, tag
        for target in re.findall(r"url\(([^)]*)\)", " ".join(tag.attributes.values())):
            assert target.startswith("#"), tag
            assert target[1:] in ids, tag
        for key in ("aria-labelledby", "aria-describedby"):
            if key in tag.attributes:
                assert tag.attributes[key] in ids, tag


def test_nothing_is_asked_from_outside_and_nothing_runs(rendered: tuple[str, str]) -> None:
    _, text = rendered
    page = read(text)
    assert not {"link", "img", "iframe", "object", "embed", "base", "form", "use-external"} & {
        t.name for t in page.tags
    }
    for tag in page.tags:
        assert not {"src", "srcset", "data", "action", "poster", "background"} & set(tag.attributes), tag
        assert not [k for k in tag.attributes if k.startswith("on")], tag
    assert "@import" not in text
    assert not re.search(r"https?:|(?<![\w:])//\w", text)
    policy = [t for t in page.named("meta") if t.attributes.get("http-equiv") == "Content-Security-Policy"]
    scripts = re.findall(r"<script>(.*?)</script>", text, flags=re.S)
    assert len(scripts) == text.count("<script") == 1
    digest = base64.b64encode(hashlib.sha256(scripts[0].encode()).digest()).decode()
    assert (
        policy[0].attributes["content"]
        == f"default-src 'none'; style-src 'unsafe-inline'; script-src 'sha256-{digest}'"
    )
    assert len(scripts[0]) < 6_000
    assert not re.search(
        r"\beval\b|Function\(|innerHTML|outerHTML|document\.write|fetch\(|XMLHttp|import\(|localStorage",
        scripts[0],
    )


def test_no_colour_font_or_date_is_fixed_in_a_picture(rendered: tuple[str, str]) -> None:
    _, text = rendered
    for svg in re.findall(r"<svg.*?</svg>", text, flags=re.S):
        assert not re.search(r"#[0-9a-fA-F]{6}", svg)
        assert "font-family" not in svg
        assert "<metadata" not in svg
    assert "nan" not in " ".join(re.findall(r' d="([^"]*)"', text)).lower()


def test_every_picture_has_words_and_a_table(rendered: tuple[str, str]) -> None:
    _, text = rendered
    page = read(text)
    for svg in page.named("svg"):
        assert svg.attributes.get("aria-hidden") == "true" or len(svg.attributes["aria-label"]) > 20
    figures = re.split(r"<figure", text)[1:]
    assert figures
    for figure in figures:
        inside, after = figure.split("</figure>", 1)
        assert len(re.findall(r"<figcaption>(.{40,}?)</figcaption>", inside, flags=re.S)) == 1
        assert after.lstrip().startswith("<details><summary>Table: ")


def test_headings_go_down_one_step_at_a_time_and_tables_have_scopes(rendered: tuple[str, str]) -> None:
    page = read(rendered[1])
    levels = [int(t.name[1]) for t in page.tags if re.fullmatch(r"h[1-6]", t.name)]
    assert levels[0] == 1
    assert levels.count(1) == 1
    assert all(b - a <= 1 for a, b in itertools.pairwise(levels))
    assert page.named("html")[0].attributes["lang"] == "en"
    for cell in page.named("th"):
        assert cell.attributes.get("scope") in ("col", "row"), cell
    for image in page.named("svg"):
        assert ("aria-label" in image.attributes) == (image.attributes.get("role") == "img")


def test_sections_stand_in_the_contents_list_in_their_order(rendered: tuple[str, str]) -> None:
    page = read(rendered[1])
    sections = [t.attributes["id"] for t in page.named("section")]
    links = [t.attributes["href"] for t in page.named("a") if "ol" in t.parents and "nav" in t.parents]
    assert links == [f"#{key}" for key in sections[1:]]
    assert sections[0] == "summary"
    order = [s.key for s in SECTIONS if isinstance(s, Section)]
    assert sections[1:] == [key for key in order if key in sections]


def test_a_section_of_words_pictures_and_tables_needs_one_line(monkeypatch: pytest.MonkeyPatch) -> None:
    table = Table("A table", columns("What", "How much"), (row("first", "1"),))
    part = Part(("A paragraph & more.",), (Block("A block", None, (table,), "Words."),))
    more = (
        Section("later", "Added later", lambda result: part),
        Section("never", "Never", lambda result: None),
    )
    monkeypatch.setattr(section_list, "SECTIONS", (*SECTIONS, *more))
    text = render_report(sample(**PLAIN))
    page = read(text)
    assert page.problems == []
    assert page.rows("A table") == [["What", "How much"], ["first", "1"]]
    assert "<p>A paragraph &amp; more.</p>" in text
    assert '<a href="#later">Added later</a>' in text
    assert "Never" not in text


def test_no_value_is_shown_as_nan_or_none(rendered: tuple[str, str]) -> None:
    for tag in read(rendered[1]).tags:
        if tag.name in ("td", "th", "p", "li", "dd"):
            assert not re.search(r"\b(nan|NaN|None|inf|NaT|<NA>)\b", tag.text), tag.text


@pytest.mark.slow
def test_same_bytes_again_and_in_another_process(tmp_path: Path) -> None:
    write_report(sample(**SMALL), tmp_path / "one.html")
    write_report(sample(**SMALL), tmp_path / "two.html")
    code = (
        "import sys; from pathlib import Path; from tests.report.report_samples import sample;"
        "from tests.report.test_html import SMALL;"
        "from stresskit.report.html import write_report; from stresskit.report.workbook import write_workbook;"
        "write_report(sample(**SMALL), Path(sys.argv[1])); write_workbook(sample(**SMALL), Path(sys.argv[2]))"
    )
    subprocess.run(
        [sys.executable, "-c", code, str(tmp_path / "other.html"), str(tmp_path / "other.xlsx")],
        check=True, cwd=HERE.parents[2], timeout=120, env={**os.environ, "PYTHONHASHSEED": "77", "TZ": "Asia/Tokyo"},
    )  # fmt: skip
    write_workbook(sample(**SMALL), tmp_path / "one.xlsx")
    assert (tmp_path / "other.html").read_bytes() == (tmp_path / "one.html").read_bytes()
    assert (tmp_path / "other.xlsx").read_bytes() == (tmp_path / "one.xlsx").read_bytes()
    assert (tmp_path / "one.html").read_bytes() == (tmp_path / "two.html").read_bytes()


def test_order_of_rows_does_not_matter_to_the_headline() -> None:
    result = sample(**PLAIN)
    turned = dataclasses.replace(
        result, segments=result.segments.iloc[::-1].sort_values(["step"], kind="stable")
    )
    assert read(render_report(turned)).rows("The whole book by scenario") == read(render_report(result)).rows(
        "The whole book by scenario"
    )


@pytest.mark.slow
def test_a_large_study_stays_under_five_megabytes() -> None:
    result = sample(
        regions=tuple(f"region {k:02d}" for k in range(50)),
        scenarios=("baseline", *(f"s{k}" for k in range(9))),
        steps=360,
    )
    assert len(render_report(result).encode()) < 5_000_000


# ---- escaping ------------------------------------------------------------------------------------


def test_names_from_data_are_text_everywhere() -> None:
    result = sample(products=NASTY[:2], regions=NASTY[2:], steps=12, macro=False)
    text = render_report(result)
    assert "<script>alert" not in text
    assert "<img" not in text
    assert "{{ 7*7 }}" in text  # not evaluated
    page = read(text)
    cells = {t.text for t in page.named("th") if t.attributes.get("scope") == "row"}
    for name in NASTY:
        assert name in cells, name


def test_texts_of_findings_cautions_and_record_are_escaped() -> None:
    bad = '<b onclick="x">&amp;</b>'
    result = sample(**SMALL)
    result = dataclasses.replace(
        result,
        findings=result.findings.assign(message=bad, first=bad),
        reconciliation=result.reconciliation.assign(reason=bad),
        not_projected=result.not_projected.assign(reason=bad, loan=bad),
        alignment=result.alignment.assign(feature=bad),
        coefficients=result.coefficients.assign(term=bad),
        paths=result.paths.assign(unit=bad, variable=result.paths["variable"].replace({"policy_rate": bad})),
        features=result.features.assign(
            feature=result.features["feature"].replace({"house_price_growth": bad})
        ),
        cautions=(bad, *result.cautions),
        record={**result.record, bad: bad, "more": bad + "\n" + bad},
    )
    text = render_report(result)
    page = read(text)
    assert page.problems == []
    assert not page.named("b") or all("onclick" not in t.attributes for t in page.tags)
    for name, least in (("td", 8), ("li", 2), ("pre", 1)):
        assert sum(bad in t.text for t in page.named(name)) >= least, name
    assert any(bad in t.attributes.get("aria-label", "") for t in page.named("svg"))


# ---- figures are those of the result -------------------------------------------------------------


def test_headline_table_by_hand(usual: tuple[str, Page]) -> None:
    summary = sample().summary
    book = {r["scenario"]: r for r in summary[summary["by"] == ""].to_dict("records")}
    base = book["baseline"]
    rows = usual[1].rows("The whole book by scenario")
    assert [r[0] for r in rows[1:]] == ["baselinereference", "deep_recession", "rates_up", "weighted mean"]
    for shown, name in zip(rows[1:], ["baseline", "deep_recession", "rates_up", "weighted"], strict=True):
        r = book[name]
        shares = [f"{100 * r[c]:.2f}%" for c in ("pd_12m", "pd_lifetime", "lgd")]
        amounts = [f"{r[c]:,.0f}" for c in ("el_12m", "el_lifetime")]
        assert shown[6] == f"{100 * r['el_lifetime'] / r['exposure']:.2f}%"
        if name != "baseline":
            points = [100 * (r[c] - base[c]) for c in ("pd_12m", "pd_lifetime", "lgd")]
            shares = [
                s + (f"{p:+.2f} pp" if abs(p) >= 0.005 else "±0.00 pp")
                for s, p in zip(shares, points, strict=True)
            ]
            gaps = [(r[c] - base[c], r[c] / base[c] - 1) for c in ("el_12m", "el_lifetime")]
            amounts = [a + f"{g:+,.0f} ({100 * p:+.1f}%)" for a, (g, p) in zip(amounts, gaps, strict=True)]
        assert [w.replace("−", "-") for w in shown[1:4]] == shares
        assert [w.replace("−", "-") for w in shown[4:6]] == amounts
    assert f"Exposure {base['exposure']:,.0f}," in usual[0]
    for name, r in book.items():
        if name == "deep_recession":
            more = r["el_lifetime"] / base["el_lifetime"] - 1
            lead = next(t.text for t in usual[1].named("p") if t.attributes.get("class") == "lead")
            assert f"({100 * more:.1f}%) more than in baseline." in lead


def test_segments_that_carry_the_loss_by_a_plain_loop(usual: tuple[str, Page]) -> None:
    summary = sample().summary
    cells = summary[summary["by"] == "product+region"]
    gaps = {}
    for segment in cells["segment"].unique():
        mine = cells[cells["segment"] == segment].set_index("scenario")["el_lifetime"]
        gaps[segment] = float(mine["deep_recession"]) - float(mine["baseline"])
    top = sorted(gaps, key=lambda s: -gaps[s])[:3]
    rows = usual[1].rows("Segments that carry the loss")
    assert [r[0] for r in rows[1:]] == top
    assert [r[-1] for r in rows[1:]] == [f"{100 * gaps[s] / sum(gaps.values()):.0f}%" for s in top]
    share = sum(gaps[s] for s in top) / sum(gaps.values())
    assert (
        f"3 of 6 segments carry {100 * share:.0f}% of the difference between deep_recession and baseline."
        in usual[0]
    )


def test_loss_by_year_adds_up_to_the_lifetime_loss(usual: tuple[str, Page]) -> None:
    rows = usual[1].rows("Expected loss by calendar year")
    curves = sample().segments
    for k, name in enumerate(["baseline", "deep_recession", "rates_up", "weighted"], start=1):
        mine = curves[(curves["by"] == "") & (curves["scenario"] == name)]
        by_year: dict[str, float] = {}
        for period, el in zip(mine["period"], mine["el"], strict=True):
            by_year[period[:4]] = by_year.get(period[:4], 0.0) + el
        assert {r[0]: r[k] for r in rows[1:]} == {y: f"{v:,.0f}" for y, v in by_year.items()}


def test_quarters_of_a_year_go_together_and_a_part_year_is_said() -> None:
    text = render_report(sample(**CASES["quarters"]))
    years = [r[0] for r in read(text).rows("Expected loss by calendar year")[1:]]
    assert years[0] == "2025"
    assert years[-1] == "2035"
    assert "The first year, 2025, starts after 2025Q3." in text
    assert "The first year" not in render_report(sample(**PLAIN))


def test_curve_tables_read_the_curve_at_year_ends(usual: tuple[str, Page]) -> None:
    curves = sample().segments
    mine = curves[(curves["by"] == "") & (curves["scenario"] == "rates_up")].set_index("step")[
        "default_cumulative"
    ]
    rows = usual[1].rows("Cumulative PD, whole book")
    row = next(r for r in rows if r[1] == "rates_up")
    assert rows[0][2:] == ["Year 1", "Year 2", "Year 3", "Year 5", "Year 7", "End"]
    assert row[2:] == [f"{100 * mine[s]:.2f}%" for s in (12, 24, 36, 60, 84, 120)]


def test_expected_signs_and_periods_stand_beside_the_coefficients(usual: tuple[str, Page]) -> None:
    rows = {r[0]: r for r in usual[1].rows("Coefficients of the default hazard")}
    assert rows["unemployment_change"][-1] == "positivehas it"
    assert rows["house_price_growth"][-1] == "negativehas it NOT"
    assert rows["intercept"][-1] == "not stated"
    assert rows["unemployment_change"][3] == "0.1530period"
    assert "2 of 4 coefficients with an expected sign have it." in usual[0]
    assert usual[0].count("<b>120 calendar periods.</b>") == 2


def test_reconciliation_that_does_not_add_up_is_said(usual: tuple[str, Page]) -> None:
    assert "Every column adds up." in usual[0]
    result = sample(**PLAIN)
    account = result.reconciliation.copy()
    account.loc[account["what"] == "used", "rows"] += 7
    text = render_report(dataclasses.replace(result, reconciliation=account))
    assert "Every column adds up." not in text
    assert "rows: in differs from used + left out by −7.00" in text


def test_features_outside_their_range_are_counted_by_a_plain_loop(usual: tuple[str, Page]) -> None:
    features = sample().features
    mine = features[
        (features["scenario"] == "deep_recession") & (features["feature"] == "unemployment_change")
    ]
    outside, longest, run = 0, 0, 0
    for value, lowest, highest in zip(mine["value"], mine["lowest"], mine["highest"], strict=True):
        run = run + 1 if value < lowest or value > highest else 0
        outside += run > 0
        longest = max(longest, run)
    row = next(
        r
        for r in usual[1].rows("Macro features outside their estimation range")
        if r[:2] == ["deep_recession", "unemployment_change"]
    )
    assert row[5] == f"{outside} of 120longest run {longest}"
    assert row[3] == f"{mine['value'].max():.3f}in " + str(
        mine.iloc[int(mine["value"].to_numpy().argmax())]["period"]
    )


def test_standing_words_and_cautions(usual: tuple[str, Page]) -> None:
    page = usual[1]
    words = [t.text for t in page.tags if t.attributes.get("class") == "safety"]
    assert len(words) == 2
    for sentence in STANDING:
        assert all(sentence in w for w in words)
    shown = [t.text for t in page.named("li") if "main" in t.parents]
    found = [c for c in sample().cautions if c not in STANDING]
    for caution in found:
        assert caution in shown
    many = dataclasses.replace(
        sample(**SMALL), cautions=tuple(f"caution number {k}" for k in range(9)) + STANDING
    )
    first_screen = render_report(many).split('id="paths"')[0]
    assert "caution number 2<" in first_screen
    assert "caution number 3<" not in first_screen
    assert "All cautions (11)" in first_screen


def test_the_first_screen_shows_one_caution_of_a_kind_and_none_that_it_tells_itself() -> None:
    left = "Scenario slump: {} leaves the range on which hazards were estimated: above it in 2026-01, by up to 1."
    cautions = (
        "94% of lifetime default incidence comes from ages beyond those observed (scenario slump).",
        left.format("first"), left.format("second"), left.format("third"), "Something else.",
    )  # fmt: skip
    page = read(render_report(dataclasses.replace(sample(**SMALL), cautions=(*cautions, *STANDING))))
    lists = [t.text for t in page.named("ol") if t.attributes.get("class") == "cautions"]
    assert lists[0].split("\n")[1:3] == [f"{cautions[1]} (2 more like this)", "Something else."]
    assert all(c in lists[1] for c in cautions)


# ---- edge cases ----------------------------------------------------------------------------------


def test_without_macro_there_are_no_paths() -> None:
    text = render_report(sample(**PLAIN))
    assert 'id="paths"' not in text
    assert 'href="#paths"' not in text
    assert "No macro features, so nothing to align." in text
    assert "No hazard reads a macro feature: scenarios cannot change the result." in text


def test_one_scenario_has_no_differences() -> None:
    page = read(render_report(sample(**{**PLAIN, "scenarios": ("stagnation",), "weighted": False})))
    heads = page.rows("The whole book by scenario")[0]
    assert not [h for h in heads if "against" in h]
    assert "Part of the loss" in page.rows("Segments that carry the loss")[0]


def test_the_first_scenario_is_the_reference_when_none_is_called_baseline() -> None:
    text = render_report(sample(**{**PLAIN, "scenarios": ("calm", "deep_recession"), "weighted": False}))
    assert "Lifetime EL against calm" in text
    assert re.search(r"\) (more|less)</b> than in calm\.", text)


def test_a_milder_scenario_is_said_to_cost_less() -> None:
    result = sample(**{**PLAIN, "scenarios": ("deep_recession", "baseline"), "weighted": False})
    names = {"baseline": "mild", "deep_recession": "baseline"}
    tables = {
        t: getattr(result, t).assign(scenario=getattr(result, t)["scenario"].replace(names))
        for t in ("summary", "segments")
    }
    result = dataclasses.replace(result, **tables)
    page = read(render_report(result))
    lead = next(t.text for t in page.named("p") if t.attributes.get("class") == "lead")
    assert lead.startswith("In mild, ")
    assert lead.endswith("less than in baseline.")
    rows = page.rows("The whole book by scenario")
    assert re.fullmatch(r"[\d,]+−[\d,]+ \(−[\d.]+%\)", next(r for r in rows if r[0] == "mild")[5])


def test_without_payoff_nothing_speaks_of_early_repayment_figures() -> None:
    page = read(render_report(sample(**PLAIN, payoff=False)))
    assert "PD without early repayment" not in page.rows("Whole book")[0]
    assert "PD without early repayment" in read(render_report(sample(**PLAIN))).rows("Whole book")[0]


def test_thirty_segments_show_the_twelve_largest_and_say_so() -> None:
    result = sample(**CASES["30 segments"])
    text = render_report(result)
    panels = re.findall(r'aria-label="Cumulative PD of ([^"]*?) by scenario\. At', text)
    rows = result.summary[
        (result.summary["by"] == "product+region") & (result.summary["scenario"] == "baseline")
    ]
    largest = rows.sort_values("exposure", ascending=False)["segment"].head(12)
    assert panels == list(largest)
    assert "the 12 segments with the largest exposure of 30" in text


def test_a_scenario_that_acts_after_the_first_year_is_pointed_out() -> None:
    result = sample(**{**PLAIN, "steps": 24})
    assert "Within 12 months deep_recession costs no more than baseline" not in render_report(result)
    base = result.summary[result.summary["scenario"] == "baseline"]["el_12m"].to_numpy()
    late = result.summary.copy()
    late.loc[late["scenario"] == "deep_recession", "el_12m"] = base
    assert "Within 12 months deep_recession costs no more than baseline" in render_report(
        dataclasses.replace(result, summary=late)
    )


def test_missing_numbers_are_dashes() -> None:
    result = sample(**PLAIN)
    summary = result.summary.assign(lgd=float("nan"), from_extrapolated_age=float("nan"))
    coefficients = result.coefficients.assign(se_loan=float("nan"))
    text = render_report(dataclasses.replace(result, summary=summary, coefficients=coefficients))
    rows = read(text).rows("The whole book by scenario")
    assert [r[3] for r in rows[1:]] == ["–"] * 4


def test_a_book_without_any_loss() -> None:
    result = sample(**PLAIN)
    zero = ["el_12m", "el_lifetime"]
    result = dataclasses.replace(
        result,
        summary=result.summary.assign(**dict.fromkeys(zero, 0.0)),
        segments=result.segments.assign(el=0.0),
    )
    page = read(render_report(result))
    assert page.problems == []
    assert page.rows("The whole book by scenario")[2][4:] == ["00", "00", "0.00%"]


def test_empty_evidence_tables() -> None:
    result = sample(**PLAIN)
    empty = dataclasses.replace(
        result,
        hazard_by_age=result.hazard_by_age.head(0),
        actual_expected=result.actual_expected.head(0),
        findings=result.findings.head(0),
        coefficients=result.coefficients.head(0),
        fits={},
        cautions=(),
        record={},
    )
    text = render_report(empty)
    assert read(text).problems == []
    assert "No hazards by age in this result." in text
    assert "The quality rules found nothing." in text
    assert "Main cautions" not in text


def test_an_unwritable_place_is_an_os_error(tmp_path: Path) -> None:
    with pytest.raises(OSError, match="No such file"):
        write_report(sample(**PLAIN), tmp_path / "missing" / "report.html")


def test_the_samples_are_consistent() -> None:
    """The invented study itself: states and flows add up, segments add up to the book."""
    result = sample()
    book = result.segments[result.segments["by"] == ""]
    gone = book.groupby("scenario")["payoff"].cumsum() + book["default_cumulative"] + book["matured"]
    assert (book["survival"] + gone - 1).abs().max() < 1e-12
    summary: pd.DataFrame = result.summary
    cells = summary[summary["by"] == "product+region"].groupby("scenario")["el_lifetime"].sum()
    whole = summary[summary["by"] == ""].set_index("scenario")["el_lifetime"]
    assert (cells / whole - 1).abs().max() < 1e-12


def test_the_sentence_as_plain_text_keeps_names_as_they_are() -> None:
    result = sample(**{**PLAIN, "scenarios": ("baseline", "a <b> & c"), "weighted": False})
    words = headline(result).words
    assert words.startswith("In a <b> & c, ")
    assert "&amp;" not in words
