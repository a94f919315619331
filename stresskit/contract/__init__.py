"""What a loan's contract makes of it along a path: rates, balances, limits, and loan columns derived from them.

In: Portfolio, scenario path on model periods, declarations of the study. Out: values per loan and step. May import: macro, spec, core, kernels.
"""
