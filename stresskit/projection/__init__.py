"""Survival rolled forward for every loan along a path.

In: fits, portfolio, paths. Out: Projection. May import: hazard, scenario, kernels, core.
"""
