"""Evidence: what a validator asks of a fit, as tables and plain sentences.

In: HazardFit, RiskSet, FeatureTable (Macro and MacroHistory for the lag profile). Out: pandas tables and
verdicts. May import: hazard, macro, panel, scenario, spec, core, kernels. docs/evidence.md argues each choice.
"""
