"""A strict little reader of our HTML: tags that match, ids, links, texts, tables."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property, lru_cache
from html.parser import HTMLParser

VOID = {"meta", "wbr", "br", "hr", "img", "input", "link"}


@dataclass
class Tag:
    """``pieces`` are all texts of the document; those of the tag are the ones from ``start`` to before ``end``."""

    name: str
    attributes: dict[str, str]
    parents: tuple[str, ...]
    pieces: list[str] = field(repr=False)
    start: int
    end: int | None = None

    @cached_property
    def text(self) -> str:
        return "".join(self.pieces[self.start : self.end])


@dataclass
class Page(HTMLParser):
    """Every tag of a document in order; ``text`` of a tag holds all text inside it."""

    tags: list[Tag] = field(default_factory=list)
    pieces: list[str] = field(default_factory=list)
    problems: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        super().__init__(convert_charrefs=True)
        self._open: list[Tag] = []

    __hash__ = object.__hash__

    def handle_starttag(self, name: str, attributes: list[tuple[str, str | None]]) -> None:
        names = [k for k, _ in attributes]
        if len(names) != len(set(names)):
            self.problems.append(f"<{name}> repeats an attribute: {names}")
        self._begin(name, attributes)
        if name in VOID:
            self.tags[-1].end = len(self.pieces)
        else:
            self._open.append(self.tags[-1])

    def handle_startendtag(self, name: str, attributes: list[tuple[str, str | None]]) -> None:
        self._begin(name, attributes)
        self.tags[-1].end = len(self.pieces)

    def _begin(self, name: str, attributes: list[tuple[str, str | None]]) -> None:
        parents = tuple(t.name for t in self._open)
        self.tags.append(
            Tag(name, {k: v or "" for k, v in attributes}, parents, self.pieces, len(self.pieces))
        )

    def handle_endtag(self, name: str) -> None:
        if not self._open or self._open[-1].name != name:
            self.problems.append(
                f"</{name}> closes {self._open[-1].name if self._open else 'nothing'}, at {self.getpos()}"
            )
            return
        self._open.pop().end = len(self.pieces)

    def handle_data(self, data: str) -> None:
        self.pieces.append(data)

    def finish(self) -> None:
        self.close()
        self.problems += [f"<{t.name}> is never closed" for t in self._open]

    def named(self, name: str) -> list[Tag]:
        return [t for t in self.tags if t.name == name]

    def rows(self, title: str) -> list[list[str]]:
        """Cells of the table whose scroll box has this label, headings first; small print after a bar."""
        at = next(
            k for k, t in enumerate(self.tags) if t.attributes.get("aria-label") == title and t.name == "div"
        )
        out: list[list[str]] = []
        for tag in self.tags[at + 1 :]:
            if tag.name == "table" and out:
                break
            if tag.name == "tr":
                out.append([])
            elif tag.name in ("td", "th"):
                out[-1].append(tag.text)
            elif tag.name in ("section", "h3", "details"):
                break
        return out


@lru_cache(maxsize=4)
def read(text: str) -> Page:
    """The document; one that several tests look at is read once, so nobody may change it."""
    page = Page()
    page.feed(text)
    page.finish()
    return page
