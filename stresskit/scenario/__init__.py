"""Scenario text to complete paths.

In: scenario models and macro history. Out: ScenarioPath. May import: macro, spec, core.
"""
