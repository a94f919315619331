"""How wide the stressed figures are, and what makes them wide: draws of what is uncertain, each re-projecting the book.

In: a :class:`stresskit.runs.setting.Setting`. Out: an analysis with quantiles, their Monte Carlo error and shares of variance.
"""
