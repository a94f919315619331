"""Quality rules, one small module per family; the list is in registry.py.

In: relations described in base.py. Out: findings and reasons. May import: panel values, spec, core.
"""
