"""A comparison as a folder: a CSV per table, the texts' differences, and a page."""

from __future__ import annotations

from pathlib import Path

from stresskit.repeat.compare import Comparison
from stresskit.repeat.page import comparison_page
from stresskit.runs.folder import plain_csv
from stresskit.runs.place import whole_folder


def write_comparison(found: Comparison, out: str | Path) -> Path:
    """Write the folder, whole or not at all. Raises OutputError when the place exists or cannot be written."""
    place = Path(out)
    with whole_folder(place) as part:
        for name, table in found.tables.items():
            plain_csv(table, part / f"{name}.csv")
        told = [diff or f"# {name}\n" for name, diff in found.texts.items()]
        (part / "texts.diff").write_bytes("\n".join(told).encode("utf-8"))
        (part / "report.html").write_bytes(comparison_page(found).encode("utf-8"))
    return place
