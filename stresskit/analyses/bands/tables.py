"""Draws to tables: quantiles with their Monte Carlo error, differences to the reference, shares of variance."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.analyses.bands.draws import NAMES
from stresskit.analyses.bands.engine import MEASURES, TOGETHER, Drawn
from stresskit.analyses.bands.quantiles import monte_carlo_error, quantile

Floats = NDArray[np.float64]

HORIZONS = {
    "pd_12m": "12 months",
    "pd_lifetime": "lifetime",
    "el_12m": "12 months",
    "el_lifetime": "lifetime",
}


def ends(level: float) -> tuple[float, float, float]:
    """Lower end, median, upper end as probabilities."""
    return (1.0 - level) / 2.0, 0.5, (1.0 + level) / 2.0


def described(kind: str, draws: Floats, point: Floats, level: float) -> dict[str, Floats]:
    """Columns of a quantity: draws (N, r), point (r,). ``kind``: what column names begin with, el or pd."""
    low, middle, high = (quantile(draws, p) for p in ends(level))
    error = np.maximum(*(monte_carlo_error(draws, p) for p in (ends(level)[0], ends(level)[2])))
    return {
        f"{kind}_point": point, f"{kind}_low": low, f"{kind}_median": middle, f"{kind}_high": high,
        f"{kind}_mean": draws.mean(axis=0), f"{kind}_sd": draws.std(axis=0, ddof=1), f"{kind}_mc_error": error,
    }  # fmt: skip


def segment_table(drawn: Drawn, kind: str, level: float) -> pd.DataFrame:
    """scenario, by, segment, horizon, then the columns of :func:`described`; the whole book first."""
    measures = [m for m in MEASURES if m.startswith(kind)]
    rows = []
    for s, scenario in enumerate(drawn.scenarios):
        for g, (by, segment) in enumerate(drawn.layout.groups):
            rows += [(s, drawn.layout.place(g, m), scenario, by, segment, HORIZONS[m]) for m in measures]
    at = tuple(np.array(x) for x in zip(*((r[0], r[1]) for r in rows), strict=True))
    out = pd.DataFrame([r[2:] for r in rows], columns=["scenario", "by", "segment", "horizon"])
    found = described(kind, drawn.sets[TOGETHER][:, at[0], at[1]], drawn.point[at], level)
    return out.assign(**found)


def book_only(table: pd.DataFrame) -> pd.DataFrame:
    """Rows of the whole book, without the columns that say so."""
    return table[table["by"] == ""].drop(columns=["by", "segment"]).reset_index(drop=True)


def year_table(drawn: Drawn, level: float) -> pd.DataFrame:
    """scenario, year, then the loss of the book in that calendar year."""
    first, years = drawn.layout.first_year, drawn.layout.years
    frames = []
    for s, scenario in enumerate(drawn.scenarios):
        found = described("el", drawn.sets[TOGETHER][:, s, first:], drawn.point[s, first:], level)
        frames.append(pd.DataFrame({"scenario": scenario, "year": years} | found))
    return pd.concat(frames, ignore_index=True)


def difference_table(drawn: Drawn, kind: str, level: float) -> pd.DataFrame:
    """scenario, reference, horizon, then the difference draw by draw: what the scenarios share cancels."""
    rows, draws, points = [], [], []
    together, ref = drawn.sets[TOGETHER], drawn.reference
    for s, scenario in enumerate(drawn.scenarios):
        for m in (m for m in MEASURES if m.startswith(kind)):
            if s == ref:
                continue
            p = drawn.layout.place(0, m)
            rows.append((scenario, drawn.scenarios[ref], HORIZONS[m]))
            draws.append(together[:, s, p] - together[:, ref, p])
            points.append(drawn.point[s, p] - drawn.point[ref, p])
    out = pd.DataFrame(rows, columns=["scenario", "reference", "horizon"])
    if not rows:
        return out
    return out.assign(**described(kind, np.column_stack(draws), np.array(points), level))


def source_table(drawn: Drawn, level: float) -> pd.DataFrame:
    """Lifetime loss of the book by source.

    scenario, source, draws, el_point, el_low, el_high, share_alone (variance with this source alone over that with all),
    share_lost (part of the variance with all that goes when it is left out). Shares need not add up to one: sources
    multiply, and both come from finitely many draws, the same for every row.
    """
    place, rows = drawn.layout.place(0, "el_lifetime"), []
    low, _, high = ends(level)
    for s, scenario in enumerate(drawn.scenarios):
        point = drawn.point[s, place]

        def row(
            name: str, draws: Floats, alone: float, lost: float, s: str = scenario, point: float = point
        ) -> None:
            rows.append(
                (
                    s,
                    name,
                    draws.size,
                    point,
                    float(quantile(draws, low)),
                    float(quantile(draws, high)),
                    alone,
                    lost,
                )
            )

        row(TOGETHER, drawn.sets[TOGETHER][:, s, place], 1.0, 1.0)
        for source in drawn.spreads.sources:
            only, rest = drawn.sets.get(f"only {source}"), drawn.sets.get(f"without {source}")
            if only is None:
                continue
            size = only.shape[0]
            whole = float(drawn.sets[TOGETHER][:size, s, place].var(ddof=1))
            own = only[:, s, place]
            lost = np.nan
            if rest is not None and whole > 0.0:
                lost = 1.0 - float(rest[:, s, place].var(ddof=1)) / whole
            elif len(drawn.spreads.sources) == 2 and whole > 0.0:
                other = next(o for o in drawn.spreads.sources if o != source)
                lost = 1.0 - float(drawn.sets[f"only {other}"][:, s, place].var(ddof=1)) / whole
            row(NAMES[source], own, float(own.var(ddof=1)) / whole if whole > 0.0 else np.nan, lost)
    columns = ["scenario", "source", "draws", "el_point", "el_low", "el_high", "share_alone", "share_lost"]
    return pd.DataFrame(rows, columns=columns)


def method_table(drawn: Drawn) -> pd.DataFrame:
    """source, drawn, how."""
    varied = drawn.spreads.sources
    return pd.DataFrame(
        [(NAMES[s], s in varied, drawn.spreads.words[s]) for s in NAMES], columns=["source", "drawn", "how"]
    )


def shown(table: pd.DataFrame, kind: str, keys: Sequence[str]) -> pd.DataFrame:
    """The columns that a reader needs first."""
    return table[[*keys, *(f"{kind}_{c}" for c in ("point", "low", "median", "high", "mc_error"))]]
