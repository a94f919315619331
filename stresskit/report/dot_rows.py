"""Dots with bars, a row per group: names and numbers stand in HTML, only the marks are drawn.

A row's picture is a small SVG without a viewBox: positions across are percentages, so it takes any width
and its marks and figures keep their size on a narrow screen.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from markupsafe import Markup

#: Part of the width left free at both ends, in percent, so that no mark is cut.
_EDGE = 3.0


@dataclass(frozen=True, slots=True)
class DotRow:
    """One row: name, picture, numbers in words, and a mark that the style sheet knows ("" or "warn")."""

    label: str
    svg: Markup
    value: str
    mark: str = ""


@dataclass(frozen=True, slots=True)
class Bar:
    """A bar from ``lower`` to ``upper`` with a dot at ``point``; ``shape``: "dot" or "square"."""

    lower: float
    upper: float
    point: float
    colour: str = "s1"
    shape: str = "dot"


@dataclass(frozen=True, slots=True)
class Scale:
    """Values ``low`` to ``high`` across the width; what lies beyond is drawn at the edge."""

    low: float
    high: float

    def place(self, value: float) -> str:
        share = (min(max(value, self.low), self.high) - self.low) / (self.high - self.low)
        return f"{_EDGE + (100.0 - 2.0 * _EDGE) * share:.2f}%"

    def extent(self, lower: float, upper: float) -> tuple[str, str]:
        """x and width of a rectangle."""
        left, right = (float(self.place(v).rstrip("%")) for v in (lower, upper))
        return f"{left:.2f}%", f"{right - left:.2f}%"


def ratio_row(bar: Bar, scale: Scale) -> Markup:
    """A band with a dot, and a line at 1."""
    return _svg(18, [_upright(scale, 1.0, 18), _band(bar, scale, 9), _dot(bar, scale, 9)])


def pair_row(bars: Sequence[Bar], scale: Scale) -> Markup:
    """Estimates below each other with their intervals, and a line at 0."""
    parts = [_upright(scale, 0.0, 4 + 12 * len(bars))]
    for k, bar in enumerate(bars):
        y = 8 + 12 * k
        x1, x2 = scale.place(bar.lower), scale.place(bar.upper)
        parts.append(
            f'<line x1="{x1}" x2="{x2}" y1="{y}" y2="{y}" stroke="var(--{bar.colour})" stroke-width="2"/>'
        )
        parts.append(_dot(bar, scale, y))
    return _svg(4 + 12 * len(bars), parts)


def axis_row(scale: Scale, ticks: Sequence[float]) -> Markup:
    """Numbers below the rows."""
    words = [
        f'<text x="{scale.place(t)}" y="11" text-anchor="middle" font-size="12" fill="var(--soft)">{t:g}</text>'
        for t in ticks
    ]
    return _svg(14, words)


def _svg(height: int, parts: Sequence[str]) -> Markup:
    return Markup(f'<svg width="100%" height="{height}" aria-hidden="true">{"".join(parts)}</svg>')


def _upright(scale: Scale, value: float, height: int) -> str:
    x = scale.place(value)
    return f'<line x1="{x}" x2="{x}" y1="0" y2="{height}" stroke="var(--soft)" stroke-width="1"/>'


def _band(bar: Bar, scale: Scale, y: int) -> str:
    x, width = scale.extent(bar.lower, bar.upper)
    return f'<rect x="{x}" y="{y - 4}" width="{width}" height="8" fill="var(--band)" fill-opacity=".55"/>'


def _dot(bar: Bar, scale: Scale, y: int) -> str:
    x, fill = scale.place(bar.point), f'fill="var(--{bar.colour})"'
    if bar.shape == "square":
        # A line of no length with square ends is a square that percentages can place.
        return f'<line x1="{x}" x2="{x}" y1="{y}" y2="{y}" stroke="var(--{bar.colour})" stroke-width="8" stroke-linecap="square" stroke-dasharray="0 9"/>'
    return f'<circle cx="{x}" cy="{y}" r="4" {fill}/>'
