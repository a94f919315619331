"""What the tests need to know about a Markdown page: links, anchors, fenced blocks."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

ROOT = Path(__file__).parents[2]
_FENCE = re.compile(r"^(`{3,})\s*([\w{}-]*)\s*$")
_MARK = re.compile(r"^<!-- complete: (study|scenario|import) -->$")
_FILE = re.compile(r"^<!-- file: ([\w.-]+) -->$")
_LINK = re.compile(r"!?\[[^\]]*\]\(([^)\s]+)\)")
_HEADING = re.compile(r"^#{1,6}\s+(.+?)\s*#*$")


@dataclass(frozen=True, slots=True)
class Block:
    """A fenced block: language, text, what the comments above it say it is and which file it is ("" for nothing), its line."""

    page: Path
    line: int
    language: str
    text: str
    complete: str
    file: str = ""

    @property
    def name(self) -> str:
        return f"{self.page.relative_to(ROOT).as_posix()}:{self.line}"


def pages() -> list[Path]:
    """Every page of the project that people read."""
    return [ROOT / "README.md", ROOT / "DEVELOPERS.md", *sorted((ROOT / "docs").rglob("*.md"))]


def blocks(page: Path) -> Iterator[Block]:
    fence, language, start, mark, file, lines = "", "", 0, "", "", list[str]()
    before = list[str]()
    for number, line in enumerate(page.read_text(encoding="utf-8").splitlines(), start=1):
        found = _FENCE.match(line)
        if not fence and found:
            fence, language, start, lines = found[1], found[2], number, []
            marks = [m[1] for line in before if (m := _MARK.match(line))]
            files = [m[1] for line in before if (m := _FILE.match(line))]
            mark, file = (marks or [""])[0], (files or [""])[0]
        elif fence and found and found[1] == fence and not found[2]:
            yield Block(page, start, language, "\n".join(lines) + "\n", mark, file)
            fence = ""
        elif fence:
            lines.append(line)
        if line.startswith("<!--"):
            before.append(line.strip())
        elif line.strip():
            before = []


def prose(page: Path) -> list[str]:
    """Lines outside fenced blocks; inline code taken out."""
    out, inside = [], False
    for line in page.read_text(encoding="utf-8").splitlines():
        if _FENCE.match(line):
            inside = not inside
        elif not inside:
            out.append(re.sub(r"`[^`]*`", "", line))
    return out


def links(page: Path) -> list[str]:
    return [target for line in prose(page) for target in _LINK.findall(line)]


def anchors(page: Path) -> set[str]:
    """Fragments that a renderer gives to the headings."""
    out = set()
    inside = False
    for line in page.read_text(encoding="utf-8").splitlines():
        if _FENCE.match(line):
            inside = not inside
        elif not inside and (found := _HEADING.match(line)):
            words = re.sub(r"\[([^\]]*)\]\([^)]*\)", r"\1", found[1]).lower()
            kept = "".join(c for c in words if c.isalnum() or c in " -_")
            out.add(kept.replace(" ", "-"))
    return out
