"""Commands verify and compare: what they print. Heavy rooms are imported when a command runs."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

from cyclopts import App, Parameter

from stresskit.core.errors import CheckFailed

if TYPE_CHECKING:
    from rich.console import Console

    from stresskit.repeat.compare import Comparison
    from stresskit.repeat.verify import Verification
    from stresskit.report.tables import Table

RunPath = Annotated[
    Path, Parameter(help="run folder, or that of one analysis or of fit, evidence, lgd or search")
]
AsJson = Annotated[bool, Parameter(name="--json", negative=(), help="print the result as JSON")]


def add_commands(app: App, say: Callable[[], Callable[[str], None]]) -> None:
    """Register verify and compare; ``say`` makes the progress line."""

    @app.command
    def verify(
        run: RunPath,
        *,
        inputs: Annotated[
            Path | None,
            Parameter(help="folder that the study's input files lie in now, when they were moved"),
        ] = None,
        out: Annotated[
            Path | None, Parameter(help="keep what was made again in this folder; must not exist yet")
        ] = None,
        json: AsJson = False,
    ) -> None:
        """Make a run again from its own record and compare every output. Exit code 6 when it does not come out.

        Example: stresskit verify harbour/run
        Inputs moved: stresskit verify harbour/run --inputs archive/2025-12
        """
        from stresskit.repeat.verify import verify as make_again
        from stresskit.report.terminal import as_json

        outcome = make_again(run, inputs=inputs, out=out, say=say())
        if json:
            print(as_json(verification_plain(outcome)))
        else:
            show_verification(outcome)
        if not outcome.ok:
            raise CheckFailed(f"{run} does not come out")

    @app.command
    def compare(
        a: Annotated[Path, Parameter(help="run folder: changes are counted from this one")],
        b: Annotated[Path, Parameter(help="run folder: to this one")],
        *,
        out: Annotated[
            Path | None, Parameter(help="folder for tables and a report page; must not exist yet")
        ] = None,
        inputs_a: Annotated[Path | None, Parameter(help="input files of run a, when they were moved")] = None,
        inputs_b: Annotated[Path | None, Parameter(help="input files of run b, when they were moved")] = None,
        bridge: Annotated[
            bool, Parameter(negative="--no-bridge", help="project again to say what the change comes from")
        ] = True,
        json: AsJson = False,
    ) -> None:
        """Explain the difference of two runs: inputs, texts, scenario values, coefficients, then losses.

        Example: stresskit compare run-2025q3 run-2025q4 --out change
        """
        from stresskit.repeat.compare import compare as set_side_by_side
        from stresskit.repeat.folder import write_comparison
        from stresskit.report.terminal import as_json
        from stresskit.runs.place import whole_folder

        if out is not None:
            with whole_folder(out, probe=True):
                pass
        found = set_side_by_side(a, b, inputs_a=inputs_a, inputs_b=inputs_b, bridge=bridge, say=say())
        if out is not None:
            write_comparison(found, out)
        if json:
            print(as_json(comparison_plain(found) | {"folder": None if out is None else str(out)}))
            return
        show_comparison(found)
        if out is not None:
            print(f"Tables: {out}\nReport: {out / 'report.html'}")


def verification_plain(outcome: Verification) -> dict[str, Any]:
    """What ``verify --json`` prints."""
    return {
        "ok": outcome.ok,
        "outcome": outcome.sentence,
        "folder": str(outcome.folder),
        "study": outcome.study,
        "as_of": outcome.as_of,
        "bitwise": outcome.bitwise,
        "failure": outcome.failure,
        "changes": [
            {"kind": c.kind, "what": c.what, "words": c.words, "fatal": c.fatal} for c in outcome.changes
        ],
        "files": [
            {
                "file": f.file, "status": f.status, "tolerance": f.tolerance, "differences": f.count,
                "largest_relative": _finite(f.largest),
                "first": [
                    {"row": m.row, "column": m.column, "before": m.before, "after": m.after, "relative": _finite(m.relative)}
                    for m in f.first
                ],
            }
            for f in outcome.files
        ],
    }  # fmt: skip


def _finite(value: float) -> float | None:
    return value if value == value and abs(value) != float("inf") else None


def show_verification(outcome: Verification) -> None:
    """What was checked, what changed, what moved, and the outcome last."""
    from rich.text import Text

    from stresskit.report.terminal import console, text

    out = console()
    changes = {k: [c for c in outcome.changes if c.kind == k] for k in ("input", "text", "version", "output")}
    out.print(Text(text(f"Verify {outcome.folder}: {outcome.study} as of {outcome.as_of}")))
    inputs, outputs = outcome.inputs, outcome.outputs
    sound = inputs.count - len(inputs.changed) - len(inputs.missing)
    rule = (
        "as at the run: bytes must agree"
        if outcome.bitwise
        else "not as at the run: figures must agree within the tolerance between builds"
    )
    heads = {
        "input": f"{sound} of {inputs.count} files as recorded, in {inputs.base}",
        "text": "as recorded" if not any(c.fatal for c in changes["text"]) else "not as recorded",
        "version": rule,
        "output": "as recorded" if outputs.sound else "not as recorded",
    }
    for kind, label in (
        ("input", "Inputs"),
        ("text", "Texts"),
        ("version", "Versions"),
        ("output", "Outputs"),
    ):
        out.print(Text(text(f"{label:<9} {heads[kind]}")))
        for change in changes[kind]:
            out.print(Text(text(f"  {'!' if change.fatal else '-'} {change.words}")))
    if outcome.files:
        counts = [f.status for f in outcome.files]
        told = ", ".join(f"{counts.count(s)} {s}" for s in dict.fromkeys(counts))
        out.print(Text(f"{'Re-run':<9} {len(counts)} files: {told}"))
        _show_moved(outcome)
    out.print(Text(text(outcome.sentence)))


def _show_moved(outcome: Verification) -> None:
    import pandas as pd

    from stresskit.report.terminal import show, text

    rows = [
        {
            "file": m.file, "row": m.row, "column": m.column, "before": m.before, "after": m.after,
            "relative": f"{m.relative:.1e}" if _finite(m.relative) is not None else "",
        }
        for f in outcome.moved[:12]
        for m in (f.first or ())
    ]  # fmt: skip
    if rows:
        shown = rows[:20]
        total = sum(f.count for f in outcome.moved)
        show(
            pd.DataFrame(shown),
            title=f"What moved: {len(shown)} of {total:,} differences",
            formats={c: lambda v: text(v)[:60] for c in ("row", "before", "after")},
        )
    gone = [f.file for f in outcome.moved if f.status in ("missing", "new")]
    for name in gone[:5]:
        status = (
            "is not made any more"
            if name in [f.file for f in outcome.moved if f.status == "missing"]
            else "is new"
        )
        print(f"  {name} {status}")
    if len(gone) > 5:
        print(f"  and {len(gone) - 5} more")


def comparison_plain(found: Comparison) -> dict[str, Any]:
    """What ``compare --json`` prints."""
    return {
        "same": found.same,
        "outcome": found.sentence,
        "a": str(found.a),
        "b": str(found.b),
        "differing": dict(found.differing),
        "texts": dict(found.texts),
        "no_bridge": found.no_bridge,
        "bridge_joined": "" if found.bridge is None else found.bridge.joined,
        "tables": dict(found.tables),
        "cautions": list(found.cautions),
    }


#: Lines of a text's difference that are printed.
_DIFF_LINES = 60


def show_comparison(found: Comparison) -> None:
    """The outcome, then every table that differs, the loss last but one and what it comes from last."""
    from rich.text import Text

    from stresskit.repeat.page import bridge_words, differing_table, loss_table, step_table
    from stresskit.report.terminal import console, text

    out = console()
    for letter, folder, study, as_of in zip(
        ("a", "b"), (found.a, found.b), found.study, found.as_of, strict=True
    ):
        out.print(Text(text(f"{letter}: {folder}, {study} as of {as_of}")))
    out.print(Text(text(found.sentence)))
    if found.same:
        return
    for key in ("facts", "inputs", "reconciliation", "scenario_values", "coefficients"):
        table = differing_table(found, key)
        if table is not None:
            _print_table(table, out)
    for name, diff in found.texts.items():
        lines = diff.splitlines()
        out.print(Text(f"Text: {text(name)}"))
        for line in lines[:_DIFF_LINES]:
            out.print(Text(f"  {text(line)}"))
        if len(lines) > _DIFF_LINES:
            out.print(Text(f"  and {len(lines) - _DIFF_LINES} lines more"))
    losses = found.tables["losses"]
    for by, part in losses[losses["by"].str.count(r"\+") == 0].groupby("by", sort=False):
        title = f"Expected loss by {by!s}" if by else "Expected loss of the whole book"
        _print_table(loss_table(part, title, segment=bool(by)), out)
    if found.bridge is not None:
        _print_table(step_table(found.bridge.table), out)
        out.print(Text(text(bridge_words(found))))
    else:
        out.print(Text(text(f"The change is not split by cause: {found.no_bridge}.")))
    for caution in found.cautions:
        out.print(Text(text(f"  - {caution}")))


def _print_table(table: Table, out: Console) -> None:
    """A table of finished text."""
    from rich import box
    from rich.table import Table as Grid
    from rich.text import Text

    from stresskit.report.terminal import text

    grid = Grid(title=Text(text(table.title)), title_justify="left", box=box.SIMPLE_HEAD, pad_edge=False)
    for column in table.columns:
        grid.add_column(Text(text(column.label)), justify="right" if column.number else "left")
    for cells in table.rows:
        grid.add_row(*[Text(text(c.text)) for c in cells])
    out.print(grid)
    if table.note:
        out.print(Text(text(table.note)))
