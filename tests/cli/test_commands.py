"""The command line as a user meets it: exit codes, messages, no tracebacks, stdout and stderr apart."""

from __future__ import annotations

import json
import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from stresskit import cli
from stresskit.core.errors import DataError
from tests.cli.small_study import write_small_study
from tests.program import stresskit

ROOT = Path(__file__).parents[2]


def process(*words: str | Path, cwd: Path) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "stresskit.cli", *map(str, words)]
    return subprocess.run(command, cwd=cwd, capture_output=True, text=True, check=False, timeout=120)


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_small_study(tmp_path_factory.mktemp("bank with space"))


@pytest.fixture(scope="module")
def finished(study: Path) -> Path:
    done = process("run", study, "--out", study.parent / "run", cwd=study.parent)
    assert done.returncode == 0, done.stderr
    return study.parent / "run"


def test_help_shows_an_example_for_every_command(tmp_path: Path) -> None:
    top = process("--help", cwd=tmp_path)
    assert top.returncode == 0
    for command in ("demo", "check", "fit", "project", "run", "schema"):
        assert command in top.stdout
        text = stresskit(command, "--help", cwd=tmp_path)
        assert text.returncode == 0
        assert f"Example: stresskit {command}" in text.stdout


def test_light_commands_import_nothing_heavy(tmp_path: Path) -> None:
    code = "import sys, stresskit.cli; print([m for m in ('numpy','pandas','scipy','matplotlib','duckdb') if m in sys.modules])"
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=tmp_path
    )
    assert done.stdout.strip() == "[]"


def test_check_prints_reconciliation_alignment_and_nothing_on_stderr(study: Path) -> None:
    done = process("check", study, cwd=study.parent)
    assert done.returncode == 0, done.stderr
    assert "Reconciliation" in done.stdout
    assert "Alignment sample" in done.stdout
    assert done.stderr == ""
    assert "\x1b" not in done.stdout


def test_check_json(study: Path) -> None:
    done = stresskit("check", study, "--json", cwd=study.parent)
    outcome = json.loads(done.stdout)
    table = outcome["reconciliation"]
    rows = {w: sum(r["rows"] for r in table if r["what"] == w) for w in ("in", "used", "left out")}
    assert rows["in"] == rows["used"] + rows["left out"] > 0


def test_run_writes_everything_that_it_promises(finished: Path) -> None:
    names = {f.relative_to(finished).as_posix() for f in finished.rglob("*") if f.is_file()}
    assert names >= {
        "manifest.json", "times.json", "summary.csv", "coefficients.csv", "paths.csv", "reconciliation.csv",
        "segments.parquet", "loans.parquet", "report.html", "results.xlsx", "models/default.json", "models/payoff.json",
    }  # fmt: skip


def test_a_repeated_run_has_the_same_bytes(study: Path, finished: Path) -> None:
    again = stresskit("run", study, "--out", study.parent / "again", cwd=study.parent)
    assert again.returncode == 0, again.stderr
    first, second = (
        json.loads((d / "manifest.json").read_text()) for d in (finished, study.parent / "again")
    )
    assert first["outputs"] == second["outputs"]
    assert len(first["outputs"]) > 10
    assert first["inputs"] == second["inputs"]
    assert "time" not in json.dumps(list(first)).lower()


@pytest.mark.slow
def test_run_questions_its_fits_unless_told_not_to(study: Path, finished: Path) -> None:
    import pandas as pd

    verdicts = pd.read_csv(finished / "evidence" / "verdicts.csv")
    assert set(verdicts["cause"]) == {"default", "payoff"}
    assert (finished / "evidence" / "lag_profile.csv").is_file()
    record = json.loads((finished / "manifest.json").read_text())
    assert "evidence/verdicts.csv" in record["outputs"]
    flagged = verdicts[verdicts["status"] == "look at"]
    assert sum("(default hazard)" in c or "(payoff hazard)" in c for c in record["cautions"]) == len(flagged)
    report = (finished / "report.html").read_text()
    assert f"{len(verdicts)} questions were asked of the fits" in report
    assert len(report.encode()) < 5_000_000
    alone = stresskit("evidence", study, "--out", study.parent / "alone", cwd=study.parent)
    assert alone.returncode == 0, alone.stderr
    for table in (finished / "evidence").iterdir():
        assert table.read_bytes() == (study.parent / "alone" / table.name).read_bytes(), table.name

    out = study.parent / "unasked"
    bare = stresskit("run", study, "--out", out, "--no-evidence", "--json", cwd=study.parent)
    assert bare.returncode == 0, bare.stderr
    assert "verdicts" not in json.loads(bare.stdout)
    assert not (out / "evidence").exists()
    assert "<code>--no-evidence</code>" in (out / "report.html").read_text()
    assert (out / "summary.csv").read_bytes() == (finished / "summary.csv").read_bytes()


def test_fit_then_project_gives_the_same_figures_as_run(study: Path, finished: Path) -> None:
    models, out = study.parent / "models", study.parent / "projected"
    fitted = stresskit("fit", study, "--out", models, cwd=study.parent)
    assert fitted.returncode == 0, fitted.stderr
    assert "Models:" in fitted.stdout
    projected = stresskit("project", study, "--models", models, "--out", out, "--json", cwd=study.parent)
    assert projected.returncode == 0, projected.stderr
    assert (out / "summary.csv").read_bytes() == (finished / "summary.csv").read_bytes()
    assert (out / "segments.parquet").read_bytes() == (finished / "segments.parquet").read_bytes()
    assert json.loads(projected.stdout)["summary"][0]["segment"] == "portfolio"


def test_project_refuses_models_of_another_text(study: Path, finished: Path) -> None:
    other = study.parent / "other.yaml"
    other.write_text(study.read_text().replace("link: cloglog", "link: logit"))
    done = stresskit(
        "project", other, "--models", finished / "models", "--out", study.parent / "x", cwd=study.parent
    )
    assert done.returncode == 3
    assert "is not what the model was fitted with" in done.stderr
    assert not (study.parent / "x").exists()


def test_existing_output_is_refused_before_any_work(study: Path, finished: Path) -> None:
    before = (finished / "manifest.json").read_bytes()
    done = stresskit("run", study, "--out", finished, cwd=study.parent)
    assert done.returncode == 2
    assert "exists already" in done.stderr
    assert (finished / "manifest.json").read_bytes() == before


def test_weighted_row_is_the_weighted_mean(finished: Path) -> None:
    import pandas as pd

    rows = pd.read_csv(finished / "summary.csv")
    total = rows[rows["segment"] == "portfolio"].set_index("scenario")["el_lifetime"]
    assert total["weighted"] == pytest.approx(0.7 * total["baseline"] + 0.3 * total["slump"], rel=1e-12)
    assert total["slump"] > total["baseline"]


BAD = {
    "unknown key": (
        "frequency: month",
        "frequency: month\nfrequencie: month",
        3,
        r"study\.yaml:\d+:1: .*frequencie",
    ),
    "duplicate key": (
        "frequency: month",
        "frequency: month\nfrequency: month",
        3,
        r"study\.yaml:\d+:1: .*frequency",
    ),
    "wrong type": ("frequency: month", "frequency: 12", 3, r"study\.yaml:\d+:\d+: .*frequency"),
    "impossible date": ("as_of: 2020-12", "as_of: 2020-13", 3, r"study\.yaml:\d+:\d+: .*2020-13"),
    "missing scenario file": (
        "slump.yaml",
        "slmp.yaml",
        3,
        r"slmp\.yaml.*(does not exist|no such|not found|there is no)",
    ),
    "missing loan file": ("file: loans.csv", "file: lons.csv", 4, r"lons\.csv"),
    "missing column": ("balance: owed", "balance: owing", 4, r"owed.*owing"),
    "scenario lacks a variable": ("of: unemployment_rate", "of: policy_rate", 3, r"policy_rate"),
    "no such feature": (
        "{macro: unemployment_change",
        "{macro: unemployment_chnge",
        3,
        r"unemployment_chnge",
    ),
    "no events": ("default: [D]", "default: [Z]", 4, r"default"),
}


@pytest.mark.parametrize("case", BAD)
def test_bad_study_gives_place_exit_code_and_no_traceback(case: str, study: Path, tmp_path: Path) -> None:
    old, new, code, message = BAD[case]
    text = study.read_text()
    assert old in text
    for file in study.parent.glob("*.*"):
        if file.is_file():
            (tmp_path / file.name).write_bytes(file.read_bytes())
    (tmp_path / "study.yaml").write_text(text.replace(old, new, 1))
    done = stresskit("run", tmp_path / "study.yaml", "--out", tmp_path / "run", cwd=tmp_path)
    assert done.returncode == code, done.stderr
    assert re.search(message, done.stderr, re.S), done.stderr
    assert "Traceback" not in done.stderr
    assert not (tmp_path / "run").exists()
    assert not list(tmp_path.glob(".run.partial-*"))


def test_scenario_that_starts_at_the_wrong_period(study: Path, tmp_path: Path) -> None:
    for file in study.parent.glob("*.*"):
        if file.is_file():
            (tmp_path / file.name).write_bytes(file.read_bytes())
    slump = tmp_path / "slump.yaml"
    slump.write_text(slump.read_text().replace("starts: 2021Q1", "starts: 2021Q2"))
    done = process("check", tmp_path / "study.yaml", cwd=tmp_path)
    assert done.returncode == 3
    assert re.search(r"slump\.yaml:\d+:\d+: .*2021Q2.*2021Q1", done.stderr, re.S)


def test_unknown_command_and_option(study: Path) -> None:
    for words in (("rum", study), ("run", study, "--outt", "x"), ("run", study)):
        done = stresskit(*words, cwd=study.parent)
        assert done.returncode == 2
        assert "Traceback" not in done.stderr


def test_traceback_when_asked(tmp_path: Path) -> None:
    done = stresskit("check", "nowhere.yaml", "--traceback", cwd=tmp_path)
    assert done.returncode == 3
    assert "Traceback" in done.stderr


@pytest.mark.slow
@pytest.mark.parametrize(
    ("cap", "code", "words"),
    [(150_000, 2, "nothing was left there"), (20_000, 4, "no room for the temporary files")],
)
def test_a_disk_that_fills_leaves_no_folder(study: Path, cap: int, code: int, words: str) -> None:
    """A cap on file size stands in for the full disk, in the run folder or where loans are staged."""
    out = study.parent / "full"
    script = (
        f"import resource, sys; resource.setrlimit(resource.RLIMIT_FSIZE, ({cap}, {cap})); "
        f"from stresskit.cli import main; main(['run', {str(study)!r}, '--out', {str(out)!r}])"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=False)
    assert done.returncode == code, done.stderr
    assert words in done.stderr
    assert "Traceback" not in done.stderr
    assert not out.exists()
    assert not list(study.parent.glob(".full.partial-*"))


@pytest.fixture
def staging(tmp_path: Path) -> Path:
    """The temporary folder of a run that is interrupted: handlers are installed once it opens a folder there."""
    folder = tmp_path / "staging"
    folder.mkdir()
    return folder


@pytest.mark.slow
@pytest.mark.parametrize("name", ["SIGINT", "SIGTERM"])
def test_an_interrupt_says_so_and_clears_up(name: str, study: Path, tmp_path: Path, staging: Path) -> None:
    """The program as it is started, from its first line to its exit code."""
    command = [sys.executable, "-m", "stresskit.cli", "run", str(study), "--out", str(tmp_path / "run")]
    done = subprocess.Popen(
        command,
        stdout=subprocess.DEVNULL,
        stderr=subprocess.PIPE,
        text=True,
        env=os.environ | {"TMPDIR": str(staging)},
    )
    while not any(staging.glob("stresskit-*")) and done.poll() is None:
        time.sleep(0.005)
    time.sleep(0.12)
    done.send_signal(getattr(signal, name))
    _, stderr = done.communicate(timeout=60)
    assert done.returncode == 130, stderr
    assert "Traceback" not in stderr
    assert "interrupted" in stderr
    assert [p.name for p in tmp_path.iterdir()] == ["staging"]
    assert list(staging.iterdir()) == []


def _ends_as_interrupted(folder: Path) -> None:
    ended = stresskit("run", "study.yaml", "--out", "run", cwd=folder)
    assert ended.returncode == 130, ended.stderr
    assert ended.stderr == "stresskit: interrupted; nothing half-written was left\n"


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
@pytest.mark.parametrize("error", [SystemError, RuntimeError, DataError])
def test_an_interrupt_that_a_library_made_an_error_of_is_an_interrupt(
    number: int, error: type[Exception], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Compiled code that meets it while it makes its result ends with a SystemError, a query with a RuntimeError."""

    def interrupted() -> None:
        try:
            signal.raise_signal(number)
        except KeyboardInterrupt:
            raise error("a result with an exception set") from None

    monkeypatch.setattr(cli, "app", lambda *words, **how: interrupted())
    _ends_as_interrupted(tmp_path)


def test_an_interrupt_that_meets_the_end_of_an_object_is_not_lost(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """What is raised while an object goes is reported by Python and forgotten; the command ends all the same."""

    class Going:
        def __del__(self) -> None:
            signal.raise_signal(signal.SIGTERM)

    def work(*words: object, **how: object) -> None:
        Going()
        for _ in range(400):
            time.sleep(0.05)

    monkeypatch.setattr(cli, "app", work)
    _ends_as_interrupted(tmp_path)


def test_the_same_error_without_an_interrupt_is_our_bug(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def wrong(*words: object, **how: object) -> None:
        raise SystemError("a result with an exception set")

    monkeypatch.setattr(cli, "app", wrong)
    ended = stresskit("run", "study.yaml", "--out", "run", cwd=tmp_path)
    assert ended.returncode == 1
    assert "This is a bug in stresskit" in ended.stderr


@pytest.mark.slow
@pytest.mark.parametrize("name", ["SIGINT", "SIGTERM"])
def test_an_interrupt_at_any_moment_says_so_and_clears_up(
    name: str, study: Path, tmp_path: Path, staging: Path
) -> None:
    """Forks of a process that has everything imported: moments from the reading of the loans to the evidence."""
    waits, out = [0.0, 0.06, 0.12, 0.24, 0.36, 0.5, 0.7, 0.9], tmp_path / "place" / "run"
    out.parent.mkdir()
    done = subprocess.run(
        [sys.executable, "-m", "tests.cli.interrupt_server", str(study), str(out), name, json.dumps(waits)],
        capture_output=True, text=True, check=True, timeout=180, cwd=ROOT,
        env=os.environ | {"TMPDIR": str(staging)},
    )  # fmt: skip
    ended = [json.loads(line) for line in done.stdout.splitlines()]
    assert len(ended) == len(waits)
    for run in ended:
        assert run["code"] == 130, run
        assert "Traceback" not in run["stderr"]
        assert "interrupted" in run["stderr"]
        assert (run["staging"], run["beside"]) == ([], [])
