"""A study from YAML to a run folder.

In: study file. Out: run folder and its records. May import: every stage.
"""
