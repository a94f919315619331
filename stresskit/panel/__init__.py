"""Loan history to risk set and portfolio.

In: files or frames and the loans part of a study. Out: RiskSet, Portfolio, reconciliation.
May import: spec, core, kernels.
"""
