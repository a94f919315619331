"""Values that an afterwards rule supplied are marked wherever they go: paths, features, the share of the PD, the report."""

from __future__ import annotations

from pathlib import Path

import pytest

import stresskit as sk
from stresskit.core.period import Frequency, parse_period
from stresskit.report.html import render_report
from stresskit.report.macro_pictures import feature_picture, path_picture
from stresskit.runs.records import StudyResult
from tests.cli.small_study import write_small_study

RULES = {
    "held": "  unemployment_rate: {hold: history, until: 2021Q3}\nafterwards: {revert_to: long_run_mean, half_life: 2}",
    "reached": "  unemployment_rate: {reach: 9, at: 2022Q1}\nafterwards: {back_to: baseline, over: 4}",
    "shocked": "  unemployment_rate: {change_from: baseline, peak_points: 4, at: 2021Q4, half_life: 0.5}",
}
#: Last quarter up to which each scenario is given: until, at; the shock runs on to 2022Q4 (log2(100) / 2 = 3.3 quarters after the
#: peak), but on a baseline that is stated up to 2021Q4 only, and a value is as good as the worst of what it rests on.
STATED = {"baseline": "2021Q4", "held": "2021Q3", "reached": "2022Q1", "shocked": "2021Q4"}


@pytest.fixture(scope="module")
def result(tmp_path_factory: pytest.TempPathFactory) -> StudyResult:
    folder = tmp_path_factory.mktemp("flags")
    study = write_small_study(folder)
    (folder / "baseline.yaml").write_text((folder / "baseline.yaml").read_text().replace("weight: 0.7\n", ""))
    for name, text in RULES.items():
        (folder / f"{name}.yaml").write_text(f"scenario: {name}\nstarts: 2021Q1\npaths:\n{text}\n")
    names = ", ".join(f"{n}.yaml" for n in ("baseline", *RULES))
    study.write_text(study.read_text().replace("[baseline.yaml, slump.yaml]", f"[{names}]"))
    file = sk.load_study(study)
    data = sk.prepare(file)
    return sk.project(file, data, sk.fit(file, data))


def quarter(label: str) -> int:
    return parse_period(label, Frequency.QUARTER)


@pytest.mark.slow
@pytest.mark.parametrize("name", STATED)
def test_flags_of_paths_features_and_the_share(result: StudyResult, name: str) -> None:
    last = quarter(STATED[name])
    paths = result.paths[result.paths["scenario"] == name]
    assert set(paths["flag"]) == {"given", "afterwards"}
    assert [f == "given" for f in paths["flag"]] == [quarter(p) <= last for p in paths["period"]]

    # unemployment_change: difference over 4 quarters, lag 1, on months by straight lines between quarters' last
    # months: a month reads its own quarter and, unless it is a last month, the one before, a quarter back each
    features = result.features[result.features["scenario"] == name]
    for period, flag in zip(features["period"], features["flag"], strict=True):
        newest = quarter(period) - 1
        assert (flag == "afterwards") == (newest > last), period

    book = result.segments[(result.segments["by"] == "") & (result.segments["scenario"] == name)]
    marked = dict(zip(features["period"], features["flag"], strict=True))
    after = sum(d for p, d in zip(book["period"], book["default"], strict=True) if marked[p] == "afterwards")
    row = result.summary[(result.summary["by"] == "") & (result.summary["scenario"] == name)].iloc[0]
    assert row["beyond_path"] == pytest.approx(after / book["default"].sum(), rel=1e-9)
    assert 0 < row["beyond_path"] < 1


@pytest.mark.slow
def test_the_report_marks_them(result: StudyResult) -> None:
    paths = path_picture(result)
    features = feature_picture(result)
    assert paths is not None
    assert features is not None
    names = [c.label for c in paths.tables[0].columns][1:]
    for r in paths.tables[0].rows:
        for name, cell in zip(names, r[1:], strict=True):
            if cell.mark != "past":
                assert (cell.mark == "after") == (quarter(r[0].text) > quarter(STATED[name]))
    counted = {r[1].text: r[-1].text for r in features.tables[0].rows}
    table = result.features
    assert counted == {
        n: str(((table["scenario"] == n) & (table["flag"] == "afterwards")).sum()) for n in STATED
    }
    text = render_report(result)
    assert "Periods afterwards" in text
    assert "afterwards rule" in " ".join(result.cautions)


@pytest.mark.slow
def test_history_is_marked_observed(result: StudyResult, tmp_path: Path) -> None:
    assert set(result.features.loc[result.features["scenario"] == "history", "flag"]) == {"observed"}
    assert result.features.columns[-1] == "flag"
