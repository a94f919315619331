"""Write docs/manifest-schema.json, the JSON Schema of a run folder's manifest.json.

Run from anywhere: ``python docs/make_manifest_schema.py``. tests/runs compares the committed file with what this gives.
"""

from __future__ import annotations

import json
from pathlib import Path

from stresskit.runs.manifest_schema import manifest_schema

FILE = Path(__file__).with_name("manifest-schema.json")


def text() -> str:
    """The file's content."""
    return json.dumps(manifest_schema(), indent=1, ensure_ascii=False) + "\n"


if __name__ == "__main__":
    FILE.write_text(text(), encoding="utf-8", newline="\n")
