"""Commands. Heavy rooms are imported only by the command that needs them."""

from __future__ import annotations

import _thread
import contextlib
import os
import signal
import sys
import threading
import traceback
from collections.abc import Callable, Iterator
from datetime import UTC, datetime
from inspect import cleandoc
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Literal

from cyclopts import App, CycloptsError, Parameter

from stresskit import __version__
from stresskit.cli_backtest import backtest, model_choice
from stresskit.cli_bands import bands
from stresskit.cli_explain import explain, reverse
from stresskit.cli_repeat import add_commands as add_repeat
from stresskit.cli_what_if import WhatIf
from stresskit.core.errors import StresskitError, UsageError
from stresskit.core.words import visible

if TYPE_CHECKING:
    from types import FrameType

    from stresskit.runs.api import Prepared, StudyFile
    from stresskit.runs.records import StudyResult

app = App(
    name="stresskit",
    version=__version__,
    help=(
        "Stressed PD, LGD and expected loss for loan books.\n\n"
        "A study file names the loans, the macro history, the hazards, the losses and the scenarios. "
        "Example: stresskit demo --out harbour ; then stresskit run harbour/study.yaml --out harbour/run2\n\n"
        "Exit codes: 0 ok, 1 our bug, 2 usage, 3 study or scenario text, 4 data, 5 numerics, 6 a check failed, "
        "130 interrupted. Add --traceback to any command to see where an error arose."
    ),
    help_format="plaintext",
    suppress_keyboard_interrupt=False,
)

StudyPath = Annotated[Path, Parameter(help="the study's YAML file")]
OutPath = Annotated[Path, Parameter(help="folder to write; must not exist yet")]
Replace = Annotated[bool, Parameter(negative=(), help="overwrite an earlier run folder")]
WithEvidence = Annotated[
    bool, Parameter(name="--evidence", negative="--no-evidence", help="ask of the fits what a validator asks")
]
AsJson = Annotated[bool, Parameter(name="--json", negative=(), help="print the result as JSON")]


def _say() -> Callable[[str], None]:
    """Progress on stderr, off when stderr is not a terminal."""
    if not sys.stderr.isatty():
        return lambda _: None
    start = datetime.now(UTC)
    return lambda what: print(
        f"{(datetime.now(UTC) - start).total_seconds():6.1f} s  {visible(what)}", file=sys.stderr
    )


def _opened(
    study: Path, *, what_if: list[str] | None = None, first: Callable[[StudyFile], object] = lambda _: None
) -> tuple[Callable[[str], None], StudyFile, Prepared]:
    """How most commands begin: the progress line, the study with its what-if, and the data that it names.

    ``first`` may object to the study before any data is read.
    """
    from stresskit.runs.api import load_study, prepare
    from stresskit.runs.what_if import with_what_if

    say = _say()
    say("reading")
    file = with_what_if(load_study(study), what_if)
    first(file)
    return say, file, prepare(file)


@app.command
def check(study: StudyPath, /, *, what_if: WhatIf = None, json: AsJson = False) -> None:
    """Read loans, macro history and scenarios; print the reconciliation and what was found. Nothing is fitted.

    Example: stresskit check study.yaml
    """
    from stresskit.report.checkup import check_report, print_check
    from stresskit.report.terminal import as_json

    _, file, data = _opened(study, what_if=what_if)
    outcome = check_report(file, data)
    if json:
        print(as_json(outcome))
    else:
        print_check(outcome)


@app.command
def fit(study: StudyPath, /, *, out: OutPath, replace: Replace = False, json: AsJson = False) -> None:
    """Fit the study's hazards and write the models.

    Example: stresskit fit study.yaml --out models
    """
    from stresskit.report.terminal import as_json, show_block, show_place
    from stresskit.runs.api import fit as fit_all
    from stresskit.runs.folder import write_model_folder
    from stresskit.runs.place import whole_folder
    from stresskit.runs.tables import coefficient_table, fit_facts

    with whole_folder(out, replace=replace, probe=True):
        pass
    say, file, data = _opened(study)
    fits = fit_all(file, data, say=say)
    write_model_folder(fits, file, data, out, command=sys.argv[1:], replace=replace)
    if json:
        print(as_json({"coefficients": coefficient_table(fits), "fits": fit_facts(fits), "folder": str(out)}))
        return
    for cause in fits:
        show_block(fits[cause].summary())
    show_place("Models:", out)


def _finish(result: StudyResult, out: Path, json: bool) -> None:
    from stresskit.report.terminal import as_json, show_cautions, show_place, show_summary
    from stresskit.report.workbook import left_out

    missing = left_out(result)
    if json:
        told = {"summary": result.summary, "cautions": result.cautions, "folder": str(out)}
        if result.evidence is not None:
            told["verdicts"] = result.evidence.verdict_table()
        told["left_out_of_workbook"] = missing
        print(as_json(told))
        return
    show_summary(result)
    show_cautions(result.cautions)
    for words in missing:
        show_place("Workbook:  ", words)
    show_place("Run folder:", out)
    show_place("Report:    ", out / "report.html")
    show_place("Workbook:  ", out / "results.xlsx")


def _run(
    study: Path, out: Path, *, models: Path | None, replace: bool, ask: bool, what_if: list[str] | None = None
) -> StudyResult:
    from stresskit.analyses.whole import whole_result
    from stresskit.cli_progress import progress_bar
    from stresskit.report.folder import write_run
    from stresskit.runs.api import fit as fit_all
    from stresskit.runs.folder import read_models
    from stresskit.runs.place import whole_folder

    started = datetime.now(UTC)
    with whole_folder(out, replace=replace, probe=True):
        pass
    say, file, data = _opened(study, what_if=what_if)
    fits = read_models(models) if models else fit_all(file, data, say=say)
    result = whole_result(file, data, fits, evidence=ask, say=say, bar=progress_bar)
    say("writing")

    def times() -> dict[str, str]:
        return {"started": started.isoformat(), "finished": datetime.now(UTC).isoformat()}

    write_run(result, fits, out, command=sys.argv[1:], replace=replace, times=times)
    return result


@app.command
def project(
    study: StudyPath,
    /,
    *,
    models: Annotated[Path, Parameter(help="folder written by fit")],
    out: OutPath,
    what_if: WhatIf = None,
    evidence: WithEvidence = True,
    replace: Replace = False,
    json: AsJson = False,
) -> None:
    """Project the book under every scenario with models fitted before; write the run folder.

    Example: stresskit project study.yaml --models models --out run1
    One more scenario: stresskit project study.yaml --models models --out run2 --what-if "unemployment_rate + 4 over 4 quarters"
    """
    result = _run(study, out, models=models, replace=replace, ask=evidence, what_if=what_if)
    _finish(result, out, json)


@app.command
def run(
    study: StudyPath,
    /,
    *,
    out: OutPath,
    what_if: WhatIf = None,
    evidence: WithEvidence = True,
    replace: Replace = False,
    json: AsJson = False,
) -> None:
    """Check, fit, project, question the fits, report: the whole study into one run folder.

    Example: stresskit run study.yaml --out run1
    """
    result = _run(study, out, models=None, replace=replace, ask=evidence, what_if=what_if)
    _finish(result, out, json)


@app.command
def lgd(study: StudyPath, /, *, out: OutPath, replace: Replace = False, json: AsJson = False) -> None:
    """Estimate LGD by recovery time from the study's workouts, open ones included.

    Example: stresskit lgd study.yaml --out lgd1
    """
    from stresskit.cli_recovery import show_recovery
    from stresskit.report.terminal import show_place
    from stresskit.runs.place import whole_folder
    from stresskit.runs.recovery import estimate_recovery, fit_recovery
    from stresskit.runs.recovery_folder import write_recovery

    with whole_folder(out, replace=replace, probe=True):
        pass
    say, file, data = _opened(study)
    if data.workouts is None:
        raise UsageError("the study has no section recovery: it names no workouts")
    found = estimate_recovery(file.study, data.workouts, say=say)
    fits = fit_recovery(file.study, data.workouts, data.history, frequency=file.frequency)
    write_recovery(found, fits, file, data, out, command=sys.argv[1:], replace=replace)
    show_recovery(found, fits, json=json)
    if not json:
        show_place("Tables:", out)


@app.command
def search(
    study: StudyPath,
    specifications: Annotated[Path, Parameter(help="the search's YAML file: candidates and rules")],
    /,
    *,
    out: Annotated[Path | None, Parameter(help="folder to write; must not exist yet")] = None,
    best: Annotated[int, Parameter(help="rows of the table that is printed")] = 10,
    threads: Annotated[int, Parameter(help="threads per fit; the figures do not depend on it")] = 1,
    replace: Replace = False,
    json: AsJson = False,
) -> None:
    """Try many macro specifications for one cause under stated rules; every one tried is recorded.

    Example: stresskit search study.yaml search.yaml --out search1
    """
    from stresskit.cli_progress import progress_bar
    from stresskit.cli_search import as_plain, show_search
    from stresskit.report.terminal import as_json, show_place
    from stresskit.runs.place import whole_folder
    from stresskit.search.api import read_search, search_specifications
    from stresskit.search.folder import write_search

    if best < 1 or threads < 1:
        raise UsageError("--best and --threads are at least 1")
    if out is not None:
        with whole_folder(out, replace=replace, probe=True):
            pass
    text = read_search(specifications)
    _, file, data = _opened(study)
    with progress_bar("fits") as progress:
        result = search_specifications(file, data, text, progress=progress, threads=threads)
    if out is not None:
        write_search(result, out, command=sys.argv[1:], replace=replace)
    if json:
        print(as_json(as_plain(result) | {"folder": None if out is None else str(out)}))
        return
    show_search(result, best=best)
    if out is not None:
        show_place("Search folder:", out)


@app.command(name="import")
def import_(
    mapping: Annotated[Path, Parameter(help="the mapping's YAML file: which column is which variable")],
    /,
    *,
    out: Annotated[Path, Parameter(help="folder for NAME.yaml of every scenario, or a .yaml file for one")],
    scenario: Annotated[
        tuple[str, ...],
        Parameter(negative=(), show_default=False, help="make only this scenario; may be repeated"),
    ] = (),
    study: Annotated[
        Path | None, Parameter(help="study whose history the scenarios join, and whose checks they must pass")
    ] = None,
    history: Annotated[Path | None, Parameter(help="CSV file to write the table's own history to")] = None,
    replace: Annotated[bool, Parameter(negative=(), help="overwrite files of an earlier import")] = False,
    json: AsJson = False,
) -> None:
    """Turn a published table (CSV or Excel) into scenario files.

    Example: stresskit import supervisor.yaml --out scenarios --study study.yaml
    """
    from stresskit.cli_import import show_import
    from stresskit.imports.api import import_table, write_import

    result = import_table(mapping, scenarios=scenario, study=study)
    files = write_import(result, out, history=history, replace=replace)
    show_import(result, files, json=json)


@app.command
def new(
    folder: Annotated[Path, Parameter(help="folder to make; must not exist yet, or be empty")],
    /,
    *,
    from_: Annotated[
        Path | None,
        Parameter(name="--from", help="your own loan table (CSV or Parquet): its columns are guessed"),
    ] = None,
    json: AsJson = False,
) -> None:
    """Write a commented study and scenarios to start from; with an invented loan book, or for your own table.

    Example: stresskit new harbour
    For your own loans: stresskit new my-study --from loans.csv
    """
    from stresskit.cli_new import show_new
    from stresskit.starter.write import start

    show_new(start(folder, loans=from_), json=json)


@app.command
def completion(
    shell: Annotated[Literal["bash", "zsh", "fish"], Parameter(help="the shell: bash, zsh or fish")],
    /,
) -> None:
    """Print the script with which a shell completes commands and options.

    Example: stresskit completion bash
    For every new shell: stresskit completion bash > ~/.local/share/bash-completion/completions/stresskit
    """
    print(app.generate_completion(prog_name="stresskit", shell=shell))


@app.command
def schema(
    kind: Annotated[
        Literal["study", "scenario", "search", "import"],
        Parameter(help="the kind of file: study, scenario, search or import"),
    ],
    /,
) -> None:
    """Print the JSON Schema of a kind of file, with which editors complete and check it.

    Example: stresskit schema scenario > scenario-schema.json
    """
    from stresskit.spec.schema import schema_text

    print(schema_text(kind), end="")


@app.command
def evidence(
    study: StudyPath,
    /,
    *,
    out: Annotated[Path | None, Parameter(help="folder to write the tables to; must not exist yet")] = None,
    split: Annotated[
        str | None,
        Parameter(help="last period before the break that stability is judged at, like 2019-12 or 2019Q4"),
    ] = None,
    replace: Replace = False,
    json: AsJson = False,
) -> None:
    """Fit the study's hazards and ask of them what a validator asks; print verdicts and tables.

    Example: stresskit evidence study.yaml --out evidence1
    """
    from stresskit.report.terminal import as_json, show_place
    from stresskit.report.validation import show_evidence
    from stresskit.runs.api import fit as fit_all
    from stresskit.runs.evidence import split_period, study_evidence, write_evidence
    from stresskit.runs.place import whole_folder

    if out is not None:
        with whole_folder(out, replace=replace, probe=True):
            pass
    say, file, data = _opened(study, first=lambda given: split_period(given, split))
    at = split_period(file, split)
    found = study_evidence(file, data, fit_all(file, data, say=say), split=at, say=say)
    if out is not None:
        write_evidence(found, file, data, out, command=sys.argv[1:], replace=replace, split=split)
    if json:
        tables = dict(found.tables) | {"verdicts": found.verdict_table()}
        print(as_json(tables | {"folder": None if out is None else str(out)}))
        return
    show_evidence(found)
    if out is not None:
        show_place("Evidence folder:", out)


@app.command
def demo(
    *,
    out: OutPath,
    loans: Annotated[int, Parameter(help="number of invented loans")] = 20_000,
    seed: Annotated[int, Parameter(help="seed of the invented bank")] = 20251231,
    evidence: WithEvidence = True,
    json: AsJson = False,
) -> None:
    """Write the study of an invented bank into a folder and run it.

    Example: stresskit demo --out harbour
    """
    from stresskit.core.errors import OutputError
    from stresskit.demo.bank import write_demo
    from stresskit.report.terminal import show_place

    if out.exists() and (not out.is_dir() or any(out.iterdir())):
        raise OutputError(f"{out} exists already; choose another --out")
    say = _say()
    say("inventing a bank")
    try:
        study = write_demo(out, seed=seed, loans=loans)
    except OSError as e:
        raise OutputError(f"cannot write the demo to {out}: {e.strerror or e}") from e
    result = _run(study, out / "run", models=None, replace=False, ask=evidence)
    _finish(result, out / "run", json)
    if not json:
        show_place("Study:     ", study)


app.command(explain)
app.command(reverse)
app.command(backtest)
app.command(model_choice)
add_repeat(app, _say)


app.command(bands)


def _fail(error: BaseException, code: int, show: bool) -> int:
    if show:
        traceback.print_exception(error)
    print(f"stresskit: {visible(str(error), lines=True)}", file=sys.stderr)
    return code


def _examples_last(commands: App) -> None:
    """In every command's help the lines from the first example on stand after the options."""
    for name in commands.resolved_commands():
        if not name.startswith("-"):
            one = commands[name]
            before, mark, after = cleandoc(one.help or "").partition("\nExample: ")
            if mark:
                one.help, one.help_epilogue = before.rstrip(), f"Example: {after.strip()}"


def _where_to_look(words: list[str]) -> str:
    """The help to read after a wrong call, and the command's own example."""
    known = [w for w in words[:1] if not w.startswith("-") and w in app.resolved_commands()]
    if not known:
        return "See stresskit --help."
    example = (app[known[0]].help_epilogue or "").split("\n")[0]
    return f"See stresskit {known[0]} --help. {example}".rstrip()


def _outcome(words: list[str], show: bool, signals: list[int]) -> int:
    """Exit code of one command; ``signals`` are those that have come to end it."""
    try:
        app(words, exit_on_error=False, print_error=False, result_action="return_value")
        # a reader that has gone is met here and not when the interpreter ends
        sys.stdout.flush()
    except CycloptsError as e:
        code = _fail(e, 2, show)
        print(_where_to_look(words), file=sys.stderr)
        return code
    except (BrokenPipeError, SystemExit):
        # The reader of stdout has gone, which is its right. rich meets this itself and asks the program to end.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    except Exception as e:
        # The database and compiled code turn an interrupt that meets them into an error of their own.
        if signals:
            raise KeyboardInterrupt from e
        if isinstance(e, StresskitError):
            return _fail(e, e.exit_code, show)
        code = _fail(e, 1, show)
        print(
            "This is a bug in stresskit. Run again with --traceback and report what it prints.",
            file=sys.stderr,
        )
        return code
    return 0


@contextlib.contextmanager
def _heard() -> Iterator[None]:
    """An interrupt that meets the end of an object, where Python can only report it, comes again a moment later."""
    told = sys.unraisablehook

    def again(what: sys.UnraisableHookArgs) -> None:
        if not isinstance(what.exc_value, KeyboardInterrupt):
            told(what)
            return
        timer = threading.Timer(0.02, _thread.interrupt_main, [signal.SIGTERM])
        timer.daemon = True
        timer.start()

    sys.unraisablehook = again
    try:
        yield
    finally:
        sys.unraisablehook = told


def main(argv: list[str] | None = None) -> None:
    """Entry point: runs a command and exits with the code its outcome has."""
    words = list(sys.argv[1:] if argv is None else argv)
    signals: list[int] = []

    def end(number: int, frame: FrameType | None) -> None:
        signals.append(number)
        signal.default_int_handler(number, frame)

    try:
        # A polite kill ends like an interrupt, so that temporary files are cleared.
        signal.signal(signal.SIGTERM, end)
        if signal.getsignal(signal.SIGINT) is not signal.SIG_IGN:
            signal.signal(signal.SIGINT, end)
        with _heard():
            code = _outcome([w for w in words if w != "--traceback"], "--traceback" in words, signals)
    except KeyboardInterrupt:
        print("stresskit: interrupted; nothing half-written was left", file=sys.stderr)
        code = 130
    sys.exit(code)


_examples_last(app)

if __name__ == "__main__":
    main()
