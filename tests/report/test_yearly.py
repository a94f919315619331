"""Year view, stages, capital and adjustments in the report and the workbook, on an invented result with known figures."""

from __future__ import annotations

import dataclasses
import io
import re

import numpy as np
import openpyxl
import pandas as pd
import pytest

from stresskit.report import numbers as num
from stresskit.report.html import render_report
from stresskit.report.workbook import render_workbook, sheets
from stresskit.runs.records import PORTFOLIO, StudyResult
from stresskit.spec.study import Study
from tests.report.page import Page, read
from tests.report.report_samples import sample

SECTIONS = {
    "staging": {"ratio": 2.0, "increase": 0.01, "backstop_pd": 0.2, "low_risk": 0.001, "past_due": {"column": "days"}},
    "capital": {"class": "product", "values": {"fixed": "residential_mortgage"}, "stressed_weight": 0.4},
}  # fmt: skip
ENDS = ("2025-12", "2026-12", "2027-12")


def invented_years(names: list[str]) -> pd.DataFrame:
    """Three points per scenario; every figure its own number, so that a mix-up shows."""
    rows = []
    for s, scenario in enumerate(names):
        for k, until in enumerate(ENDS):
            for by, segment in (("", PORTFOLIO), ("product", "fixed"), ("product", "floating")):
                r = {
                    "scenario": scenario,
                    "by": by,
                    "segment": segment,
                    "year": 2025 + k,
                    "until": until,
                    "periods": 12 * (k > 0),
                }
                base = 1e6 * (s + 1) + 1e4 * k + (0 if not by else 111.0)
                flow = np.nan if k == 0 else 1.0
                r |= {
                    "loans_end": base / 1e3,
                    "balance_end": 90 * base,
                    "pd": 0.011 * flow,
                    "lgd": 0.31 * flow,
                }
                r |= {"default_amount": 1.5 * base * flow, "loss": 0.5 * base * flow, "el": 0.4 * base * flow}
                for stage in (1, 2, 3):
                    r[f"loans_stage_{stage}"] = base / 1e3 / stage
                    r[f"balance_stage_{stage}"] = (90 - 10 * stage) * base
                    r[f"impairment_stage_{stage}"] = stage * base
                r |= {
                    "impairment": 6 * base,
                    "outflow_stage_3": base * flow,
                    "written_off": 0.3 * base * flow,
                    "impairment_charge": -0.2 * base * flow,
                }
                r |= {
                    "pd_regulatory": 0.017,
                    "lgd_regulatory": 0.33,
                    "rwa_performing": 40 * base,
                    "rwa_defaulted": 2 * base,
                }
                r |= {"rwa": 42 * base, "el_regulatory": 5 * base, "el_less_provisions": -1 * base}
                rows.append(r)
    return pd.DataFrame(rows)


@pytest.fixture(scope="module")
def result() -> StudyResult:
    plain = sample(steps=24)
    study = Study.model_validate(
        plain.study.model_dump(by_alias=True, exclude_unset=True) | SECTIONS, strict=False
    )
    names = list(dict.fromkeys(plain.summary["scenario"]))
    summary = plain.summary.assign(
        el_12m_adjusted=plain.summary["el_12m"], el_lifetime_adjusted=1.25 * plain.summary["el_lifetime"]
    )
    adjustments = pd.DataFrame(
        [(s, "", PORTFOLIO, k + 1, kind, name, f"reason <b>{name}</b>", 7.0, 100.0 + k, 101.0 + k, 300.0, 300.0 * (1 + k))
         for s in names for k, (kind, name) in enumerate((("floor", "lgd"), ("overlay", "flood")))],
        columns=["scenario", "by", "segment", "step", "kind", "name", "reason", "loans", "el_12m_before", "el_12m_after",
                 "el_lifetime_before", "el_lifetime_after"],
    )  # fmt: skip
    return dataclasses.replace(
        plain, study=study, summary=summary, years=invented_years(names), adjustments=adjustments
    )


@pytest.fixture(scope="module")
def text(result: StudyResult) -> str:
    return render_report(result)


@pytest.fixture(scope="module")
def page(text: str) -> Page:
    return read(text)


def test_the_page_is_sound_and_has_the_sections(page: Page) -> None:
    assert page.problems == []
    ids = {t.attributes.get("id") for t in page.tags}
    assert {"by-year", "stages", "capital", "adjustments"} <= ids
    targets = {t.attributes["href"] for t in page.named("a")}
    assert {"#by-year", "#stages", "#capital", "#adjustments"} <= targets
    assert len([i for i in ids if i]) == len([t for t in page.tags if t.attributes.get("id")])


def test_a_study_without_them_has_no_trace_of_them() -> None:
    text = render_report(sample(steps=24))
    assert not re.search(r'id="(by-year|stages|capital|adjustments)"', text)
    assert "after adjustments" not in text
    assert {s.name for s in sheets(sample(steps=24))}.isdisjoint({"year view", "adjustments"})


def test_flows_are_empty_at_as_of_and_figures_stand_where_they_belong(
    page: Page, result: StudyResult
) -> None:
    rows = page.rows("The whole book by calendar year")
    assert rows[0] == [
        "Scenario",
        "End of",
        "Loans at the end",
        "Balance at the end",
        "PD",
        "LGD",
        "Default flow",
        "Loss, undiscounted",
        "EL, discounted",
    ]
    assert rows[1] == ["baseline", "2025-12as of", "1,000", "90,000,000", "", "", "", "", ""]
    assert rows[2][1:] == [
        "2026-12",
        "1,010",
        "90,900,000",
        "1.10%",
        "31.00%",
        "1,515,000",
        "505,000",
        "404,000",
    ]
    assert len(rows) == 1 + 3 * result.summary["scenario"].nunique()
    parts = page.rows("Calendar years by product")
    assert parts[1][:3] == ["fixed", "baseline", "2025-12as of"]


def test_stage_tables_and_words(page: Page) -> None:
    rows = page.rows("Impairment of the whole book")
    assert rows[0][2:] == [
        "Stage 1 impairment",
        "Stage 2 impairment",
        "Stage 3 impairment",
        "Impairment",
        "Written off",
        "Charge",
    ]
    assert rows[2][2:] == ["1,010,000", "2,020,000", "3,030,000", "6,060,000", "303,000", "−202,000"]
    text = next(t for t in page.named("section") if t.attributes["id"] == "stages").text
    assert (
        "the lifetime PD is more than 2 times that at origination for the same remaining life and higher by more than 1.00%, "
        "or the 12-month PD is above 20.00%, but not with a 12-month PD of 0.10% or less, and in any case when it is 30 days past due at as_of"
    ) in text
    assert "not an accounting figure" in text


def test_capital_says_what_it_is(page: Page) -> None:
    text = next(t for t in page.named("section") if t.attributes["id"] == "capital").text
    assert "An estimate, not a regulatory figure." in text
    assert "40% stressed 12-month PD and 60% long-run PD" in text
    rows = page.rows("Capital of the whole book")
    assert rows[2][2:] == [
        "90,900,000",
        "1.70%",
        "33.00%",
        "40,400,000",
        "2,020,000",
        "42,420,000",
        "5,050,000",
        "−1,010,000",
    ]


def test_adjustments_before_and_after_and_one_by_one(page: Page) -> None:
    rows = page.rows("Floors and overlays, one after the other")
    assert rows[1] == ["baseline", "floor lgdreason <b>lgd</b>", "7", "100", "101+1.0%", "300", num.MISSING]
    assert rows[2] == [
        "baseline",
        "overlay floodreason <b>flood</b>",
        "7",
        "101",
        "102+1.0%",
        "300",
        "600+100.0%",
    ]
    assert rows[3] == ["baseline", "all together", "", "100", "102+2.0%", "300", "600+100.0%"]
    assert rows[4][1] == "floor lgd"
    head = page.rows("The whole book by scenario")
    assert head[0][-1] == "Lifetime EL after adjustments"
    assert head[1][-1].endswith("+25.0%")


def test_every_picture_has_words_and_a_table(text: str) -> None:
    for key in ("stages", "capital"):
        section = text.split(f'<section id="{key}"', 1)[1].split("</section>", 1)[0]
        figures = section.split("<figure")[1:]
        assert len(figures) == (2 if key == "stages" else 1)
        for figure in figures:
            assert figure.split("</figure>", 1)[1].lstrip().startswith("<details><summary>Table: ")
        for svg in read(section).named("svg"):
            assert svg.attributes.get("aria-hidden") == "true" or len(svg.attributes["aria-label"]) > 20


def test_sheets_hold_the_tables(result: StudyResult) -> None:
    book = openpyxl.load_workbook(io.BytesIO(render_workbook(sheets(result))))
    assert {"year view", "adjustments"} <= set(book.sheetnames)
    assert result.years is not None
    values = list(book["year view"].iter_rows(values_only=True))
    assert tuple(c for c in values[0] if c != "until_date") == tuple(result.years.columns)
    assert len(values) == 1 + len(result.years)
    at = values[0].index("impairment")
    assert values[1][at] == pytest.approx(result.years["impairment"].iloc[0])
    assert values[1][values[0].index("el")] is None


def with_constant(result: StudyResult) -> StudyResult:
    """Beside run-off a constant balance sheet with figures of its own, a year longer; balance 7, flows 1000 times as large."""
    assert result.years is not None
    held = result.years.copy()
    for column in ("default_amount", "loss", "el"):
        held[column] *= 1000
    held["balance_end"] = 7.0
    held["pd"] = np.nan
    held.loc[:, held.columns.str.contains("stage|impairment|rwa|regulatory")] = np.nan
    last = held[held["year"] == 2027].assign(year=2028, until="2028-12")
    both = pd.concat(
        [
            result.years.assign(balance_sheet="run_off"),
            held.assign(balance_sheet="constant"),
            last.assign(balance_sheet="constant"),
        ]
    )
    share = np.where(both["periods"] == 0, np.nan, 0.0123)
    return dataclasses.replace(result, years=both.assign(default_share=share).reset_index(drop=True))


def test_both_balance_sheets_side_by_side(result: StudyResult, text: str, page: Page) -> None:
    both = read(render_report(with_constant(result)))
    assert both.problems == []
    rows = both.rows("Run-off and constant balance sheet")
    assert rows[0][2:] == [
        "Balance at the end, run-off", "Balance at the end, constant", "Default flow, run-off", "Default flow, constant",
        "Loss, undiscounted, run-off", "Loss, undiscounted, constant", "EL, discounted, run-off", "EL, discounted, constant",
        "Defaults over loans, constant",
    ]  # fmt: skip
    assert rows[1][1:] == ["2025-12as of", "90,000,000", "7", "", "", "", "", "", "", ""]
    assert rows[2][1:] == [
        "2026-12", "90,900,000", "7", "1,515,000", "1,515,000,000", "505,000", "505,000,000", "404,000", "404,000,000", "1.23%",
    ]  # fmt: skip
    # the book is gone, the constant one is not
    assert rows[4][1:4] == ["2028-12", "", "7"]
    assert both.rows("Both balance sheets by product")[1][:3] == ["fixed", "baseline", "2025-12as of"]
    for title in (
        "The whole book by calendar year",
        "Calendar years by product",
        "Impairment of the whole book",
        "Capital of the whole book",
    ):
        assert both.rows(title) == page.rows(title), title
    assert "constant balance sheet" not in text
