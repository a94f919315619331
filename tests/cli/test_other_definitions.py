"""Models meet a study whose macro features, calendar or causes are not those of the fit: refused, never projected."""

from __future__ import annotations

import dataclasses
import json
import shutil
import subprocess
from pathlib import Path

import pytest

from stresskit.core.errors import TextError
from stresskit.core.values import FeatureTable
from stresskit.hazard.result import HazardFit
from stresskit.projection.project import project
from stresskit.runs import api
from tests.cli.small_study import BASELINE, STUDY, write_small_study
from tests.program import stresskit

FEATURE = "unemployment_change: {of: unemployment_rate, transform: difference, over: 4, lag: 1}"
VARIABLE = "unemployment_rate: {unit: percent, place: linear}"
#: Both hazards with the same text, so that only the model itself can say which cause it is of.
TWIN = STUDY.replace(
    "      - {age: linear}\n",
    "      - {age: log}\n      - {macro: unemployment_change, expect: positive}\n"
    "      - {loan: product, as: category, reference: fixed}\n",
)
EDITS = {
    "of": (
        FEATURE,
        FEATURE.replace("of: unemployment_rate", "of: policy_rate"),
        "unemployment_rate",
        "policy_rate",
    ),
    "transform": (FEATURE, FEATURE.replace("difference", "growth"), "difference", "growth"),
    "over": (FEATURE, FEATURE.replace("over: 4", "over: 2"), "4", "2"),
    "lag": (FEATURE, FEATURE.replace("lag: 1", "lag: 0"), "1", "0"),
    "unit": (VARIABLE, VARIABLE.replace("percent", "level"), "percent", "level"),
    "place": (VARIABLE, VARIABLE.replace("linear", "step"), "linear", "step"),
}


@pytest.fixture(scope="module")
def bank(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the study, its models and its projection in one go (``whole``)."""
    folder = tmp_path_factory.mktemp("bank")
    study = write_small_study(folder)
    assert TWIN != STUDY
    study.write_text(TWIN, encoding="utf-8")
    policy = "paths:\n  policy_rate: {values: [2.5, 1.0, 1.0, 1.0]}\n"
    (folder / "baseline.yaml").write_text(BASELINE.replace("paths:\n", policy), encoding="utf-8")
    for words in (("fit", study, "--out", "models"), ("run", study, "--out", "whole", "--no-evidence")):
        done = stresskit(*words, cwd=folder)
        assert done.returncode == 0, done.stderr
    return folder


def _project(bank: Path, text: str, models: str = "models") -> subprocess.CompletedProcess[str]:
    (bank / "other.yaml").write_text(text, encoding="utf-8")
    shutil.rmtree(bank / "out", ignore_errors=True)
    return stresskit("project", "other.yaml", "--models", models, "--out", "out", "--no-evidence", cwd=bank)


def test_the_unchanged_study_projects_to_the_same_bits(bank: Path) -> None:
    done = _project(bank, TWIN)
    assert done.returncode == 0, done.stderr
    for name in ("summary.csv", "loans.parquet", "segments.parquet"):
        assert (bank / "out" / name).read_bytes() == (bank / "whole" / name).read_bytes(), name


@pytest.mark.parametrize("edit", sorted(EDITS))
def test_another_definition_of_a_feature_is_refused(bank: Path, edit: str) -> None:
    before, after, fitted, here = EDITS[edit]
    assert TWIN.count(before) == 1
    done = _project(bank, TWIN.replace(before, after))
    assert done.returncode == 3, done.stderr
    assert "hazards.default was fitted with another macro feature 'unemployment_change'" in done.stderr
    assert f"({edit}: {fitted}, " in done.stderr
    assert f"defines ({edit}: {here}, " in done.stderr
    assert "fit again, or restore the study's text" in done.stderr
    assert not (bank / "out").exists()


def test_another_length_of_a_period_is_refused(bank: Path) -> None:
    # The rows of one month in three are a panel of quarters, so that nothing else stops the study.
    lines = (bank / "loans.csv").read_text(encoding="utf-8").splitlines()
    third = [line for line in lines[1:] if line.split(",")[1][-2:] in ("03", "06", "09", "12")]
    (bank / "quarters.csv").write_text("\n".join([lines[0], *third, ""]), encoding="utf-8")
    text = TWIN.replace("frequency: month", "frequency: quarter").replace("as_of: 2020-12", "as_of: 2020Q4")
    done = _project(bank, text.replace("loans.csv", "quarters.csv"))
    assert done.returncode == 3, done.stderr
    assert (
        "the model of hazards.default has periods of a month, the study periods of a quarter" in done.stderr
    )


def test_another_calendar_of_the_macro_table_is_refused(bank: Path) -> None:
    head, *rows = (bank / "macro.csv").read_text(encoding="utf-8").splitlines()
    months = [f"{row[:4]}-{3 * int(row[5]) - 2 + k:02d}{row[6:]}" for row in rows for k in range(3)]
    (bank / "monthly.csv").write_text("\n".join([head, *months, ""]), encoding="utf-8")
    for name in ("baseline", "slump"):
        text = (bank / f"{name}.yaml").read_text(encoding="utf-8")
        (bank / f"{name}_monthly.yaml").write_text(text.replace("2021Q1", "2021-01"), encoding="utf-8")
    study = TWIN.replace("macro.csv", "monthly.csv").replace("baseline.yaml", "baseline_monthly.yaml")
    done = _project(bank, study.replace("slump.yaml", "slump_monthly.yaml"))
    assert done.returncode == 3, done.stderr
    assert "(place: linear, macro_frequency: quarter, of: unemployment_rate" in done.stderr
    assert "(place: step, macro_frequency: month, of: unemployment_rate" in done.stderr


def test_a_model_under_the_name_of_another_cause_is_refused(bank: Path) -> None:
    shutil.copytree(bank / "models", bank / "swapped")
    shutil.copy(bank / "models" / "default.json", bank / "swapped" / "payoff.json")
    done = _project(bank, TWIN, models="swapped")
    assert done.returncode == 3, done.stderr
    assert "swapped/payoff.json is not the file that was written" in done.stderr
    (bank / "swapped" / "manifest.json").unlink()
    done = _project(bank, TWIN, models="swapped")
    assert done.returncode == 3, done.stderr
    assert "the model given for hazards.payoff was fitted for 'default'" in done.stderr


def test_a_feature_that_no_hazard_reads_may_change(bank: Path) -> None:
    spare = f"{FEATURE}\n    spare: {{of: policy_rate, lag: 2}}"
    done = _project(bank, TWIN.replace(FEATURE, spare))
    assert done.returncode == 0, done.stderr
    assert (bank / "out" / "summary.csv").read_bytes() == (bank / "whole" / "summary.csv").read_bytes()


def test_a_model_that_does_not_say_is_projected_with_a_caution(bank: Path) -> None:
    (bank / "silent").mkdir()
    for cause in ("default", "payoff"):
        document = json.loads((bank / "models" / f"{cause}.json").read_text(encoding="utf-8"))
        assert document["features"]["unemployment_change"]["lag"] == 1
        del document["features"]
        (bank / "silent" / f"{cause}.json").write_text(json.dumps(document), encoding="utf-8")
    done = _project(bank, TWIN, models="silent")
    assert done.returncode == 0, done.stderr
    assert (bank / "out" / "summary.csv").read_bytes() == (bank / "whole" / "summary.csv").read_bytes()

    def said(folder: str) -> list[str]:
        cautions = json.loads((bank / folder / "manifest.json").read_text(encoding="utf-8"))["cautions"]
        return [c for c in cautions if "does not say how its macro features" in c]

    assert [c.split("'s model")[0] for c in said("out")] == ["The default hazard", "The payoff hazard"]
    assert said("whole") == []


def _parts(bank: Path) -> tuple[api.StudyFile, api.Prepared, dict[str, HazardFit], FeatureTable]:
    file = api.load_study(bank / "study.yaml")
    data = api.prepare(file)
    fits = dict(api.fit(file, data))
    setting, _ = api.checked_setting(file, data, fits)
    return file, data, fits, setting.features(data.paths[0])


def test_the_library_call_compares_too_and_nothing_with_a_table_made_by_hand(bank: Path) -> None:
    _, data, fits, path = _parts(bank)
    whole = project(data.loans.portfolio, fits, path, cap=6)
    made = dict(path.definitions)
    lagged = dataclasses.replace(made["unemployment_change"], lag=7)
    other = dataclasses.replace(path, definitions={"unemployment_change": lagged})
    with pytest.raises(TextError, match=r"\(lag: 1, of: .*\(lag: 7, of: "):
        project(data.loans.portfolio, fits, other, cap=6)
    by_hand = dataclasses.replace(path, definitions={})
    again = project(data.loans.portfolio, fits, by_hand, cap=6)
    assert again.survival.tobytes() == whole.survival.tobytes()
    with pytest.raises(TextError, match="was fitted for 'default'"):
        project(data.loans.portfolio, fits | {"payoff": fits["default"]}, path, cap=6)


def test_a_table_defines_all_of_its_features_or_none(bank: Path) -> None:
    _, _, _, path = _parts(bank)
    made = path.definitions["unemployment_change"]
    with pytest.raises(ValueError, match="of all features or of none"):
        dataclasses.replace(path, definitions={"another": made})


# ---- rows that a feature does not reach


def test_rows_without_a_feature_are_said_by_check_and_by_the_run(bank: Path) -> None:
    long = STUDY.replace("lag: 1", "lag: 16")
    (bank / "long.yaml").write_text(long, encoding="utf-8")
    file = api.load_study(bank / "long.yaml")
    data = api.prepare(file)
    facts = api.fit(file, data)["default"].facts
    lost, events = int(facts.rows_without_feature), int(facts.events_without_feature)
    risk = data.loans.risk_set
    assert events > 0
    assert events + facts.n_events == risk.events("default")
    # Plain count: the feature's first quarter is 2014Q1 + 4 + 16 = 2019Q1, and lines between quarters begin at its last month.
    first = 12 * 2019 + 2
    plain = 0
    for origin, entry, exit_, cause in zip(
        risk.stay_origin, risk.stay_entry, risk.stay_exit, risk.stay_cause, strict=True
    ):
        last = exit_ - (risk.causes[cause - 1] == "payoff" if cause else False)
        plain += sum(origin + age < first for age in range(entry + 1, last + 1))
    assert lost == plain

    words = (
        f"The default hazard leaves out {lost / (lost + facts.nobs):.1%} of its rows ({lost:,} of {lost + facts.nobs:,.0f}) and "
        f"{events:,} of its {events + facts.n_events:,.0f} events: a macro feature (unemployment_change) is not known"
    )
    ran = stresskit("run", "long.yaml", "--out", "long", "--no-evidence", "--json", cwd=bank)
    assert ran.returncode == 0, ran.stderr
    assert [c[: len(words)] for c in json.loads(ran.stdout)["cautions"] if "leaves out" in c] == [words]
    checked = stresskit("check", "long.yaml", "--json", cwd=bank)
    assert checked.returncode == 0, checked.stderr
    told = json.loads(checked.stdout)
    assert told["facts"]["rows_without_feature_default"] == lost
    assert told["facts"]["events_without_feature_default"] == events
    assert "rows_without_feature_payoff" not in told["facts"]
    assert [a[: len(words)] for a in told["assumptions"] if "leaves out" in a] == [words]


def test_check_goes_on_where_no_row_has_the_feature(bank: Path) -> None:
    (bank / "far.yaml").write_text(STUDY.replace("lag: 1", "lag: 24"), encoding="utf-8")
    checked = stresskit("check", "far.yaml", cwd=bank)
    assert checked.returncode == 0, checked.stderr
    assert "leaves out 100.0% of its rows" in " ".join(checked.stdout.split())


def test_nothing_is_said_where_every_row_has_the_feature(bank: Path) -> None:
    checked = stresskit("check", "study.yaml", "--json", cwd=bank)
    assert json.loads(checked.stdout)["facts"]["rows_without_feature_default"] == 0
    assert "leaves out" not in checked.stdout
