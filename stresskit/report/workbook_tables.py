"""Tables that only the workbook has: differences, loss by segment and by year, PD term structure, the record."""

from __future__ import annotations

import numpy as np
import pandas as pd

from stresskit.report.evidence import flat_record
from stresskit.report.reading import book, breakdowns, calendar_years, reference, scenarios
from stresskit.report.workbook_cells import last_days
from stresskit.runs.records import StudyResult


def summary(result: StudyResult) -> pd.DataFrame:
    """The summary with its differences to the reference scenario, in amounts and as shares."""
    table = result.summary.copy()
    base = reference(result)
    before = table[table["scenario"] == base].set_index(["by", "segment"])
    at = pd.MultiIndex.from_frame(table[["by", "segment"]])
    for column in ("el_12m", "el_lifetime"):
        own = before[column].reindex(at).to_numpy(dtype=np.float64)
        gap = table[column].to_numpy(dtype=np.float64) - own
        table[f"{column}_difference"] = gap
        table[f"{column}_change"] = np.divide(gap, own, out=np.full(len(own), np.nan), where=own != 0)
    return table


def record(result: StudyResult) -> pd.DataFrame:
    """Notes, cautions and the run record; texts line by line."""
    base = reference(result)
    rows = [
        ("note", "study", result.study.study),
        ("note", "as_of", result.study.as_of),
        ("note", "reference", f"differences in the sheet summary are to scenario {base}"),
        ("note", "whole book", f"{len(book(result))} scenarios; by is empty and segment is portfolio"),
        ("note", "units", "shares as fractions shown in percent; amounts in the currency of the loan file"),
        ("note", "loan by loan", "loans.parquet in this run's folder"),
        *(("caution", str(k), c) for k, c in enumerate(result.cautions, start=1)),
    ]
    for cause, facts in result.fits.items():
        rows += [("fit", f"{cause}.{key}", str(value)) for key, value in facts.items()]
    short, long = flat_record(result.record)
    rows += [("record", key, value) for key, value in short.items()]
    rows += [("text", key, line) for key, text in long.items() for line in text.splitlines()]
    return pd.DataFrame(rows, columns=["kind", "item", "value"])


#: Columns of the tables below that are no scenario.
_OWN = ("year", "step", "period", "period_end", "loans", "exposure")


def column_of(scenario: str) -> str:
    """What a scenario's column is called: its name, unless a column of another kind is called so."""
    return f"scenario {scenario}" if scenario in _OWN else scenario


def _by_scenario(wide: pd.DataFrame, result: StudyResult) -> pd.DataFrame:
    """Columns in the order of the study, under their names."""
    names = list(scenarios(result))
    return wide.reindex(columns=names).set_axis([column_of(n) for n in names], axis=1)


def _whole(result: StudyResult) -> pd.DataFrame:
    return result.segments[result.segments["by"] == ""]


def loss_by_year(result: StudyResult) -> pd.DataFrame:
    """Discounted expected loss of the whole book: a row per calendar year, a column per scenario."""
    rows = _whole(result)
    rows = pd.DataFrame(
        {"year": calendar_years(rows["period"]), "scenario": rows["scenario"].astype(str), "el": rows["el"]}
    )
    wide = rows.pivot_table(index="year", columns="scenario", values="el", aggfunc="sum", observed=True)
    return _by_scenario(wide, result).fillna(0.0).reset_index()


def term_structure(result: StudyResult) -> pd.DataFrame:
    """Cumulative PD of the whole book: a row per step, a column per scenario."""
    rows = _whole(result)
    wide = rows.pivot(index="step", columns="scenario", values="default_cumulative")
    wide = _by_scenario(wide, result).reset_index()
    labels = rows.drop_duplicates("step").set_index("step")["period"].reindex(wide["step"])
    wide.insert(1, "period", labels.to_numpy())
    wide.insert(2, "period_end", last_days(wide["period"]))
    return wide


def losses_by_segment(result: StudyResult) -> tuple[tuple[str, pd.DataFrame], ...]:
    """For each breakdown a row per segment: loans, exposure, and the lifetime expected loss by scenario."""
    base, names = reference(result), list(scenarios(result))
    out = []
    for cut in breakdowns(result):
        mine = result.summary[result.summary["by"] == cut.by]
        own = mine[mine["scenario"] == base].set_index("segment")[["loans", "exposure"]]
        wide = mine.pivot(index="segment", columns="scenario", values="el_lifetime")[names]
        table = pd.concat([own, wide], axis=1).reindex(list(cut.segments)).reset_index()
        table.columns = pd.Index([cut.title, "loans", "exposure", *names])
        out.append((cut.title, table))
    return tuple(out)
