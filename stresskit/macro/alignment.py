"""The alignment sample: which macro values a model period really read, for the eye of a reviewer."""

from __future__ import annotations

import numpy as np
import pandas as pd

from stresskit.core.period import Frequency, format_period
from stresskit.core.values import FeatureTable, MacroHistory
from stresskit.macro.calendar import positions
from stresskit.macro.rules import offsets
from stresskit.spec.study import Macro

COLUMNS = ("model_period", "feature", "macro_period", "macro_value", "value")
_SHOWN = 4


def alignment_sample(
    macro: Macro, history: MacroHistory, features: FeatureTable, *, model: Frequency, rows: int = 5
) -> pd.DataFrame:
    """A few model periods per feature, first to last, with the macro values behind each.

    A feature that goes by a loan column has a sample for each level, of two rows when there are several: which
    variable a level reads shows in one, and the timing is that of the others.
    Columns: model_period, feature, macro_period (the labels of every macro period read, oldest
    first), macro_value (the variable's values there, in the same order), value (the feature's).
    Rows whose macro periods lie beyond history (they come from a scenario) are not sampled.
    """
    out = []
    periods = np.arange(features.start, features.start + features.n_periods, dtype=np.int64)
    columns = macro.columns()
    few = {c for n, k in features.keyed.items() if len(k.levels) > 1 for c in k.columns(n)}
    for name in features.names:
        feature = columns[name]
        place = history.place.get(feature.variable, "step")
        q, weight = positions(periods, model=model, macro=history.frequency, place=place)
        column = features.column(name)
        usable = np.flatnonzero(np.isfinite(column) & (q - feature.lag <= history.end))
        back = offsets(feature, history.frequency)
        for row in _spread(usable, min(rows, 2) if name in few else rows):
            ends = [int(q[row]) - feature.lag] + ([int(q[row]) - feature.lag - 1] if weight[row] < 1 else [])
            read = sorted({end - b for end in ends for b in back})
            values = [float(history.values[feature.variable][p - history.start]) for p in read]
            out.append(
                (
                    format_period(int(periods[row]), model),
                    name,
                    _listed([format_period(p, history.frequency) for p in read]),
                    _listed([f"{v:.10g}" for v in values]),
                    float(column[row]),
                )
            )
    return pd.DataFrame(out, columns=list(COLUMNS))


def _spread(usable: np.ndarray[tuple[int], np.dtype[np.intp]], rows: int) -> list[int]:
    """Up to ``rows`` of the usable rows, the first and the last among them.

    Those between are moved back by 1, 2, 0, 1, ... where there is room, so that a spacing of whole
    quarters does not show the same month of the quarter every time.
    """
    if usable.size <= rows:
        return [int(i) for i in usable]
    picks = np.linspace(0, usable.size - 1, rows).round().astype(np.int64)
    if usable.size > 3 * rows:
        picks[1:-1] -= np.arange(1, rows - 1) % 3
    return [int(i) for i in usable[picks]]


def _listed(texts: list[str]) -> str:
    if len(texts) <= _SHOWN + 1:
        return ", ".join(texts)
    return f"{', '.join(texts[: _SHOWN - 1])}, ... {len(texts) - _SHOWN} more ..., {texts[-1]}"
