"""Workouts of defaulted loans, recovery curves weighted by amount, LGD by recovery time.

In: tables of cases and cash flows, the recovery part of a study. Out: Workouts, curves, LGD of a default in
each step. May import: hazard, macro, spec, core, kernels.
"""
