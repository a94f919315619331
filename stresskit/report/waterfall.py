"""A waterfall as rows: what there was, what each part adds or takes away, what there is then."""

from __future__ import annotations

from collections.abc import Sequence

from markupsafe import Markup

from stresskit.report import numbers as num
from stresskit.report.dot_rows import DotRow, Scale, axis_row

#: Colours of totals, of parts that add and of parts that take away.
TOTAL, MORE, LESS = "band", "s1", "s2"
_HEIGHT = 20


def waterfall_rows(
    start: tuple[str, float], parts: Sequence[tuple[str, float]], end: tuple[str, float]
) -> tuple[tuple[DotRow, ...], Markup, str]:
    """Rows from ``start`` over parts to ``end``, the axis below, and the word for its unit.

    start, end  name and amount; the parts are drawn one after the other and lead from one to the other
    """
    at, edges = start[1], [0.0, start[1], end[1]]
    for _, size in parts:
        at += size
        edges.append(at)
    low, high = min(edges), max(edges)
    divisor, word = num.scale(max(abs(low), abs(high)))
    room = 0.02 * ((high - low) or 1.0)
    scale = Scale((low - (room if low < 0 else 0.0)) / divisor, (high + room) / divisor)
    rows = [_total(start, scale, divisor)]
    at = start[1]
    for name, size in parts:
        rows.append(
            DotRow(
                name,
                _bar(at, at + size, scale, divisor, MORE if size >= 0 else LESS),
                num.signed(num.amount(size)),
            )
        )
        at += size
    rows.append(_total(end, scale, divisor))
    return tuple(rows), axis_row(scale, _ticks(scale)), word


def _total(item: tuple[str, float], scale: Scale, divisor: float) -> DotRow:
    return DotRow(item[0], _bar(0.0, item[1], scale, divisor, TOTAL), num.amount(item[1]))


def _bar(before: float, after: float, scale: Scale, divisor: float, colour: str) -> Markup:
    """From one amount to the next, with thin uprights at both ends so that a bar of no length is still seen."""
    ends = sorted((before / divisor, after / divisor))
    x, width = scale.extent(*ends)
    zero, where = scale.place(0.0), scale.place(after / divisor)
    parts = [
        f'<line x1="{zero}" x2="{zero}" y1="0" y2="{_HEIGHT}" stroke="var(--line)" stroke-width="1"/>',
        f'<rect x="{x}" y="3" width="{width}" height="{_HEIGHT - 6}" fill="var(--{colour})"/>',
        f'<line x1="{where}" x2="{where}" y1="1" y2="{_HEIGHT - 1}" stroke="var(--ink)" stroke-width="1.2"/>',
    ]
    return Markup(f'<svg width="100%" height="{_HEIGHT}" aria-hidden="true">{"".join(parts)}</svg>')


def _ticks(scale: Scale) -> list[float]:
    """Round numbers across the width, four at most and 0 among them."""
    span = scale.high - scale.low
    raw = span / 4
    unit = 10.0 ** len(str(int(raw))) / 10 if raw >= 1 else 0.1
    step = next(s for m in (1, 2, 5, 10, 20, 50, 100) if (s := m * unit) >= raw)
    first = int(scale.low / step) * step
    return [round(first + k * step, 6) for k in range(6) if scale.low <= first + k * step <= scale.high]
