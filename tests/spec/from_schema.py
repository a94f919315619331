"""Documents drawn from a JSON Schema: mostly what it allows, here and there something else in its place."""

from __future__ import annotations

from typing import Any

from hypothesis import strategies as st

#: What may stand anywhere by mistake.
STRAY: st.SearchStrategy[Any] = st.one_of(
    st.none(), st.booleans(), st.integers(-(10**17), 10**17), st.floats(allow_nan=False, allow_infinity=False),
    st.sampled_from(["", "hold", "baseline", "2026Q1", "4%", "-200%", "1e400", "NO", "2025-02-30", "ü", "x" * 200]),
    st.just([]), st.just({}), st.just([1.0]), st.just({"values": [1]}),
)  # fmt: skip
#: Texts that our patterns and period types take, so that drawn documents reach the later checks too.
NAMES = st.sampled_from(["baseline", "stress", "u", "hpi", "policy", "a-b", "A1"])
PERIODS = st.sampled_from(
    ["2026Q1", "2026Q2", "2026-03", "2027Q4", "2025Q4", "2026-05-31", "9999Q4", "0001-01"]
)
PERCENTS = st.sampled_from(["4%", "-24%", "+0.5 %", "-99.9%", "0%", "1000%"])
WORDS = st.sampled_from(["", "severe", "a b", "2025-11-28", "=cmd", "'", "é"])
NUMBERS = st.sampled_from([0, 1, -1, 0.5, 5.25, 400, 1e-300, 1e300, -1e308])


def documents(schema: dict[str, Any], *, stray: float = 0.05) -> st.SearchStrategy[Any]:
    """Values drawn along ``schema``; each place is a stray value with about this probability."""
    every = max(2, round(1 / stray)) if stray else 0

    def at(part: Any, depth: int) -> st.SearchStrategy[Any]:
        drawn = one(part, depth)
        if not every:
            return drawn
        return st.integers(1, every).flatmap(lambda k: STRAY if k == every else drawn)

    def one(part: Any, depth: int) -> st.SearchStrategy[Any]:
        if "$ref" in part:
            return st.deferred(lambda: one(schema["$defs"][part["$ref"].rsplit("/", 1)[-1]], depth))
        for key in ("anyOf", "oneOf"):
            if key in part:
                return st.one_of([one(p, depth) for p in part[key]])
        if "const" in part:
            return st.just(part["const"])
        if "enum" in part:
            return st.sampled_from(part["enum"])
        kind = part.get("type", "null")
        if kind == "object":
            return mapping(part, depth + 1)
        if kind == "array":
            return st.lists(
                at(part.get("items", {}), depth + 1), min_size=part.get("minItems", 0), max_size=4
            )
        return scalar(part, kind)

    def mapping(part: Any, depth: int) -> st.SearchStrategy[Any]:
        if "properties" in part:
            needed = set(part.get("required", ()))
            fields = {k: at(v, depth) for k, v in part["properties"].items()}
            return st.fixed_dictionaries(
                {k: v for k, v in fields.items() if k in needed},
                optional={k: v for k, v in fields.items() if k not in needed},
            )
        if "patternProperties" in part:
            inner = next(iter(part["patternProperties"].values()))
            return st.dictionaries(NAMES, at(inner, depth), max_size=3)
        inner = part.get("additionalProperties", {})
        names = PERIODS if depth > 2 else WORDS
        return st.dictionaries(names, at(inner if isinstance(inner, dict) else {}, depth), max_size=3)

    return at(schema, 0)


def scalar(part: Any, kind: Any) -> st.SearchStrategy[Any]:
    """A text, number, truth or null of the declared type."""
    if isinstance(kind, list):
        return PERIODS
    if kind == "string":
        pattern = part.get("pattern", "")
        if "%" in pattern:
            return PERCENTS
        if "A-Za-z" in pattern:
            return NAMES
        return st.sampled_from(["2025-11-28", "2024-02-29"]) if r"\d{4}" in pattern else WORDS
    if kind in ("number", "integer"):
        low, high = part.get("minimum", part.get("exclusiveMinimum")), part.get("maximum")
        if low is None and high is None:
            return NUMBERS
        return st.integers(1 if low is None else int(low) + 1, 4 if high is None else max(int(high), 1))
    return st.booleans() if kind == "boolean" else st.none()
