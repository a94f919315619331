"""The JSON Schemas agree with the loader about texts that differ in shape."""

from __future__ import annotations

import re
from collections.abc import Iterator
from typing import Any

import pytest

from stresskit.spec.schema import DIALECT, scenario_schema, study_schema
from stresskit.spec.yaml import read_document
from tests.spec.texts import GOOD, SCENARIOS, STUDIES, changed

TYPES = {"object": dict, "array": list, "string": str, "boolean": bool, "null": type(None)}
#: Keywords that say something about a value; everything else in our schemas is for the reader.
CHECKED = {
    "$ref", "type", "enum", "const", "anyOf", "oneOf", "properties", "required", "additionalProperties",
    "patternProperties", "propertyNames", "minProperties", "items", "prefixItems", "minItems", "maxItems",
    "pattern", "minLength", "maxLength", "minimum", "maximum", "exclusiveMinimum",
}  # fmt: skip
READ = {"$schema", "$defs", "title", "description", "default", "examples"}


def _is(value: Any, kind: str) -> bool:
    if kind in ("number", "integer"):
        kinds = (int,) if kind == "integer" else (int, float)
        return isinstance(value, kinds) and not isinstance(value, bool)
    return isinstance(value, TYPES[kind])


def accepts(schema: Any, value: Any, top: Any) -> bool:
    """A plain reading of the keywords that our schemas use (draft 2020-12, core and validation parts)."""
    if isinstance(schema, bool):
        return schema
    if "$ref" in schema and not accepts(top["$defs"][schema["$ref"].removeprefix("#/$defs/")], value, top):
        return False
    if "type" in schema:
        kinds = schema["type"] if isinstance(schema["type"], list) else [schema["type"]]
        if not any(_is(value, kind) for kind in kinds):
            return False
    if "enum" in schema and value not in schema["enum"]:
        return False
    if "const" in schema and value != schema["const"]:
        return False
    if "anyOf" in schema and not any(accepts(s, value, top) for s in schema["anyOf"]):
        return False
    if "oneOf" in schema and sum(accepts(s, value, top) for s in schema["oneOf"]) != 1:
        return False
    if isinstance(value, dict):
        return _accepts_mapping(schema, value, top)
    if isinstance(value, list):
        return _accepts_list(schema, value, top)
    if isinstance(value, str):
        return (
            len(value) >= schema.get("minLength", 0)
            and len(value) <= schema.get("maxLength", 10**9)
            and (re.search(schema.get("pattern", ""), value) is not None)
        )
    if _is(value, "number"):
        above = value > schema.get("exclusiveMinimum", float("-inf"))
        return bool(above and schema.get("minimum", value) <= value <= schema.get("maximum", value))
    return True


def _accepts_mapping(schema: Any, value: dict[str, Any], top: Any) -> bool:
    if not all(name in value for name in schema.get("required", ())) or len(value) < schema.get(
        "minProperties", 0
    ):
        return False
    for key, item in value.items():
        inner = [schema["properties"][key]] if key in schema.get("properties", {}) else []
        inner += [s for pattern, s in schema.get("patternProperties", {}).items() if re.search(pattern, key)]
        if not all(accepts(s, item, top) for s in inner or [schema.get("additionalProperties", True)]):
            return False
        if not accepts(schema.get("propertyNames", True), key, top):
            return False
    return True


def _accepts_list(schema: Any, value: list[Any], top: Any) -> bool:
    if not schema.get("minItems", 0) <= len(value) <= schema.get("maxItems", 10**9):
        return False
    fixed = schema.get("prefixItems", [])
    return all(accepts(s, v, top) for s, v in zip(fixed, value, strict=False)) and all(
        accepts(schema.get("items", True), v, top) for v in value[len(fixed) :]
    )


def _schema(name: str) -> dict[str, Any]:
    return study_schema() if name in STUDIES else scenario_schema()


def _subschemas(schema: Any) -> Iterator[dict[str, Any]]:
    if isinstance(schema, list):
        for item in schema:
            yield from _subschemas(item)
    elif isinstance(schema, dict):
        yield schema
        for key, inner in schema.items():
            if key in ("properties", "patternProperties", "$defs"):
                yield from _subschemas(list(inner.values()))
            elif key in ("items", "prefixItems", "anyOf", "oneOf", "additionalProperties", "propertyNames"):
                yield from _subschemas(inner)


@pytest.mark.parametrize("schema", [study_schema(), scenario_schema()], ids=["study", "scenario"])
def test_dialect_references_and_known_keywords(schema: dict[str, Any]) -> None:
    assert schema["$schema"] == DIALECT
    count = 0
    for inner in _subschemas(schema):
        count += 1
        assert set(inner) <= CHECKED | READ
        if "$ref" in inner:
            assert inner["$ref"].removeprefix("#/$defs/") in schema["$defs"]
        if "properties" in inner:
            assert inner["additionalProperties"] is False
            assert all(name in inner["properties"] for name in inner.get("required", ()))
    assert count > 50


@pytest.mark.parametrize("name", STUDIES + SCENARIOS)
def test_good_texts_fit(name: str) -> None:
    schema = _schema(name)
    assert accepts(schema, read_document((GOOD / name).read_bytes(), name).data, schema)


@pytest.mark.parametrize(
    ("name", "old", "new"),
    [
        ("harbour_study.yaml", "as_of:", "as_off:"),
        ("harbour_study.yaml", "study: harbour-retail\n", ""),
        ("harbour_study.yaml", "balance: balance", "ballance: balance"),
        ("harbour_study.yaml", "study: harbour-retail", "study: harbour retail"),
        ("harbour_study.yaml", "frequency: month ", "frequency: week "),
        ("harbour_study.yaml", "[D]", "D"),
        ("harbour_study.yaml", "[D]", "[]"),
        ("harbour_study.yaml", "[D]", "[1]"),
        ("harbour_study.yaml", "lag: 1", "lag: NO"),
        ("harbour_study.yaml", "lag: 1", "lag: '1'"),
        ("harbour_study.yaml", "lag: 1", "lag: -1"),
        ("harbour_study.yaml", "lag: 1", "lag: 1.5"),
        ("harbour_study.yaml", "floating: 0.4", "floating: 1.4"),
        ("harbour_study.yaml", "discount: rate", "discount: rates"),
        ("harbour_study.yaml", "{age: spline, knots: 5", "{agee: spline, knots: 5"),
        ("harbour_study.yaml", "{loan: product, as", "{loan: product, ass"),
        ("harbour_study.yaml", "[product, unemployment_change]", "[product]"),
        ("harbour_study.yaml", "  payoff: {link", "  prepayment: {link"),
        ("harbour_study.yaml", "unemployment_rate: {unit", "unemployment rate: {unit"),
        ("harbour_study.yaml", "{by: product, values: {fixed: 0.35, floating: 0.4}}", "0.4"),
        ("deep_recession.yaml", "weight: 0.2", "weight: 20"),
        ("deep_recession.yaml", "starts: 2026Q1\n", ""),
        ("deep_recession.yaml", "-24%", "-24"),
        ("deep_recession.yaml", "values: [5.1", "value: [5.1"),
        ("deep_recession.yaml", "7.4", "NO"),
        ("deep_recession.yaml", "over: 12", "over: 0"),
        ("deep_recession.yaml", "policy_rate", "policy rate"),
        ("published_table.yaml", "table: tables/severe.csv\n", ""),
    ],
)
def test_malformed_texts_do_not(name: str, old: str, new: str) -> None:
    schema = _schema(name)
    data = read_document(changed(name, (old, new)).encode(), name).data
    assert not accepts(schema, data, schema)


def test_every_key_is_explained() -> None:
    for schema in (study_schema(), scenario_schema()):
        for model, inner in schema["$defs"].items():
            assert inner.get("description"), model
            for key, field in inner.get("properties", {}).items():
                assert field.get("description"), f"{model}.{key}"
