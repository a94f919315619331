"""A finished search as a folder that is whole or not there."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from stresskit.runs.folder import plain_csv
from stresskit.runs.place import whole_folder
from stresskit.runs.record import write_manifest
from stresskit.search.result import SearchResult


def write_search(
    result: SearchResult, out: str | Path, *, command: Sequence[str] = (), replace: bool = False
) -> Path:
    """search.csv (every specification), terms, windows, features, references, winner.yaml, manifest.json.

    Two runs of the same search leave the same bytes. Raises OutputError when the place exists (and
    ``replace`` is false) or cannot be written.
    """
    place = Path(out)
    with whole_folder(place, replace=replace) as part:
        plain_csv(result.table, part / "search.csv")
        for name in ("terms", "windows", "features", "references"):
            plain_csv(getattr(result, name), part / f"{name}.csv")
        if result.winner:
            (part / "winner.yaml").write_text(result.winner, encoding="utf-8")
        record = dict(result.record)
        record["search"] = dict(record["search"]) | {
            "accepted": result.accepted,
            "refused_by_rule": dict(result.refused),
            "notes": list(result.notes),
        }
        write_manifest(record, part, command=command)
    return place
