"""The panels of the evidence on the fits: one small picture each, from plain tables.

Every function returns inline SVG (see svg.py) without any text from data.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import pandas as pd
from markupsafe import Markup
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullLocator
from numpy.typing import NDArray

from stresskit.report.figures import SMALL, WIDE
from stresskit.report.style import stand_in
from stresskit.report.svg import canvas, finish, percent_axis, settings

Array = NDArray[np.float64]
#: Groups with fewer expected events do not set the height of a picture of ratios.
ENOUGH_EXPECTED = 5.0
#: A ratio beyond this is drawn at the edge.
HIGHEST_RATIO = 4.0
#: Distance from 1 that an axis of ratios shows at least.
LEAST_REACH = 0.25
#: Numbers below a small picture: of up to three digits, and longer ones.
MOST_TICKS, MOST_YEARS = 10, 6
#: Log-likelihood units that a lag profile shows at least.
LEAST_DEPTH = 8.0


def ratio_range(rows: pd.DataFrame) -> tuple[float, float]:
    """Ends of an axis of ratios, 1 in the middle where 0 allows: groups with enough expected events, and their bands."""
    sure = rows[rows["expected"] >= ENOUGH_EXPECTED]
    known = [
        1.0,
        *sure["ratio"],
        *(sure["high_events"] / sure["expected"]),
        *(sure["low_events"] / sure["expected"]),
    ]
    reach = 1.08 * max(LEAST_REACH, float(np.nanmax(np.abs(np.array(known) - 1.0))))
    return max(0.0, 1.0 - reach), min(HIGHEST_RATIO, 1.0 + reach)


def ratio_panel(rows: pd.DataFrame, starts: Sequence[int], *, key: str, alt: str) -> Markup:
    """Actual over expected per group as a dot, over the band it should lie in.

    Groups stand side by side at equal widths; ``starts`` is the number that each begins at (age, year, tenth).
    """
    with settings():
        figure, axes = canvas(*SMALL)
        x = np.arange(len(rows), dtype=np.float64)
        bottom, top = ratio_range(rows)
        ratio = rows["ratio"].to_numpy(dtype=np.float64)
        low, high = (rows[c].to_numpy(dtype=np.float64) / rows["expected"].to_numpy(dtype=np.float64)
                     for c in ("low_events", "high_events"))  # fmt: skip
        out = (ratio < low) | (ratio > high)
        low, high, shown = (np.clip(v, bottom, top) for v in (low, high, ratio))
        axes.bar(x, high - low, 0.92, bottom=low, color=stand_in("band"), alpha=0.55, linewidth=0, zorder=2)
        axes.axhline(1.0, color=stand_in("soft"), linewidth=1, zorder=3)
        _marks(axes, x, shown, out)
        every = -(-len(rows) // (MOST_TICKS if max(starts) < 1000 else MOST_YEARS))
        axes.xaxis.set_major_locator(FixedLocator(list(x[::every])))
        axes.xaxis.set_major_formatter(FuncFormatter(lambda _, at: f"{starts[at * every]:d}"))
        axes.yaxis.set_major_locator(MaxNLocator(nbins=5, steps=[1, 2, 2.5, 5, 10]))
        axes.set_xlim(-0.6, len(rows) - 0.4)
        axes.set_ylim(bottom, top)
        return finish(figure, key=key, alt=alt)


def _marks(axes: Axes, x: Array, y: Array, out: NDArray[np.bool_]) -> None:
    """Dots, and diamonds for those outside their band."""
    for at, marker, size in ((~out, "o", 5.5), (out, "D", 6.5)):
        axes.plot(
            x[at],
            y[at],
            marker,
            color=stand_in("s1"),
            markersize=size,
            markeredgewidth=0,
            zorder=4,
            clip_on=False,
        )


def survival_panel(rows: pd.DataFrame, *, key: str, alt: str) -> Markup:
    """Observed survival by age with its band, and the fitted one, both as steps."""
    with settings():
        figure, axes = canvas(*WIDE)
        age = rows["age"].to_numpy(dtype=np.float64)
        start = np.concatenate([[age[0] - 1.0], age])
        banded = rows[rows["lower"].notna()]
        axes.fill_between(
            banded["age"].to_numpy(dtype=np.float64),
            banded["lower"].to_numpy(dtype=np.float64),
            banded["upper"].to_numpy(dtype=np.float64),
            step="post", color=stand_in("band"), alpha=0.55, linewidth=0, zorder=2,
        )  # fmt: skip
        for column, colour in (("observed", "ink"), ("fitted", "s1")):
            y = np.concatenate([[1.0], rows[column].to_numpy(dtype=np.float64)])
            axes.plot(start, y, color=stand_in(colour), linewidth=1.6, drawstyle="steps-post", zorder=3)
        axes.set_xlim(start[0], start[-1])
        lowest = float(np.nanmin(rows[["observed", "fitted", "lower"]].to_numpy(dtype=np.float64)))
        axes.set_ylim(0.0 if lowest < 0.4 else lowest - 0.04 * (1.0 - lowest), 1.0)
        percent_axis(axes)
        return finish(figure, key=key, alt=alt)


def memory_panel(rows: pd.DataFrame, *, key: str, alt: str) -> Markup:
    """Autocorrelation by lag as stems over the band of no memory."""
    with settings():
        figure, axes = canvas(*WIDE)
        lag, value = (rows[c].to_numpy(dtype=np.float64) for c in ("lag", "autocorrelation"))
        band = float(rows["band"].iloc[0])
        axes.axhspan(-band, band, color=stand_in("band"), alpha=0.45, linewidth=0, zorder=1)
        axes.axhline(0.0, color=stand_in("soft"), linewidth=1, zorder=2)
        axes.vlines(lag, 0.0, value, color=stand_in("s1"), linewidth=2, zorder=3)
        _marks(axes, lag, value, np.abs(value) > band)
        reach = 1.12 * max(1.8 * band, float(np.abs(value).max()))
        axes.set_ylim(-reach, reach)
        axes.set_xlim(0.4, lag[-1] + 0.6)
        axes.xaxis.set_major_locator(MaxNLocator(nbins=13, integer=True))
        return finish(figure, key=key, alt=alt)


def calibration_panel(rows: pd.DataFrame, *, key: str, alt: str) -> Markup:
    """Predicted (across) against actual rates (up) per band, both on a log scale, with the line of equality."""
    with settings():
        figure, axes = canvas(WIDE[0], 300)
        x, y, lower, upper = (
            rows[c].to_numpy(dtype=np.float64) for c in ("predicted", "actual", "lower", "upper")
        )
        seen = y > 0.0
        span = [*x, *y[seen], *upper[seen]]
        low, high = _step_down(min(span)), _step_up(max(span))
        axes.set_xscale("log")
        axes.set_yscale("log")
        axes.plot([low, high], [low, high], color=stand_in("soft"), linewidth=1.2, zorder=2)
        axes.vlines(x, np.maximum(lower, low), upper, color=stand_in("band"), linewidth=2.4, zorder=3)
        axes.plot(
            x, np.maximum(y, low), "o", color=stand_in("s1"), markersize=5.5, markeredgewidth=0, zorder=4,
            clip_on=False,
        )  # fmt: skip
        _log_percent(axes, _step_down(float(x.min())), _step_up(float(x.max())), low, high)
        return finish(figure, key=key, alt=alt)


def _log_percent(axes: Axes, left: float, right: float, low: float, high: float) -> None:
    for axis, a, b, most in ((axes.xaxis, left, right, 6), (axes.yaxis, low, high, 8)):
        _ticks(axis, a, b, most)
    axes.set_xlim(left, right)
    axes.set_ylim(low, high)


def _ticks(axis: Axis, low: float, high: float, most: int) -> None:
    ticks = [m * 10.0**e for e in range(-12, 1) for m in (1, 2, 5) if low * 0.99 < m * 10.0**e < high * 1.01]
    if len(ticks) > most:
        ticks = [t for t in ticks if math.isclose(math.log10(t), round(math.log10(t)), abs_tol=1e-9)]
    axis.set_major_locator(FixedLocator(ticks))
    axis.set_minor_locator(NullLocator())
    axis.set_major_formatter(FuncFormatter(lambda v, _: f"{float(f'{100 * v:.3g}'):g}%"))


def _step_down(value: float) -> float:
    """The largest of 1, 2, 5 times a power of ten that is not above ``value``."""
    power = 10.0 ** math.floor(math.log10(value))
    return max(m * power for m in (1, 2, 5) if m * power <= value * (1 + 1e-9))


def _step_up(value: float) -> float:
    power = 10.0 ** math.floor(math.log10(value))
    return min(m * power for m in (1, 2, 5, 10) if m * power >= value * (1 - 1e-9))


def lag_panel(rows: pd.DataFrame, *, support: float, key: str, alt: str) -> Markup:
    """Log-likelihood by lag, shocks allowed for, below the best; the study's lag marked; hollow: the other sign."""
    with settings():
        figure, axes = canvas(*WIDE)
        lag, behind, sign = (rows[c].to_numpy(dtype=np.float64) for c in ("lag", "behind_scaled", "coef"))
        own = rows["study"].to_numpy(dtype=bool)
        alike = np.sign(sign) == np.sign(sign[own][0])
        axes.axhline(-support, color=stand_in("soft"), linewidth=1.2, linestyle=(0, (4.0, 3.0)), zorder=2)
        axes.axvline(float(lag[own][0]), color=stand_in("soft"), linewidth=1, linestyle=(0, (1.0, 3.0)))
        axes.plot(lag, -behind, color=stand_in("s0"), linewidth=2.0, zorder=3)
        axes.plot(
            lag[alike & ~own], -behind[alike & ~own], "o", color=stand_in("s0"), markersize=5.5, markeredgewidth=0,
            zorder=4,
        )  # fmt: skip
        axes.plot(
            lag[~alike], -behind[~alike], "o", markersize=5.5, markerfacecolor=stand_in("card"),
            markeredgecolor=stand_in("s0"), markeredgewidth=1.4, zorder=4,
        )  # fmt: skip
        axes.plot(
            lag[own], -behind[own], "D", color=stand_in("s1"), markersize=8, markeredgewidth=0, zorder=5
        )
        depth = min(
            float(np.nanmax(behind)),
            max(LEAST_DEPTH, 4.0 * support, 1.5 * float(np.nan_to_num(behind[own][0]))),
        )
        axes.set_ylim(-1.06 * max(depth, 1.5 * support), 0.08 * max(depth, 1.5 * support))
        axes.set_xlim(lag[0] - 0.4, lag[-1] + 0.4)
        axes.xaxis.set_major_locator(MaxNLocator(nbins=13, integer=True))
        axes.xaxis.set_major_formatter(FuncFormatter(lambda v, _: f"{v:.0f}".replace("-", "−")))
        return finish(figure, key=key, alt=alt)
