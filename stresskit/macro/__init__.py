"""Macro history, placement on model periods, features.

In: a table of variables and the macro part of a study. Out: MacroHistory, FeatureTable.
May import: spec, core.
"""
