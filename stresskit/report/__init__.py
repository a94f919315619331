"""Figures, HTML report and workbook from a finished run.

In: a run's tables. Out: report.html, results.xlsx. May import: runs, core.
"""
