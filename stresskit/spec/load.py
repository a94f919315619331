"""Study and scenario files as checked models that remember where everything stands.

YAML text -> plain data with places -> JSON -> model in strict mode. Every error is a TextError with
file, line and column (1-based); all errors of a file are reported, the first one is the error's place.
"""

from __future__ import annotations

import difflib
import hashlib
import json
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Generic, TypeVar

from pydantic import BaseModel, ValidationError

from stresskit.core.errors import TextError
from stresskit.spec.imports import ImportMapping
from stresskit.spec.places import Document, Keys, Marks, dotted
from stresskit.spec.plain import Fault, faults
from stresskit.spec.scenario import ScenarioSpec, TableMapping
from stresskit.spec.search import SearchSpec
from stresskit.spec.study import Study
from stresskit.spec.what_if import WhatIf
from stresskit.spec.yaml import MAX_BYTES, read_document

M = TypeVar("M", bound=BaseModel, covariant=True)
B = TypeVar("B", bound=BaseModel)

_SHOWN = 20


@dataclass(frozen=True, slots=True)
class Loaded(Generic[M]):
    """A model with the file it came from.

    model   the checked model
    file    path as given
    text    the file's text
    digest  SHA-256 of the file's bytes, hexadecimal
    marks   place of every key and value, by path
    said    the line that the text was made from, where nobody wrote it: errors are placed there
    """

    model: M
    file: Path
    text: str
    digest: str
    marks: Marks
    said: WhatIf | None = None

    def error(self, keys: Keys, message: str) -> TextError:
        """An error about the value at ``keys`` (YAML keys and 0-based list positions), placed at its key.

        For a key that the text does not hold the place is that of the innermost key around it.
        """
        if self.said is not None:
            return self.said.about(keys, message)
        line, column = self.marks.of_key(keys)
        where = dotted(keys)
        words = f"{where}: {message}" if where else message
        return TextError(words, file=str(self.file), line=line, column=column)


def load_study(path: Path) -> Loaded[Study]:
    """Read and check a study. Raises TextError."""
    return _study(path, *_read(path))


def _study(path: Path, content: bytes, document: Document) -> Loaded[Study]:
    if "study" not in document.data and "scenario" in document.data:
        raise _wrong_kind(path, document, "scenario", "a scenario, where a study was expected")
    return _checked(Study, path, content, document)


def study_from_text(text: str, file: Path) -> Loaded[Study]:
    """A study from text that was kept, as if it stood in ``file``. Raises TextError."""
    content = text.encode("utf-8")
    return _study(file, content, read_document(content, str(file)))


def load_scenario(path: Path) -> Loaded[ScenarioSpec | TableMapping]:
    """Read and check a scenario: paths, or the mapping of a published table (told by its key ``table``).

    Raises TextError.
    """
    return _scenario(path, *_read(path))


def kept_scenario(text: str, file: Path) -> Loaded[ScenarioSpec | TableMapping]:
    """A scenario of either kind from text that was kept, as if it stood in ``file``. Raises TextError."""
    content = text.encode("utf-8")
    return _scenario(file, content, read_document(content, str(file)))


def _scenario(path: Path, content: bytes, document: Document) -> Loaded[ScenarioSpec | TableMapping]:
    data = document.data
    if "scenario" not in data and "study" in data:
        raise _wrong_kind(path, document, "study", "a study, where a scenario was expected")
    if "scenario" not in data and "import" in data:
        words = "an import mapping, where a scenario was expected: `stresskit import` makes scenarios of it"
        raise _wrong_kind(path, document, "import", words)
    looks_like_table = not {"paths", "starts"} & data.keys() and {"variables", "period"} & data.keys()
    if "table" in data or looks_like_table:
        return _checked(TableMapping, path, content, document)
    return _checked(ScenarioSpec, path, content, document)


def scenario_from_text(
    text: str, file: Path, said: WhatIf | None = None
) -> Loaded[ScenarioSpec | TableMapping]:
    """A scenario that was made (from the line ``said``) and not read, checked as if it stood in ``file``. Raises TextError."""
    content = text.encode("utf-8")
    return replace(_checked(ScenarioSpec, file, content, read_document(content, str(file))), said=said)


def load_search(path: Path) -> Loaded[SearchSpec]:
    """Read and check a search of macro specifications. Raises TextError."""
    content, document = _read(path)
    for key, what in (("study", "a study"), ("scenario", "a scenario")):
        if key in document.data and "search" not in document.data:
            raise _wrong_kind(path, document, key, f"{what}, where a search was expected")
    return _checked(SearchSpec, path, content, document)


def search_from_text(text: str, file: Path) -> Loaded[SearchSpec]:
    """A search from text that was kept, as if it stood in ``file``. Raises TextError."""
    content = text.encode("utf-8")
    return _checked(SearchSpec, file, content, read_document(content, str(file)))


def load_import(path: Path) -> Loaded[ImportMapping]:
    """Read and check the mapping of a published table to scenario files. Raises TextError."""
    content, document = _read(path)
    for key, what in (("study", "a study"), ("scenario", "a scenario"), ("search", "a search")):
        if key in document.data and "import" not in document.data:
            raise _wrong_kind(path, document, key, f"{what}, where an import mapping was expected")
    return _checked(ImportMapping, path, content, document)


def _wrong_kind(path: Path, document: Document, key: str, what: str) -> TextError:
    line, column = document.marks.of_key((key,))
    return TextError(f"this file is {what}", file=str(path), line=line, column=column)


def _read(path: Path) -> tuple[bytes, Document]:
    path = Path(path)
    try:
        if path.is_dir():
            raise TextError("this is a folder: name a YAML file", file=str(path))
        if not path.is_file():
            raise TextError(f"no such file{_neighbours(path)}", file=str(path))
        with path.open("rb") as stream:
            # One byte more than allowed tells a file that is too large without reading all of it.
            content = stream.read(MAX_BYTES + 1)
    except OSError as error:
        raise TextError(f"cannot be read: {error.strerror or error}", file=str(path)) from error
    return content, read_document(content, str(path))


def _neighbours(path: Path) -> str:
    """Names in the folder that the missing file may have been meant to be."""
    folder = path.parent
    if not folder.is_dir():
        return f": the folder {str(folder)!r} does not exist"
    names = sorted(p.name for p in folder.iterdir() if p.suffix.lower() in (".yaml", ".yml"))
    near = difflib.get_close_matches(path.name, names, n=3, cutoff=0.5)
    if near:
        return f"; did you mean {' or '.join(repr(n) for n in near)}?"
    if names:
        return f" (YAML files in that folder: {', '.join(names[:8])}{', ...' if len(names) > 8 else ''})"
    return ": that folder holds no YAML file"


def _checked(model: type[B], path: Path, content: bytes, document: Document) -> Loaded[B]:
    try:
        value = model.model_validate_json(json.dumps(document.data), strict=True)
    except ValidationError as error:
        found, more = faults(model, document.data, error, document.marks)
        raise _error(str(path), document.marks, found, more=more) from None
    return Loaded(value, Path(path), document.text, hashlib.sha256(content).hexdigest(), document.marks)


def _error(file: str, marks: Marks, found: list[Fault], *, more: bool) -> TextError:
    """All faults as one error that stands at the first."""
    places = [marks.of_key(f.keys) if f.at_key else marks.of_value(f.keys) for f in found]
    lines = [found[0].text()]
    if len(found) > 1:
        least = "at least " if more else ""
        lines.append(f"{least}{len(found) - 1} more error{'s' if len(found) > 2 else ''}:")
        for fault, (line, column) in list(zip(found, places, strict=True))[1:_SHOWN]:
            lines.append(f"  {file}:{line}:{column}: {fault.text()}")
        if len(found) > _SHOWN:
            lines.append(f"  and {least}{len(found) - _SHOWN} more")
    return TextError("\n".join(lines), file=file, line=places[0][0], column=places[0][1])
