"""`stresskit new`: the folder runs at once, every switched-off key is valid, and columns are guessed or left to name."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from pathlib import Path

import pandas as pd
import pytest

from stresskit.cli import main
from stresskit.core.errors import DataError, OutputError
from stresskit.demo.bank import write_demo
from stresskit.runs.api import load_study, prepare
from stresskit.spec.load import load_scenario
from stresskit.starter.write import Started, start
from tests.shared_inputs import shared


@pytest.fixture(scope="module")
def fresh(tmp_path_factory: pytest.TempPathFactory) -> Started:
    return start(tmp_path_factory.mktemp("fresh") / "first")


def switched_on(text: str) -> Iterator[tuple[str, str]]:
    """The text with one of its switched-off keys in use, for each of them."""
    for found in re.finditer(r"^( *)#(?=[a-z_]+:)", text, re.MULTILINE):
        changed = text[: found.start()] + found[1] + text[found.end() :]
        yield changed[found.start() :].splitlines()[0].strip(), changed


def test_the_fresh_folder_runs_at_once(fresh: Started, capsys: pytest.CaptureFixture[str]) -> None:
    out = fresh.study.parent / "run1"
    with pytest.raises(SystemExit) as ended:
        main(["run", str(fresh.study), "--out", str(out), "--no-evidence", "--json"])
    assert ended.value.code == 0
    rows = {
        r["scenario"]: r
        for r in json.loads(capsys.readouterr().out)["summary"]
        if r["segment"] == "portfolio"
    }
    assert rows["adverse"]["el_lifetime"] > 1.1 * rows["baseline"]["el_lifetime"] > 0
    assert (out / "results.xlsx").is_file()
    text = (out / "coefficients.csv").read_text()
    assert "unemployment_change" in text


def test_nothing_of_the_fresh_study_needs_a_remedy(fresh: Started) -> None:
    data = prepare(load_study(fresh.study))
    table = data.loans.reconciliation
    assert table.loc[table["what"] == "used", "events_default"].sum() > 30
    assert fresh.to_name == ()


def test_every_switched_off_key_is_valid(fresh: Started) -> None:
    text = fresh.study.read_text()
    tried = []
    for k, (line, changed) in enumerate(switched_on(text)):
        tried.append(line.split(":")[0])
        other = fresh.study.parent / f"on{k}.yaml"
        other.write_text(changed)
        assert load_study(other).study.study == "first-study", line
    assert {
        "portfolio",
        "horizon",
        "years",
        "staging",
        "capital",
        "adjustments",
        "moving",
        "var",
        "timing",
    } <= set(tried)


def test_every_key_in_use_is_explained(fresh: Started) -> None:
    """A comment behind it, above it or above its group."""
    lines = fresh.study.read_text().splitlines()
    explained, bare = False, []
    for line in lines:
        if not line.strip():
            explained = False
        elif line.lstrip().startswith("# ") or " # " in line:
            explained = True
        elif not explained and not line.rstrip().endswith(":"):
            bare.append(line)
    assert bare == []


def test_never_overwrites(tmp_path: Path) -> None:
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine" / "study.yaml").write_text("study: mine\n")
    with pytest.raises(OutputError, match="not empty: nothing was written"):
        start(tmp_path / "mine")
    assert [f.name for f in (tmp_path / "mine").iterdir()] == ["study.yaml"]
    (tmp_path / "empty").mkdir()
    assert start(tmp_path / "empty").study.is_file()


def fill_macro(folder: Path) -> None:
    """Values into the table that a person would fill."""
    table = pd.read_csv(folder / "macro.csv", dtype=str)
    table["unemployment_rate"] = [f"{5 + (k % 8) / 4:g}" for k in range(len(table))]
    table["house_price_index"] = [f"{100 + k % 11 + k / 2:g}" for k in range(len(table))]
    table.to_csv(folder / "macro.csv", index=False)


def test_guess_of_the_demo_panel(tmp_path: Path) -> None:
    write_demo(tmp_path / "demo", loans=1000)
    made = start(tmp_path / "mine", loans=tmp_path / "demo" / "loans.parquet")
    study = load_study(made.study).study
    columns = study.loans.columns
    assert (columns.loan, columns.period, columns.origination, columns.maturity) == (
        "loan_id",
        "month",
        "opened",
        "matures",
    )
    assert (columns.balance, columns.amount, columns.rate) == ("balance", "amount", "annual_rate")
    assert study.loans.layout == "panel"
    assert study.as_of == "2025-12"
    assert study.loans.rate_unit == "fraction"
    assert study.loans.segments == ("product", "region")
    assert study.loans.outcome.model_dump()["default"] == ("D",)
    assert study.loans.outcome.model_dump()["payoff"] == ("P",)
    assert set(study.hazards) == {"default", "payoff"}
    assert study.loans.file == "../demo/loans.parquet"
    assert made.to_name == ()
    assert load_scenario(made.study.parent / "scenarios" / "baseline.yaml").model.starts == "2026Q1"
    fill_macro(made.study.parent)
    assert prepare(load_study(made.study)).loans.risk_set.events("default") > 20


@pytest.mark.realdata
def test_guess_of_real_small_business_loans(tmp_path: Path) -> None:
    made = start(tmp_path / "mine", loans=shared("data/small_business_loans.csv"))
    study = load_study(made.study).study
    columns, outcome = study.loans.columns, study.loans.outcome.model_dump()
    assert (columns.loan, columns.origination, columns.term_months) == ("loan", "disbursed", "term_months")
    assert columns.amount == "gross_disbursed"
    assert study.loans.layout == "spells"
    assert outcome["default_date"] == "charged_off"
    assert (outcome["default"], outcome["payoff"]) == (("CHGOFF",), ("P I F",))
    assert outcome["undated_payoff"] == "observed_to_maturity"
    assert set(study.hazards) == {"default"}
    text = made.study.read_text()
    assert "assume: {rate: 0.05}" in text
    assert text.count("CHECK") > 10
    for line, changed in switched_on(text):
        (made.study.parent / "on.yaml").write_text(changed)
        assert "COLUMN_TO_NAME" in line or load_study(made.study.parent / "on.yaml"), line
    fill_macro(made.study.parent)
    with pytest.raises(DataError, match=r"default_after_maturity|after the contract end"):
        prepare(load_study(made.study))
    mended = text.replace("#default_after_maturity:", "default_after_maturity:")
    made.study.write_text(mended)
    assert prepare(load_study(made.study)).loans.risk_set.events("default") > 500


def test_what_cannot_be_guessed_is_left_to_name(tmp_path: Path) -> None:
    (tmp_path / "odd.csv").write_text("a,b\n1,x\n2,y\n3,x\n")
    made = start(tmp_path / "mine", loans=tmp_path / "odd.csv")
    assert load_study(made.study).study.loans.columns.loan == "COLUMN_TO_NAME"
    assert [line.split(":")[0] for line in made.to_name] == [
        "loan", "origination", "maturity", "balance", "column", "default", "default_date",
    ]  # fmt: skip
    assert all("CHECK" in line for line in made.to_name)
    fill_macro(made.study.parent)
    with pytest.raises(DataError, match="COLUMN_TO_NAME"):
        prepare(load_study(made.study))


HOSTILE = ("a: b", "no", "=1+1", "[red]x", "x # y", 'say "hi"', "\x1b[31mred", "é", "1.0", "- z", "a\tb")


def test_names_and_codes_of_any_kind_are_read_back_as_they_are(tmp_path: Path) -> None:
    rows = [{"loan id": k % 50, "Report Month": f"2020-{k // 50 + 1:02d}", "loanStatus": HOSTILE[k % 11], "no": k, "Booked On": "2019-05-01",
             "balance: now": 10.5 * k} for k in range(550)]  # fmt: skip
    pd.DataFrame(rows).to_csv(tmp_path / "odd names.csv", index=False)
    made = start(tmp_path / "mine it", loans=tmp_path / "odd names.csv")
    study = load_study(made.study).study
    assert study.study == "mine-it"
    assert study.loans.columns.loan == "loan id"
    assert study.loans.columns.period == "Report Month"
    assert study.loans.columns.origination == "Booked On"
    assert study.loans.columns.balance == "balance: now"
    outcome = study.loans.outcome.model_dump()
    assert outcome["column"] == "loanStatus"
    assert set(outcome["performing"]) == {h for h in HOSTILE if h.isprintable()}
    text = made.study.read_text()
    assert "\x1b" not in text
    assert "2 codes hold invisible characters" in text


def test_a_table_that_is_not_there_or_cannot_be_read(tmp_path: Path) -> None:
    (tmp_path / "loans.csv").write_text("")
    (tmp_path / "book.xlsx").write_bytes(b"PK")
    (tmp_path / "broken.parquet").write_bytes(b"PAR1....")
    for name, words in (("lons.csv", "did you mean 'loans.csv'"), ("loans.csv", "empty"), ("book.xlsx", "expected a .csv or .parquet"),
                        ("broken.parquet", "cannot be read")):  # fmt: skip
        with pytest.raises(DataError, match=words):
            start(tmp_path / "mine", loans=tmp_path / name)
        assert not (tmp_path / "mine").exists()
