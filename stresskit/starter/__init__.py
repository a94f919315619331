"""A study to start from: commented files, with an invented book or for a loan table that somebody has.

In: a folder, perhaps a loan table. Out: study.yaml, scenarios, inputs. May import: demo, runs, spec, core.
"""
