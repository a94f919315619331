"""Overview, totals, checks, names and charts of the workbook, read by openpyxl and computed again by LibreOffice."""

from __future__ import annotations

import dataclasses
import io
import re
import zipfile
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import openpyxl
import pandas as pd
import pytest

from stresskit.report import sheet as limits
from stresskit.report.style import COLOURS
from stresskit.report.workbook import (
    Sheet,
    left_out,
    render_result,
    render_workbook,
    section,
    sheet_name,
    sheets,
)
from stresskit.runs.cautions import STANDING
from stresskit.runs.records import StudyResult
from tests.report.office import converted, needs_office
from tests.report.report_samples import sample

FRONT = ["overview", "contents", "loss by segment", "loss by year", "PD term structure", "checks"]
#: Everything that our formulas are made of; nothing of it comes from data.
OURS = re.compile(
    r"""=(?:SUM|SUMIFS|IF|ABS|MAX|[-+*/(),:<>=$!.0-9' ]|\$?[A-Z]{1,2}\$?[0-9]+|overview|reconciliation
    |'loss\ by\ segment'|'loss\ by\ year'|'PD\ term\ structure'|"used"|"left\ out"|"in"|"agrees"|"DIFFERS"|"")+""",
    re.VERBOSE,
)
HOSTILE = (
    "=1+1",
    "+2+3",
    "-4+5",
    "@SUM(1;2)",
    "\t=6*7",
    "\r=8+9",
    "=cmd|' /C calc'!A0",
    '=HYPERLINK("http://x")',
)


def opened(data: bytes, **options: Any) -> Any:
    return openpyxl.load_workbook(io.BytesIO(data), **options)


@pytest.fixture(scope="module")
def result() -> StudyResult:
    return sample(steps=24)


@pytest.fixture(scope="module")
def data(result: StudyResult) -> bytes:
    return render_result(result)


@pytest.fixture(scope="module")
def book(data: bytes) -> Any:
    return opened(data)


def engine(result: StudyResult) -> pd.DataFrame:
    """Figures of the whole book by scenario, straight from the result."""
    return result.summary[result.summary["by"] == ""].set_index("scenario")


def figures(workbook: Any) -> dict[str, float]:
    """Every defined name of one cell, with the value there."""
    out = {}
    for name, defined in workbook.defined_names.items():
        places = list(defined.destinations)
        assert len(places) == 1
        sheet, cell = places[0]
        if ":" not in cell:
            out[name] = workbook[sheet][cell.replace("$", "")].value
    return out


def test_first_the_sheets_for_a_reader_then_the_tables(book: Any, result: StudyResult) -> None:
    assert book.sheetnames == [*FRONT, *(s.name for s in sheets(result))]
    assert book.active.title == "overview"


def test_the_first_sheet_says_the_figure_and_what_it_is_not(book: Any, result: StudyResult) -> None:
    words = [str(c.value) for line in book["overview"].iter_rows() for c in line if c.value is not None]
    for sentence in STANDING:
        assert sentence in words
    assert any(w.startswith("In deep_recession, ") for w in words)
    assert f"1. {result.cautions[0]}" in words


def test_a_name_per_figure_and_table_all_listed(book: Any, result: StudyResult) -> None:
    found, rows = figures(book), engine(result)
    for scenario in rows.index:
        for column in ("loans", "exposure", "pd_12m", "pd_lifetime", "lgd", "el_12m", "el_lifetime"):
            assert found[f"{column}_{scenario}"] == pytest.approx(
                float(rows.loc[scenario, column]), rel=1e-15
            )
    tables = {n for n in book.defined_names if n.startswith("table_")}
    assert {
        "table_overview",
        "table_checks",
        "table_loss_by_year",
        "table_segment_curves",
        "table_record",
    } <= tables
    listed = {str(c.value) for c in book["contents"]["A"]}
    assert set(book.defined_names) <= listed
    assert set(book.sheetnames) - {"contents"} <= listed
    for name in book.defined_names:
        assert re.fullmatch(r"[A-Za-z_]\w{2,}", name, re.ASCII)


def test_a_table_name_covers_its_table_with_headings(book: Any, result: StudyResult) -> None:
    ((sheet, cells),) = book.defined_names["table_segment_curves"].destinations
    values = [[c.value for c in line] for line in book[sheet][cells.replace("$", "")]]
    assert values[0][:3] == ["scenario", "by", "segment"]
    assert len(values) == len(result.segments) + 1


def test_only_our_formulas_and_every_one_has_the_value_of_the_engine(
    data: bytes, result: StudyResult
) -> None:
    kept, shown = opened(data), opened(data, data_only=True)
    seen = 0
    for sheet in kept:
        for cell in (c for line in sheet.iter_rows() for c in line if c.data_type == "f"):
            seen += 1
            assert sheet.title in ("overview", "loss by segment", "loss by year", "checks"), sheet.title
            assert OURS.fullmatch(cell.value), cell.value
            assert shown[sheet.title][cell.coordinate].value is not None
    assert seen > 50
    assert {c.value for c in shown["checks"]["F"][1:]} == {"agrees"}
    total = next(r for r in shown["loss by year"].iter_rows(values_only=True) if r[0] == "Total")
    heads = [c.value for c in shown["loss by year"][1]]
    for scenario, value in engine(result)["el_lifetime"].items():
        assert total[heads.index(scenario)] == pytest.approx(value, rel=1e-9)


def test_dates_are_dates(book: Any, result: StudyResult) -> None:
    for name in ("segment curves", "paths", "PD term structure"):
        heads = [c.value for c in book[name][1]]
        label, day = heads.index("period"), heads.index("period_end")
        for line in book[name].iter_rows(min_row=2, max_row=20):
            end = line[day].value
            assert line[day].is_date
            assert line[day].number_format == "yyyy-mm-dd"
            period = pd.Period(
                line[label].value.replace("Q", "-Q") if "Q" in line[label].value else line[label].value
            )
            assert end == period.end_time.normalize().to_pydatetime()


def test_charts_have_titles_units_and_our_colours(data: bytes) -> None:
    with zipfile.ZipFile(io.BytesIO(data)) as z:
        charts = [z.read(n).decode() for n in z.namelist() if re.fullmatch(r"xl/charts/chart\d+\.xml", n)]
    assert len(charts) == 3
    texts = []
    for chart in charts:
        root = ElementTree.fromstring(chart)
        texts.append([t.text for t in root.iter("{http://schemas.openxmlformats.org/drawingml/2006/main}t")])
        colours = set(re.findall(r'srgbClr val="(\w+)"', chart))
        assert colours <= {light[1:].upper() for light, _ in COLOURS.values()}
    titles = [t[0] for t in texts]
    assert titles[0] == "Lifetime expected loss by scenario"
    assert titles[1].startswith("Expected loss by calendar year")
    assert titles[2].startswith("PD term structure")
    assert all(any("currency" in w or "percent" in w for w in t[1:]) for t in texts)


def test_repeated_bytes(result: StudyResult, data: bytes) -> None:
    assert render_result(result) == data


def test_scenarios_whose_names_differ_only_in_signs_keep_apart(result: StudyResult) -> None:
    frames = {
        f: getattr(result, f).replace({"scenario": {"rates_up": "deep-recession"}})
        for f in ("summary", "segments", "paths")
    }
    changed = dataclasses.replace(result, **frames)
    found, rows = figures(opened(render_result(changed))), engine(changed)
    assert found["el_12m_deep_recession"] == pytest.approx(rows.loc["deep_recession", "el_12m"])
    assert found["el_12m_deep_recession_2"] == pytest.approx(rows.loc["deep-recession", "el_12m"])


@pytest.mark.parametrize("name", ["year", "loans", "step", "period_end", "exposure"])
def test_a_scenario_that_is_called_like_a_column(result: StudyResult, name: str) -> None:
    frames = {
        f: getattr(result, f).replace({"scenario": {"rates_up": name}})
        for f in ("summary", "segments", "paths")
    }
    changed = dataclasses.replace(result, **frames)
    data = render_result(changed)
    assert {c.value for c in opened(data, data_only=True)["checks"]["F"][1:]} == {"agrees"}
    found = figures(opened(data))
    assert found[f"el_lifetime_{name}"] == pytest.approx(engine(changed).loc[name, "el_lifetime"])


def test_a_sheet_too_large_to_be_useful_names_its_file(
    result: StudyResult, monkeypatch: pytest.MonkeyPatch
) -> None:
    assert left_out(result) == ()
    monkeypatch.setattr(limits, "MOST_CELLS", 2_000)
    said = left_out(result)
    assert [
        s for s in said if s.startswith("Sheet segment curves of results.xlsx: ") and "segments.parquet" in s
    ]
    book = opened(render_result(result))
    assert "segments.parquet" in book["segment curves"]["A1"].value
    assert "table_segment_curves" not in book.defined_names
    assert book["loss by year"].max_row > 2


def test_further_sections_come_before_the_record(result: StudyResult) -> None:
    tables = {
        "summary": pd.DataFrame({"x": [1.0]}),
        "by: period/1": pd.DataFrame({"day": pd.to_datetime(["2026-01-31"])}),
    }
    extra = section("backtest", tables, "backtest", "How earlier forecasts came out")
    book = opened(render_result(result, extra=extra))
    assert book.sheetnames[-3:] == ["backtest", "backtest - by  period 1", "record"]
    assert book["backtest - by  period 1"]["A2"].is_date
    about = {r[0]: r[1] for r in book["contents"].iter_rows(values_only=True)}
    assert about["backtest"] == "How earlier forecasts came out"
    twice = opened(render_result(result, extra=(*extra, Sheet("Summary", tables["summary"], "x.csv"))))
    assert "Summary 2" in twice.sheetnames


def test_names_of_sheets() -> None:
    assert sheet_name("a/b[c]:*?") == "a b c"
    assert sheet_name("'") == "sheet"
    assert sheet_name("x" * 40) == "x" * 31
    assert sheet_name("x" * 40, ["X" * 31]) == "x" * 29 + " 2"
    assert sheet_name("History") == "History 2"


def test_no_other_scenario_and_no_segments(result: StudyResult) -> None:
    alone = sample(steps=24, scenarios=("baseline",), weighted=False, breakdowns=False)
    shown = opened(render_result(alone), data_only=True)
    assert shown["overview"]["J8"].value == 0
    assert {c.value for c in shown["checks"]["F"][1:]} == {"agrees"}


@needs_office
@pytest.mark.slow
def test_recomputed_by_another_program(result: StudyResult, data: bytes, tmp_path: Path) -> None:
    """Values carried in the file are thrown away first; one loss is raised, so that sums must follow."""
    book = opened(data)
    book["loss by year"]["B2"].value += 1000.0
    for sheet in book:
        sheet.auto_filter.ref = None
        sheet._charts = []  # openpyxl cannot read what LibreOffice makes of them
    book.save(tmp_path / "raised.xlsx")
    assert opened((tmp_path / "raised.xlsx").read_bytes(), data_only=True)["checks"]["F2"].value is None
    again = openpyxl.load_workbook(converted(tmp_path / "raised.xlsx", "xlsx"), data_only=True)
    rows, found = engine(result), figures(again)
    base = float(rows.loc["baseline", "el_lifetime"])
    heads = [c.value for c in again["loss by year"][1]]
    total = next(r for r in again["loss by year"].iter_rows(values_only=True) if r[0] == "Total")
    for scenario, value in rows["el_lifetime"].items():
        raised = 1000.0 if heads.index(scenario) == 1 else 0.0
        assert total[heads.index(scenario)] == pytest.approx(value + raised, rel=1e-9)
        assert found[f"el_lifetime_{scenario}"] == pytest.approx(value, rel=1e-12)
    wrong = [r for r in again["checks"].iter_rows(min_row=2, values_only=True) if r[5] != "agrees"]
    assert [(r[0], r[1], r[5]) for r in wrong] == [
        ("Lifetime EL: calendar years add up to it", "baseline", "DIFFERS")
    ]
    assert wrong[0][4] == pytest.approx(1000.0, rel=1e-6)
    lines = list(again["overview"].iter_rows(min_row=8, max_row=7 + len(rows), values_only=True))
    for line, (_, value) in zip(lines, rows["el_lifetime"].items(), strict=True):
        assert line[8] == pytest.approx(value - base, abs=1e-3)
        assert line[9] == pytest.approx(value / base - 1, abs=1e-12)


@needs_office
@pytest.mark.slow
def test_no_text_of_the_data_is_run(result: StudyResult, tmp_path: Path) -> None:
    """Opened and saved by LibreOffice, every hostile text is still that text: nothing was computed."""
    kinds = {
        s: HOSTILE[k % len(HOSTILE)] + s
        for k, s in enumerate(result.summary["segment"].unique())
        if s != "portfolio"
    }
    changed = dataclasses.replace(
        result,
        summary=result.summary.replace({"segment": kinds}),
        segments=result.segments.replace({"segment": kinds}),
        findings=result.findings.assign(message=HOSTILE[: len(result.findings)]),
        cautions=HOSTILE,
    )
    probe = Sheet("probe", pd.DataFrame({"text": HOSTILE, HOSTILE[0]: "x"}), "probe.csv")
    (tmp_path / "hostile.xlsx").write_bytes(render_result(changed, extra=(probe,)))
    saved = converted(tmp_path / "hostile.xlsx", "ods")
    with zipfile.ZipFile(saved) as z:
        root = ElementTree.fromstring(z.read("content.xml"))
    name = {
        k: f"{{urn:oasis:names:tc:opendocument:xmlns:{v}:1.0}}"
        for k, v in (("t", "table"), ("o", "office"), ("x", "text"))
    }
    texts = set()
    for cell in root.iter(f"{name['t']}table-cell"):
        text = "\n".join("".join(p.itertext()) for p in cell.iter(f"{name['x']}p"))
        formula = cell.get(f"{name['t']}formula")
        if formula is None:
            texts.add(text)
            continue
        assert not any(h.strip() in formula for h in HOSTILE), formula
    for hostile in HOSTILE:
        core = hostile.strip()
        assert any(core in t for t in texts), hostile
    for computed in ("2", "5", "1", "42", "17"):
        assert computed not in {t for t in texts if t and t[0] in "=+-@"}
    sums = render_workbook([probe])
    assert all(c.data_type != "f" for line in opened(sums)["probe"].iter_rows() for c in line)
