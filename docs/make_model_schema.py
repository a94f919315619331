"""Write docs/model-schema.json, the JSON Schema of a saved hazard.

Run from anywhere: ``python docs/make_model_schema.py``. tests/hazard compares the committed file with what this gives.
"""

from __future__ import annotations

import json
from pathlib import Path

from stresskit.hazard.model_schema import model_schema

FILE = Path(__file__).with_name("model-schema.json")


def text() -> str:
    """The file's content."""
    return json.dumps(model_schema(), indent=1, ensure_ascii=False) + "\n"


if __name__ == "__main__":
    FILE.write_text(text(), encoding="utf-8")
