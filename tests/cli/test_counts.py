"""A table of lines that stand for several loans, against the same study with every line written out loan by loan."""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from stresskit.core.period import Frequency
from stresskit.core.values import Portfolio
from stresskit.hazard.result import HazardFit
from stresskit.runs.responses import middle_age
from tests.cli.pools import EXACT, OF_LINES, same, written_out
from tests.cli.small_study import reworded, write_small_study
from tests.cli.test_all_sections import SECTIONS
from tests.program import stresskit

RATE = "rate: interest}"
TERM = "      - {loan: product, as: category, reference: fixed}\n"
#: Macro features then act on loans in different ways, and on ages.
CROSSED = (
    TERM,
    f"{TERM}      - {{interaction: [product, unemployment_change]}}\n      - {{interaction: [age, unemployment_change]}}\n",
)
COUNTED = (RATE, "rate: interest, count: n}")
YEARS = ("years: {first: 3}", "years: {first: 3, balance_sheet: [run_off, constant]}")
EAST = "    - {name: east_flood"
FLAT = "    - {name: levy, reason: a flat sum, where: {place: [west]}, add: 1000, on: el_lifetime}\n"
ANALYSES = "analyses:\n  attribution: {}\n  bands: {draws: 100, source_draws: 20, lgd_se: 0.05}\n"


@pytest.fixture(scope="module")
def bank(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Folders ``lines`` and ``loans`` with study, run (evidence asked) and what ``run --json`` printed (told.json)."""
    folder = tmp_path_factory.mktemp("pools")
    for kind in ("lines", "loans"):
        (folder / kind).mkdir()
        study = write_small_study(folder / kind, loans=300)
        panel = pd.read_csv(study.parent / "loans.csv")
        number = panel["id"].str[1:].astype(int)
        panel["rating"] = "R" + (number % 3).astype(str)
        panel["n"] = np.array([1, 2, 3, 5])[number % 4]
        if kind == "lines":
            panel["owed"] *= panel["n"]
        else:
            panel = written_out(panel, amounts=())
        panel.to_csv(study.parent / "loans.csv", index=False)
        text = (
            reworded(study.read_text(), CROSSED) + reworded(SECTIONS, YEARS, (EAST, FLAT + EAST)) + ANALYSES
        )
        study.write_text(reworded(text, COUNTED) if kind == "lines" else text)
        done = stresskit("run", study, "--out", "run", "--json", cwd=study.parent)
        assert done.returncode == 0, done.stderr
        (study.parent / "told.json").write_text(done.stdout)
    return folder


def _models(bank: Path) -> Iterator[tuple[HazardFit, HazardFit]]:
    for cause in ("default", "payoff"):
        lines, loans = (
            HazardFit.from_json((bank / kind / "run" / "models" / f"{cause}.json").read_text())
            for kind in ("lines", "loans")
        )
        yield lines, loans


def test_the_fit_is_that_of_the_lines_written_out(bank: Path) -> None:
    for lines, loans in _models(bank):
        assert np.allclose(lines.coefficients, loans.coefficients, rtol=EXACT, atol=0)
        assert lines.llf == pytest.approx(loans.llf, rel=1e-12)
        assert (lines.facts.nobs, lines.facts.n_events) == (loans.facts.nobs, loans.facts.n_events)
        for kind in ("model_expected", "model_observed", "period"):
            found = lines.standard_errors(kind)
            assert np.allclose(found, loans.standard_errors(kind), rtol=EXACT, atol=0), kind
        # a line is one cluster: five loans alike under one identifier tell no more than one
        assert (lines.standard_errors("loan") > 1.2 * loans.standard_errors("loan")).all()
        assert lines.facts.n_rows < loans.facts.n_rows == loans.facts.nobs
        assert (lines.facts.count, loans.facts.count) == ("n", "")
        assert "column 'n'" in str(lines.summary())
        assert [(g.name, g.passed) for g in lines.gates] == [(g.name, g.passed) for g in loans.gates]
    kinds = [
        json.loads((bank / k / "run" / "manifest.json").read_text())["gates"] for k in ("lines", "loans")
    ]
    assert [g["asked"] for g in kinds[0]] == [g["asked"] for g in kinds[1]]
    levels = [[g["found"] for g in k if g["name"] == "levels"] for k in kinds]
    assert levels[0] == levels[1]


def test_every_table_of_a_run_is_that_of_the_lines_written_out(bank: Path) -> None:
    """Summary, years, adjustments, evidence, attribution: all CSV files but those that say that they count lines."""
    files = sorted(p.relative_to(bank / "loans" / "run") for p in (bank / "loans" / "run").rglob("*.csv"))
    assert {
        "summary.csv",
        "years.csv",
        "adjustments.csv",
        "evidence/auc.csv",
        "evidence/survival.csv",
    } <= set(map(str, files))
    for key in ("attribution", "bands"):
        assert any(str(f).startswith(f"analyses/{key}") for f in files), key
    for file in files:
        if file.name in OF_LINES:
            continue
        lines, loans = (pd.read_csv(bank / kind / "run" / file) for kind in ("lines", "loans"))
        if file.name == "coefficients.csv":
            lines, loans = (x.drop(columns="se_loan") for x in (lines, loans))
        same(lines, loans, str(file))
    segments = [pd.read_parquet(bank / kind / "run" / "segments.parquet") for kind in ("lines", "loans")]
    same(*segments, "segments.parquet")


def test_cautions_and_facts_count_loans(bank: Path) -> None:
    told = [json.loads((bank / kind / "told.json").read_text()) for kind in ("lines", "loans")]
    assert told[0]["cautions"] == told[1]["cautions"]
    facts = []
    for kind in ("lines", "loans"):
        done = stresskit("check", "study.yaml", "--json", cwd=bank / kind)
        assert done.returncode == 0, done.stderr
        facts.append(json.loads(done.stdout))
    lines, loans = (f["facts"] for f in facts)
    assert {k: lines[k] for k in loans if k != "book_balance"} == {
        k: v for k, v in loans.items() if k != "book_balance"
    }
    assert lines["book_balance"] == pytest.approx(loans["book_balance"], rel=1e-12)
    assert lines["lines_at_risk"] < loans["loans_at_risk"]
    reasons = [{r["reason"]: r["loans"] for r in f["not_projected"]} for f in facts]
    assert reasons[0] == reasons[1]


def test_the_loan_table_has_pds_of_one_loan_and_amounts_of_all(bank: Path) -> None:
    table = pd.read_parquet(bank / "lines" / "run" / "loans.parquet")
    table = table[table["scenario"] == "slump"]
    assert table["pd_lifetime"].between(0, 1).all()
    assert set(table["count"]) == {1.0, 2.0, 3.0, 5.0}
    summary = pd.read_csv(bank / "lines" / "run" / "summary.csv", keep_default_na=False)
    whole = summary[(summary["scenario"] == "slump") & (summary["by"] == "")].iloc[0]
    assert float(whole["pd_lifetime"]) == pytest.approx(
        np.average(table["pd_lifetime"], weights=table["count"]), rel=1e-12
    )
    assert float(whole["el_lifetime"]) == pytest.approx(table["el_lifetime"].sum(), rel=1e-12)
    assert int(whole["loans"]) == table["count"].sum()
    assert "count" not in pd.read_parquet(bank / "loans" / "run" / "loans.parquet")


def test_a_model_and_a_study_agree_on_counts(bank: Path) -> None:
    for kind, other, words in (
        ("loans", "lines", "hazards.default: the model was fitted with counts of loans (column 'n'), but the study names no"),
        ("lines", "loans", "loans.columns.count: the study names column 'n', but the model of hazards.default was fitted without"),
    ):  # fmt: skip
        models = bank / other / "run" / "models"
        done = stresskit("project", "study.yaml", "--models", models, "--out", "again", cwd=bank / kind)
        assert done.returncode == 3, done.stdout
        assert words in " ".join(done.stderr.split())
        assert not (bank / kind / "again").exists()


def test_a_search_goes_by_counts(bank: Path) -> None:
    text = (
        "search: drivers\ncause: default\ncandidates:\n"
        "  - {of: unemployment_rate, transforms: [difference], over: [4], lags: [0, 1]}\n"
        "out_of_time: {folds: 1, window: 6}\n"
    )
    found = []
    for kind in ("lines", "loans"):
        (bank / kind / "search.yaml").write_text(text)
        done = stresskit("search", "study.yaml", "search.yaml", "--out", "found", cwd=bank / kind)
        assert done.returncode == 0, done.stderr
        found.append({f.name: pd.read_csv(f) for f in (bank / kind / "found").glob("*.csv")})
    assert found[0].keys() == found[1].keys() != set()
    for name, lines in found[0].items():
        same(lines, found[1][name], name)


def test_the_middle_age_is_that_of_the_loans() -> None:
    rng = np.random.default_rng(3)
    for n in (1, 2, 5, 8, 8, 8):
        age, count = rng.integers(1, 40, n), rng.integers(1, 4, n)
        ids = np.array([str(i) for i in range(n)], dtype=object)
        book = Portfolio(
            frequency=Frequency.MONTH, as_of=0, loan_ids=ids, age=age, remaining=np.ones(n, dtype=np.int64),
            balance=np.ones(n), rate=np.zeros(n), static={}, count=count.astype(np.float64),
        )  # fmt: skip
        assert middle_age(book) == int(np.median(np.repeat(age, count)))
