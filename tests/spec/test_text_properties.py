"""Whatever a file holds: a model, or a TextError with a place in the file. Nothing else, and soon."""

from __future__ import annotations

import json
import string
from collections.abc import Iterator
from decimal import Decimal
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from stresskit.core.errors import TextError
from stresskit.spec.load import load_scenario, load_study
from stresskit.spec.reverse import Reverse
from stresskit.spec.yaml import read_document, scalar
from tests.spec.texts import GOOD, SCENARIOS, STUDIES, Load

# Generous: another process may hold the machine, and a hang is what this looks for.
SOON = settings(
    max_examples=150, deadline=10_000, suppress_health_check=[HealthCheck.function_scoped_fixture]
)

YAML_LIKE = st.text(
    alphabet=" \n\n::,--[]{}#&*!|>'\"%@`?<~.\\\t\r0123456789eabNOtrue\u00e9\u00a0\u2028\x00", max_size=60
)
TEXTS = {name: (GOOD / name).read_text(encoding="utf-8") for name in STUDIES + SCENARIOS}


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "x.yaml"


def _loads_or_says_where(path: Path, content: bytes) -> None:
    path.write_bytes(content)
    for load in (load_study, load_scenario):
        _one(path, content, load)


def _one(path: Path, content: bytes, load: Load) -> None:
    error = _error(path, load)
    if error is None:
        return
    assert error.file == str(path)
    assert error.line is not None
    assert error.column is not None
    text = content.decode("utf-8", errors="replace").replace("\r\n", "\n").replace("\r", "\n")
    lines = text.split("\n")
    assert 1 <= error.line <= len(lines)
    assert 1 <= error.column <= len(lines[error.line - 1]) + 1
    words = str(error)
    assert words.startswith(f"{path}:{error.line}:{error.column}: ")
    for jargon in ("Input should", "Value error", "validator", "function-", "constrained", "0x7f"):
        assert jargon not in words


def _error(path: Path, load: Load) -> TextError | None:
    try:
        load(path)
    except TextError as error:
        return error
    return None


@SOON
@given(text=st.text(max_size=200))
def test_any_text(path: Path, text: str) -> None:
    _loads_or_says_where(path, text.encode("utf-8", errors="surrogatepass"))


@SOON
@given(text=YAML_LIKE)
def test_any_text_of_yaml_characters(path: Path, text: str) -> None:
    _loads_or_says_where(path, text.encode("utf-8"))


@SOON
@given(content=st.binary(max_size=80))
def test_any_bytes(path: Path, content: bytes) -> None:
    _loads_or_says_where(path, content)


@SOON
@given(name=st.sampled_from(sorted(TEXTS)), data=st.data())
def test_good_texts_with_a_piece_replaced(path: Path, name: str, data: st.DataObject) -> None:
    text = TEXTS[name]
    start = data.draw(st.integers(0, len(text)))
    end = data.draw(st.integers(start, min(len(text), start + 12)))
    content = text[:start] + data.draw(YAML_LIKE) + text[end:]
    _one(path, _write(path, content), load_study if name in STUDIES else load_scenario)


def _write(path: Path, text: str) -> bytes:
    content = text.encode("utf-8")
    path.write_bytes(content)
    return content


VALUES = st.recursive(
    st.none()
    | st.booleans()
    | st.integers(-(10**20), 10**20)
    | st.floats()
    | st.text(max_size=8)
    | st.sampled_from(["2025-12", "2025Q4", "hold", "-24%", "rate", "spline"]),
    lambda inner: (
        st.lists(inner, max_size=3)
        | st.dictionaries(
            st.sampled_from(
                ["values", "loan", "age", "of", "by", "constant", "column", "add_to", "revert_to", "x y"]
            ),
            inner,
            max_size=3,
        )
    ),
    max_leaves=6,
)


def _places(data: Any, keys: tuple[str | int, ...] = ()) -> Iterator[tuple[str | int, ...]]:
    items = data.items() if isinstance(data, dict) else enumerate(data) if isinstance(data, list) else ()
    for key, value in items:
        yield (*keys, key)
        yield from _places(value, (*keys, key))


@SOON
@given(name=st.sampled_from(sorted(TEXTS)), value=VALUES, data=st.data())
def test_good_data_with_a_value_replaced(path: Path, name: str, value: Any, data: st.DataObject) -> None:
    """Wrong shapes at every place of the models, which random text seldom reaches."""
    tree: Any = read_document(TEXTS[name].encode(), name).data
    *above, last = data.draw(st.sampled_from(sorted(_places(tree), key=str)))
    inner = tree
    for key in above:
        inner = inner[key]
    inner[last] = value
    _one(path, _write(path, json.dumps(tree)), load_study if name in STUDIES else load_scenario)


@settings(max_examples=300, deadline=None)
@given(number=st.floats(allow_nan=False, allow_infinity=False) | st.integers(-(10**18) + 1, 10**18 - 1))
def test_numbers_are_read_to_the_last_bit(number: float) -> None:
    found = read_document(f"a: {number!r}\n".encode(), "x").data["a"]
    assert type(found) is type(number)
    assert repr(found) == repr(number)


@settings(max_examples=300, deadline=None)
@given(text=st.text(alphabet=string.printable + "éß漢𝄞", max_size=40))
def test_quoted_text_is_read_as_written(text: str) -> None:
    kept = "".join(c for c in text if c == "\n" or c >= " ")
    assert read_document(json.dumps({"a": kept}, ensure_ascii=False).encode(), "x").data == {"a": kept}


@settings(max_examples=300, deadline=None)
@given(text=st.from_regex(r"[-+]?[0-9]{1,4}([.:_,\-][0-9]{0,3})?([eE][-+]?[0-9]{1,2})?", fullmatch=True))
def test_plain_scalars_are_numbers_only_when_python_agrees(text: str) -> None:
    """By another route: what is read as a number is what float() makes of it; leading zeros stay text."""
    found = scalar(text)
    digits = text.lstrip("+-")
    leading_zero = digits[0] == "0" and digits[1:2].isdigit()
    if leading_zero or any(c in text for c in ":_,") or "-" in digits.replace("e-", "").replace("E-", ""):
        assert found == text
    else:
        assert isinstance(found, int | float)
        assert found == float(text)


@settings(max_examples=300, deadline=None)
@given(hundredths=st.integers(1, 10**6), digits=st.integers(0, 4), odd=st.floats(1e-6, 1e3))
@example(hundredths=76, digits=3, odd=1.0)  # 0.076 %: 0.00076 is one bit beside what 0.076 / 100 gives
def test_percentages_come_back_from_json_to_the_last_bit(hundredths: int, digits: int, odd: float) -> None:
    for text in (f"{Decimal(hundredths).scaleb(-digits):f}%", f"{Decimal(repr(odd)):f}%"):
        one = Reverse.model_validate({"loss_rise": text})
        assert Reverse.model_validate_json(one.model_dump_json()).loss_rise == one.loss_rise
