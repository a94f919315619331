"""Natural cubic splines by their values at the knots (Wood 2017, Generalized Additive Models, 5.3.1)."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def natural_basis(knots: Floats, x: Floats) -> Floats:
    """(n, K) matrix whose column j is the natural cubic spline that is 1 at knot j and 0 at the others.

    knots  (K,) rising, K >= 2
    x      (n,) within [knots[0], knots[-1]]; no rule for the outside is implied here

    The columns sum to 1, so a coefficient is the curve's height at its knot and dropping column j
    makes the others heights against knot j.
    """
    if x.size and (x.min() < knots[0] or x.max() > knots[-1]):
        raise ValueError("natural_basis: x outside the boundary knots")
    h = np.diff(knots)
    j = np.clip(np.searchsorted(knots, x, side="right") - 1, 0, knots.size - 2)
    right, left, width = knots[j + 1] - x, x - knots[j], h[j]
    out = np.zeros((x.size, knots.size))
    row = np.arange(x.size)
    out[row, j] = right / width
    out[row, j + 1] = left / width
    if knots.size > 2:
        curvature = _second_derivatives(h)
        out += ((right**3 / width - width * right) / 6.0)[:, None] * curvature[j]
        out += ((left**3 / width - width * left) / 6.0)[:, None] * curvature[j + 1]
    return out


def _second_derivatives(h: Floats) -> Floats:
    """(K, K): row j gives the second derivative at knot j from the values at all knots; 0 at both ends."""
    inner = h.size - 1
    d = np.zeros((inner, inner + 2))
    b = np.zeros((inner, inner))
    at = np.arange(inner)
    d[at, at] = 1.0 / h[:-1]
    d[at, at + 1] = -1.0 / h[:-1] - 1.0 / h[1:]
    d[at, at + 2] = 1.0 / h[1:]
    b[at, at] = (h[:-1] + h[1:]) / 3.0
    b[at[:-1], at[1:]] = h[1:-1] / 6.0
    b[at[1:], at[:-1]] = h[1:-1] / 6.0
    out = np.zeros((inner + 2, inner + 2))
    out[1:-1] = np.linalg.solve(b, d)
    return out
