"""Commands verify and compare: what they print. Heavy rooms are imported when a command runs."""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

from cyclopts import App, Parameter

from stresskit.core.errors import CheckFailed

if TYPE_CHECKING:
    from stresskit.repeat.verify import Verification

RunPath = Annotated[Path, Parameter(help="run folder, as run, project or demo wrote it")]
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


def progress_line() -> Callable[[str], None]:
    """Used where no progress line is handed over."""
    return (lambda what: print(what, file=sys.stderr)) if sys.stderr.isatty() else (lambda _: None)
