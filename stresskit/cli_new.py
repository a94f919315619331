"""A new study in the terminal. Imported only by its command."""

from __future__ import annotations

import pandas as pd
from rich.text import Text

from stresskit.report.terminal import as_json, console, show, show_place, text
from stresskit.starter.write import Started


def show_new(made: Started, *, json: bool) -> None:
    """What was written, what was guessed, what to do next."""
    g = made.guessed
    if json:
        told: dict[str, object] = {"study": str(made.study), "files": made.files, "to_name": made.to_name}
        if g is not None:
            told |= {
                "layout": g.layout, "frequency": g.frequency, "as_of": g.as_of, "columns": g.roles,
                "outcome": {"default": g.default, "payoff": g.payoff, "performing": g.performing},
                "segments": g.segments, "without_role": g.others, "rows_read": g.looked.rows, "all_rows": g.looked.whole,
            }  # fmt: skip
        print(as_json(told))
        return
    out = console()
    if g is not None:
        rows = [(role, column, g.why[role]) for role, column in g.roles.items()]
        part = "" if g.looked.whole else f", from the first {g.looked.rows:,} rows"
        show(
            pd.DataFrame(rows, columns=["role", "column", "because"]),
            title=f"Guessed from names and values{part}: {'a row per loan and period' if g.layout == 'panel' else 'a row per loan'}",
            to=out,
        )
        for line in made.to_name:
            out.print(Text(f"  - to be named by you: {text(line)}"))
    for file in made.files:
        show_place("Written:", made.study.parent / file)
    if g is None:
        out.print(Text("\nEverything in it is invented. Next:"))
        show_place("  stresskit run", f"{made.study} --out {made.study.parent / 'run1'}")
    else:
        out.print(Text("\nNext: look at every line with CHECK, fill macro.csv, then"))
        show_place("  stresskit check", made.study)
