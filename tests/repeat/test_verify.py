"""A run comes out again from its own record; what does not is said, by figure and by cause."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import stresskit as sk
from stresskit import cli
from stresskit.core.errors import OutputError, UsageError
from stresskit.demo.bank import write_demo
from stresskit.repeat.verify import Verification
from stresskit.runs.manifest import check_outputs, read_manifest
from tests.cli.small_study import write_small_study
from tests.repeat.made import make_models, make_run


def edit(run: Path, change: Callable[[dict[str, Any]], None]) -> None:
    """Change manifest.json."""
    file = run / "manifest.json"
    plain = json.loads(file.read_text(encoding="utf-8"))
    change(plain)
    file.write_text(json.dumps(plain), encoding="utf-8")


def words(outcome: Verification, kind: str) -> list[str]:
    return [c.words for c in outcome.changes if c.kind == kind]


def test_a_fresh_run_comes_out_to_the_last_byte(kept: Path) -> None:
    outcome = sk.verify(kept / "run")
    assert outcome.ok
    assert outcome.bitwise
    assert outcome.changes == ()
    assert {f.status for f in outcome.files} == {"same bytes"}
    assert {f.file for f in outcome.files} == set(read_manifest(kept / "run").outputs)
    assert outcome.sentence == f"It comes out: all {len(outcome.files)} files have the same bytes."


@pytest.mark.slow
def test_the_demo_comes_out_with_evidence_moving_columns_and_recovery(tmp_path: Path) -> None:
    """Also after the whole folder was moved, and with a caution about a file of somebody else's."""
    study = write_demo(tmp_path / "bank", loans=1500)
    make_run(study, study.parent / "run", evidence=True)
    moved = tmp_path / "archive"
    study.parent.rename(moved)
    (moved / "run" / "notes.txt").write_text("looked at")
    outcome = sk.verify(moved / "run")
    assert outcome.ok, outcome.sentence
    assert {f.status for f in outcome.files} == {"same bytes"}
    assert {"evidence/verdicts.csv", "recovery/curves.csv", "plausibility/pairs.csv", "years.csv"} <= {
        f.file for f in outcome.files
    }
    assert words(outcome, "output") == ["file notes.txt was not written by the run: it is not looked at"]


def test_a_changed_input_is_named_with_what_moved(book: Path) -> None:
    before = read_manifest(book / "run").inputs["macro.csv"]
    table = pd.read_csv(book / "macro.csv")
    table.loc[table["period"] == "2020Q4", "unemployment_rate"] += 0.5
    table.to_csv(book / "macro.csv", index=False)
    outcome = sk.verify(book / "run")
    assert not outcome.ok
    (said,) = words(outcome, "input")
    assert said.startswith(f"input macro.csv was changed after the run: sha256 {before[:12]} then, ")
    moved = {f.file: f for f in outcome.moved}
    assert {"summary.csv", "paths.csv", "report.html", "results.xlsx"} <= set(moved)
    first = moved["paths.csv"].first[0]
    assert (first.row, first.column) == ("history / unemployment_rate / 2020Q4", "value")
    assert float(first.after) == pytest.approx(float(first.before) + 0.5)
    assert first.relative == pytest.approx(0.5 / float(first.after))
    # summary.csv stands first: it is what was signed
    assert outcome.files[0].file == "summary.csv"
    assert outcome.sentence.startswith("It does not come out: ")


def test_a_changed_input_that_moves_nothing_is_still_said(book: Path) -> None:
    with (book / "macro.csv").open("a") as f:
        f.write("\n")
    outcome = sk.verify(book / "run")
    assert not outcome.ok
    moved = {f.file for f in outcome.moved}
    assert moved == {"report.html", "results.xlsx"}, "they show the digest of the input"


def test_a_missing_input_is_named_and_may_lie_elsewhere(book: Path, tmp_path: Path) -> None:
    other = tmp_path / "archive"
    other.mkdir()
    (book / "loans.csv").rename(other / "loans.csv")
    shutil.copy(book / "macro.csv", other)
    outcome = sk.verify(book / "run")
    assert not outcome.ok
    assert words(outcome, "input") == [
        f"input loans.csv is missing: there is no {book / 'loans.csv'}; name the folder that holds the inputs now with --inputs"
    ]
    assert outcome.sentence == "It could not be made again: 1 of 2 input files are missing"
    assert outcome.files == ()
    assert sk.verify(book / "run", inputs=other).ok
    with pytest.raises(UsageError, match=r"--inputs: .*nowhere is not a folder"):
        sk.verify(book / "run", inputs=tmp_path / "nowhere")


def test_a_run_folder_elsewhere_needs_the_inputs_named(book: Path, tmp_path: Path) -> None:
    alone = tmp_path / "far" / "away" / "run"
    shutil.copytree(book / "run", alone)
    assert sk.verify(alone).failure == "2 of 2 input files are missing"
    assert sk.verify(alone, inputs=book).ok


def test_an_edited_output_is_named_with_the_figure(book: Path) -> None:
    file = book / "run" / "summary.csv"
    table = pd.read_csv(file, dtype=str, keep_default_na=False)
    at = table.index[(table["scenario"] == "slump") & (table["segment"] == "fixed")][0]
    right = float(table.loc[at, "el_lifetime"])
    table.loc[at, "el_lifetime"] = repr(right - 1000.0)
    table.to_csv(file, index=False)
    outcome = sk.verify(book / "run")
    assert not outcome.ok
    assert words(outcome, "output") == [
        "output summary.csv was changed after the run: its sha256 is not the one in the record"
    ]
    (one,) = outcome.moved
    assert one.count == 1
    assert (one.first[0].file, one.first[0].row, one.first[0].column) == (
        "summary.csv", "slump / product / fixed", "el_lifetime",
    )  # fmt: skip
    assert float(one.first[0].after) == right
    assert outcome.sentence == f"It does not come out: 1 differences in 1 of {len(outcome.files)} files."


def test_a_missing_output_is_named(book: Path) -> None:
    (book / "run" / "report.html").unlink()
    outcome = sk.verify(book / "run")
    assert not outcome.ok
    assert words(outcome, "output") == ["output report.html is missing from the folder"]


@pytest.mark.parametrize(
    ("name", "content"), [("loans.parquet", b"PAR1"), ("results.xlsx", b"x"), ("models/default.json", b"{")]
)
def test_an_output_that_is_broken_is_named(book: Path, name: str, content: bytes) -> None:
    (book / "run" / name).write_bytes(content)
    outcome = sk.verify(book / "run")
    assert not outcome.ok
    assert [f.file for f in outcome.moved] == [name]


def test_a_changed_text_of_the_record_is_named(book: Path) -> None:
    edit(book / "run", lambda m: m.update(study_text=m["study_text"].replace("fixed: 0.3", "fixed: 0.2")))
    outcome = sk.verify(book / "run")
    assert not outcome.ok
    assert words(outcome, "text") == [
        "the text of the study in manifest.json was changed after the run: its sha256 is not the one beside it"
    ]
    assert outcome.failure == "manifest.json does not hold the texts that were run any more"


def test_a_changed_scenario_of_the_record_is_named(book: Path) -> None:
    edit(book / "run", lambda m: m["scenarios"][1].update(text=m["scenarios"][1]["text"] + "\n"))
    outcome = sk.verify(book / "run")
    assert not outcome.ok
    assert words(outcome, "text") == [
        "the text of scenario slump in manifest.json was changed after the run: its sha256 is not the one beside it"
    ]


def test_files_changed_beside_the_inputs_are_told_and_the_kept_text_is_run(book: Path) -> None:
    study = book / "study.yaml"
    study.write_text(study.read_text().replace("fixed: 0.3", "fixed: 0.2"))
    (book / "slump.yaml").write_text("scenario: other")
    outcome = sk.verify(book / "run")
    assert outcome.ok
    assert words(outcome, "text") == [
        "study.yaml was changed after the run; the text of the study as it was then was run again",
        "slump.yaml was changed after the run; the text of the scenario slump as it was then was run again",
    ]


def test_study_and_scenario_files_may_be_gone(book: Path) -> None:
    for name in ("study.yaml", "baseline.yaml", "slump.yaml"):
        (book / name).unlink()
    outcome = sk.verify(book / "run")
    assert outcome.ok
    assert outcome.changes == ()


def test_another_version_is_named_and_the_tolerance_holds(book: Path) -> None:
    """The record says another numpy: bytes need not agree then, and the reports are compared without it."""
    edit(book / "run", lambda m: m["versions"].update(numpy="1.0.0"))
    outcome = sk.verify(book / "run")
    assert not outcome.bitwise
    (said,) = words(outcome, "version")
    assert said.startswith("numpy 1.0.0 at the run, ")
    # only the record of the report was made with the real version
    assert {f.file for f in outcome.files if f.status != "same bytes"} == {"report.html", "results.xlsx"}


def test_a_build_that_differs_is_named(book: Path) -> None:
    def change(m: dict[str, Any]) -> None:
        m["build"]["code"] = "0" * 64
        m["build"]["cpu"] = ["OTHER"]
        m["build"]["threads"] = {"processors": 99}

    edit(book / "run", change)
    outcome = sk.verify(book / "run")
    said = words(outcome, "version")
    assert len(said) == 2
    assert said[0].startswith("stresskit's own code: sha256 000000000000 at the run, ")
    assert said[1].startswith("instruction sets of the processor: OTHER at the run, ")
    assert outcome.ok
    assert not outcome.bitwise


def test_models_that_were_given_are_inputs(book: Path) -> None:
    models = make_models(book / "study.yaml", book / "models")
    run = make_run(book / "study.yaml", book / "projected", models=models)
    shutil.rmtree(models)
    record = read_manifest(run)
    assert record.models_given
    assert set(record.plain["models"]["digests"]) == {"default", "payoff"}
    assert record.plain["models"]["digests"]["default"] == record.outputs["models/default.json"]
    assert sk.verify(run).ok
    model = run / "models" / "default.json"
    plain = json.loads(model.read_text())
    plain["coefficients"][0] += 0.1
    model.write_text(json.dumps(plain))
    outcome = sk.verify(run)
    assert not outcome.ok
    assert words(outcome, "output")[0].startswith("output models/default.json was changed after the run")
    assert "summary.csv" in {f.file for f in outcome.moved}
    shutil.rmtree(run / "models")
    assert sk.verify(run).failure == "the models that the run was given are not in its folder any more"


def test_other_folders_of_results_come_out_too(book: Path) -> None:
    assert sk.verify(make_models(book / "study.yaml", book / "models")).ok


def test_a_what_if_is_run_again(book: Path) -> None:
    run = make_run(book / "study.yaml", book / "shocked", what_if="unemployment_rate + 4 over 4 quarters")
    kept = read_manifest(run).scenarios[-1]
    assert kept.what_if == ("unemployment_rate + 4 over 4 quarters",)
    outcome = sk.verify(run)
    assert outcome.ok
    assert "scenarios/what_if.yaml" in {f.file for f in outcome.files}


def test_tables_from_memory_cannot_be_read_again(book: Path) -> None:
    file = sk.load_study(book / "study.yaml")
    data = sk.prepare(file, loans=pd.read_csv(book / "loans.csv"))
    fits = sk.fit(file, data)
    run = sk.write_run(sk.project(file, data, fits), fits, book / "frame")
    outcome = sk.verify(run)
    assert not outcome.ok
    assert outcome.failure == (
        "loans came from memory, not from files, when the run was made: there is nothing to read it from. "
        "Save it beside the study, name it there, and run again"
    )


def test_a_file_that_the_pattern_finds_now_is_named(book: Path) -> None:
    study = book / "study.yaml"
    study.write_text(study.read_text().replace("file: loans.csv", "file: parts/*.csv"))
    panel = pd.read_csv(book / "loans.csv")
    (book / "parts").mkdir()
    early = panel["id"] < "L0150"
    panel[early].to_csv(book / "parts" / "1.csv", index=False)
    run = make_run(study, book / "parted")
    assert sk.verify(run).ok
    panel[~early].to_csv(book / "parts" / "2.csv", index=False)
    outcome = sk.verify(run)
    assert not outcome.ok
    assert words(outcome, "input") == [
        "input parts/2.csv is new: the study's pattern finds it now, and did not at the run"
    ]


def test_an_input_that_cannot_be_read_any_more(book: Path) -> None:
    (book / "macro.csv").write_text("period,unemployment_rate\n2020Q1,5\n")
    outcome = sk.verify(book / "run")
    assert not outcome.ok
    assert outcome.sentence.startswith("It could not be made again: ")
    assert words(outcome, "input")[0].startswith("input macro.csv was changed")


def test_folders_that_are_no_runs(book: Path, tmp_path: Path) -> None:
    def said(place: Path) -> str:
        with pytest.raises(UsageError) as caught:
            sk.verify(place)
        return str(caught.value)

    assert (
        said(book / "no") == f"{book / 'no'} is not a folder: name a run folder, as `stresskit run` writes it"
    )
    assert said(book) == f"{book} is not a run folder: it has no manifest.json"
    other = tmp_path / "other"
    other.mkdir()
    (other / "manifest.json").write_text('{"name": "extension"}')
    assert said(other) == f"{other} is not a run folder: its manifest.json was not written by stresskit"
    (other / "manifest.json").write_text("{")
    assert said(other).startswith(f"{other} is not a run folder: manifest.json cannot be read (")
    file = book / "run" / "manifest.json"
    edit(book / "run", lambda m: m.update(format=1))
    assert said(book / "run") == (
        f"{file} has format 1, and this stresskit reads 2: it was written by an older stresskit and does not say where the "
        "inputs lay; run the study again"
    )
    edit(book / "run", lambda m: m.update(format=3))
    assert said(book / "run").endswith("reads 2: it was written by a newer stresskit; use that one")
    edit(book / "run", lambda m: m.update(format=2, inputs=[]))
    assert said(book / "run") == f"{file}: inputs is a list, expected a dict: it was changed by hand"
    edit(book / "run", lambda m: m.update(inputs={}, kind="holiday"))
    assert "kind is 'holiday', expected one of run, models" in said(book / "run")
    edit(book / "run", lambda m: m.update(kind="run", scenarios=[1]))
    assert "scenarios is not a list of names" in said(book / "run")
    edit(book / "run", lambda m: m.update(scenarios=[], place={"inputs": None}))
    assert said(book / "run").endswith("does not say where its inputs lay; name their folder with --inputs")
    edit(book / "run", lambda m: m.update(kind="analysis"))
    assert "holds one analysis asked by itself" in said(book / "run")


def test_the_command_line(book: Path, capsys: pytest.CaptureFixture[str]) -> None:
    def command(*given: str) -> tuple[int, str, str]:
        with pytest.raises(SystemExit) as done:
            cli.main(list(given))
        assert isinstance(done.value.code, int)
        told = capsys.readouterr()
        return done.value.code, told.out, told.err

    run = str(book / "run")
    code, out, err = command("verify", run, "--out", str(book / "again"))
    assert (code, err) == (0, "")
    assert "Versions  as at the run: bytes must agree" in out
    assert out.rstrip().endswith("files have the same bytes.")
    assert check_outputs(read_manifest(book / "again")).sound
    assert read_manifest(book / "again").outputs == read_manifest(book / "run").outputs
    assert command("verify", run, "--out", str(book / "again"))[0] == 2
    with pytest.raises(OutputError, match="exists already"):
        sk.verify(run, out=book / "again")
    file = book / "run" / "summary.csv"
    file.write_text(file.read_text().replace("slump", "slumb"))
    code, out, err = command("verify", run)
    assert code == 6
    assert "! output summary.csv was changed after the run" in out
    assert "What moved: " in out
    assert err == f"stresskit: {run} does not come out\n"
    code, out, _ = command("verify", run, "--json")
    assert code == 6
    told = json.loads(out)
    assert told["ok"] is False
    assert told["changes"][0]["kind"] == "output"
    assert told["files"][0]["file"] == "summary.csv"
    assert told["files"][0]["differences"] > 0
    assert command("verify", str(book))[0] == 2


def test_a_long_loan_table_is_compared_group_by_group(book: Path) -> None:
    """A figure in the last row group is found, and the row is named."""
    file = book / "run" / "loans.parquet"
    table = pq.read_table(file)
    frame = table.to_pandas()
    frame.loc[len(frame) - 1, "pd_lifetime"] *= 1.0 + 1e-12
    with pq.ParquetWriter(file, table.schema) as writer:
        for start in range(0, len(frame), 100):
            writer.write_table(
                pa.Table.from_pandas(
                    frame.iloc[start : start + 100], schema=table.schema, preserve_index=False
                )
            )
    outcome = sk.verify(book / "run")
    (one,) = outcome.moved
    assert one.count == 1
    last = frame.iloc[-1]
    assert one.first[0].row == f"{last['scenario']} / {last['loan']}"
    assert one.first[0].relative == pytest.approx(1e-12, rel=1e-3)


def test_another_study_in_the_same_place_does_not_come_out(book: Path, tmp_path: Path) -> None:
    """Inputs of another bank under the same names: both files are named."""
    other = tmp_path / "other"
    other.mkdir()
    write_small_study(other, loans=120)
    outcome = sk.verify(book / "run", inputs=other)
    assert [c.what for c in outcome.changes if c.kind == "input"] == ["loans.csv"]
    assert not outcome.ok
