"""How the command line feels: help with examples that run, widths, JSON, colour, completion, names that would steer a terminal."""

from __future__ import annotations

import io
import json
import os
import pty
import re
import shlex
import shutil
import signal
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from rich.console import Console

from stresskit.cli import app, main
from stresskit.core.words import visible
from stresskit.demo.bank import write_demo
from stresskit.report.terminal import as_json, show, show_summary
from stresskit.starter.write import start
from tests.cli.small_study import write_small_study
from tests.program import stresskit
from tests.report.report_samples import sample

COMMANDS = [name for name in app.resolved_commands() if not name.startswith("-")]
#: Commands that print a result, and so print it as JSON too. The others print a file for another program.
NO_RESULT = {"schema", "completion"}
#: Commands of which the example is run a second time for its JSON; JSON of the others is read in tests of their own.
CHEAP = {"check", "fit", "import", "lgd", "new", "search"}
#: Commands that read what the demo's study declares and a new study does not: workouts, a VAR.
OF_THE_DEMO = {"lgd", "reverse"}
#: Words of examples that name something of another book than this one, or take long: what stands for them here.
OTHER_WORDS = {
    "2007-12": "2020-12", "2008-12": "2021-12", "deep_recession": "adverse", "1%": "25%", "50%": "20%",
}  # fmt: skip
#: What the examples of several commands take for granted besides the study of `stresskit new`.
SEARCH = """\
search: drivers
cause: default
candidates:
  - {of: unemployment_rate, transforms: [difference], over: [4], lags: [0, 1], expect: positive}
out_of_time: {folds: 2, window: 12}
"""
MAPPING = """\
import: spring-exercise
table: table.csv
period: Quarter
as_of: 2025Q4
variables:
  unemployment_rate: {column: Unemployment, unit: percent}
  house_price_index: {column: House prices, unit: index}
scenarios:
  spring: {title: Adverse case of the spring exercise}
"""
TABLE = "Quarter,Unemployment,House prices\n2026 Q1,5.6,145.1\n2026 Q2,6.4,141.0\n"


def process(*words: str, cwd: Path) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "stresskit.cli", *words]
    return subprocess.run(command, cwd=cwd, capture_output=True, text=True, check=False, timeout=120)


def called(words: list[str], capsys: pytest.CaptureFixture[str]) -> tuple[int, str, str]:
    """Exit code, stdout and stderr of a command in this process."""
    before = signal.getsignal(signal.SIGTERM)
    try:
        with pytest.raises(SystemExit) as ended:
            main(words)
    finally:
        signal.signal(signal.SIGTERM, before)
    out, err = capsys.readouterr()
    return int(ended.value.code or 0), out, err


def _refuse(word: str) -> None:
    raise AssertionError(f"{word} is no JSON")


def examples(name: str) -> list[str]:
    """Command lines below the options of a command's help."""
    text = app[name].help_epilogue or ""
    return re.findall(r"(?:^|: )(stresskit .+)$", text, re.MULTILINE)


@pytest.mark.parametrize("name", COMMANDS)
def test_help_ends_with_an_example_of_the_command(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    code, out, _ = called([name, "--help"], capsys)
    assert code == 0
    tail = re.split(r"╰─+╯", out)[-1]
    assert re.search(rf"^Example: stresskit {name}\b", tail.strip()), out
    assert examples(name)[0].startswith(f"stresskit {name}")
    assert max(map(len, out.splitlines())) <= 80


def test_help_of_every_command_imports_nothing_heavy(tmp_path: Path) -> None:
    script = f"""
import contextlib, io, sys
from stresskit.cli import main
for name in ["", *{COMMANDS!r}]:
    with contextlib.redirect_stdout(io.StringIO()), contextlib.suppress(SystemExit):
        main([name, "--help"] if name else ["--help"])
with contextlib.redirect_stdout(io.StringIO()), contextlib.suppress(SystemExit):
    main(["completion", "bash"])
heavy = ("numpy", "pandas", "scipy", "matplotlib", "duckdb", "pydantic", "pyarrow", "xlsxwriter", "numba", "ruamel")
print([m for m in heavy if m in sys.modules])
"""
    done = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, cwd=tmp_path, check=True
    )
    assert done.stdout.strip() == "[]"


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The study of `stresskit new`, with models, two runs and the other files that examples name."""
    here = tmp_path_factory.mktemp("examples") / "here"
    start(here)
    (here / "search.yaml").write_text(SEARCH)
    (here / "supervisor.yaml").write_text(MAPPING)
    (here / "table.csv").write_text(TABLE)
    for words in ("fit study.yaml --out models", "run study.yaml --out run1 --no-evidence"):
        done = stresskit(*words.split(), cwd=here)
        assert done.returncode == 0, done.stderr
    for name in ("run2", "run-2025q3", "run-2025q4"):
        shutil.copytree(here / "run1", here / name)
    (here / "harbour").mkdir()
    for name in ("study.yaml", "loans.csv", "macro.csv"):
        shutil.copy(here / name, here / "harbour" / name)
    shutil.copytree(here / "scenarios", here / "harbour" / "scenarios")
    shutil.copytree(here / "run1", here / "harbour" / "run")
    return here


@pytest.mark.slow
@pytest.mark.parametrize("name", COMMANDS)
def test_the_first_example_of_every_command_runs(
    name: str,
    folder: Path,
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """As written, in a folder that has what it names; the demo and its workouts are drawn smaller."""
    here = tmp_path / "here"
    if name in OF_THE_DEMO:
        write_demo(here, loans=2500)
    else:
        shutil.copytree(folder, here)
    monkeypatch.chdir(here)
    words = [OTHER_WORDS.get(w, w) for w in shlex.split(examples(name)[0], comments=True)[1:]]
    words = words[: words.index(">")] if ">" in words else words
    target = words[words.index("--out") + 1] if "--out" in words else words[-1] if name == "new" else None
    if target is not None and target != "scenarios":
        shutil.rmtree(here / target, ignore_errors=True)
    more = {
        "demo": ["--loans", "2000", "--no-evidence"],
        "run": ["--no-evidence"],
        "project": ["--no-evidence"],
    }
    code, out, err = called([*words, *more.get(name, [])], capsys)
    assert code == 0, err
    assert out
    assert "\x1b" not in out
    if target is not None:
        assert (here / target).exists()
    if name in CHEAP:
        if target is not None and target != "scenarios":
            shutil.rmtree(here / target)
        again = ["--replace"] if target == "scenarios" else []
        code, out, err = called([*words, *again, "--json"], capsys)
        assert code == 0, err
        assert isinstance(json.loads(out, parse_constant=_refuse), dict)


@pytest.mark.parametrize("name", sorted(set(COMMANDS) - NO_RESULT))
def test_every_command_with_a_result_prints_json(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert "--json" in called([name, "--help"], capsys)[1]


def test_json_is_json_whatever_the_values() -> None:
    value: dict[str, Any] = {
        "nan": float("nan"), "inf": -np.inf, "np": np.float64("nan"), "int": np.int64(7), "flag": np.bool_(True),
        "frame": pd.DataFrame({"x": [1e-13, np.nan, np.inf], "t": pd.to_datetime(["2026-01-31", None, "2026-02-28"]), "s": ["é", None, "\x1b"]}),
        "nested": [{"a": (np.nan, pd.NA, pd.NaT)}, np.array([1.0, np.nan])], "path": Path("x"), "none": None,
    }  # fmt: skip
    text = as_json(value)

    back = json.loads(text, parse_constant=_refuse)
    assert back["frame"][0]["x"] == 1e-13
    assert [r["x"] for r in back["frame"][1:]] == [None, None]
    assert back["frame"][1]["t"] is None
    assert back["frame"][0]["t"].startswith("2026-01-31")
    assert (back["nan"], back["inf"], back["np"], back["int"], back["flag"]) == (None, None, None, 7, True)
    assert back["nested"] == [{"a": [None, None, None]}, [1.0, None]]
    assert "\x1b" not in text


def printed(width: int, draw: Any, **options: Any) -> list[str]:
    out = Console(
        width=width, file=io.StringIO(), force_terminal=True, no_color=True, highlight=False, **options
    )
    draw(out)
    assert isinstance(out.file, io.StringIO)
    return re.sub(r"\x1b\[[0-9;]*m", "", out.file.getvalue()).splitlines()


WIDE = pd.DataFrame(
    {
        "name": ["a long name of a segment / another", "b"],
        **{f"column_{k}": [1234567.891 * k, -1.0] for k in range(14)},
    }
)


@pytest.mark.parametrize("width", [40, 80, 120, 260])
def test_a_wide_table_comes_in_parts_that_fit(width: int) -> None:
    lines = printed(width, lambda out: show(WIDE, title="Wide", to=out))
    assert max(map(len, lines)) <= width
    text = re.sub(r"\s+", " ", " ".join(lines))
    for k in range(14):
        assert f"{1234567.891 * k:,.6g}" in text
        assert f"column_{k} " in text or f"column_{k}" in text.replace(" ", "")
    assert ("(continued)" in text) == (width < 260)


@pytest.mark.parametrize("width", [80, 120])
def test_the_result_table_fits_and_says_what_it_leaves_out(
    width: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    from stresskit.report import terminal

    result = sample(steps=24)
    pages: list[Console] = []

    def narrow() -> Console:
        pages.append(Console(width=width, file=io.StringIO(), no_color=True, highlight=False))
        return pages[-1]

    monkeypatch.setattr(terminal, "console", narrow)
    show_summary(result)
    for page in pages:
        assert isinstance(page.file, io.StringIO)
        text = page.file.getvalue()
        assert max(map(len, text.splitlines())) <= width
        for head in ("exposure", "EL", "lifetime"):
            assert head in text
        whole = result.summary[result.summary["by"] == ""].iloc[0]
        if "portfolio" in text:
            assert f"{whole['el_lifetime']:,.0f}" in text
            assert f"{100 * whole['pd_lifetime']:.2f}%" in text
        assert ("Not shown for lack of room: loans" in text) == (width == 80)


@pytest.mark.parametrize(
    ("words", "told"),
    [
        (["rum", "x"], r'Unknown command "rum". Did you mean "run"?'),
        (["run", "x.yaml", "--outt", "y"], "Did you mean --out instead of --outt?"),
        (["run", "x.yaml"], "See stresskit run --help. Example: stresskit run study.yaml --out run1"),
        (["search", "x.yaml"], "parameter SPECIFICATIONS requires an argument"),
        (["schema", "studdy"], 'Did you mean "study"?'),
        (["demo", "--out", "x", "--loans", "many"], 'unable to convert "many" into int'),
    ],
)
def test_a_wrong_call_names_the_remedy(
    words: list[str], told: str, capsys: pytest.CaptureFixture[str]
) -> None:
    code, out, err = called(words, capsys)
    assert code == 2
    assert out == ""
    assert told in err
    assert "Traceback" not in err
    assert len(err.strip().splitlines()) == 2


@pytest.mark.skipif(shutil.which("bash") is None, reason="bash is not installed on this machine")
def test_bash_completes_commands_and_options(tmp_path: Path) -> None:
    script = process("completion", "bash", cwd=tmp_path)
    assert script.returncode == 0
    (tmp_path / "stresskit.bash").write_text(script.stdout)

    def completed(*words: str) -> set[str]:
        line = " ".join(shlex.quote(w) for w in ("stresskit", *words))
        ask = (
            f"source stresskit.bash; complete -p stresskit >/dev/null || exit 9; COMP_WORDS=({line}); COMP_CWORD={len(words)}; "
            '_stresskit stresskit "${COMP_WORDS[COMP_CWORD]}" "${COMP_WORDS[COMP_CWORD-1]}"; echo "${COMPREPLY[@]}"'
        )
        done = subprocess.run(["bash", "-c", ask], cwd=tmp_path, capture_output=True, text=True, check=True)
        assert done.stderr == ""
        return set(done.stdout.split())

    assert completed("pro") == {"project"}
    assert completed("") >= set(COMMANDS)
    assert completed("run", "study.yaml", "--rep") == {"--replace"}
    assert completed("schema", "sc") == {"scenario"}


@pytest.mark.parametrize("shell", ["zsh", "fish"])
def test_other_shells_get_a_script_that_names_every_command(
    shell: str, capsys: pytest.CaptureFixture[str]
) -> None:
    code, out, _ = called(["completion", shell], capsys)
    assert code == 0
    assert all(name in out for name in COMMANDS)


def on_a_terminal(words: list[str], cwd: Path, **env: str) -> str:
    """What a command writes when stdout and stderr are a terminal."""
    master, slave = pty.openpty()
    child = subprocess.Popen(
        [sys.executable, "-m", "stresskit.cli", *words], cwd=cwd, stdin=slave, stdout=slave, stderr=slave,
        env={k: v for k, v in os.environ.items() if k != "NO_COLOR"} | {"TERM": "xterm-256color"} | env,
    )  # fmt: skip
    os.close(slave)
    out = b""
    try:
        while piece := os.read(master, 65536):
            out += piece
    except OSError:
        pass  # the terminal is gone when the command has ended
    finally:
        os.close(master)
        assert child.wait(timeout=60) == 0, out.decode(errors="replace")
    return out.decode(errors="replace")


COLOUR = re.compile(r"\x1b\[(?:[0-9;]*;)?(?:3[0-7]|9[0-7]|38|4[0-7])(?:;[0-9;]*)?m")


def test_colour_on_a_terminal_only_and_never_against_no_color(tmp_path: Path) -> None:
    assert COLOUR.search(on_a_terminal(["--help"], tmp_path))
    assert not COLOUR.search(on_a_terminal(["--help"], tmp_path, NO_COLOR="1"))
    assert "\x1b" not in process("--help", cwd=tmp_path).stdout


@pytest.fixture(scope="module")
def hostile(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The small study with products whose names would steer a terminal, be markup, or turn the direction of writing."""
    study = write_small_study(tmp_path_factory.mktemp("hostile"))
    loans = pd.read_csv(study.parent / "loans.csv")
    loans["place"] = loans["place"].map({"east": NAMES[0], "west": NAMES[1]})
    loans["product"] = loans["product"].map({"fixed": "fixed", "floating": NAMES[2]})
    loans.to_csv(study.parent / "loans.csv", index=False)
    text = study.read_text().replace("floating: 0.45", f"{json.dumps(NAMES[2], ensure_ascii=False)}: 0.45")
    study.write_text(text)
    return study


NAMES = ("\x1b]0;owned\x07\x1b[2J", "a\u202eb\x9b31m", "[red]loud[/red] [link=file:///x]y[/link]")


@pytest.mark.slow
def test_names_that_would_steer_a_terminal_are_shown_harmlessly(
    hostile: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(hostile.parent)
    for line in ("check study.yaml", "fit study.yaml --out models", "run study.yaml --out run --no-evidence"):
        code, out, err = called(line.split(), capsys)
        assert code == 0, err
        for forbidden in ("\x1b", "\x07", "\x9b", "\u202e"):
            assert forbidden not in out + err, line
        if line.startswith("run"):
            assert r"\x1b]0;owned\x07\x1b[2J" in out
            assert r"a\u202eb\x9b31m" in out
            assert "[red]loud[/red][link=file:///x]y[/link]" in re.sub(r"\s+", "", out)
    shown = on_a_terminal(
        ["fit", "study.yaml", "--out", "models", "--replace"], hostile.parent, COLUMNS="100"
    )
    assert "owned\x07" not in shown
    assert "\x1b[2J" not in shown
    assert "\x1b]8;" not in shown


def test_an_error_about_such_a_name_is_harmless_too(
    hostile: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    study = hostile.parent / "other.yaml"
    study.write_text(hostile.read_text().replace("file: loans.csv", "file: spoiled.csv"))
    loans = (hostile.parent / "loans.csv").read_text().replace("owed", "\x1b[31mowed", 1)
    (hostile.parent / "spoiled.csv").write_text(loans)
    code, _, err = called(["check", str(study)], capsys)
    assert code == 4
    assert "\x1b" not in err
    assert r"\x1b[31mowed" in err
    code, _, err = called(["check", "nowhere\x1b[31m.yaml"], capsys)
    assert code == 3
    assert "\x1b" not in err
    assert r"nowhere\x1b[31m.yaml" in err


def test_visible_keeps_what_can_be_read() -> None:
    assert visible("é [b] 中\n") == "é [b] 中\\n"
    assert visible("a\nb\x1b", lines=True) == "a\nb\\x1b"


@pytest.mark.parametrize("words", ["schema study", "--help", "completion bash"])
def test_a_reader_that_leaves_early_causes_no_complaint(words: str, tmp_path: Path) -> None:
    child = subprocess.Popen(
        [sys.executable, "-m", "stresskit.cli", *words.split()],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        cwd=tmp_path,
    )
    assert child.stdout is not None
    child.stdout.close()
    assert child.stderr is not None
    assert child.stderr.read() == b""
    child.stderr.close()
    assert child.wait(timeout=60) == 0


@pytest.mark.parametrize("as_text", [True, False])
def test_a_table_that_the_workbook_leaves_out_is_told(
    as_text: bool, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    from stresskit.cli import _finish
    from stresskit.report import sheet

    monkeypatch.setattr(sheet, "MOST_CELLS", 2_000)
    _finish(sample(steps=24), Path("run1"), not as_text)
    out = capsys.readouterr().out
    if as_text:
        assert re.search(r"Sheet segment curves of results\.xlsx: .* in the file segments\.parquet", out)
    else:
        assert "segments.parquet" in json.loads(out)["left_out_of_workbook"][0]
