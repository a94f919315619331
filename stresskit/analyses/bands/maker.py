"""The analysis ``bands``: from a question to tables and words."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from stresskit.analyses.bands.draws import NAMES, spreads_of
from stresskit.analyses.bands.engine import TOGETHER, Compression, Drawn, run_draws
from stresskit.analyses.bands.tables import (
    book_only,
    difference_table,
    method_table,
    segment_table,
    source_table,
    year_table,
)
from stresskit.core.errors import UsageError
from stresskit.core.values import ScenarioPath
from stresskit.runs.records import Analysis, AnalysisTable
from stresskit.runs.setting import Setting
from stresskit.runs.tables import whole_number
from stresskit.spec.bands import Bands

if TYPE_CHECKING:
    from stresskit.analyses.ask import Question


def chosen_paths(setting: Setting, spec: Bands) -> list[ScenarioPath]:
    """The reference first, then the scenarios asked for in the study's order. Raises UsageError for an unknown one."""
    reference = setting.reference()
    for name in spec.scenarios or ():
        setting.path(name)
    wanted = [p for p in setting.data.paths if spec.scenarios is None or p.name in spec.scenarios]
    return [reference, *(p for p in wanted if p.name != reference.name)]


def bands(question: Question) -> Analysis:
    """Raises UsageError for a scenario that is not there, NumericError when nothing varies."""
    setting, spec = question.setting, question.spec
    if not isinstance(spec, Bands):
        raise UsageError("bands takes the keys of analyses.bands")
    paths = chosen_paths(setting, spec)
    question.say("how uncertain each source is")
    spreads = spreads_of(setting, paths, spec)
    drawn = run_draws(setting, paths, spreads, spec, say=question.say, progress=question.progress)
    return told(drawn, spec)


def told(drawn: Drawn, spec: Bands) -> Analysis:
    """The analysis of finished draws."""
    el, pd_ = segment_table(drawn, "el", spec.level), segment_table(drawn, "pd", spec.level)
    sources, gaps = source_table(drawn, spec.level), difference_table(drawn, "el", spec.level)
    level = f"{spec.level:.0%}"
    tables = [
        AnalysisTable("loss", f"Expected loss of the book, {level} bands", book_only(el), note=_COLUMNS),
        AnalysisTable("pd", f"PD of the book, {level} bands", book_only(pd_)),
        AnalysisTable("sources", "Lifetime loss: what makes the band wide", sources, note=_SHARES),
    ]
    if len(gaps):
        tables.append(
            AnalysisTable("difference", f"Difference to {gaps['reference'][0]}, draw by draw", gaps)
        )
    tables += [
        AnalysisTable("years", "Loss by calendar year", year_table(drawn, spec.level), shown=False),
        AnalysisTable("loss_segments", "Expected loss by segment", el, shown=False),
        AnalysisTable("pd_segments", "PD by segment", pd_, shown=False),
    ]
    if len(gaps):
        more = difference_table(drawn, "pd", spec.level)
        tables.append(AnalysisTable("difference_pd", "Difference of PD, draw by draw", more, shown=False))
    tables.append(AnalysisTable("method", "How each source is drawn", method_table(drawn), shown=False))
    return Analysis(
        "bands", "How wide the figures are", answer(drawn, el, sources, gaps, spec), tuple(tables),
        notes=notes(drawn, spec), cautions=cautions(drawn, spec), facts=facts(drawn, spec),
    )  # fmt: skip


_COLUMNS = (
    "point: the figure of the run. low, median, high: of the draws. mc error: how far an end may be off because draws are "
    "finitely many (one standard error)."
)
_SHARES = (
    "share alone: variance with this source alone, as a part of that with all. share lost: part of the variance that goes when it is "
    "left out. Sources multiply, so shares need not add up to one."
)


def short(value: float) -> str:
    """An amount in a sentence: three digits with a word."""
    for divisor, word in ((1e9, " billion"), (1e6, " million"), (1e3, " thousand")):
        if abs(value) >= divisor:
            size = abs(value) / divisor
            return f"{value / divisor:.{2 if size < 10 else 1 if size < 100 else 0}f}{word}"
    return f"{value:,.0f}" if abs(value) >= 10 else f"{value:.3g}"


def worst(drawn: Drawn) -> int:
    """The scenario with the largest lifetime loss."""
    return int(np.argmax(drawn.point[:, drawn.layout.place(0, "el_lifetime")]))


def answer(drawn: Drawn, el: pd.DataFrame, sources: pd.DataFrame, gaps: pd.DataFrame, spec: Bands) -> str:
    """How wide, what makes it wide, and how sure the difference is."""
    name = drawn.scenarios[worst(drawn)]
    row = book_only(el).query("scenario == @name and horizon == 'lifetime'").iloc[0]
    said = [
        f"With {spec.level:.0%} probability the lifetime loss under {name} lies between {short(row['el_low'])} and "
        f"{short(row['el_high'])}; the run says {short(row['el_point'])}."
    ]
    mine = sources[(sources["scenario"] == name) & (sources["source"] != TOGETHER)].sort_values(
        "share_alone", ascending=False, kind="stable"
    )
    if len(mine):
        parts = [f"{r.source} ({r.share_alone:.0%} of the variance alone)" for r in mine.itertuples()]
        said.append(f"What makes it wide: {', '.join(parts)}.")
    else:
        said.append(f"Only one source varies: {NAMES[drawn.spreads.sources[0]]}.")
    if name != drawn.scenarios[drawn.reference]:
        gap = gaps.query("scenario == @name and horizon == 'lifetime'").iloc[0]
        said.append(
            f"It exceeds that under {gap['reference']} by {short(gap['el_low'])} to {short(gap['el_high'])} "
            f"({short(gap['el_point'])} in the run)."
        )
    return " ".join(said)


def notes(drawn: Drawn, spec: Bands) -> tuple[str, ...]:
    """What was drawn and how, and how exact the figures are."""
    c, n = drawn.compression, drawn.sets[TOGETHER].shape[0]
    out = [f"{NAMES[s][0].upper()}{NAMES[s][1:]}: {drawn.spreads.words[s]}." for s in NAMES]
    out.append(
        f"{n:,} joint draws (seed {spec.seed}), the same numbers for every scenario; largest Monte Carlo error of a band's end "
        f"{drawn.reached:.1%} of the book's loss."
    )
    if c.used:
        few = f"{c.standing:,} loans stand for {c.loans:,}"
        if c.alike is not None:
            few = f"{c.standing:,} of {c.loans:,} lines stand for {c.alike:,.10g} loans"
        out.append(
            f"{few}; full projections of three draws differ from theirs by {c.error:.2%} of a figure "
            f"of the book at most (tolerance {c.tolerance:.2%}), {c.segment_error:.2%} of one of a segment with 1% of the loss or more."
        )
    else:
        of = "" if c.alike is None else f", which stand for {c.alike:,.10g} loans,"
        out.append(f"Every one of {c.loans:,} {c.unit}{of} is projected in every draw.")
    out.append(
        "Not in the bands: a wrong model, new business, the error of the shocks' own estimates, chance in single loans."
    )
    return tuple(out)


def cautions(drawn: Drawn, spec: Bands) -> tuple[str, ...]:
    """What a reader of the stressed figure must know."""
    out = []
    if spec.draws is None and drawn.reached > spec.precision:
        out.append(
            f"Bands: {drawn.sets[TOGETHER].shape[0]:,} draws leave a Monte Carlo error of {drawn.reached:.1%}, more than the "
            f"{spec.precision:.1%} asked for (analyses.bands.most_draws)."
        )
    if spec.covariance == "model" and drawn.spreads.coefficients is not None:
        out.append(
            "Bands: coefficient errors take loan-periods as independent; where months carry shocks that is too narrow."
        )
    return tuple(out)


def facts(drawn: Drawn, spec: Bands) -> dict[str, object]:
    """For the run record."""
    c, shocks = drawn.compression, drawn.spreads.periods
    out: dict[str, object] = {
        "seed": spec.seed,
        "draws": int(drawn.sets[TOGETHER].shape[0]),
        "level": spec.level,
        "sources": list(drawn.spreads.sources),
        "precision_reached": drawn.reached,
        "precision_asked": None if spec.draws else spec.precision,
        **_sizes(c),
        "compression_error": c.error,
        "compression_error_segments": c.segment_error,
        "compression_tolerance": c.tolerance,
        "covariance": spec.covariance,
        "stated": spec.stated,
    }
    if shocks is not None:
        out["shock_sd"] = dict(zip(shocks.causes, map(float, shocks.sd), strict=True))
        out["shock_autocorrelation"] = dict(zip(shocks.causes, map(float, shocks.memory), strict=True))
    return out


def _sizes(c: Compression) -> dict[str, object]:
    """Loans of the book and entries projected in a draw."""
    if c.alike is None:
        return {"loans": c.loans, "loans_projected": c.standing}
    return {"loans": whole_number(c.alike), "lines": c.loans, "lines_projected": c.standing}
