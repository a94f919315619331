"""JSON Schema (draft 2020-12) of study, scenario, search and import files, for editors that complete and check YAML."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from types import MappingProxyType
from typing import Any

from pydantic import TypeAdapter

from stresskit.spec.imports import ImportMapping
from stresskit.spec.scenario import ScenarioSpec, TableMapping
from stresskit.spec.search import SearchSpec
from stresskit.spec.study import Study

DIALECT = "https://json-schema.org/draft/2020-12/schema"


def study_schema() -> dict[str, Any]:
    """JSON Schema of ``study.yaml``."""
    return {"$schema": DIALECT, **_closed(Study.model_json_schema(by_alias=True))}


def scenario_schema() -> dict[str, Any]:
    """JSON Schema of a scenario file: paths, or the mapping of a published table."""
    schema = TypeAdapter(ScenarioSpec | TableMapping).json_schema(by_alias=True)
    return {"$schema": DIALECT, "title": "Scenario", **_closed(schema)}


def search_schema() -> dict[str, Any]:
    """JSON Schema of a search of macro specifications."""
    return {"$schema": DIALECT, **_closed(SearchSpec.model_json_schema(by_alias=True))}


def import_schema() -> dict[str, Any]:
    """JSON Schema of the mapping that an import of a published table follows."""
    return {"$schema": DIALECT, **_closed(ImportMapping.model_json_schema(by_alias=True))}


#: Kind of file -> its schema.
SCHEMAS: Mapping[str, Callable[[], dict[str, Any]]] = MappingProxyType(
    {"study": study_schema, "scenario": scenario_schema, "search": search_schema, "import": import_schema}
)


def schema_text(kind: str) -> str:
    """The schema of a kind of file as it is printed and published."""
    return json.dumps(SCHEMAS[kind](), indent=1, ensure_ascii=False) + "\n"


def _closed(schema: Any) -> Any:
    """The schema, in which mappings with a pattern for their keys refuse all other keys."""
    if isinstance(schema, list):
        return [_closed(item) for item in schema]
    if not isinstance(schema, dict):
        return schema
    out = {key: _closed(value) for key, value in schema.items()}
    if "patternProperties" in out:
        out.setdefault("additionalProperties", False)
    return out
