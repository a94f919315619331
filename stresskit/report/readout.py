"""Values behind a panel, for the page's script: what stands where, so that a pointer or an arrow key can read it.

They travel in an attribute of the SVG. Without a script nothing is lost: each figure has its table.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from numpy.typing import NDArray

Array = NDArray[np.float64]

#: Points of a panel that can be read; of longer ones every second, third ... and the last.
MOST_POINTS = 180


@dataclass(frozen=True, slots=True)
class Trace:
    """One line or row of columns: its name, x and y (n,), and the scenario's place (None: not of a scenario)."""

    name: str
    x: Array
    y: Array
    place: int | None = None


@dataclass(frozen=True, slots=True)
class Readout:
    """traces; label of each x; whether y is a share, shown as percent; ``divisor``: the axis shows y over it."""

    traces: Sequence[Trace]
    labels: Mapping[float, str]
    share: bool = False
    divisor: float = 1.0

    def attribute(self, axes: Axes) -> str:
        """JSON for a single-quoted attribute: x in pixels with labels, y as numbers with the line that maps them to pixels."""
        given = [t.x for t in self.traces if t.x.size]
        x = np.unique(np.concatenate(given)) if given else np.empty(0)
        every = max(1, -(-x.size // MOST_POINTS))
        x = x[sorted({*range(0, x.size, every), x.size - 1})] if every > 1 else x
        figure = axes.get_figure(root=True)
        if figure is None:
            raise ValueError("axes without a figure")
        width, height = figure.get_size_inches() * 72
        box, (left, right), (low, high) = axes.get_position(), axes.get_xlim(), axes.get_ylim()
        across = width * (box.x0 + box.width * (x - left) / (right - left))
        per_unit = -height * box.height / (high - low) / self.divisor
        zero = height * (1 - box.y0) - per_unit * self.divisor * low
        told = {
            "x": [round(float(v), 1) for v in across],
            "l": [self.labels.get(float(v), f"{v:.4g}") for v in x],
            "y": [round(float(zero), 2), float(f"{per_unit:.6g}")],
            "h": [round(float(height * (1 - box.y1)), 1), round(float(height * (1 - box.y0)), 1)],
            "u": "%" if self.share else "",
            "t": [[-1 if t.place is None else t.place, t.name, _along(t, x)] for t in self.traces],
        }
        text = json.dumps(told, separators=(",", ":"), ensure_ascii=False, allow_nan=False)
        for sign, entity in (("&", "&amp;"), ("'", "&#39;"), ("<", "&lt;"), (">", "&gt;")):
            text = text.replace(sign, entity)
        return text


def _along(trace: Trace, x: Array) -> list[float | None]:
    """Values of a trace at every x, five digits each; None where it has none."""
    known = dict(zip(trace.x.tolist(), trace.y.tolist(), strict=True))
    found = (known.get(float(v), math.nan) for v in x)
    return [float(f"{v:.5g}") if math.isfinite(v) else None for v in found]
