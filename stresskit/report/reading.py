"""Questions asked of a StudyResult by report and workbook: scenarios, reference, breakdowns, time.

The reference is the scenario called ``baseline``, or the first one. The worst is the single scenario
with the largest lifetime expected loss of the book besides it.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.period import Frequency, frequency_of_label, parse_period, year_of
from stresskit.runs.records import PORTFOLIO, WEIGHTED, StudyResult

#: One row of a table: column name -> value.
Record = Mapping[str, Any]


def scenarios(result: StudyResult) -> tuple[str, ...]:
    """Scenario names in the order of the study, the weighted mean last."""
    names = [str(s) for s in result.summary["scenario"].unique()]
    return (*(n for n in names if n != WEIGHTED), *(n for n in names if n == WEIGHTED))


def single_scenarios(result: StudyResult) -> tuple[str, ...]:
    """Scenarios without the weighted mean."""
    return tuple(n for n in scenarios(result) if n != WEIGHTED)


def reference(result: StudyResult) -> str:
    """Name of the scenario that differences are taken to."""
    names = single_scenarios(result)
    return "baseline" if "baseline" in names else names[0]


def worst(result: StudyResult) -> str | None:
    """Name of the costliest scenario besides the reference; None when there is no other."""
    others = [n for n in single_scenarios(result) if n != reference(result)]
    if not others:
        return None
    rows = book(result)
    return max(others, key=lambda n: float(rows[n]["el_lifetime"]))


def name_of(scenario: str) -> str:
    """A scenario's name for people: the weighted mean says what it is."""
    return "weighted mean" if scenario == WEIGHTED else scenario


def lines(result: StudyResult, by: str) -> dict[tuple[str, str], Record]:
    """Summary rows of one breakdown, by segment and scenario."""
    rows = result.summary[result.summary["by"] == by].to_dict("records")
    return {(str(r["segment"]), str(r["scenario"])): {str(k): v for k, v in r.items()} for r in rows}


def book(result: StudyResult) -> dict[str, Record]:
    """Summary rows of the whole book, by scenario."""
    return {scenario: r for (_, scenario), r in lines(result, "").items()}


@dataclass(frozen=True, slots=True)
class Breakdown:
    """One way to cut the book: ``by`` as in the tables, segments from the largest exposure down."""

    by: str
    segments: tuple[str, ...]

    @property
    def title(self) -> str:
        return self.by.replace("+", " and ") if self.by else PORTFOLIO


def breakdowns(result: StudyResult) -> tuple[Breakdown, ...]:
    """Breakdowns of the summary in its order; segments by exposure, ties by name."""
    rows = result.summary[(result.summary["scenario"] == reference(result)) & (result.summary["by"] != "")]
    out = []
    for by in rows["by"].unique():
        mine = rows[rows["by"] == by].sort_values(
            ["exposure", "segment"], ascending=[False, True], kind="stable"
        )
        out.append(Breakdown(str(by), tuple(str(s) for s in mine["segment"])))
    return tuple(out)


def finest(result: StudyResult) -> Breakdown | None:
    """The breakdown with the most segments (the first of equals); None without any."""
    found = breakdowns(result)
    return max(found, key=lambda b: len(b.segments)) if found else None


Families = Mapping[str, Mapping[str, pd.DataFrame]]


def families(result: StudyResult, by: str, segments: Sequence[str]) -> Families:
    """Curves of a breakdown: segment -> scenario -> its rows by step, segments in the order given."""
    frame = result.segments[result.segments["by"] == by]
    frame = frame[frame["segment"].isin(list(segments))]
    out: dict[str, dict[str, pd.DataFrame]] = {s: {} for s in segments}
    for (segment, scenario), rows in frame.groupby(["segment", "scenario"], sort=False):
        out[str(segment)][str(scenario)] = rows
    return out


def has_payoff(result: StudyResult) -> bool:
    """Whether early repayment is an exit of its own in this study."""
    return "payoff" in result.study.hazards


def clock(result: StudyResult) -> Frequency:
    """Length of a model period."""
    return Frequency(result.study.frequency)


def decimal_years(labels: pd.Series) -> NDArray[np.float64]:
    """END of each period as a decimal year: 2025-12 and 2025Q4 are 2026.0."""
    known = {text: _clock_and_ordinal(text) for text in labels.astype(str).unique()}
    ends = {text: (ordinal + 1) / frequency.per_year for text, (frequency, ordinal) in known.items()}
    return np.array([ends[text] for text in labels.astype(str)], dtype=np.float64)


def calendar_years(labels: pd.Series) -> NDArray[np.int64]:
    """Calendar year that each period lies in."""
    known = {text: _clock_and_ordinal(text) for text in labels.astype(str).unique()}
    years = {text: year_of(ordinal, frequency) for text, (frequency, ordinal) in known.items()}
    return np.array([years[text] for text in labels.astype(str)], dtype=np.int64)


def _clock_and_ordinal(label: str) -> tuple[Frequency, int]:
    frequency = frequency_of_label(label)
    return frequency, parse_period(label, frequency)


def as_of_year(result: StudyResult) -> float:
    """End of as_of as a decimal year."""
    frequency = clock(result)
    return (parse_period(result.study.as_of, frequency) + 1) / frequency.per_year


def at_largest(frame: pd.DataFrame, values: NDArray[np.float64]) -> Record:
    """The first row of the frame whose value is the largest; missing values never are. Raises ValueError on none."""
    place = int(np.nanargmax(values))
    return {str(name): frame[name].iloc[place] for name in frame.columns}


def numbers(frame: pd.DataFrame, column: str) -> NDArray[np.float64]:
    """A column as float64."""
    return np.asarray(frame[column].to_numpy(dtype=np.float64), dtype=np.float64)
