"""Tries many macro specifications for one cause under stated rules, and records every one of them.

In: a study, its prepared data, a search. Out: SearchResult and its folder. May import: runs, hazard, macro, spec, core.
"""
