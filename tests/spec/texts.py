"""Good texts beside this file, malformed variants of them, and what loading them says."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from stresskit.core.errors import TextError
from stresskit.spec.load import Loaded, load_scenario, load_study

GOOD = Path(__file__).parent / "good"
STUDIES = ("flags_study.yaml", "harbour_study.yaml", "spells_study.yaml")
SCENARIOS = ("by_label.yaml", "deep_recession.yaml", "published_table.yaml")

Load = Callable[[Path], Loaded[Any]]


def load(path: Path) -> Loaded[Any]:
    """The loader for a file of the folder of good texts, or a variant of one."""
    return (load_study if path.name in STUDIES else load_scenario)(path)


def changed(name: str, *changes: tuple[str, str]) -> str:
    """A good text in which each first occurrence of an old piece is replaced by a new one."""
    text = (GOOD / name).read_text(encoding="utf-8")
    for old, new in changes:
        assert old in text, f"{old!r} is not in {name}"
        text = text.replace(old, new, 1)
    return text


def complaint(path: Path, content: str | bytes, loader: Load) -> TextError:
    """The error that loading this content raises; its file, line and column must be those of its text."""
    path.write_bytes(content if isinstance(content, bytes) else content.encode("utf-8"))
    with pytest.raises(TextError) as caught:
        loader(path)
    error = caught.value
    assert error.file == str(path)
    assert error.exit_code == 3
    if error.line is not None:
        assert str(error).startswith(f"{path}:{error.line}:{error.column}: ")
    return error


def said(path: Path, content: str | bytes, loader: Load) -> str:
    """That error's text, with the path of the file cut down to ``file``."""
    return str(complaint(path, content, loader)).replace(str(path), "file")
