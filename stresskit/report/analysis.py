"""Analyses as sections of the report, as sheets of the workbook and as files of the run folder."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import pandas as pd

from stresskit.report import numbers as num
from stresskit.report.attribution_pictures import attribution_pictures
from stresskit.report.backtest_pictures import backtest_pictures
from stresskit.report.bands_pictures import bands_pictures
from stresskit.report.model_choice_pictures import model_choice_pictures
from stresskit.report.picture import Picture
from stresskit.report.reverse_pictures import reverse_pictures
from stresskit.report.sheet import Sheet, sheet_name
from stresskit.report.tables import Format, Table, from_frame
from stresskit.runs.folder import plain_csv
from stresskit.runs.records import Analysis, StudyResult

#: Key of an analysis -> what draws its pictures. A picture reads the tables and facts of its analysis and nothing else.
PICTURES: Mapping[str, Callable[[Analysis], tuple[Picture, ...]]] = {
    "attribution": attribution_pictures,
    "reverse": reverse_pictures,
    "model_choice": model_choice_pictures,
    "backtest": backtest_pictures,
    "bands": bands_pictures,
}
#: Rows of a table that stands open.
_OPEN_ROWS = 40


@dataclass(frozen=True, slots=True)
class AnalysisSection:
    """As the template shows it: answer, pictures, tables that stand open, tables behind a fold, notes."""

    key: str
    title: str
    answer: str
    pictures: tuple[Picture, ...]
    shown: tuple[Table, ...]
    folded: tuple[Table, ...]
    notes: tuple[str, ...]


def formats(frame: pd.DataFrame) -> dict[str, Format]:
    """How columns are written, by what their names say: probabilities and shares in percent, amounts whole."""
    out: dict[str, Format] = {}
    for column in map(str, frame.columns):
        kind = column.lower()
        if not pd.api.types.is_numeric_dtype(frame[column]):
            continue
        if kind.startswith("el_"):
            # before what names end in: el_policy_rate is an amount
            out[column] = num.amount
        elif kind.startswith(("pd", "lgd", "share", "rate", "coverage")) or kind.endswith(
            ("_share", "_rate", "_pd", "_change")
        ):
            out[column] = lambda v: num.percent(v, 2)
        elif kind.startswith(("el", "loss", "exposure", "balance", "amount", "rwa")) or kind.endswith(
            ("_el", "_loss", "_amount", "_balance")
        ):
            out[column] = num.amount
        elif kind in ("distance", "d2", "usual_year") or kind.endswith("points"):
            out[column] = lambda v: num.plain(v, 2)
        elif kind.split("_")[0].split(" ")[0] in ("defaults", "payoffs", "expected", "projected"):
            out[column] = lambda v: num.plain(v, 1)
        elif kind in ("loans", "draws", "projections", "rank", "year") or kind.endswith("_loans"):
            out[column] = (
                (lambda v: num.MISSING if pd.isna(v) else str(int(v))) if kind == "year" else num.count
            )
    return out


def section(found: Analysis) -> AnalysisSection:
    """One analysis as a section of a page."""
    draw = PICTURES.get(found.key)
    rest = f"analyses/{found.key}"
    shown, folded = list[Table](), list[Table]()
    for t in found.tables:
        short = t.shown and len(t.frame) <= _OPEN_ROWS
        made = from_frame(t.frame, t.title, formats=formats(t.frame), rest=f"{rest}/{t.name}.csv")
        if t.note:
            made = Table(made.title, made.columns, made.rows, " ".join(x for x in (made.note, t.note) if x))
        (shown if short else folded).append(made)
    return AnalysisSection(
        found.key, found.title, found.answer, draw(found) if draw else (), tuple(shown), tuple(folded), found.notes
    )  # fmt: skip


def sections(found: Sequence[Analysis]) -> tuple[AnalysisSection, ...]:
    """Every analysis of a result."""
    return tuple(section(a) for a in found)


def analysis_sheets(found: Sequence[Analysis], *, folder: str = "analyses") -> tuple[Sheet, ...]:
    """A sheet per table, named by analysis and table as a workbook wants it."""
    out, used = list[Sheet](), list[str]()
    for a in found:
        for t in a.tables:
            used.append(sheet_name(f"{a.key} {t.name}".replace("_", " "), used))
            out.append(Sheet(used[-1], t.frame, f"{folder}/{a.key}/{t.name}.csv", f"{a.title}: {t.title}"))
    return tuple(out)


def write_analysis_files(found: Analysis, folder: Path) -> None:
    """A CSV per table and the analysis's own texts."""
    folder.mkdir(parents=True, exist_ok=True)
    for t in found.tables:
        plain_csv(t.frame, folder / f"{t.name}.csv")
    for name, text in found.files.items():
        (folder / name).write_bytes(text.encode("utf-8"))


def write_analyses(result: StudyResult, folder: Path) -> None:
    """The part of a run folder that its analyses fill."""
    for found in result.analyses:
        write_analysis_files(found, folder / "analyses" / found.key)
