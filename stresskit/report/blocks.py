"""A section made of nothing but words, pictures and tables: what ``sections/blocks.html.j2`` shows."""

from __future__ import annotations

from dataclasses import dataclass

from stresskit.report.picture import Picture
from stresskit.report.tables import Table


@dataclass(frozen=True, slots=True)
class Block:
    """One heading with its words, picture and tables; tables of a block without a picture stand open too."""

    title: str
    picture: Picture | None
    tables: tuple[Table, ...] = ()
    words: str = ""


@dataclass(frozen=True, slots=True)
class Part:
    """A section: paragraphs, then blocks."""

    lead: tuple[str, ...]
    blocks: tuple[Block, ...]
