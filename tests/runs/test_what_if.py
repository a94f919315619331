"""A what-if is an ordinary scenario: its text loads by itself, gives the same path, and leaves the weighted mean alone."""

from __future__ import annotations

import hashlib
import json
import subprocess
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.core.errors import TextError, UsageError
from stresskit.core.values import AFTERWARDS, FILLED, GIVEN, ScenarioPath
from stresskit.demo.bank import write_demo
from stresskit.macro.read import read_history
from stresskit.macro.var_fit import fit_var
from stresskit.runs.api import StudyFile
from stresskit.runs.folder import write_model_folder
from stresskit.scenario.completion import fill
from stresskit.scenario.resolve import resolve
from stresskit.spec.load import load_scenario
from tests import program
from tests.cli.small_study import write_small_study
from tests.runs.test_plausibility import write as write_with_var

U = "unemployment_rate"


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("pier")
    path = write_small_study(folder)
    # both variables in the baseline, so that both can be changed
    text = (folder / "baseline.yaml").read_text()
    (folder / "baseline.yaml").write_text(
        text.replace("paths:\n", "paths:\n  policy_rate: {values: [2.0]}\n")
    )
    return path


@pytest.fixture(scope="module")
def file(study: Path) -> StudyFile:
    return sk.load_study(study)


def yaml(file: StudyFile, text: str | list[str]) -> str:
    return sk.what_if(file, text).scenarios[-1].text


def paths(file: StudyFile) -> dict[str, ScenarioPath]:
    """Paths of all scenarios over five years."""
    assert file.study.macro is not None
    past = read_history(file.study.macro, base=file.base, model=file.frequency)
    found = resolve(
        file.scenarios, file.study.macro, past, as_of=file.as_of, model=file.frequency, horizon=60
    )
    return {p.name: p for p in found}


def path(file: StudyFile, text: str | list[str], variable: str = U) -> list[float]:
    values: list[float] = paths(sk.what_if(file, text))["what_if"].values[variable].tolist()
    return values


def test_the_text_of_a_what_if(file: StudyFile) -> None:
    assert yaml(file, "unemployment_rate + 4 over 4 quarters then back over 8 quarters") == (
        "# What if: unemployment_rate + 4 over 4 quarters then back over 8 quarters\n"
        "scenario: what_if\n"
        "based_on: baseline\n"
        "weighted: false\n"
        "starts: 2021Q1\n"
        "paths:\n"
        "  unemployment_rate: {change_from: baseline, peak_points: 4, at: 2021Q4, back_by: 2023Q4}\n"
        "notes:\n"
        "  what_if: 'unemployment_rate + 4 over 4 quarters then back over 8 quarters'\n"
    )


@pytest.mark.parametrize(
    ("text", "line"),
    [
        (f"{U} - 0.50", f"  {U}: {{change_from: baseline, peak_points: -0.50, at: 2021Q1}}"),
        (f"{U} x 007.5 over 1 year", f"  {U}: {{change_from: baseline, peak_factor: 7.5, at: 2021Q4}}"),
        (f"{U} + 1 over 2 years on slump", f"  {U}: {{change_from: slump, peak_points: 1, at: 2022Q4}}"),
        (f"{U} to 8 over 6 months", f"  {U}: {{reach: 8, at: 2021Q2}}\nafterwards:\n  {U}: hold"),
        (f"{U} to 8 then back over 3 quarters", f"  {U}: {{reach: 8, at: 2021Q1, back_to: baseline, back_by: 2021Q4}}"),
    ],
)  # fmt: skip
def test_lines(file: StudyFile, text: str, line: str) -> None:
    assert f"paths:\n{line}\nnotes:\n" in yaml(file, text)


def test_values_by_hand(file: StudyFile) -> None:
    """The baseline is 5.0 5.0 4.9 4.9 and then holds; 2.0 for the policy rate."""
    assert path(file, f"{U} + 4 over 4 quarters")[:6] == pytest.approx([6.0, 7.0, 7.9, 8.9, 8.9, 8.9])
    assert path(file, f"{U} + 4 over 2 quarters then back over 2 quarters")[:5] == pytest.approx(
        [7, 9, 6.9, 4.9, 4.9]
    )
    assert path(file, f"{U} x 2 over 2 quarters")[:4] == pytest.approx([7.5, 10.0, 9.8, 9.8])
    assert path(file, f"{U} - 1")[:4] == pytest.approx([4.0, 4.0, 3.9, 3.9])
    last = pd.read_csv(file.base / "macro.csv")[U].iloc[-1]
    to = path(file, f"{U} to 9 over 4 quarters then back over 2 quarters")
    assert to[:7] == pytest.approx([last + (9 - last) * k / 4 for k in (1, 2, 3, 4)] + [6.95, 4.9, 4.9])
    both = [f"{U} + 1", "policy_rate to 3 over 2 quarters"]
    assert path(file, both)[:3] == pytest.approx([6.0, 6.0, 5.9])
    assert path(file, both, "policy_rate")[:3] == pytest.approx([2.5, 3.0, 3.0])


def test_the_text_stands_on_its_own(file: StudyFile, tmp_path: Path) -> None:
    """Saved as a file of the study it gives the same path, digest and place outside the mean."""
    made = sk.what_if(file, f"{U} + 4 over 4 quarters")
    saved = tmp_path / "what_if.yaml"
    saved.write_text(made.scenarios[-1].text, encoding="utf-8", newline="\n")
    loaded = load_scenario(saved)
    assert loaded.digest == made.scenarios[-1].digest == hashlib.sha256(saved.read_bytes()).hexdigest()
    assert loaded.model == made.scenarios[-1].model
    again = replace(file, scenarios=(*file.scenarios, loaded))
    first, second = paths(made)["what_if"], paths(again)["what_if"]
    assert first.values[U].tobytes() == second.values[U].tobytes()
    assert first.weight is second.weight is None


def test_a_start_in_months_is_read_on_the_calendar_of_the_table(file: StudyFile) -> None:
    """2021-01 can name the quarter that holds it; the macro table is quarterly, so spans are quarters."""
    month = [replace(s, model=s.model.model_copy(update={"starts": "2021-01"})) for s in file.scenarios]
    made = yaml(replace(file, scenarios=tuple(month)), f"{U} to 8 over 1 year then back over 6 months")
    assert "starts: 2021-01\n" in made
    assert "{reach: 8, at: 2021Q4, back_to: baseline, back_by: 2022Q2}" in made
    elsewhere = replace(file, scenarios=tuple(month), base=file.base / "nowhere")
    assert "{change_from: baseline, peak_points: 1, at: 2021-02}" in yaml(elsewhere, f"{U} + 1 over 2 months")


def test_names(file: StudyFile) -> None:
    two = sk.what_if(sk.what_if(file, f"{U} + 1"), f"{U} + 2")
    assert [s.model.scenario for s in two.scenarios] == ["baseline", "slump", "what_if", "what_if_2"]
    on_first = sk.what_if(two, f"{U} + 1 on what_if", name="more")
    assert on_first.scenarios[-1].model.scenario == "more"
    assert paths(on_first)["more"].values[U][0] == pytest.approx(7.0)
    for name in ("slump", "weighted", "history"):
        with pytest.raises(UsageError, match=f"a scenario cannot be called '{name}': the name is taken"):
            sk.what_if(file, f"{U} + 1", name=name)
    with pytest.raises(TextError, match="expected a name that begins with a letter"):
        sk.what_if(file, f"{U} + 1", name="a b")


def test_the_first_scenario_is_changed_when_none_is_called_baseline(file: StudyFile) -> None:
    other = load_scenario(file.scenarios[0].file)
    other = replace(other, model=other.model.model_copy(update={"scenario": "central"}))
    assert "based_on: central\n" in yaml(replace(file, scenarios=(other,)), f"{U} + 1")
    with pytest.raises(UsageError, match="the study has none"):
        sk.what_if(replace(file, scenarios=()), f"{U} + 1")


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("unemploymnt_rate + 4", "what-if:1:1: there is no variable 'unemploymnt_rate'; there are unemployment_rate, policy_rate; did you mean 'unemployment_rate'?"),
        (f"{U} + 4 on slum", "what-if:1:26: there is no scenario 'slum'; the study has baseline, slump; did you mean 'slump'?"),
        (f"{U} + 10%", "what-if:1:21: unemployment_rate is in percent, where + 10% can mean two things: write + 10 for percentage points, or x 1.1 for its value times that"),
        (f"{U} - 10%", "what-if:1:21: unemployment_rate is in percent, where - 10% can mean two things: write - 10 for percentage points, or x 0.9 for its value times that"),
        (f"{U} + 4 over 4 months", "what-if:1:28: 4 months is no whole number of quarters, and the macro table is quarterly"),
        (f"{U} + 4 over 3 months then back over 500 quarters", "what-if:1:52: 500 quarters is longer than 400 quarters"),
    ],
)  # fmt: skip
def test_refusals(file: StudyFile, text: str, message: str) -> None:
    with pytest.raises(TextError) as caught:
        sk.what_if(file, text)
    assert str(caught.value).split("\n")[0] == message


def test_a_variable_without_a_path_is_refused_when_paths_are_made(file: StudyFile) -> None:
    bare = load_scenario(file.scenarios[0].file)
    bare = replace(
        bare, model=bare.model.model_copy(update={"weight": None, "paths": {U: bare.model.paths[U]}})
    )  # type: ignore[union-attr]
    made = sk.what_if(replace(file, scenarios=(bare,)), "policy_rate + 1")
    with pytest.raises(TextError) as caught:
        paths(made)
    # the file does not exist before a run: the line that was typed is shown
    assert str(caught.value) == (
        "what-if:1:1: scenario 'baseline' gives no path of 'policy_rate' to start from; state it there, or give values here\n"
        "  policy_rate + 1\n  ^"
    )
    made = sk.what_if(
        replace(file, scenarios=(bare,)),
        [f"{U} + 1", f"{U.replace('unemployment', 'policy')} to 3 over 1 year then back over 1 year"],
    )
    with pytest.raises(TextError) as caught:
        paths(made)
    assert str(caught.value).startswith("what-if:2:1: scenario 'baseline' gives no path of 'policy_rate'")


def test_a_what_if_on_a_scenario_with_filled_variables(tmp_path: Path) -> None:
    """By the plain route: the stated path by hand, then the VAR's conditional mean given that."""
    file = sk.load_study(write_with_var(tmp_path, var=True, loans=60))
    assert file.study.macro is not None
    assert file.study.macro.var is not None
    past = read_history(file.study.macro, base=file.base, model=file.frequency)
    var = fit_var(file.study.macro.var, past, end=past.end)

    def found(text: str) -> ScenarioPath:
        scenarios = sk.what_if(file, text).scenarios
        made = resolve(
            scenarios, file.study.macro, past, as_of=file.as_of, model=file.frequency, horizon=60, var=var
        )
        return made[-1]

    jobs = np.array([6.0, 8.0, 9.0, 9.0, 8.5, 8.0])
    worse = found(f"{U} + 2 over 2 quarters then back over 4 quarters on jobs")
    np.testing.assert_allclose(worse.values[U][:6], jobs + [1.0, 2.0, 1.5, 1.0, 0.5, 0.0])
    refilled = fill(var, {U: worse.values[U][:6]})["policy_rate"].values
    np.testing.assert_array_equal(worse.values["policy_rate"][:6], refilled)
    assert worse.flags["policy_rate"].tolist() == [FILLED] * 6 + [AFTERWARDS] * 14
    assert worse.flags[U].tolist() == [GIVEN] * 6 + [AFTERWARDS] * 14

    dear = found("policy_rate + 1 on jobs")
    filled = fill(var, {U: jobs})["policy_rate"].values
    np.testing.assert_allclose(dear.values["policy_rate"][:6], filled + 1.0)
    np.testing.assert_array_equal(dear.values[U][:6], jobs)
    # a change to a filled value is no better than that value, and it is a statement all the same
    assert dear.flags["policy_rate"].tolist() == [FILLED] * 6 + [AFTERWARDS] * 14
    assert dear.stated == {U: 6, "policy_rate": 6}
    level = found("policy_rate to 4 over 2 quarters then back over 2 quarters on jobs")
    start = past.values["policy_rate"][-1]
    np.testing.assert_allclose(level.values["policy_rate"][:2], [(start + 4.0) / 2, 4.0])
    np.testing.assert_allclose(level.values["policy_rate"][3:6], filled[3:])


def test_a_study_without_macro_variables_has_nothing_to_change(file: StudyFile) -> None:
    bare = replace(file, study=file.study.model_copy(update={"macro": None}))
    with pytest.raises(TextError, match="there is no variable 'unemployment_rate'; the study declares none"):
        sk.what_if(bare, f"{U} + 1")


def command(*words: str) -> subprocess.CompletedProcess[str]:
    return program.stresskit(*words, cwd=Path.cwd())


@pytest.mark.slow
def test_a_run_with_a_what_if(study: Path, file: StudyFile, tmp_path: Path) -> None:
    shock, shocked = f"{U} + 4 over 4 quarters", tmp_path / "shocked"
    data = sk.prepare(file)
    fits = sk.fit(file, data)
    before = sk.project(file, data, fits).summary
    write_model_folder(fits, file, data, tmp_path / "models", command=[], replace=False)
    done = command(
        "project", str(study), "--models", str(tmp_path / "models"), "--out", str(shocked), "--no-evidence",
        "--what-if", shock, "--what-if", "policy_rate - 0.5",
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    after = pd.read_csv(shocked / "summary.csv", keep_default_na=False, float_precision="round_trip")
    assert list(after["scenario"].unique()) == ["baseline", "slump", "what_if", "weighted"]
    book = after[after["by"] == ""].set_index("scenario")
    assert book.loc["what_if", "el_lifetime"] > book.loc["slump", "el_lifetime"]

    # the mean is that of the others, by hand and as it was without the what-if
    for column in ("pd_lifetime", "el_12m", "el_lifetime"):
        by_hand = 0.7 * book.loc["baseline", column] + 0.3 * book.loc["slump", column]
        assert book.loc["weighted", column] == pytest.approx(by_hand, rel=1e-12)
    kept = after[after["scenario"] != "what_if"].reset_index(drop=True)
    pd.testing.assert_frame_equal(kept, before, check_dtype=False, check_exact=True)

    record = json.loads((shocked / "manifest.json").read_text())
    entry = record["scenarios"][-1]
    text = (shocked / "scenarios" / "what_if.yaml").read_bytes()
    assert entry["text"].encode() == text == yaml(file, [shock, "policy_rate - 0.5"]).encode()
    assert entry["digest"] == record["outputs"]["scenarios/what_if.yaml"] == hashlib.sha256(text).hexdigest()
    report = (shocked / "report.html").read_text()
    assert "outside the mean" in report
    assert f"what_if: {shock}; policy_rate - 0.5" in report.replace("<wbr>", "")


@pytest.mark.slow
def test_check_takes_a_what_if_and_shows_where_it_is_wrong(study: Path) -> None:
    checked = command("check", str(study), "--json", "--what-if", f"{U} + 4 over 4 quarters")
    assert "what_if" in json.loads(checked.stdout)["facts"]["scenarios"]
    wrong = command("check", str(study), "--what-if", f"{U} plus 4")
    assert (wrong.returncode, wrong.stdout) == (3, "")
    assert wrong.stderr.splitlines()[1:] == [f"  {U} plus 4", "  " + " " * 18 + "^"]


@pytest.mark.slow
def test_the_mean_of_a_study_without_weights_stays_away(file: StudyFile) -> None:
    bare = [replace(s, model=s.model.model_copy(update={"weight": None})) for s in file.scenarios]
    made = sk.what_if(replace(file, scenarios=tuple(bare)), f"{U} + 1")
    data = sk.prepare(made)
    assert [p.weight for p in data.paths] == [None, None, None]
    result = sk.project(made, data, sk.fit(made, data))
    assert "weighted" not in set(result.summary["scenario"])
    assert np.isfinite(result.summary["el_lifetime"]).all()


@pytest.mark.parametrize("name", ["weighted", "history", "variable", "period"])
def test_names_that_results_use_are_taken(name: str, file: StudyFile, tmp_path: Path) -> None:
    with pytest.raises(UsageError, match=f"a scenario cannot be called '{name}': the name is taken"):
        sk.what_if(file, f"{U} + 1", name=name)
    study = write_small_study(tmp_path, loans=5)
    slump = tmp_path / "slump.yaml"
    slump.write_text(slump.read_text().replace("scenario: slump", f"scenario: {name}"))
    with pytest.raises(TextError, match=f"'{name}' is a name that results use themselves"):
        sk.load_study(study)


@pytest.mark.slow
def test_a_what_if_beside_years_stages_and_weights(tmp_path: Path) -> None:
    """The demo bank has them all: the mean by year is that of the weighted scenarios, and the report is written."""
    made = sk.what_if(sk.load_study(write_demo(tmp_path / "bank", loans=3000)), f"{U} + 3 over 4 quarters")
    data = sk.prepare(made)
    fits = sk.fit(made, data)
    result = sk.project(made, data, fits)
    assert result.years is not None
    book = result.years[result.years["by"] == ""].set_index(["scenario", "year"])["el"]
    weights = {p.name: p.weight for p in data.paths if p.weight is not None}
    assert "what_if" not in weights
    by_hand = sum(w * book[name] for name, w in weights.items())
    np.testing.assert_allclose(book["weighted"], by_hand, rtol=1e-12)
    sk.write_run(result, fits, tmp_path / "run")
    assert "what_if" in (tmp_path / "run" / "report.html").read_text(encoding="utf-8")
