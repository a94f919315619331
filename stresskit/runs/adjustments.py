"""Floors and overlays as a table, and the summary's losses after them."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.errors import TextError
from stresskit.core.values import Portfolio
from stresskit.loss.adjust import adjusted
from stresskit.loss.assess import LossResult
from stresskit.loss.yearly import by_cell
from stresskit.runs.records import WEIGHTED
from stresskit.runs.tables import Cells
from stresskit.spec.base import meant
from stresskit.spec.provisions import Adjustments

Floats = NDArray[np.float64]
_MEASURES = ("touched", "el_12m_before", "el_12m_after", "el_lifetime_before", "el_lifetime_after")


def adjustment_table(
    adjustments: Adjustments,
    portfolio: Portfolio,
    cells: Cells,
    results: Mapping[str, LossResult],
    weights: Mapping[str, float | None],
) -> pd.DataFrame:
    """scenario, by, segment, step, kind, name, reason, loans, el_12m_before, el_12m_after, el_lifetime_before,
    el_lifetime_after.

    A row per scenario, segment and floor or overlay, in the order of application; ``loans`` is how many it touches, by counts
    (in the weighted mean: their mean). The weighted rows are the weighted mean of the scenarios' rows.
    """
    for i, overlay in enumerate(adjustments.overlays):
        for name in overlay.scenarios:
            if name not in weights:
                raise TextError(
                    f"adjustments.overlays#{i + 1}.scenarios: no scenario {name!r}{meant(name, weights)} "
                    f"(scenarios: {', '.join(weights)})"
                )
    sums: dict[str, Floats] = {}
    heads: list[tuple[str, str, str]] = []
    for scenario, result in results.items():
        if scenario == WEIGHTED:
            continue
        year, life = result.loans["el_12m"], result.loans["el_lifetime"]
        parts = []
        steps = adjusted(portfolio, result.loans, adjustments, scenario)
        for step in steps:
            columns = np.stack(
                [step.touched * portfolio.counts, year, step.el_12m, life, step.el_lifetime], axis=1
            ).astype(float)
            parts.append(by_cell(cells.codes, columns, cells.count))
            year, life = step.el_12m, step.el_lifetime
        heads = [(s.kind, s.name, s.reason) for s in steps]
        sums[scenario] = np.stack(parts)
    if WEIGHTED in results:
        total = np.zeros(next(iter(sums.values())).shape)
        for scenario, weight in weights.items():
            total += float(weight or 0.0) * sums[scenario]
        sums[WEIGHTED] = total
    frames = [
        _rows(scenario, by, labels, np.stack([by_cell(index, s, len(labels)) for s in values]), heads)
        for scenario, values in sums.items()
        for by, labels, index in cells.breakdowns
    ]
    return pd.concat(frames, ignore_index=True)


def _rows(
    scenario: str, by: str, labels: tuple[str, ...], values: Floats, heads: list[tuple[str, str, str]]
) -> pd.DataFrame:
    """Rows of one breakdown; values (steps, segments, measures)."""
    out = pd.DataFrame(
        [(scenario, by, label, k + 1, *head) for label in labels for k, head in enumerate(heads)],
        columns=["scenario", "by", "segment", "step", "kind", "name", "reason"],
    )
    flat = np.swapaxes(values, 0, 1).reshape(-1, len(_MEASURES))
    return pd.concat([out, pd.DataFrame(flat, columns=["loans", *_MEASURES[1:]])], axis=1)


def with_adjusted(summary: pd.DataFrame, table: pd.DataFrame) -> pd.DataFrame:
    """The summary with el_12m_adjusted and el_lifetime_adjusted; the model's own columns stay as they are."""
    keys = ["scenario", "by", "segment"]
    last = table[table["step"] == table["step"].max()].set_index(keys)
    first = table[table["step"] == 1].set_index(keys)
    at = pd.MultiIndex.from_frame(summary[keys])
    out = summary.copy()
    for name in ("el_12m", "el_lifetime"):
        # the change is added, so that a scenario without one has the model's figure to the last bit
        change = last[f"{name}_after"] - first[f"{name}_before"]
        out[f"{name}_adjusted"] = summary[name].to_numpy() + change.reindex(at).to_numpy()
    return out


def adjustment_notes(table: pd.DataFrame) -> tuple[str, ...]:
    """One caution: how far floors and overlays move the loss."""
    book = table[(table["by"] == "") & (table["step"] == table["step"].max())]
    first = table[(table["by"] == "") & (table["step"] == 1)].set_index("scenario")["el_lifetime_before"]
    words = []
    for row in book.itertuples():
        before = float(first[row.scenario])
        change = (
            f"{float(row.el_lifetime_after) / before - 1:+.1%}"
            if before > 0
            else f"{float(row.el_lifetime_after):+,.0f}"
        )
        words.append(f"{row.scenario} {change}")
    return (
        "Floors and overlays of the study change the lifetime expected loss after the model: "
        f"{', '.join(words)}. They are judgements, listed one by one; stages, years and capital are without them.",
    )
