"""How a study's section ``analyses`` is answered and shown, with an analysis made for the test."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from openpyxl import load_workbook

import stresskit as sk
from stresskit.analyses.ask import MAKERS, Question, add_analyses, analyse, options_of
from stresskit.analyses.whole import whole_result
from stresskit.core.errors import NumericError, UsageError
from stresskit.loss.book import LossBook, prepare_book
from stresskit.report.analysis import PICTURES
from stresskit.report.analysis_folder import write_analysis
from stresskit.report.folder import write_run
from stresskit.report.html import render_report
from stresskit.runs.api import checked_setting, project_setting
from stresskit.runs.records import Analysis, AnalysisTable
from tests.analyses.world import setting_of, small_setting
from tests.cli.small_study import write_small_study


def losses(question: Question) -> Analysis:
    setting = question.setting
    found = setting.along(setting.data.paths)
    frame = pd.DataFrame(
        {
            "scenario": [p.name for p in setting.data.paths],
            "el_lifetime": [float(r.loans["el_lifetime"].sum()) for r in found],
            "comment": ["=1+1", "<script>alert(1)</script>"][: len(found)],
        }
    )
    return Analysis(
        "bands", "Losses & more", "It costs <b>this</b>.", (AnalysisTable("losses", "Losses", frame),),
        notes=("How it was done.",), cautions=("Only a test.",), facts={"seed": 5}, files={"path.yaml": "scenario: x\n"},
    )  # fmt: skip


def refuse(_: Question) -> Analysis:
    raise NumericError("no event before the cut-off")


@pytest.fixture
def study(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    for key in list(MAKERS):
        monkeypatch.delitem(MAKERS, key)  # type: ignore[attr-defined]
    monkeypatch.delitem(PICTURES, "bands", raising=False)  # type: ignore[attr-defined]
    monkeypatch.setitem(MAKERS, "bands", losses)  # type: ignore[attr-defined]
    monkeypatch.setitem(MAKERS, "backtest", refuse)  # type: ignore[attr-defined]
    path = write_small_study(tmp_path)
    with path.open("a") as out:
        out.write("\nanalyses:\n  bands: {}\n  backtest: {}\n")
    return path


def test_a_run_answers_what_the_study_asks_and_survives_what_cannot_be_made(
    study: Path, tmp_path: Path
) -> None:
    file = sk.load_study(study)
    data = sk.prepare(file)
    fits = sk.fit(file, data)
    setting, _ = checked_setting(file, data, fits)
    result = project_setting(setting)
    done = add_analyses(result, setting)
    assert [a.key for a in done.analyses] == ["bands"]
    book = result.summary[result.summary["by"] == ""].set_index("scenario")["el_lifetime"]
    table = done.analyses[0].table("losses").set_index("scenario")["el_lifetime"]
    np.testing.assert_allclose(table, book.loc[table.index], rtol=1e-12)
    assert "Only a test." in done.cautions
    assert "The analysis backtest could not be made: no event before the cut-off" in done.cautions
    page = render_report(done)
    assert "It costs &lt;b&gt;this&lt;/b&gt;." in page
    assert "<script>alert" not in page
    out = tmp_path / "run"
    write_run(done, fits, out)
    record = json.loads((out / "manifest.json").read_text())
    assert record["seeds"]["bands"] == 5
    assert "analyses/bands/losses.csv" in record["outputs"]
    assert (out / "analyses/bands/path.yaml").read_text() == "scenario: x\n"
    assert "'=1+1" in (out / "analyses/bands/losses.csv").read_text()
    sheet = load_workbook(out / "results.xlsx")["bands losses"]
    assert [c.value for c in sheet[1]] == ["scenario", "el_lifetime", "comment"]


def test_a_run_makes_the_book_ready_once_for_the_projection_and_all_analyses(
    study: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    file = sk.load_study(study)
    data = sk.prepare(file)
    fits = sk.fit(file, data)
    apart = add_analyses(sk.project(file, data, fits), checked_setting(file, data, fits)[0])
    made: list[int] = []

    def counted(portfolio: Any, *args: Any, **more: Any) -> LossBook:
        made.append(portfolio.n_loans)
        return prepare_book(portfolio, *args, **more)

    monkeypatch.setattr("stresskit.runs.setting.prepare_book", counted)
    whole = whole_result(file, data, fits, evidence=False)
    assert made == [data.loans.portfolio.n_loans]
    assert [a.key for a in whole.analyses] == ["bands"]
    assert (whole.cautions, whole.record) == (apart.cautions, apart.record)
    for name in ("summary", "segments", "loans"):
        assert getattr(whole, name).equals(getattr(apart, name))
    assert whole.analyses[0].table("losses").equals(apart.analyses[0].table("losses"))


def test_a_study_without_the_section_is_left_as_it_is(tmp_path: Path) -> None:
    setting = small_setting(tmp_path)
    result = sk.project(setting.file, setting.data, setting.fitted)
    assert add_analyses(result, setting) is result


def test_one_analysis_by_itself_has_a_whole_folder(study: Path, tmp_path: Path) -> None:
    setting = setting_of(study)
    found = analyse(setting, "bands")
    write_analysis(found, setting, options_of(setting.file, "bands"), tmp_path / "alone", command=["bands"])
    names = sorted(p.name for p in (tmp_path / "alone").iterdir())
    assert names == ["losses.csv", "manifest.json", "path.yaml", "report.html", "results.xlsx"]
    assert "model estimate" in (tmp_path / "alone/report.html").read_text().lower()


def test_an_unknown_analysis_is_refused_with_those_there_are(study: Path) -> None:
    setting = setting_of(study)
    with pytest.raises(UsageError, match=r"there is no analysis 'band' \(analyses: bands, backtest\)"):
        analyse(setting, "band")
