"""The report's section on the evidence: verdicts, pictures, tables, and what is said without evidence."""

from __future__ import annotations

import dataclasses
import math
import re
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import openpyxl
import pandas as pd
import pytest

from stresskit.core.errors import DataError
from stresskit.evidence import verdicts as ask
from stresskit.evidence.collect import Evidence
from stresskit.evidence.verdicts import Verdict
from stresskit.report.dot_rows import Bar, Scale, pair_row, ratio_row
from stresskit.report.folder import write_run
from stresskit.report.html import render_report
from stresskit.report.validation_figures import HIGHEST_RATIO, ratio_range
from stresskit.report.validation_page import questions_line
from stresskit.report.validation_pictures import calibration_picture
from stresskit.report.validation_tables import group_table
from stresskit.report.workbook import sheets
from stresskit.runs.cautions import STANDING
from stresskit.runs.evidence import add_evidence, caution, with_evidence
from stresskit.runs.records import StudyResult
from tests.report.evidence_samples import sample_evidence
from tests.report.page import Page, read
from tests.report.report_samples import sample
from tests.report.test_html import PLAIN, SMALL

BLOCKS = (
    "Events against expected by calendar period", "Events against expected by age, cohort and prediction",
    "Events against expected by segment", "Observed and fitted survival", "Memory of what is left unexplained",
    "Calibration on later periods", "Ranking of borrowers", "Lag of each macro term", "Coefficients before and after",
)  # fmt: skip


def questioned(**changes: object) -> StudyResult:
    return with_evidence(sample(**{**SMALL, **changes}), sample_evidence())


@pytest.fixture(scope="module")
def shown() -> tuple[str, Page]:
    text = render_report(questioned())
    return text, read(text)


def section(text: str) -> str:
    return text[text.index('<section id="fit"') : text.index('<section id="coefficients"')]


def test_document_is_well_formed_offline_and_without_fixed_colours(shown: tuple[str, Page]) -> None:
    text, page = shown
    assert page.problems == []
    ids = [t.attributes["id"] for t in page.tags if "id" in t.attributes]
    assert len(ids) == len(set(ids))
    assert not re.search(r"https?:", text)
    for svg in re.findall(r"<svg.*?</svg>", text, flags=re.S):
        assert not re.search(r"#[0-9a-fA-F]{6}", svg)
        assert "font-family" not in svg
        assert "nan" not in svg.lower()
    for tag in page.tags:
        if tag.name in ("td", "th", "p", "li", "b"):
            assert not re.search(r"\b(nan|NaN|None|inf)\b", tag.text), tag.text


def test_every_block_has_a_picture_with_words_and_a_table_or_an_open_table(shown: tuple[str, Page]) -> None:
    part = section(shown[0])
    assert tuple(re.findall(r"<h3>(.*?)</h3>", part))[2:] == BLOCKS
    for block in re.split(r"<h3>", part)[3:]:
        if block.startswith("Ranking"):
            assert "<figure" not in block
            assert block.count("<table") == 2
            continue
        inside, after = block.split("</figure>", 1)
        assert len(re.findall(r"<figcaption>(.{60,}?)</figcaption>", inside, flags=re.S)) == 1
        assert after.lstrip().startswith("<details><summary>Table: ")
        for words in re.findall(r'role="img" aria-label="([^"]*)"', inside):
            assert len(words) > 30


def test_verdicts_come_first_with_their_status_in_words(shown: tuple[str, Page]) -> None:
    part = section(shown[0])
    lists = re.findall(r'<ul class="verdicts">(.*?)</ul>', part, flags=re.S)
    assert len(lists) == 2
    assert part.index("</ul>") < part.index("<figure")
    marks = re.findall(r'<span class="status (\w+)">(.*?)</span><div><b>(.*?)</b> (.*?)</div>', lists[0])
    assert [(m[0], m[1]) for m in marks] == [
        ("good", "in order"), ("soft", "note"), ("warn", "look at"), ("soft", "cannot be told"),
    ]  # fmt: skip
    assert marks[2][2] == ask.MEMORY
    assert marks[2][3].replace("<wbr>", "").startswith("No: Ljung-Box 30.1 on 12 lags")


def test_first_screen_counts_the_questions(shown: tuple[str, Page]) -> None:
    first = shown[0].split('id="fit"')[0]
    line = "8 questions were asked of the fits: 2 need a look, 2 are notes, 2 cannot be told."
    assert line in first
    assert line in section(shown[0])
    fine = Evidence({}, (Verdict("default", ask.MATCH, "Yes.", "in order"),))
    assert questions_line(fine) == "1 question was asked of the fits: none needs a look."


def test_without_evidence_the_report_says_so_and_keeps_actual_against_expected() -> None:
    text = render_report(sample(**SMALL))
    assert "this run was made without the" in text.split('id="fit"')[0]
    part = section(text)
    assert "<code>--no-evidence</code>" in part
    assert "Actual against expected</h3>" in part
    assert "<figure" in part
    assert "band" not in re.sub(r"var\(--band\)", "", part.split("<figure")[1].split("</figure>")[0])


def test_every_look_at_becomes_a_caution_before_the_standing_ones(shown: tuple[str, Page]) -> None:
    before, after = sample(**SMALL).cautions, questioned().cautions
    assert after[-len(STANDING) :] == STANDING
    own = after[len(before) - len(STANDING) : -len(STANDING)]
    assert own == tuple(
        f"What the fit leaves unexplained has a memory ({c} hazard): Ljung-Box 30.1 on 12 lags, p = 0.0027."
        for c in ("default", "payoff")
    )
    assert all(c in shown[0].split('id="cautions"')[1] for c in own)


@pytest.mark.parametrize(
    ("asked", "found", "sentence"),
    [
        (
            ask.MATCH, "Not by cohort (p < 0.0001); yes by age and predicted.",
            "Events are not those expected in every group of loans (default hazard): by cohort (p < 0.0001).",
        ),
        (
            ask.OUT_OF_TIME,
            "No: fitted up to 2009Q2, then 312 events against 144.2 expected (level +0.79, p = 0.0075), slope 0.65 (p < 0.0001; 1 is ideal), 21 periods.",
            "A fit to the earlier periods is off on the later ones (default hazard): fitted up to 2009Q2, then 312 events against "
            "144.2 expected (level +0.79, p = 0.0075), slope 0.65.",
        ),
        (
            ask.LAG.format("x"), "Best lag 3, the study's is 1, 9.0 log-likelihood units behind (beyond 2). Lags 3 and 4 cannot be told apart.",
            "The data prefer another lag of x (default hazard): Best lag 3, the study's is 1, 9.0 log-likelihood units behind (beyond 2).",
        ),
        (
            ask.STABLE.format("2009Q2"), "No: a[1], -3.75 to -1.89 (z +4.0); macro terms together p = 0.0078.",
            "Coefficients moved after 2009Q2 (default hazard): a[1], -3.75 to -1.89 (z +4.0).",
        ),
        ("Is it new?", "No.", "Look at: Is it new? (default hazard): No."),
    ],
)  # fmt: skip
def test_cautions_are_short_sentences(asked: str, found: str, sentence: str) -> None:
    assert caution(Verdict("default", asked, found, "look at")) == sentence


def test_a_result_does_not_need_evidence_and_is_not_changed_by_it() -> None:
    result = sample(**SMALL)
    assert result.evidence is None
    with_evidence(result, sample_evidence())
    assert result.evidence is None


def test_band_of_periods_stands_in_picture_note_and_table() -> None:
    result = sample(**SMALL)
    periods = tuple(result.actual_expected["period"].astype(str).unique())
    found = sample_evidence(periods=periods)
    text = render_report(with_evidence(result, found))
    table = found.tables["actual_expected"]
    mine = table[(table["by"] == "period") & (table["cause"] == "default")].set_index("group")
    rows = read(text).rows("default: by calendar period")
    assert rows[0][-1] == "95% band"
    first = mine.loc[rows[1][0]]
    assert rows[1][-1] == f"{first['low_events']:.1f} to {first['high_events']:.1f}"
    own = result.actual_expected[result.actual_expected["cause"] == "default"].set_index("period")["events"]
    above = sum(own[p] > mine.loc[p, "high_events"] for p in own.index)
    below = sum(own[p] < mine.loc[p, "low_events"] for p in own.index)
    assert above + below > 0
    assert f"{above} of {len(own)} periods lie above the band, {below} below." in text


def test_group_tables_show_the_ratio_and_its_band(shown: tuple[str, Page]) -> None:
    table = sample_evidence().tables["actual_expected"]
    mine = table[(table["cause"] == "default") & table["by"].isin(["age", "cohort", "predicted"])]
    rows = shown[1].rows("default: by age band, cohort and tenth")[1:]
    assert len(rows) == len(mine) == 20
    for r, (_, want) in zip(rows, mine.iterrows(), strict=True):
        assert r[1] == want["group"]
        assert r[3:5] == [f"{want['events']:,.0f}", f"{want['expected']:,.1f}"]
        assert r[6] == f"{want['ratio']:.2f}"
        assert r[5] == f"{want['low_events']:.1f} to {want['high_events']:.1f}"
        assert r[7] == f"{want['z_shock']:.1f}".replace("-0.0", "0.0").replace("-", "\N{MINUS SIGN}")


def test_groups_outside_their_band_are_counted_by_a_plain_loop(shown: tuple[str, Page]) -> None:
    for by, words in (("age", "age band"), ("cohort", "cohort"), ("predicted", "tenth of the prediction")):
        out = total = 0
        for r in sample_evidence().tables["actual_expected"].to_dict("records"):
            if r["cause"] == "payoff" and r["by"] == by:
                total += 1
                out += not r["low_events"] <= r["events"] <= r["high_events"]
        assert (
            f'aria-label="payoff: events over expected events by {words}. {out} of {total} outside the band.'
            in shown[0]
        )


def test_names_of_levels_and_terms_stand_outside_the_pictures_and_are_escaped() -> None:
    bad = '<img src=x onerror="alert(1)">'
    found = sample_evidence(("default",), levels=(bad, "b"), terms=(bad,))
    more = Verdict(bad, bad, bad, "look at")
    found = dataclasses.replace(found, verdicts=(*found.verdicts, more))
    text = render_report(with_evidence(sample(**PLAIN), found))
    page = read(text)
    assert page.problems == []
    assert not page.named("img")
    assert any(t.text == bad for t in page.named("th"))
    for svg in re.findall(r"<svg[^>]*>(.*?)</svg>", text, flags=re.S):
        assert "onerror" not in svg
        for words in re.findall(r"<text[^>]*>(.*?)</text>", svg, flags=re.S):
            assert re.fullmatch(r"[−\d.,%eE+ ]*", words), words


def test_without_macro_terms_there_is_no_lag_profile() -> None:
    text = render_report(with_evidence(sample(**PLAIN), sample_evidence(terms=())))
    assert "Lag of each macro term" not in text
    assert "Coefficients before and after</h3>" in text
    assert "Macro terms together" not in text


def test_questions_that_found_no_table_leave_no_picture() -> None:
    none = Evidence({}, (Verdict("default", ask.MATCH, "No events.", "not possible"),))
    text = render_report(with_evidence(sample(**PLAIN), none))
    assert read(text).problems == []
    part = section(text)
    assert re.findall(r"<h3>(.*?)</h3>", part) == ["default", BLOCKS[0]]
    assert "1 question was asked of the fits: none needs a look, 1 cannot be told." in part


def test_stability_rows_leave_out_what_was_held_the_intercept_and_the_age_curve(
    shown: tuple[str, Page],
) -> None:
    block = shown[0].split("Coefficients before and after</h3>")[1].split("</figure>")[0]
    names = re.findall(r'<th scope="row">(.*?)</th>', block)
    plain = [n.replace("<wbr>", "") for n in names]
    assert plain[:3] == ["unemployment_change", "house_price_growth", "product[floating]"]
    assert len(plain) == 6
    assert "0.400 → 1.100; z 4.5" in block


def test_cases_of_the_ranking_are_not_called_events(shown: tuple[str, Page]) -> None:
    """An event follows several landmarks, so there may be more cases than events."""
    text, page = shown
    heads = page.rows("default: AUC by horizon")[0]
    assert "cases" in heads
    assert "events" not in heads
    assert "each counted once for every landmark" in text


def test_standard_deviations_are_told_to_a_tenth() -> None:
    base = sample_evidence().tables["actual_expected"].head(1)
    shown_as = {0.0062: "0.0", -0.042: "0.0", -0.06: "\N{MINUS SIGN}0.1", 7.46: "7.5", math.nan: "–"}
    for value, text in shown_as.items():
        (cells,) = group_table("t", base.assign(z_shock=value)).rows
        assert cells[-1].text == text


@pytest.mark.parametrize(
    ("tenths", "words"),
    [(0, ""), (1, " 1 tenth without events stands at"), (2, " 2 tenths without events stand at")],
)
def test_tenths_without_events_are_counted_in_grammar(tenths: int, words: str) -> None:
    found = sample_evidence()
    rows = found.tables["deciles"].copy()
    rows["events"] = np.where(np.arange(len(rows)) % 10 < tenths, 0.0, 5.0)
    picture = calibration_picture(Evidence({**found.tables, "deciles": rows}, found.verdicts))
    assert picture is not None
    assert (words in picture.panels[0].note) if words else ("without events" not in picture.panels[0].note)


def test_a_picture_of_ratios_is_not_stretched_by_groups_with_few_events() -> None:
    rows = pd.DataFrame(
        {"expected": [0.1, 50.0], "ratio": [30.0, 1.1], "low_events": [0.0, 40.0], "high_events": [3.0, 70.0]}
    )
    low, high = ratio_range(rows)
    assert high == pytest.approx(1 + 1.08 * 0.4)
    assert low == pytest.approx(1 - 1.08 * 0.4)
    assert ratio_range(rows.assign(expected=50.0))[1] == HIGHEST_RATIO
    assert ratio_range(rows.head(1))[1] < 1.5


def test_rows_of_dots_place_values_by_share_and_hold_what_lies_beyond() -> None:
    scale = Scale(0.0, 2.0)
    assert scale.place(1.0) == "50.00%"
    assert scale.place(-5.0) == scale.place(0.0) == "3.00%"
    assert scale.place(9.0) == scale.place(2.0) == "97.00%"
    svg = ratio_row(Bar(0.5, 1.5, 1.0), scale)
    assert 'x="26.50%" y="5" width="47.00%"' in svg
    assert 'cx="50.00%"' in svg
    assert pair_row([Bar(0, 1, 0.5), Bar(0, 1, 0.5, "s0", "square")], scale).count("<line") == 4


def test_workbook_has_the_verdicts_and_the_comparison() -> None:
    found = sample_evidence()
    names = [s.name for s in sheets(with_evidence(sample(**SMALL), found))]
    assert names[-3:] == ["verdicts", "actual against expected", "record"]
    assert "verdicts" not in [s.name for s in sheets(sample(**SMALL))]


def test_run_folder_has_the_tables(tmp_path: Path) -> None:
    out = write_run(questioned(), {}, tmp_path / "run")
    found = sample_evidence()
    assert {f.name for f in (out / "evidence").iterdir()} == {
        "verdicts.csv",
        *(f"{t}.csv" for t in found.tables),
    }
    table = pd.read_csv(out / "evidence" / "deciles.csv", float_precision="round_trip")
    pd.testing.assert_frame_equal(table, found.tables["deciles"], check_exact=True, check_dtype=False)
    assert pd.read_csv(out / "evidence" / "verdicts.csv")["status"].value_counts()["look at"] == 2
    book = openpyxl.load_workbook(out / "results.xlsx", read_only=True)
    assert "verdicts" in book.sheetnames
    bare = write_run(sample(**SMALL), {}, tmp_path / "bare")
    assert not (bare / "evidence").exists()


def test_the_same_evidence_gives_the_same_bytes(shown: tuple[str, Page]) -> None:
    assert render_report(questioned()) == shown[0]


def test_evidence_that_cannot_be_made_costs_no_result(monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: object, **__: object) -> Evidence:
        raise DataError("a column is gone\nsecond line")

    monkeypatch.setattr("stresskit.runs.evidence.study_evidence", refuse)
    nothing: Any = None
    done = add_evidence(sample(**SMALL), nothing, nothing, {})
    assert done.evidence is None
    assert done.cautions[-len(STANDING) - 1] == "The evidence on the fits could not be made: a column is gone"
    assert "<code>--no-evidence</code>" in render_report(done)


def test_fits_of_other_data_are_named(monkeypatch: pytest.MonkeyPatch) -> None:
    found = sample_evidence(("default",))
    monkeypatch.setattr("stresskit.runs.evidence.study_evidence", lambda *_, **__: found)
    table = found.tables["actual_expected"]
    events = float(table.loc[table["by"] == "period", "events"].sum())
    nothing: Any = None
    for n, named in ((events, 0), (events + 5, 1)):
        fits: Any = {"default": SimpleNamespace(n_events=n)}
        done = add_evidence(sample(**SMALL), nothing, nothing, fits)
        assert sum("was fitted to other data" in c for c in done.cautions) == named
        assert done.cautions[-len(STANDING) :] == STANDING
