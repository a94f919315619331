"""Study and scenario text as checked, frozen models.

In: YAML text. Out: pydantic models with places for errors. May import: core.
"""
