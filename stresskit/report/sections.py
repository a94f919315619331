"""The sections of the report in their order: what each is called, what it shows, and by which template.

A section whose builder returns None is left out, of the contents list too. To add one, add a line to ``SECTIONS``: a
builder that returns a :class:`stresskit.report.blocks.Part` needs no template of its own.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Any

from stresskit.report import (
    analysis,
    balance_sheets,
    evidence,
    fit_pictures,
    macro_pictures,
    plausibility,
    response_pictures,
    result_pictures,
    results,
    scenario_words,
    validation_page,
    yearly,
)
from stresskit.report.lgd_page import lgd_page
from stresskit.report.method_page import method_page
from stresskit.report.reading import breakdowns
from stresskit.report.tables import Table
from stresskit.runs.cautions import STANDING
from stresskit.runs.records import StudyResult

Shown = Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class Section:
    """key: its anchor; build: what the template sees as ``part``, or None; template: ``sections/<template>.html.j2``."""

    key: str
    title: str
    build: Callable[[StudyResult], Any]
    template: str = "blocks"


@dataclass(frozen=True, slots=True)
class Several:
    """A place in the order where as many sections stand as the result has for it."""

    build: Callable[[StudyResult], Iterable[tuple[Section, Any]]]


def _analyses(result: StudyResult) -> Iterable[tuple[Section, Any]]:
    """A section for each analysis that the study asked for."""
    for found in analysis.sections(result.analyses):
        yield Section(found.key, found.title, lambda _: None, "analysis"), found


def _scenarios(result: StudyResult) -> Table | None:
    found = scenario_words.scenario_table(result)
    # a table of names alone says nothing
    return found if found.rows and (len(found.columns) > 1 or any(r[0].sub for r in found.rows)) else None


def _paths(result: StudyResult) -> Shown | None:
    picture = macro_pictures.path_picture(result)
    return None if picture is None else {"picture": picture, "plausibility": plausibility.page(result)}


def _hazards(result: StudyResult) -> Shown:
    return {"ages": fit_pictures.hazard_picture(result), "macro": response_pictures.response_picture(result)}


def _curves(result: StudyResult) -> Shown:
    return {
        "book": result_pictures.book_picture(result),
        "pd": result_pictures.segment_picture(result, "default_cumulative"),
        "survival": result_pictures.segment_picture(result, "survival"),
    }


def _years(result: StudyResult) -> Shown:
    return {
        "book": result_pictures.year_picture(result),
        "segments": result_pictures.segment_year_picture(result),
    }


def _by_year(result: StudyResult) -> Shown | None:
    tables = yearly.year_tables(result)
    return (
        None if tables is None else {"tables": tables, "both_sheets": balance_sheets.constant_tables(result)}
    )


def _results(result: StudyResult) -> Shown:
    return {
        "whole": results.breakdown_table(result, None),
        "breakdowns": [results.breakdown_table(result, b) for b in breakdowns(result)],
    }


def _stages(result: StudyResult) -> Shown | None:
    pictures = yearly.stage_pictures(result)
    return {"rule": yearly.stage_rule(result), "pictures": pictures} if pictures else None


def _fit(result: StudyResult) -> Shown:
    calendar = None if result.evidence else fit_pictures.actual_expected_picture(result)
    return {"page": validation_page.page(result), "calendar": calendar}


def _coefficients(result: StudyResult) -> Shown:
    models = [
        (cause, evidence.fit_line(facts), evidence.coefficient_table(result, cause), facts.get("periods"))
        for cause in evidence.causes(result)
        for facts in (result.fits.get(cause, {}),)
    ]
    return {"models": models, "gates": evidence.gate_tables(result)}


def _data(result: StudyResult) -> Shown:
    account, wrong = evidence.reconciliation_table(result)
    return {
        "account": account,
        "wrong": wrong,
        "findings": evidence.findings_table(result),
        "left_out": results.not_projected_table(result),
        "left_count": round(results.alike(result.not_projected)),
        "alignment": evidence.alignment_table(result),
    }


def _beyond(result: StudyResult) -> Shown:
    return {
        "table": results.extrapolation_table(result),
        "outside": evidence.outside_table(result),
        "features": macro_pictures.feature_picture(result),
    }


def _record(result: StudyResult) -> Shown:
    # gates have a table of their own
    short, long = evidence.flat_record({k: v for k, v in result.record.items() if k != "gates"})
    return {"table": results.facts_table("Run record", short), "texts": long}


def engine_cautions(result: StudyResult) -> tuple[str, ...]:
    """What the engine found, without the standing words."""
    return tuple(c for c in result.cautions if c not in STANDING)


SECTIONS: tuple[Section | Several, ...] = (
    Section("scenarios", "Scenarios", _scenarios, "scenarios"),
    Section("paths", "Scenario paths", _paths, "paths"),
    Section("hazards", "Hazards by age and macro", _hazards, "hazards"),
    Section("curves", "PD and survival", _curves, "curves"),
    Section("years", "Expected loss by calendar year", _years, "years"),
    Section("by-year", "Year view", _by_year, "by_year"),
    Section("results", "Results by segment", _results, "results"),
    Section("lgd", "LGD", lgd_page, "lgd"),
    Section("stages", "Stages and impairment", _stages, "stages"),
    Section("capital", "Capital", yearly.capital_picture, "capital"),
    Section("adjustments", "Floors and overlays", yearly.adjustment_table, "adjustments"),
    Several(_analyses),
    Section("fit", "Evidence on the fits", _fit, "fit"),
    Section("coefficients", "Coefficients and gates", _coefficients, "coefficients"),
    Section("data", "Data", _data, "data"),
    Section("beyond", "Extrapolation", _beyond, "beyond"),
    Section("method", "Method", method_page, "method"),
    Section("cautions", "Cautions", engine_cautions, "cautions"),
    Section("record", "Run record", _record, "record"),
)


def sections_of(result: StudyResult) -> tuple[tuple[Section, Any], ...]:
    """The sections that this result has, each with what its template sees."""
    out: list[tuple[Section, Any]] = []
    for place in SECTIONS:
        if isinstance(place, Several):
            out.extend(place.build(result))
        elif (part := place.build(result)) is not None:
            out.append((place, part))
    return tuple(out)
