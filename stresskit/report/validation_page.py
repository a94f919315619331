"""The report's section "Evidence on the fits": verdicts in words first, then pictures and tables."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass

from stresskit.evidence.collect import Evidence
from stresskit.report import validation_pictures as pictures
from stresskit.report.blocks import Block
from stresskit.report.fit_pictures import actual_expected_picture
from stresskit.report.tables import Table
from stresskit.report.validation_tables import evidence_table
from stresskit.runs.records import StudyResult

#: Status of a verdict -> words, and the mark that the style sheet knows.
_STATUS = {
    "in order": ("in order", "good"), "note": ("note", "soft"), "look at": ("look at", "warn"),
    "not possible": ("cannot be told", "soft"),
}  # fmt: skip


@dataclass(frozen=True, slots=True)
class Asked:
    """One verdict as shown."""

    status: str
    mark: str
    question: str
    answer: str


@dataclass(frozen=True, slots=True)
class Page:
    """The section: verdicts by cause, then blocks."""

    line: str
    verdicts: tuple[tuple[str, tuple[Asked, ...]], ...]
    blocks: tuple[Block, ...]


def page(result: StudyResult) -> Page | None:
    """None when the run was made without evidence."""
    found = result.evidence
    if found is None:
        return None
    verdicts = tuple((cause, _asked(found, cause)) for cause in pictures.causes(found))
    blocks = (
        Block("Events against expected by calendar period", actual_expected_picture(result)),
        Block("Events against expected by age, cohort and prediction", pictures.group_picture(found)),
        Block("Events against expected by segment", pictures.column_picture(found)),
        Block("Observed and fitted survival", pictures.survival_picture(found)),
        Block("Memory of what is left unexplained", pictures.memory_picture(found)),
        Block("Calibration on later periods", pictures.calibration_picture(found)),
        Block("Ranking of borrowers", None, _ranking(found), _AUC_WORDS),
        Block("Lag of each macro term", pictures.lag_picture(found)),
        Block("Coefficients before and after", pictures.stability_picture(found)),
    )
    return Page(questions_line(found), verdicts, tuple(b for b in blocks if b.picture or b.tables))


_AUC_WORDS = (
    "AUC: the chance that a borrower with the event is ranked above one who is then still on book without it; 0.5 is chance. At "
    "yearly landmarks (each period for a horizon of 1), by the prediction as it stood at the landmark. Cases: events, each counted once for every landmark that it follows within the horizon, so there may be more of them than "
    "events. Out of time: by coefficients of the earlier periods on the later ones."
)


def _asked(found: Evidence, cause: str) -> tuple[Asked, ...]:
    return tuple(Asked(*_STATUS[v.status], v.asked, v.found) for v in found.verdicts if v.cause == cause)


def questions_line(found: Evidence) -> str:
    """How many questions were asked of the fits, and what became of them."""
    n = Counter(v.status for v in found.verdicts)
    parts = [
        "none needs a look"
        if not n["look at"]
        else f"{n['look at']} need{'s' if n['look at'] == 1 else ''} a look"
    ]
    if n["note"]:
        parts.append(f"{n['note']} {'is a note' if n['note'] == 1 else 'are notes'}")
    if n["not possible"]:
        parts.append(f"{n['not possible']} cannot be told")
    total = sum(n.values())
    return f"{total} question{' was' if total == 1 else 's were'} asked of the fits: {', '.join(parts)}."


def _ranking(found: Evidence) -> tuple[Table, ...]:
    parts = ((cause, pictures.rows_of(found, "auc", cause)) for cause in pictures.causes(found))
    return tuple(evidence_table("auc", cause, rows) for cause, rows in parts if len(rows))
