"""What is written: text that reads back to the same bits, all files or none, nothing overwritten unasked."""

from __future__ import annotations

import hashlib
import json
import os
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stresskit.core.errors import OutputError, TextError, UsageError
from stresskit.imports.api import import_table, write_import
from stresskit.imports.paths import ImportedPath
from stresskit.imports.text import quoted, scenario_text, values_by_year
from stresskit.runs import files
from stresskit.spec.load import load_import, load_scenario
from stresskit.spec.yaml import read_document
from tests.cli.small_study import write_small_study
from tests.imports.test_forms_by_hand import JOIN, changed
from tests.imports.world import MAPPING, TABLE, imported, put
from tests.program import stresskit

TWO = MAPPING.replace("  stress: {}", "  base: {}\n  stress: {}")
FULL = MAPPING.replace(
    "stress: {}",
    'stress:\n    title: "Stress: as published"\n    weight: 0.25\n    based_on: baseline\n'
    "    afterwards: {u: {revert_to: 5.5, over: 8}, hpi: hold}\n    notes: {edition: first, 'a: b': \"no\"}",
)


def test_the_whole_text(tmp_path):
    file = put(tmp_path, FULL)
    text = import_table(file).texts["stress"]
    table, mapping = (
        hashlib.sha256((tmp_path / n).read_bytes()).hexdigest() for n in ("table.csv", "mapping.yaml")
    )
    assert (
        text
        == f"""# Imported by stresskit from table.csv by the mapping supervisor.
# Rather than edit numbers here, change the table or the mapping and import again.
scenario: stress
title: "Stress: as published"
based_on: baseline
weight: 0.25
starts: 2026Q1

paths:
  u:  # percent, column 'Unemployment'
    values: [5.2, 5.4, 5.6, 5.5]  # 2026
  hpi:  # index, column 'Houses'
    values: [149.0, 147.5, 146.0, 145.0]  # 2026

afterwards:
  u: {{revert_to: 5.5, over: 8}}
  hpi: hold

notes:
  edition: first
  "a: b": "no"
  source: "table.csv"
  source sha256: {quoted(table)}
  mapping: supervisor
  mapping sha256: {quoted(mapping)}
"""
    )


def test_the_history_that_numbers_rest_on_is_recorded(tmp_path):
    join = MAPPING + "join: {file: join.csv}\n"
    spliced = join.replace("unit: index", "unit: index, splice: growth")
    text = import_table(put(tmp_path, spliced, join=JOIN)).texts["stress"]
    digest = hashlib.sha256((tmp_path / "join.csv").read_bytes()).hexdigest()
    assert f'  history joined: "join.csv"\n  history joined sha256: {quoted(digest)}\n' in text
    # as published, no number depends on it
    plain = import_table(
        put(tmp_path, join.replace("unit: index", "unit: index, splice: none"), join=JOIN)
    ).texts["stress"]
    assert "history joined" not in plain
    deviation = spliced.replace(
        "  stress: {}",
        "  base: {}\n  stress: {variables: {hpi: {column: Unemployment, unit: index, deviation_from: base, amounts: points}}}",
    )
    assert "history joined sha256" in import_table(put(tmp_path, deviation, join=JOIN)).texts["stress"]


def test_a_note_that_the_import_writes_itself_is_not_overwritten(tmp_path):
    mapping = MAPPING.replace("stress: {}", "stress: {notes: {source: the authority}}")
    with pytest.raises(
        TextError,
        match=r"scenarios\.stress\.notes\.source: the import writes 'source' itself; choose another name",
    ):
        import_table(put(tmp_path, mapping))


def test_rows_are_calendar_years(tmp_path):
    lines = list(values_by_year(np.arange(6.0), 4 * 2025 + 2, "quarter", indent=4))
    assert lines == [
        "    values: [0.0, 1.0,            # 2025",
        "             2.0, 3.0, 4.0, 5.0]  # 2026",
    ]


@settings(max_examples=150, deadline=None)
@given(
    st.lists(st.floats(allow_nan=False, allow_infinity=False), min_size=1, max_size=30),
    st.integers(min_value=0, max_value=4 * 9990),
)
def test_any_number_reads_back_to_the_same_bits(values, start):
    head = "\n".join(values_by_year(np.array(values), start, "quarter", indent=2))
    data = read_document(f"x:\n{head}\n".encode(), "t").data
    again = np.array(data["x"]["values"], dtype=np.float64)
    assert again.tobytes() == np.array(values).tobytes()


@settings(max_examples=200, deadline=None)
@given(st.text(min_size=1, max_size=60))
def test_any_text_is_read_as_text(text):
    data = read_document(f"x: {quoted(text)}\n".encode(), "t").data
    assert isinstance(data["x"], str)
    assert data["x"] == "".join(c if c.isprintable() else " " for c in " ".join(text.split()))


def test_a_loader_that_read_other_numbers_would_be_noticed(tmp_path, monkeypatch):
    """The check of the text against the numbers can fail: a text with one digit less is caught."""
    from stresskit.imports import api

    monkeypatch.setattr(
        api, "scenario_text", lambda path, loaded: scenario_text(path, loaded).replace("5.6", "5.5")
    )
    with pytest.raises(AssertionError, match=r"stress\.u"):
        import_table(put(tmp_path))


def test_columns_with_odd_names_do_not_break_out_of_comments(tmp_path):
    name = 'U # "x": [1]'
    table = TABLE.replace("Unemployment", '"U # ""x"": [1]"')
    result = import_table(put(tmp_path, MAPPING.replace("column: Unemployment", f"column: '{name}'"), table))
    file = tmp_path / "out.yaml"
    file.write_text(result.texts["stress"], encoding="utf-8")
    assert load_scenario(file).model.paths["u"].values == (5.2, 5.4, 5.6, 5.5)


def test_places(tmp_path):
    result = import_table(put(tmp_path, TWO))
    with pytest.raises(
        UsageError, match=r"one\.yaml is one file, and there are 2 scenarios \(base, stress\)"
    ):
        write_import(result, tmp_path / "one.yaml")
    with pytest.raises(UsageError, match=r"neither a folder nor a \.yaml file"):
        write_import(result, tmp_path / "table.csv")
    written = write_import(result, tmp_path / "new" / "scenarios", history=tmp_path / "new" / "macro.csv")
    assert [p.relative_to(tmp_path).as_posix() for p in written] == [
        "new/scenarios/base.yaml", "new/scenarios/stress.yaml", "new/macro.csv",
    ]  # fmt: skip
    assert sorted(p.name for p in (tmp_path / "new").rglob("*")) == [
        "base.yaml",
        "macro.csv",
        "scenarios",
        "stress.yaml",
    ]
    assert load_scenario(written[1]).model.paths["hpi"].values == (149.0, 147.5, 146.0, 145.0)


def test_nothing_is_overwritten_unless_asked_and_never_what_another_hand_wrote(tmp_path):
    result = import_table(put(tmp_path, TWO))
    out = tmp_path / "out"
    write_import(result, out)
    before = {p: p.read_bytes() for p in out.iterdir()}
    with pytest.raises(OutputError, match="exists already; choose another place, or add --replace"):
        write_import(result, out)
    write_import(result, out, replace=True)
    assert {p: p.read_bytes() for p in out.iterdir()} == before
    (out / "stress.yaml").write_text("scenario: stress\n", encoding="utf-8")
    (out / "base.yaml").unlink()
    with pytest.raises(OutputError, match="was not written by this command: it is left alone"):
        write_import(result, out, replace=True)
    assert [p.name for p in out.iterdir()] == ["stress.yaml"]
    with pytest.raises(OutputError, match=r"mapping\.yaml was not written by this command"):
        write_import(
            import_table(tmp_path / "mapping.yaml", scenarios=["base"]),
            tmp_path / "mapping.yaml",
            replace=True,
        )


def test_a_failure_half_way_leaves_what_was_there(tmp_path, monkeypatch):
    result = import_table(put(tmp_path, TWO))
    out = tmp_path / "out"
    real, calls = os.link, []

    def second_fails(a, b, **more):
        calls.append(b)
        if len(calls) == 2:
            raise OSError(28, "No space left on device", str(a), None, str(b))
        return real(a, b, **more)

    monkeypatch.setattr(files.os, "link", second_fails)
    with pytest.raises(
        OutputError, match=r"stress\.yaml failed: No space left on device; nothing was left there"
    ):
        write_import(result, out)
    assert len(calls) == 2
    assert list(out.iterdir()) == []

    monkeypatch.undo()
    write_import(result, out)
    older = {p: p.read_bytes() for p in out.iterdir()}
    newer = import_table(put(tmp_path, TWO, TABLE.replace("5.6", "5.7")))
    swap, count = Path.replace, []

    def second_replace_fails(self, target):
        count.append(target)
        if len(count) == 2:
            raise OSError(28, "No space left on device", str(self), None, str(target))
        return swap(self, target)

    monkeypatch.setattr(Path, "replace", second_replace_fails)
    with pytest.raises(OutputError, match="No space left on device"):
        write_import(newer, out, replace=True)
    assert {p: p.read_bytes() for p in out.iterdir()} == older


def test_a_file_that_appears_meanwhile_is_not_overwritten(tmp_path, monkeypatch):
    result = import_table(put(tmp_path))
    target = tmp_path / "out.yaml"
    real = files._written

    def slow(path, text):
        part = real(path, text)
        target.write_text("mine", encoding="utf-8")
        return part

    monkeypatch.setattr(files, "_written", slow)
    with pytest.raises(OutputError, match="appeared while this command was working"):
        write_import(result, target)
    assert target.read_text(encoding="utf-8") == "mine"


def test_a_file_system_without_links(tmp_path, monkeypatch):
    def no_links(a, b):
        raise OSError(1, "Operation not permitted", str(a), None, str(b))

    monkeypatch.setattr(files.os, "link", no_links)
    result = import_table(put(tmp_path, TWO))
    write_import(result, tmp_path / "out")
    assert sorted(p.name for p in (tmp_path / "out").iterdir()) == ["base.yaml", "stress.yaml"]


def test_one_place_for_two_things(tmp_path):
    result = import_table(put(tmp_path))
    with pytest.raises(UsageError, match="is named for a scenario and for the history"):
        write_import(result, tmp_path / "s.yaml", history=tmp_path / "." / "s.yaml")
    assert not (tmp_path / "s.yaml").exists()


def test_a_history_that_the_table_does_not_have(tmp_path):
    table = "Quarter,Unemployment,Houses\n2026 Q1,5.1,150\n2026 Q2,5.2,151\n"
    result = import_table(put(tmp_path, table=table))
    assert result.history is None
    with pytest.raises(UsageError, match="the table holds no history of levels"):
        write_import(result, tmp_path / "s.yaml", history=tmp_path / "h.csv")
    assert not (tmp_path / "s.yaml").exists()


def test_growth_is_no_history_of_levels(tmp_path):
    mapping = (
        changed(("unit: index", "unit: index, growth: per_period, amounts: percent"))
        + "join: {file: join.csv}\n"
    )
    table = "Quarter,Unemployment,Houses\n2025 Q4,5.0,1\n2026 Q1,5.1,1\n2026 Q2,5.2,2\n"
    result = import_table(put(tmp_path, mapping, table, join=JOIN))
    assert result.left_out == ("hpi",)
    assert result.history == "period,u\n2025Q4,5.0\n"


def test_an_imported_path_knows_its_sheets(tmp_path):
    path = import_table(put(tmp_path)).paths["stress"]
    assert isinstance(path, ImportedPath)
    assert [s.file for s in path.sheets] == ["table.csv"]
    assert load_import(tmp_path / "mapping.yaml").model.import_ == "supervisor"


# --- with a study, through the command


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_small_study(tmp_path_factory.mktemp("bank"))


def study_mapping(study: Path, folder: Path, *, unit: str = "percent") -> tuple[Path, str]:
    """A mapping whose table continues the study's own last value."""
    from stresskit.core.period import Frequency, format_period, parse_period
    from stresskit.imports.rows import first_projected
    from stresskit.spec.load import load_study

    model = load_study(study).model
    assert model.macro is not None
    variable = next(iter(model.macro.variables))
    calendar = "quarter" if "Q" in (study.parent / model.macro.file).read_text().splitlines()[1] else "month"
    first = first_projected(model.as_of, calendar)
    assert first is not None
    labels = [format_period(first + i, Frequency(calendar)) for i in range(6)]
    table = "Quarter,X\n" + "".join(f"{t},{5 + i / 10}\n" for i, t in enumerate(labels))
    mapping = (
        f"import: supervisor\ntable: table.csv\nperiod: Quarter\nas_of: {model.as_of}\n"
        f"variables: {{{variable}: {{column: X, unit: {unit}}}}}\nscenarios: {{published: {{}}}}\n"
    )
    assert parse_period(labels[0], Frequency(calendar)) == first
    return put(folder, mapping, table), variable


@pytest.mark.slow
def test_one_command_from_table_to_a_scenario_that_the_study_accepts(study, tmp_path):
    file, variable = study_mapping(study, tmp_path)
    done = stresskit("import", file, "--out", tmp_path / "s", "--study", study, "--json", cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    told = json.loads(done.stdout)
    assert [row["variable"] for row in told["variables"]] == [variable]
    assert (tmp_path / "s" / "published.yaml").is_file()
    again = stresskit("import", file, "--out", tmp_path / "s", cwd=tmp_path)
    assert again.returncode == 2
    assert "exists already" in again.stderr
    plain = stresskit(
        "import", file, "--out", tmp_path / "s", "--scenario", "published", "--replace", cwd=tmp_path
    )
    assert plain.returncode == 0, plain.stderr
    assert "as published" in plain.stdout
    assert plain.stdout.rstrip().endswith("published.yaml")


def test_an_older_scenario_of_the_study_does_not_stand_in_the_way_unless_it_is_needed(study, tmp_path):
    """The study's own files may still be of the last vintage when the new one is imported."""
    import shutil

    home = Path(shutil.copytree(study.parent, tmp_path / "bank"))
    old = home / "baseline.yaml"
    old.write_text(
        old.read_text(encoding="utf-8").replace("starts: 2021Q1", "starts: 2020Q1"), encoding="utf-8"
    )
    file, variable = study_mapping(home / "study.yaml", tmp_path)
    assert import_table(file, study=home / "study.yaml").texts
    back = file.read_text(encoding="utf-8").replace("published: {}", "published: {afterwards: baseline}")
    file.write_text(back, encoding="utf-8")
    with pytest.raises(TextError, match="stale vintage: scenario 'baseline' starts in 2020Q1"):
        import_table(file, study=home / "study.yaml")
    old.write_text(
        old.read_text(encoding="utf-8").replace("starts: 2020Q1", "starts: 2021Q1"), encoding="utf-8"
    )
    assert import_table(file, study=home / "study.yaml").paths["published"].values[variable].size == 6


def test_a_study_in_other_units_or_of_another_vintage(study, tmp_path):
    file, variable = study_mapping(study, tmp_path, unit="index")
    with pytest.raises(TextError, match=f"{variable} is in percent in the study, in index here"):
        import_table(file, study=study)
    text = (
        file.read_text(encoding="utf-8")
        .replace("as_of: 20", "as_of: 19")
        .replace("unit: index", "unit: percent")
    )
    file.write_text(text, encoding="utf-8")
    with pytest.raises(
        TextError, match=r"mapping\.yaml:4:1: as_of: the mapping's scenarios start in 19.*asks for 20"
    ):
        import_table(file, study=study)


RULES = (
    "hold",
    "baseline",
    "{revert_to: long_run_mean, over: 8}",
    "{revert_to: 0.045, half_life: 2.5, unit: fraction}",
    "{grow_by: 2%}",
    "{grow_by: -0.35%}",
    "{grow_by: 33.333333333333336%}",
    "{grow_by: long_run_mean}",
    "{back_to: mild}",
    "{back_to: mild, over: 4}",
    "{back_to: mild, half_life: 3.0}",
)


@pytest.mark.parametrize("rule", RULES)
def test_every_rule_for_afterwards_is_written_as_it_was_given(rule, tmp_path):
    mapping = MAPPING.replace("stress: {}", f"stress: {{afterwards: {{u: {rule}, hpi: {rule}}}}}")
    result = imported(tmp_path, mapping)
    file = tmp_path / "stress.yaml"
    file.write_text(result.texts["stress"], encoding="utf-8")
    assert load_scenario(file).model.afterwards == result.mapping.model.scenarios["stress"].afterwards
    assert f"  u: {rule}\n" in result.texts["stress"]


def test_what_the_committee_adds_is_in_the_file(tmp_path):
    said = "{severity: severe, author_role: scenario committee, approved_on: 2025-11-28, weighted: false, missing: conditional}"
    result = imported(tmp_path, MAPPING.replace("stress: {}", f"stress: {said}"))
    file = tmp_path / "stress.yaml"
    file.write_text(result.texts["stress"], encoding="utf-8")
    model = load_scenario(file).model
    assert (model.severity, model.author_role, model.approved_on) == (
        "severe",
        "scenario committee",
        "2025-11-28",
    )
    assert (model.weighted, model.weight, model.missing) == (False, None, "conditional")


def test_weighted_and_a_weight_are_not_both_given(tmp_path):
    put(tmp_path, MAPPING.replace("stress: {}", "stress: {weight: 0.5, weighted: false}"))
    with pytest.raises(TextError, match="a scenario that is not weighted has no weight"):
        import_table(tmp_path / "mapping.yaml")
