"""Exposure, LGD, discounting, expected loss.

In: Projection and portfolio. Out: loss per loan and segment. May import: projection, recovery, core.
"""
