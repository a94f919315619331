"""A finished study as one self-contained HTML file: no script, no request, readable offline and in print."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from stresskit.report import (
    analysis,
    balance_sheets,
    evidence,
    fit_pictures,
    macro_pictures,
    plausibility,
    result_pictures,
    results,
    scenario_words,
    validation_page,
    yearly,
)
from stresskit.report.environment import render
from stresskit.report.headline import headline, main_cautions
from stresskit.report.reading import breakdowns, clock, reference, scenarios, worst
from stresskit.report.recovery_page import recovery_page
from stresskit.runs.cautions import STANDING
from stresskit.runs.records import StudyResult


def write_report(result: StudyResult, path: Path) -> None:
    """Write the report. The same result gives the same bytes. Raises OSError when the file cannot be written."""
    path.write_bytes(render_report(result).encode("utf-8"))


def render_report(result: StudyResult) -> str:
    """The report as text."""
    return render("report.html.j2", safety=STANDING, **_context(result))


def _context(result: StudyResult) -> Mapping[str, Any]:
    """Everything that the template shows."""
    account, wrong = evidence.reconciliation_table(result)
    short, long = evidence.flat_record(result.record)
    left = results.not_projected_table(result)
    return {
        "study": result.study,
        "period": clock(result).value,
        "scenario_names": scenarios(result),
        "reference": reference(result),
        "worst": worst(result),
        "head": headline(result),
        "main_cautions": main_cautions(result, STANDING),
        "cautions": [c for c in result.cautions if c not in STANDING],
        "scenario_words": scenario_words.scenario_table(result),
        "paths": macro_pictures.path_picture(result),
        "recovery": recovery_page(result),
        "plausibility": plausibility.page(result),
        "ages": fit_pictures.hazard_picture(result),
        "validation": validation_page.page(result),
        "calendar": None if result.evidence else fit_pictures.actual_expected_picture(result),
        "book": result_pictures.book_picture(result),
        "segments_pd": result_pictures.segment_picture(result, "default_cumulative"),
        "segments_book": result_pictures.segment_picture(result, "survival"),
        "years": result_pictures.year_picture(result),
        "by_year": yearly.year_tables(result),
        "both_sheets": balance_sheets.constant_tables(result),
        "stages": yearly.stage_pictures(result),
        "stage_rule": yearly.stage_rule(result),
        "capital": yearly.capital_picture(result),
        "adjustments": yearly.adjustment_table(result),
        "whole": results.breakdown_table(result, None),
        "breakdowns": [results.breakdown_table(result, b) for b in breakdowns(result)],
        "models": [
            (cause, evidence.fit_line(result.fits.get(cause, {})), evidence.coefficient_table(result, cause),
             result.fits.get(cause, {}).get("periods"))
            for cause in evidence.causes(result)
        ],
        "analyses": analysis.sections(result.analyses),
        "account": account,
        "account_wrong": wrong,
        "findings": evidence.findings_table(result),
        "alignment": evidence.alignment_table(result),
        "left_out": left,
        "left_count": len(result.not_projected),
        "beyond": results.extrapolation_table(result),
        "features": macro_pictures.feature_picture(result),
        "outside": evidence.outside_table(result),
        "record": results.facts_table("Run record", short),
        "record_texts": long,
    }  # fmt: skip
