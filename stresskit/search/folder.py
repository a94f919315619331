"""A finished search as a folder that is whole or not there."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from stresskit.runs.folder import plain_csv
from stresskit.runs.recorded import recorded_folder
from stresskit.search.result import SearchResult


def write_search(
    result: SearchResult, out: str | Path, *, command: Sequence[str] = (), replace: bool = False
) -> Path:
    """search.csv (every specification), terms, windows, features, references, winner.yaml, manifest.json.

    Two runs of the same search leave the same bytes. Raises OutputError when the place exists (and
    ``replace`` is false) or cannot be written.
    """
    place = Path(out)
    record = dict(result.record)
    record["search"] = dict(record["search"]) | {
        "accepted": result.accepted,
        "refused_by_rule": dict(result.refused),
        "notes": list(result.notes),
    }
    with recorded_folder(
        place, record, kind="search", command=command, base=result.base, replace=replace
    ) as part:
        plain_csv(result.table, part / "search.csv")
        for name in ("terms", "windows", "features", "references"):
            plain_csv(getattr(result, name), part / f"{name}.csv")
        if result.winner:
            (part / "winner.yaml").write_text(result.winner, encoding="utf-8")
    return place
