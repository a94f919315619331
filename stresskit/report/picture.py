"""What a figure of the report consists of: panels, legend, caption, and the tables behind."""

from __future__ import annotations

from dataclasses import dataclass

from markupsafe import Markup

from stresskit.report.dot_rows import DotRow
from stresskit.report.reading import scenarios
from stresskit.report.style import Mark, marks
from stresskit.report.tables import Table
from stresskit.runs.records import StudyResult

#: Small multiples per figure.
MOST_PANELS = 12


@dataclass(frozen=True, slots=True)
class Panel:
    """One small picture with its heading and a line of numbers; or, with ``rows``, a mark per row over ``axis``.

    segment, scenario  places of what the whole panel shows, for the page's switch; None: it is not of a single one
    """

    title: str
    unit: str
    svg: Markup
    note: str = ""
    rows: tuple[DotRow, ...] = ()
    axis: Markup | None = None
    segment: int | None = None
    scenario: int | None = None


@dataclass(frozen=True, slots=True)
class Key:
    """One entry of a legend that is not a scenario: CSS colour, words.

    kind: "line", "dash", "dashdot", "points", "hollow", "diamond", "square", "band" or "columns"
    """

    kind: str
    colour: str
    words: str


@dataclass(frozen=True, slots=True)
class Picture:
    """Panels that belong together, their legend, caption and tables."""

    key: str
    caption: str
    panels: tuple[Panel, ...]
    tables: tuple[Table, ...]
    legend: tuple[Mark, ...] = ()
    keys: tuple[Key, ...] = ()
    small: bool = False


def scenario_marks(result: StudyResult) -> tuple[Mark, ...]:
    """Marks of all scenarios, the same in every figure."""
    return marks(scenarios(result))
