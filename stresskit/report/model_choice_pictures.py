"""Picture of model choice: the stressed loss under each change, beside the study's."""

from __future__ import annotations

import numpy as np
from markupsafe import Markup

from stresskit.report import numbers as num
from stresskit.report.dot_rows import Bar, DotRow, Scale, axis_row, pair_row
from stresskit.report.picture import Key, Panel, Picture
from stresskit.runs.records import Analysis

#: Beyond twice the study's loss marks stand at the edge and the number tells.
_FURTHEST = 1.0


def model_choice_pictures(found: Analysis) -> tuple[Picture, ...]:
    """A row per change: how far the stressed loss moves, in percent of the study's."""
    table = found.table("details")
    table = table[np.isfinite(table["difference_change"].astype(float))]
    values = table["difference_change"].to_numpy(dtype=float)
    reach = min(max(float(np.abs(values).max()), 0.02), _FURTHEST) * 1.05
    scale = Scale(-reach, reach)
    rows = []
    for r in table.to_dict("records"):
        v, inside = float(r["difference_change"]), r["in_range"] == "yes"
        colour = "s1" if r["name"] == "study" else "s0" if inside else "soft"
        bar = Bar(min(v, 0.0), max(v, 0.0), v, colour, "dot" if inside else "square")
        words = f"{num.signed(num.percent(v, 2))} ({num.amount(r['el_stressed'])})"
        rows.append(DotRow(str(r["change"]), pair_row([bar], scale), words, "" if inside else "warn"))
    step = next(s for s in (0.01, 0.02, 0.05, 0.1, 0.2, 0.5) if reach / s <= 2.2)
    ticks = [step * k for k in range(-3, 4) if abs(step * k) <= reach]
    axis = axis_row(Scale(-100 * reach, 100 * reach), [round(100 * t, 6) for t in ticks])
    panel = Panel("Stressed lifetime loss", "percent of the study's", Markup(""), "", tuple(rows), axis)
    caption = (
        "A row per change to the study, every hazard that it touches fitted again. The upright line is the study's loss. Squares stand outside the "
        "range: a gate failed, or the row answers another question."
    )
    keys = (
        Key("points", "s1", "the study"),
        Key("points", "s0", "in the range"),
        Key("square", "soft", "outside the range"),
    )
    return (Picture("model-choice", caption, (panel,), (), keys=keys),)
