"""Evidence on a study's fits, and the folder it is written to."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace as changed
from pathlib import Path

from stresskit.core.errors import StresskitError, UsageError
from stresskit.core.period import parse_period
from stresskit.evidence import verdicts
from stresskit.evidence.collect import Evidence, Questions, evidence
from stresskit.evidence.verdicts import Verdict
from stresskit.hazard.result import HazardFit
from stresskit.runs.api import Prepared, StudyFile, study_record
from stresskit.runs.cautions import before_standing
from stresskit.runs.folder import plain_csv
from stresskit.runs.recorded import recorded_folder
from stresskit.runs.records import StudyResult

#: Question -> what a "look at" means in a few words; {} takes what the question is about.
_CAUTIONS = {
    verdicts.MATCH: "Events are not those expected in every group of loans",
    verdicts.SHOCKS: "Calendar periods vary more than chance",
    verdicts.SURVIVAL: "Fitted survival leaves the observed curve",
    verdicts.MEMORY: "What the fit leaves unexplained has a memory",
    verdicts.OUT_OF_TIME: "A fit to the earlier periods is off on the later ones",
    verdicts.RANKING: "The fit may rank borrowers no better than chance",
    verdicts.LAG: "The data prefer another lag of {}",
    verdicts.STABLE: "Coefficients moved after {}",
}


def split_period(file: StudyFile, text: str | None) -> int | None:
    """Ordinal of the period that ``--split`` names; None without one. Raises UsageError for what is no period."""
    if text is None:
        return None
    try:
        return parse_period(text, file.frequency)
    except ValueError as e:
        raise UsageError(f"--split: {e}") from None


def study_evidence(
    file: StudyFile,
    data: Prepared,
    fits: Mapping[str, HazardFit],
    *,
    split: int | None = None,
    say: Callable[[str], None] | None = None,
) -> Evidence:
    """Every table and verdict on the fits of a study; ``split`` is the last period (ordinal) before the break.

    Segments are compared by as well as the columns of the fits.
    """
    return evidence(
        {str(cause): fits[cause] for cause in file.study.hazards if cause in fits},
        data.loans.risk_set,
        data.features,
        macro=file.study.macro,
        history=data.history,
        questions=Questions(columns=file.study.loans.segments, split=split),
        say=say,
    )


def with_evidence(result: StudyResult, found: Evidence) -> StudyResult:
    """The result with the evidence on its fits; every "look at" becomes a caution, before the standing ones."""
    more = tuple(caution(v) for v in found.verdicts if v.status == "look at")
    return changed(result, evidence=found, cautions=before_standing(result.cautions, more))


def add_evidence(
    result: StudyResult,
    file: StudyFile,
    data: Prepared,
    fits: Mapping[str, HazardFit],
    *,
    say: Callable[[str], None] | None = None,
) -> StudyResult:
    """:func:`with_evidence` of :func:`study_evidence`.

    Evidence that cannot be made at all must not cost the result: it becomes a caution with the reason.
    Fits that were estimated on other rows than those of ``data`` are named in a caution too.
    """
    result = changed(result, record={**result.record, "asked": {"evidence": True}})
    try:
        found = study_evidence(file, data, fits, say=say)
    except StresskitError as error:
        why = str(error).splitlines()[0]
        lost = f"The evidence on the fits could not be made: {why}"
        return changed(result, cautions=before_standing(result.cautions, (lost,)))
    exits: dict[str, HazardFit] = {c: f for c, f in fits.items() if c in result.study.hazards}
    other = tuple(_on_other_rows(found, exits))
    done = with_evidence(result, found)
    return changed(done, cautions=before_standing(done.cautions, other)) if other else done


def caution(verdict: Verdict) -> str:
    """A "look at" as one short sentence: what is wrong, with which hazard, and the first figures of what was found."""
    words = f"Look at: {verdict.asked}"
    for asked, means in _CAUTIONS.items():
        about = re.fullmatch(re.escape(asked).replace(r"\{\}", "(.+)"), verdict.asked)
        if about:
            words = means.format(*about.groups())
    figures = re.split(r"; |\. |\.$", verdict.found, maxsplit=1)[0]
    if figures.count("(") > figures.count(")"):
        figures = figures[: figures.rindex("(")].rstrip()
    figures = figures.removeprefix("No: ").removeprefix("Not ")
    return f"{words} ({verdict.cause} hazard): {figures}."


def _on_other_rows(found: Evidence, fits: Mapping[str, HazardFit]) -> list[str]:
    table = found.tables["actual_expected"]
    period = table[table["by"] == "period"]
    out = []
    for cause, f in fits.items():
        events = float(period.loc[period["cause"] == cause, "events"].sum())
        if abs(events - f.n_events) > 1e-6 * max(1.0, f.n_events):
            out.append(
                f"The {cause} hazard was fitted to other data ({f.n_events:,.0f} events) than its evidence is on "
                f"({events:,.0f}): the tests take the two for the same."
            )
    return out


def write_tables(found: Evidence, folder: Path) -> None:
    """verdicts.csv and a CSV per table."""
    plain_csv(found.verdict_table(), folder / "verdicts.csv")
    for name, table in found.tables.items():
        plain_csv(table, folder / f"{name}.csv")


def write_evidence(
    found: Evidence,
    file: StudyFile,
    data: Prepared,
    out: Path,
    *,
    command: Sequence[str],
    replace: bool = False,
    split: str | None = None,
) -> None:
    """verdicts.csv, a CSV per table and manifest.json with their digests, as a whole folder or not at all."""
    record = study_record(file, data) | {"asked": {"split": split}}
    with recorded_folder(
        out, record, kind="evidence", command=command, base=file.base, replace=replace
    ) as part:
        write_tables(found, part)
