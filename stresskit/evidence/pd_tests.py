"""Tests of a stated PD against the number of defaults: Jeffreys, exact binomial, Hosmer-Lemeshow, with shocks of periods."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import special, stats

from stresskit.core.errors import UsageError

Floats = NDArray[np.float64]


def jeffreys_p(defaults: Floats | float, loans: Floats | float, pd: Floats | float) -> Floats:
    """Posterior probability that the true default rate is at or below ``pd``, prior Beta(1/2, 1/2).

    Small values say that the PD is too low (one-sided, as in the ECB's instructions for reporting the validation
    results of internal models, 2019, section 2.5.3.1). Brown, Cai and DasGupta (2001) on the prior.
    """
    d, n = np.asarray(defaults, dtype=np.float64), np.asarray(loans, dtype=np.float64)
    out: Floats = np.asarray(stats.beta.cdf(np.asarray(pd), d + 0.5, n - d + 0.5))
    return out


def binomial_p(defaults: Floats | float, loans: Floats | float, pd: Floats | float) -> tuple[Floats, Floats]:
    """(P(X >= defaults), P(X <= defaults)) for X binomial(loans, pd): exact, one-sided each.

    Numbers that are not whole, sums of fractional counts, have the incomplete beta function that the tails of whole ones are
    (Abramowitz and Stegun 1964, 26.5.24).
    """
    d, n, p = np.broadcast_arrays(*(np.asarray(x, dtype=np.float64) for x in (defaults, loans, pd)))
    upper, lower = np.asarray(stats.binom.sf(d - 1.0, n, p)), np.asarray(stats.binom.cdf(d, n, p))
    whole = (d == np.round(d)) & (n == np.round(n))
    if whole.all():
        return upper, lower
    some, rest = np.maximum(d, np.finfo(float).tiny), np.maximum(n - d, np.finfo(float).tiny)
    smooth = special.betainc(some, n - d + 1.0, p), special.betaincc(d + 1.0, rest, p)
    return np.where(whole, upper, smooth[0]), np.where(whole, lower, smooth[1])


def two_sided(upper: Floats, lower: Floats) -> Floats:
    """Twice the smaller one-sided p-value, at most 1."""
    out: Floats = np.minimum(1.0, 2.0 * np.minimum(upper, lower))
    return out


def hosmer_lemeshow(
    defaults: Floats, loans: Floats, expected: Floats, *, fitted_here: bool = False
) -> tuple[float, int, float]:
    """(chi-square, degrees of freedom, p-value) over g groups of predicted risk (Hosmer and Lemeshow 1980).

    sum of (D - E)^2 / (E (1 - E / n)). Degrees of freedom are g on loans that the model has not seen, g - 2 on
    those that it was fitted on (Hosmer, Lemeshow and Sturdivant 2013, section 5.2.2). Loans count as independent: a shock
    that they share makes the statistic too large, and its p-value too small.

    Raises UsageError for fewer than three groups, or a group in which no default or no survivor is expected.
    """
    d, n, e = (np.asarray(x, dtype=np.float64) for x in (defaults, loans, expected))
    if d.size < 3:
        raise UsageError(f"Hosmer-Lemeshow needs at least three groups of predicted risk, not {d.size}")
    if (e <= 0.0).any() or (e >= n).any():
        raise UsageError("Hosmer-Lemeshow needs expected defaults above 0 and below the loans in every group")
    chi2 = float(((d - e) ** 2 / (e * (1.0 - e / n))).sum())
    df = d.size - (2 if fitted_here else 0)
    return chi2, df, float(stats.chi2.sf(chi2, df))
