"""Terms, link, likelihood sums, solver, covariance, saved model.

In: RiskSet and FeatureTable. Out: HazardFit. May import: macro, spec, core, kernels.
"""
