"""Write docs/study-schema.json, docs/scenario-schema.json, docs/search-schema.json and docs/import-schema.json.

Run from anywhere: ``python docs/make_schemas.py``. tests/spec compares the committed files with what this gives.
"""

from __future__ import annotations

from pathlib import Path

from stresskit.spec.schema import SCHEMAS, schema_text

FILES = {kind: Path(__file__).with_name(f"{kind}-schema.json") for kind in SCHEMAS}

if __name__ == "__main__":
    for kind, file in FILES.items():
        file.write_text(schema_text(kind), encoding="utf-8", newline="\n")
