"""An analysis asked by itself comes out again from the options in its record; another option or byte is found."""

from __future__ import annotations

import hashlib
import json
import shutil
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import pytest

import stresskit as sk
from stresskit import cli
from stresskit.analyses.ask import add_analyses, options_of
from stresskit.analyses.files import digests_read
from stresskit.analyses.options import options_digest, options_record, recorded_options
from stresskit.core.errors import UsageError
from stresskit.report.analysis_folder import write_analysis
from stresskit.runs.api import checked_setting, project_setting
from stresskit.runs.manifest import check_outputs, read_manifest
from stresskit.spec.analyses import Analyses
from stresskit.spec.backtest import Backtest
from stresskit.spec.model_choice import ModelChoice
from tests.analyses.var_world import write_var_study
from tests.repeat.made import make_models

#: Key -> command with options that differ from the defaults, and one option to edit.
ASKED: Mapping[str, tuple[tuple[str, ...], tuple[str, Any]]] = {
    "attribution": (("explain", "--from", "baseline", "--no-matrix"), ("groups", {"rates": ["policy_rate"]})),
    "bands": (("bands", "--draws", "100", "--scenario", "slump"), ("seed", 7)),
    "reverse": (
        ("reverse", "--loss-rise", "20%", "--starts", "1", "--surface", "none"),
        ("loss_rise", "10%"),
    ),
    "model_choice": (("model-choice", "--scenario", "slump"), ("links", False)),
    "backtest": (("backtest", "--cutoff", "2019-12", "--steps", "8"), ("steps", 6)),
}
#: What a study says of analyses: the options of the commands go over it.
SECTION = """\
analyses:
  model_choice: {tails: false, lags: [], halves: false, without_last_years: []}
  bands: {source_draws: 0}
"""


def command(*words: str) -> None:
    with pytest.raises(SystemExit) as done:
        cli.main(list(words))
    assert done.value.code == 0


@pytest.fixture(scope="module")
def asked(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with study.yaml, its inputs, and a folder per analysis. Not to be changed."""
    folder = tmp_path_factory.mktemp("asked") / "book"
    folder.mkdir()
    study = write_var_study(folder, loans=300, more="horizon: 18\n" + SECTION)
    for key, (words, _) in ASKED.items():
        command(words[0], str(study), *words[1:], "--out", str(folder / key))
    return folder


@pytest.fixture
def book(asked: Path, tmp_path: Path) -> Path:
    """A copy that may be changed."""
    return Path(shutil.copytree(asked, tmp_path / "book"))


def edit(folder: Path, key: str, value: object, *, digest: bool) -> None:
    """Another value of an option in the record; ``digest``: with the digest that goes with it."""
    file = folder / "manifest.json"
    plain = json.loads(file.read_text(encoding="utf-8"))
    one = plain["asked"]["analysis"]
    one["options"][key] = value
    if digest:
        one["digest"] = options_digest(one["options"])
    file.write_text(json.dumps(plain), encoding="utf-8")


@pytest.mark.slow
@pytest.mark.parametrize("key", ASKED)
def test_every_analysis_comes_out_to_the_last_byte_and_an_edit_is_found(book: Path, key: str) -> None:
    folder = book / key
    # what the study says by now does not count
    (book / "study.yaml").unlink()
    outcome = sk.verify(folder)
    assert outcome.ok, outcome.sentence
    assert outcome.bitwise
    assert {f.status for f in outcome.files} == {"same bytes"}
    assert {f.file for f in outcome.files} == set(read_manifest(folder).outputs)
    edit(folder, *ASKED[key][1], digest=False)
    outcome = sk.verify(folder)
    assert not outcome.ok
    assert [c.words for c in outcome.changes if c.kind == "text"] == [
        "the options of the analysis in manifest.json were changed after the run: their sha256 is not the one beside them"
    ]
    assert outcome.failure == "manifest.json does not hold the options that were asked any more"
    # whoever writes the digest anew as well is found by the figures
    edit(folder, *ASKED[key][1], digest=True)
    outcome = sk.verify(folder)
    assert not outcome.ok
    assert not outcome.failure
    assert "report.html" in {f.file for f in outcome.moved}


def test_one_changed_byte_is_found(book: Path) -> None:
    file = book / "attribution" / "variables.csv"
    text = file.read_bytes()
    at = max(text.rfind(b"%d" % digit) for digit in range(9))
    file.write_bytes(text[:at] + bytes([text[at] + 1]) + text[at + 1 :])
    outcome = sk.verify(book / "attribution")
    assert not outcome.ok
    assert [f.file for f in outcome.moved] == ["variables.csv"]
    assert [c.words for c in outcome.changes] == [
        "output variables.csv was changed after the run: its sha256 is not the one in the record"
    ]


def test_the_record_keeps_every_option_those_of_the_command_over_the_study(asked: Path) -> None:
    for key in ASKED:
        recorded, spec = recorded_options(read_manifest(asked / key))
        kept = json.loads((asked / key / "manifest.json").read_text())["asked"]["analysis"]
        assert recorded == key
        assert set(kept["options"]) == {f.alias or n for n, f in type(spec).model_fields.items()}
        assert options_record(key, spec) == kept
    bands = recorded_options(read_manifest(asked / "bands"))[1]
    assert (bands.draws, bands.scenarios, bands.source_draws, bands.level) == (100, ("slump",), 0, 0.9)


@pytest.mark.parametrize(
    ("key", "section"),
    [
        ("attribution", {"from": "a", "groups": {"g": ["x", "y"]}, "matrix": False}),
        ("bands", {"tolerance": None, "precision": 0.1, "sources": ["lgd"], "lgd_se": 0.1}),
        ("reverse", {"capital": {"amount": 1e6, "ratio": "9%"}, "afterwards": {"x": {"revert_to": 5, "over": 4}}}),
        ("reverse", {"pd_12m": "8%", "segment": {"product": "fixed"}, "surface": ["x", "y"], "within": 3}),
        ("model_choice", {"weights": {"study": 2}, "out_of_time": 0, "lags": [-2, 2]}),
        ("backtest", {"cutoffs": ["2019-12"], "vintages": {"2019-12": "m.csv"}, "scenarios_then": {"2019-12": ["s.yaml"]}}),
    ],
)  # fmt: skip
def test_options_come_back_from_a_record_as_they_were(
    asked: Path, tmp_path: Path, key: str, section: Any
) -> None:
    spec = getattr(Analyses.model_validate_json(json.dumps({key: section})), key)
    place = shutil.copytree(asked / "attribution", tmp_path / "one")
    plain = json.loads((place / "manifest.json").read_text())
    plain["asked"]["analysis"] = options_record(key, spec)
    (place / "manifest.json").write_text(json.dumps(plain))
    assert recorded_options(read_manifest(place)) == (key, spec)


def test_models_that_were_given_and_a_what_if_belong_to_the_folder(book: Path) -> None:
    study, models = book / "study.yaml", make_models(book / "study.yaml", book / "models")
    out = book / "given"
    command(
        "explain", str(study), "--models", str(models), "--to", "what_if", "--no-matrix",
        "--what-if", "unemployment_rate + 4 over 4 quarters", "--out", str(out),
    )  # fmt: skip
    shutil.rmtree(models)
    record = read_manifest(out)
    assert record.models_given
    assert record.plain["models"]["digests"]["default"] == record.outputs["models/default.json"]
    assert not read_manifest(book / "attribution").models_given
    outcome = sk.verify(out, out=book / "again")
    assert outcome.ok, outcome.sentence
    assert check_outputs(read_manifest(book / "again")).sound
    assert read_manifest(book / "again").outputs == record.outputs
    shutil.rmtree(out / "models")
    assert sk.verify(out).failure == "the models that the run was given are not in its folder any more"


def test_a_folder_of_an_older_version_and_broken_options_are_refused(book: Path) -> None:
    folder = book / "backtest"
    file = folder / "manifest.json"

    def refused(asked_for: object) -> str:
        plain = json.loads(file.read_text())
        plain["asked"] = asked_for
        file.write_text(json.dumps(plain))
        with pytest.raises(UsageError) as caught:
            sk.verify(folder)
        return str(caught.value)

    one = options_record("backtest", options_of(sk.load_study(book / "study.yaml"), "backtest"))
    changed_by_hand = f"{file}: asked is not an object in which analysis has key, options and digest: it was changed by hand"
    assert refused({}) == (
        f"{folder} holds one analysis asked by itself, and its record does not keep the options it was asked with, as an older "
        "stresskit wrote it: ask it again, or name it under analyses in the study, run the study, and verify the run"
    )
    assert refused([]) == changed_by_hand
    assert refused({"analysis": one | {"options": "all"}}) == changed_by_hand
    assert refused({"analysis": one | {"options": {"steps": -1}}}).startswith(
        f"{file}: asked.analysis: backtest.steps: "
    )
    assert refused({"analysis": one | {"key": "holiday"}}).startswith(f"{file}: asked.analysis: holiday: ")


@pytest.mark.slow
def test_files_that_an_analysis_reads_are_inputs_of_the_folder_and_of_a_run(
    asked: Path, tmp_path: Path
) -> None:
    for name in ("study.yaml", "baseline.yaml", "slump.yaml", "loans.csv", "macro.csv"):
        shutil.copy(asked / name, tmp_path)
    shutil.copy(asked / "macro.csv", tmp_path / "macro_then.csv")
    study = tmp_path / "study.yaml"
    then = "analyses: {backtest: {cutoffs: [2019-12], steps: 6, vintages: {2019-12: macro_then.csv}}}\n"
    study.write_text(study.read_text().replace(SECTION, then))
    file = sk.load_study(study)
    data = sk.prepare(file)
    setting, _ = checked_setting(file, data, sk.fit(file, data))
    whole = add_analyses(project_setting(setting), setting)
    write_analysis(whole.analyses[0], setting, options_of(file, "backtest"), tmp_path / "alone", command=[])
    record = read_manifest(tmp_path / "alone")
    assert set(record.inputs) == {"loans.csv", "macro.csv", "macro_then.csv"}
    assert whole.record["inputs"] == record.inputs
    assert sk.verify(tmp_path / "alone").ok
    with (tmp_path / "macro_then.csv").open("a") as out:
        out.write("\n")
    outcome = sk.verify(tmp_path / "alone")
    assert not outcome.ok
    (said,) = [c.words for c in outcome.changes]
    assert said.startswith("input macro_then.csv was changed after the run: ")


def test_files_read_by_each_option(tmp_path: Path) -> None:
    for name in ("search.yaml", "s1/manifest.json", "s1/search.csv", "s1/report.html", "v.csv", "t/then.csv"):
        (tmp_path / name).parent.mkdir(exist_ok=True)
        (tmp_path / name).write_text(name)
    mapping = "scenario: then\ntable: then.csv\nperiod: at\nvariables: {unemployment_rate: u}\n"
    (tmp_path / "t/then.yaml").write_text(mapping)

    def read(spec: object) -> set[str]:
        return set(digests_read(spec, tmp_path))

    assert read(ModelChoice(search="search.yaml")) == {"search.yaml"}
    assert read(ModelChoice(search="s1")) == {"s1/manifest.json", "s1/search.csv"}
    assert read(ModelChoice(search="gone.yaml")) == read(ModelChoice()) == set()
    two = Backtest(
        cutoffs=("2019-12", "2018-12"),
        vintages={"2018-12": "v.csv"},
        scenarios_then={"2019-12": ("t/then.yaml", "gone.yaml")},
    )
    assert read(two) == {"v.csv", "t/then.yaml", "t/then.csv"}
    assert digests_read(two, tmp_path)["v.csv"] == hashlib.sha256(b"v.csv").hexdigest()


def test_compare_says_what_it_takes(asked: Path) -> None:
    with pytest.raises(
        UsageError,
        match="holds the results of kind 'analysis': compare takes folders that run, project or demo wrote; name the analysis under analyses in the study and run it",
    ):
        sk.compare(asked / "bands", asked / "bands")
