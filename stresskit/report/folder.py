"""A finished result to a run folder with report and workbook."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

from stresskit.hazard.result import HazardFit
from stresskit.report.analysis import write_analyses
from stresskit.report.html import write_report
from stresskit.report.workbook import write_workbook
from stresskit.runs.evidence import write_tables
from stresskit.runs.folder import plain_csv, write_folder
from stresskit.runs.records import StudyResult
from stresskit.runs.recovery_folder import write_recovery_tables


def _report(result: StudyResult, folder: Path) -> None:
    write_report(result, folder / "report.html")


def _workbook(result: StudyResult, folder: Path) -> None:
    write_workbook(result, folder / "results.xlsx")


def _evidence(result: StudyResult, folder: Path) -> None:
    if result.evidence is not None:
        (folder / "evidence").mkdir()
        write_tables(result.evidence, folder / "evidence")


def _plausibility(result: StudyResult, folder: Path) -> None:
    found = result.plausibility
    if found is None:
        return
    (folder / "plausibility").mkdir()
    for name in ("scenarios", "variables", "pairs", "episodes", "forecast"):
        plain_csv(getattr(found, name), folder / "plausibility" / f"{name}.csv")


def _recovery(result: StudyResult, folder: Path) -> None:
    if result.recovery is not None:
        (folder / "recovery").mkdir()
        write_recovery_tables(result.recovery, folder / "recovery")


def write_run(
    result: StudyResult,
    fits: Mapping[str, HazardFit],
    out: str | Path,
    *,
    command: Sequence[str] = (),
    replace: bool = False,
    times: Callable[[], Mapping[str, str]] | None = None,
) -> Path:
    """Write the run folder; it appears under its name only when whole. Returns its path.

    Raises OutputError when the place exists (and ``replace`` is false) or cannot be written.
    """
    place = Path(out)
    writers = (_report, _workbook, _plausibility, _recovery, _evidence, write_analyses)
    write_folder(result, fits, place, command=command, writers=writers, replace=replace, times=times)
    return place
