"""A fit that failed a gate: it can be looked at, is not projected, and goes on only with a recorded reason."""

from __future__ import annotations

import dataclasses
import json
import shutil
from pathlib import Path

import pytest

from stresskit.core.errors import NumericError, TextError
from stresskit.hazard.result import HazardFit
from stresskit.hazard.usable import UNKNOWN, Gate
from stresskit.runs import api
from stresskit.runs.folder import read_models
from stresskit.runs.gates import accepted_gates, gate_record, gate_table, refuse_failed
from stresskit.runs.record import digest_file
from tests.cli.small_study import STUDY, write_small_study
from tests.program import stresskit

#: Without a constant nothing holds the payoffs at their actual number.
PAYOFF = "  payoff:\n    link: cloglog\n    terms:\n      - {age: linear}\n"
FAILING = "  payoff:\n    link: cloglog\n    intercept: false\n    terms:\n      - {age: linear}\n"
REASON = "a pilot: the level is set by hand afterwards"


def rewrite(study: Path, payoff: str) -> None:
    assert STUDY.count(PAYOFF) == 1
    study.write_text(STUDY.replace(PAYOFF, payoff), encoding="utf-8")


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = write_small_study(tmp_path_factory.mktemp("bank"))
    rewrite(path, FAILING)
    return path


@pytest.fixture(scope="module")
def models(study: Path) -> Path:
    done = stresskit("fit", study, "--out", "models", cwd=study.parent)
    assert done.returncode == 0, done.stderr
    text = " ".join(done.stdout.split())
    assert "GATE actual_expected FAILED: asked |actual / expected - 1| <= 0.01" in text
    assert "until then the fit is not projected" in text
    return study.parent / "models"


def test_a_run_stops_with_exit_code_5_and_names_the_gate(study: Path) -> None:
    done = stresskit("run", study, "--out", "refused", cwd=study.parent)
    assert done.returncode == 5
    assert done.stdout == ""
    assert "not projected, because 2 gates failed (actual_expected, levels)" in done.stderr
    assert "hazards.payoff: gate actual_expected failed: asked |actual / expected - 1| <= 0.01" in done.stderr
    assert "hazards.payoff.accept: {actual_expected: reason}" in done.stderr
    assert "Traceback" not in done.stderr
    assert not (study.parent / "refused").exists()


def test_models_fitted_before_are_refused_too(study: Path, models: Path) -> None:
    done = stresskit("project", study, "--models", models, "--out", "refused", cwd=study.parent)
    assert done.returncode == 5
    assert "gate actual_expected failed" in done.stderr


def test_a_reason_in_the_study_lets_looked_at_models_through_and_is_recorded(
    study: Path, models: Path
) -> None:
    accept = f'    accept:\n      actual_expected: "{REASON}"\n      levels: "{REASON}"\n      periods: "not needed as it turns out"\n'
    rewrite(study, FAILING + accept)
    try:
        done = stresskit(
            "project", study, "--models", models, "--out", "accepted", "--json", cwd=study.parent
        )
        assert done.returncode == 0, done.stderr
        cautions = json.loads(done.stdout)["cautions"]
        assert cautions[0].startswith(
            "The payoff hazard failed the gate actual_expected (asked |actual / expected - 1| <= 0.01"
        )
        assert cautions[0].endswith(f"accepted in the study because: {REASON}")
        assert cautions[1].startswith("The payoff hazard failed the gate levels")
        assert not any("gate periods" in c for c in cautions)
        record = json.loads((study.parent / "accepted" / "manifest.json").read_text(encoding="utf-8"))
        gates = {(g["cause"], g["name"]): g for g in record["gates"]}
        assert len(gates) == 18
        assert gates["payoff", "actual_expected"]["accepted"] == REASON
        assert gates["payoff", "actual_expected"]["passed"] is False
        assert gates["payoff", "periods"]["accepted"] == "not needed as it turns out"
        assert gates["payoff", "periods"]["passed"] is True
        assert gates["default", "actual_expected"]["accepted"] == ""
        assert REASON in (study.parent / "accepted" / "report.html").read_text(encoding="utf-8")
        rewrite(study, FAILING.replace("{age: linear}", "{age: log}") + accept)
        done = stresskit("project", study, "--models", models, "--out", "other", cwd=study.parent)
        assert done.returncode == 3, "other terms are another model"
    finally:
        rewrite(study, FAILING)


def test_a_gate_is_not_passed_by_editing_the_model(study: Path, models: Path, tmp_path: Path) -> None:
    """The folder's record knows its models; one that is meant to differ has to be put elsewhere, and is recorded."""
    shutil.copytree(models, tmp_path / "edited")
    file = tmp_path / "edited" / "payoff.json"
    document = json.loads(file.read_text(encoding="utf-8"))
    for gate in document["gates"]:
        gate.update(passed=True, remedy="")
    file.write_text(json.dumps(document), encoding="utf-8")
    done = stresskit("project", study, "--models", tmp_path / "edited", "--out", "edited", cwd=study.parent)
    assert done.returncode == 3
    assert "payoff.json is not the file that was written" in done.stderr
    assert not (study.parent / "edited").exists()
    with pytest.raises(TextError, match="changed after the fit"):
        read_models(tmp_path / "edited")
    assert set(read_models(tmp_path / "edited", untouched=False)) == {"default", "payoff"}
    (tmp_path / "edited" / "manifest.json").unlink()
    assert set(read_models(tmp_path / "edited")) == {"default", "payoff"}
    # a run folder keeps its models one level down
    inside = tmp_path / "run" / "models"
    inside.mkdir(parents=True)
    for f in (tmp_path / "edited").glob("*.json"):
        shutil.copy(f, inside)
    digests = {f"models/{n}.json": digest_file(models / f"{n}.json") for n in ("default", "payoff")}
    (tmp_path / "run" / "manifest.json").write_text(json.dumps({"outputs": digests}), encoding="utf-8")
    for place in (tmp_path / "run", inside):
        with pytest.raises(TextError, match="payoff"):
            read_models(place)
    shutil.copy(models / "payoff.json", inside)
    assert set(read_models(tmp_path / "run")) == {"default", "payoff"}


@pytest.mark.parametrize(
    ("accept", "words"),
    [
        ("{rank: we looked at it closely}", "rank"),
        ("{actual_expectd: we looked at it closely}", "did you mean 'actual_expected'"),
        ("{levels: ok}", "a reason in words, at least 10 characters"),
    ],
)
def test_what_cannot_be_accepted_is_an_error_of_the_text(study: Path, accept: str, words: str) -> None:
    rewrite(study, FAILING + f"    accept: {accept}\n")
    try:
        with pytest.raises(TextError) as caught:
            api.load_study(study)
    finally:
        rewrite(study, FAILING)
    assert words in str(caught.value)


def _fits(study: Path, *gates: Gate) -> tuple[api.StudyFile, dict[str, HazardFit]]:
    file = api.load_study(study)
    fits = {
        cause: HazardFit.from_json((study.parent / "models" / f"{cause}.json").read_text(encoding="utf-8"))
        for cause in ("default", "payoff")
    }
    return file, {cause: dataclasses.replace(f, gates=gates) for cause, f in fits.items()}


def test_a_model_saved_before_there_were_gates_needs_a_reason(study: Path, models: Path) -> None:
    file, fits = _fits(study, UNKNOWN)
    with pytest.raises(NumericError, match=r"gate recorded failed: .*format version 1"):
        refuse_failed(gate_table(file.study, fits))
    rewrite(study, FAILING + "    accept: {recorded: checked by hand in the old version}\n")
    try:
        file, fits = _fits(study, UNKNOWN)
    finally:
        rewrite(study, FAILING)
    with pytest.raises(NumericError, match="1 gates failed"):
        refuse_failed(
            gate_table(file.study, {**fits, "default": dataclasses.replace(fits["default"], gates=())})
        )
    passed = dataclasses.replace(UNKNOWN, name="levels", passed=True)
    verdicts = gate_table(
        file.study, {**fits, "default": dataclasses.replace(fits["default"], gates=(passed,))}
    )
    refuse_failed(verdicts)
    assert len(accepted_gates(verdicts)) == 1
    assert [g["accepted"] for g in gate_record(verdicts)] == ["", "checked by hand in the old version"]
