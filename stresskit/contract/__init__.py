"""What contracts make of loans along a path: rates, balances, exposures, columns that move, collateral.

In: the study's sections on contracts, a portfolio, macro history and path. Out: ContractPaths, loan columns of a
RiskSet, CollateralLgd. May import: macro, spec, core, kernels.
"""
