"""Two runs side by side: every kind of difference is found, and the steps of the loss add up."""

from __future__ import annotations

import json
import re
import shutil
from pathlib import Path

import pandas as pd
import pytest

import stresskit as sk
from stresskit import cli
from stresskit.core.errors import UsageError
from stresskit.repeat.compare import Comparison
from tests.repeat.made import make_models, make_run


def change(book: Path, file: str, old: str, new: str) -> None:
    text = (book / file).read_text()
    assert old in text
    (book / file).write_text(text.replace(old, new))


@pytest.fixture(scope="module")
def changed(kept: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The same book with fewer loans, another LGD, a harder slump and another macro value."""
    book = Path(shutil.copytree(kept, tmp_path_factory.mktemp("changed") / "book"))
    panel = pd.read_csv(book / "loans.csv")
    panel[panel["id"] >= "L0010"].to_csv(book / "loans.csv", index=False)
    change(book, "study.yaml", "fixed: 0.3,", "fixed: 0.35,")
    change(book, "slump.yaml", "3.5, 3.0", "4.5, 3.0")
    make_run(book / "study.yaml", book / "run2")
    return book


@pytest.fixture(scope="module")
def found(kept: Path, changed: Path) -> Comparison:
    return sk.compare(kept / "run", changed / "run2")


def steps(found: Comparison, scenario: str, measure: str = "el_lifetime") -> dict[str, float]:
    table = found.tables["bridge"]
    mine = table[(table["scenario"] == scenario) & (table["segment"] == "portfolio")]
    return dict(zip(mine["what"], mine[measure], strict=True))


def test_a_run_and_itself(kept: Path) -> None:
    found = sk.compare(kept / "run", kept / "run")
    assert found.same
    assert found.texts == {}
    assert sum(found.differing.values()) == 0
    assert found.sentence == (
        "No difference: inputs, texts, versions, scenario values, coefficients and losses are the same."
    )
    assert steps(found, "slump")["run a"] == steps(found, "slump")["run b"]


def test_every_table_says_what_changed(found: Comparison, kept: Path) -> None:
    assert not found.same
    t = {name: table[table["differs"]] for name, table in found.tables.items() if "differs" in table}
    assert t["facts"].empty
    assert t["inputs"][["file", "how"]].values.tolist() == [["loans.csv", "changed"]]
    used = t["reconciliation"].set_index("what").loc["used"]
    assert (used["loans_a"], used["loans_b"], used["loans_change"]) == (200, 190, -10)
    (path,) = t["scenario_values"].to_dict("records")
    assert (path["scenario"], path["variable"], path["period"]) == ("slump", "unemployment_rate", "2021Q4")
    assert path["largest_change"] == pytest.approx(1.0)
    assert set(t["coefficients"]["cause"]) == {"default", "payoff"}
    row = t["coefficients"].iloc[0]
    assert row["z"] == pytest.approx(row["change"] / (row["se_a"] ** 2 + row["se_b"] ** 2) ** 0.5)
    own = pd.read_csv(kept / "run" / "summary.csv", keep_default_na=False, float_precision="round_trip")
    assert t["losses"]["el_lifetime_a"].tolist() == pytest.approx(own["el_lifetime"].tolist(), rel=0, abs=0)
    assert set(found.texts) == {"study", "scenario slump"}
    assert "-  lgd: {by: product, values: {fixed: 0.3, floating: 0.45}}" in found.texts["study"]
    assert "+  lgd: {by: product, values: {fixed: 0.35, floating: 0.45}}" in found.texts["study"]
    assert found.sentence.startswith(
        "The runs differ in texts, inputs, reconciliation, scenario values, coefficients and losses. Under "
    )


def test_the_steps_add_up_and_stand_in_their_order(found: Comparison) -> None:
    assert found.bridge is not None
    assert found.bridge.steps == ("inputs", "models", "scenarios", "rest of the study")
    table = found.tables["bridge"]
    for _, part in table.groupby(["scenario", "by", "segment"]):
        assert part["what"].tolist() == ["run a", *found.bridge.steps, "run b"]
        for m in ("el_12m", "el_lifetime"):
            values = part[m].tolist()
            assert sum(values[:-1]) == pytest.approx(values[-1], rel=1e-13)
    assert steps(found, "baseline")["scenarios"] == 0.0
    assert steps(found, "slump")["scenarios"] > 0.0
    assert steps(found, "slump")["rest of the study"] > 0.0


def test_a_step_is_what_a_run_with_that_change_alone_gives(
    kept: Path, changed: Path, found: Comparison, tmp_path: Path
) -> None:
    """By hand: the loans of b with the models, scenarios and LGD of a, through the ordinary calls."""
    book = Path(shutil.copytree(kept, tmp_path / "mixed"))
    models = make_models(book / "study.yaml", tmp_path / "models")
    shutil.copy(changed / "loans.csv", book / "loans.csv")
    mixed = pd.read_csv(
        make_run(book / "study.yaml", book / "mixed", models=models) / "summary.csv", keep_default_na=False
    )
    whole = mixed[mixed["segment"] == "portfolio"].set_index("scenario")["el_lifetime"]
    for scenario in ("baseline", "slump"):
        told = steps(found, scenario)
        assert told["run a"] + told["inputs"] == pytest.approx(whole[scenario], rel=1e-13)


def test_one_change_alone_is_all_of_the_difference(kept: Path, tmp_path: Path) -> None:
    book = Path(shutil.copytree(kept, tmp_path / "book"))
    change(book, "slump.yaml", "3.5, 3.0", "4.5, 3.0")
    found = sk.compare(kept / "run", make_run(book / "study.yaml", book / "run2"))
    assert found.bridge is not None
    assert found.bridge.steps == ("scenarios",)
    told = steps(found, "slump")
    assert told["scenarios"] == told["run b"] - told["run a"]


def test_another_date_joins_inputs_and_scenarios(kept: Path, tmp_path: Path) -> None:
    """Scenarios of one date do not fit another: book and scenarios are then one step, and it is said why."""
    book = Path(shutil.copytree(kept, tmp_path / "book"))
    panel = pd.read_csv(book / "loans.csv")
    panel[panel["month"] <= "2020-09"].to_csv(book / "loans.csv", index=False)
    change(book, "study.yaml", "as_of: 2020-12", "as_of: 2020-09")
    for name in ("baseline.yaml", "slump.yaml"):
        change(book, name, "starts: 2021Q1", "starts: 2020Q4")
    found = sk.compare(make_run(book / "study.yaml", book / "earlier"), kept / "run")
    assert found.bridge is not None
    assert found.bridge.steps == ("inputs and scenarios", "models")
    assert found.bridge.joined.startswith("inputs and scenarios could not be told apart: ")
    told = steps(found, "slump")
    assert told["run a"] + told["inputs and scenarios"] + told["models"] == pytest.approx(
        told["run b"], rel=1e-13
    )
    assert found.as_of == ("2020-09", "2020-12")


def test_without_the_inputs_there_are_tables_only(kept: Path, changed: Path, tmp_path: Path) -> None:
    alone = Path(shutil.copytree(changed / "run2", tmp_path / "alone" / "run2"))
    found = sk.compare(kept / "run", alone)
    assert found.bridge is None
    assert found.no_bridge == (
        f"inputs of run b are not at hand as they were: loans.csv is missing in {alone.parents[1]} "
        "(name the folder that holds them with --inputs-b)"
    ).replace(str(alone.parents[1]), str((alone / "..").resolve()))
    assert found.differing["losses"] > 0
    assert sk.compare(kept / "run", alone, inputs_b=changed).bridge is not None
    asked = sk.compare(kept / "run", alone, bridge=False)
    assert asked.no_bridge == "not asked for"


def test_an_edited_run_is_told_and_not_split(kept: Path, changed: Path, tmp_path: Path) -> None:
    book = Path(shutil.copytree(changed, tmp_path / "book"))
    file = book / "run2" / "summary.csv"
    file.write_text(file.read_text() + "\n")
    found = sk.compare(kept / "run", book / "run2")
    assert found.no_bridge == "summary.csv of run b was changed after the run"
    assert found.cautions[0].startswith("Files of run b were changed after the run (1, first summary.csv)")


def test_a_scenario_of_one_run_alone(kept: Path, tmp_path: Path) -> None:
    book = Path(shutil.copytree(kept, tmp_path / "book"))
    run = make_run(book / "study.yaml", book / "shocked", what_if="unemployment_rate + 2")
    found = sk.compare(kept / "run", run)
    assert found.texts == {"scenario what_if (only in b)": ""}
    losses = found.tables["losses"]
    only = losses[losses["scenario"] == "what_if"]
    assert only["differs"].all()
    assert only["el_lifetime_a"].isna().all()
    assert set(found.tables["bridge"]["scenario"]) == {"baseline", "slump", "weighted"}


def test_other_folders_are_refused(kept: Path, tmp_path: Path) -> None:
    models = make_models(kept / "study.yaml", tmp_path / "models")
    with pytest.raises(
        UsageError, match="holds the results of kind 'models': compare takes folders that run, project"
    ):
        sk.compare(kept / "run", models)
    with pytest.raises(UsageError, match="is not a run folder"):
        sk.compare(kept, kept / "run")


def test_the_command_writes_tables_and_an_offline_page(
    kept: Path, changed: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    out = tmp_path / "change"
    with pytest.raises(SystemExit) as done:
        cli.main(["compare", str(kept / "run"), str(changed / "run2"), "--out", str(out)])
    assert done.value.code == 0
    told = capsys.readouterr().out
    for words in (
        "Reconciliation",
        "Coefficients",
        "Expected loss of the whole book",
        "Expected loss by product",
        "200 → 190",
    ):
        assert words in told
    assert {f.name for f in out.iterdir()} == {
        "report.html", "texts.diff", "bridge.csv", "facts.csv", "inputs.csv", "losses.csv", "reconciliation.csv",
        "scenario_values.csv", "coefficients.csv",
    }  # fmt: skip
    page = (out / "report.html").read_text()
    assert "<script" not in page
    assert not re.search(r"""(?:src|href)=["']?(?:https?:)?//""", page)
    assert page.count("<svg") >= 2
    assert "fixed: 0.35" in page
    assert pd.read_csv(out / "bridge.csv", keep_default_na=False)["what"].iloc[0] == "run a"
    with pytest.raises(SystemExit) as done:
        cli.main(["compare", str(kept / "run"), str(kept / "run"), "--json", "--no-bridge"])
    assert done.value.code == 0
    assert json.loads(capsys.readouterr().out)["same"] is True
