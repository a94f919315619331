"""An import in the terminal: what was made of what, cautions, JSON. Imported only by its command."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import pandas as pd
from rich.text import Text

from stresskit.imports.api import ImportResult
from stresskit.imports.rows import period_label
from stresskit.report.terminal import as_json, console, show, show_place, text


def show_import(result: ImportResult, files: Sequence[Path], *, json: bool) -> None:
    """Variables with their first, lowest, highest and last values; cautions; the files written."""
    table = import_table_summary(result)
    cautions = [f"Scenario {name}: {words}" for name, said in result.cautions.items() for words in said]
    if json:
        print(
            as_json(
                {
                    "import": result.mapping.model.import_,
                    "variables": table,
                    "cautions": cautions,
                    "findings": list(result.findings),
                    "history_left_out": list(result.left_out),
                    "files": [str(f) for f in files],
                }
            )
        )
        return
    show(table, title=f"Import {result.mapping.model.import_}: levels as written")
    out = console()
    for words in (*cautions, *result.findings):
        out.print(Text(f"  - {text(words)}"))
    if result.history is not None and result.left_out:
        out.print(
            Text(f"  - The history lacks {', '.join(result.left_out)}: the table does not state its levels.")
        )
    for file in files:
        show_place("Written:", file)


def import_table_summary(result: ImportResult) -> pd.DataFrame:
    """A row per scenario and variable."""
    rows = []
    for name, path in result.paths.items():
        mapping = result.mapping.model.of(name)
        for variable, values in path.values.items():
            rows.append(
                {
                    "scenario": name,
                    "variable": variable,
                    "unit": mapping[variable].unit,
                    "from": period_label(path.start, path.calendar),
                    "to": period_label(path.start + len(values) - 1, path.calendar),
                    "first": float(values[0]),
                    "lowest": float(values.min()),
                    "highest": float(values.max()),
                    "last": float(values[-1]),
                    "made": path.told.get(variable, "as published"),
                }
            )
    return pd.DataFrame(rows)
