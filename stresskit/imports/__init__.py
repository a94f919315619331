"""Published tables to scenario files.

In: an import mapping, CSV or Excel tables. Out: scenario YAML and macro history CSV. May import: runs, scenario, macro, spec, core.
"""
