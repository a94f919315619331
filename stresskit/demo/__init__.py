"""An invented bank with a known truth.

In: a seed. Out: a study folder as a user would have it. May import: spec, runs.
"""
