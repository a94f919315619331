"""stresskit: stressed PD, LGD and expected loss for loan books.

The job in a few lines::

    import stresskit as sk
    study = sk.load_study("study.yaml")
    data = sk.prepare(study)            # or sk.prepare(study, loans=frame, macro=frame)
    fits = sk.fit(study, data)
    result = sk.project(study, data, fits)   # result.summary is a DataFrame
    sk.write_run(result, fits, "run1")  # report, workbook, tables, record

Heavy parts load when first used, so that ``import stresskit`` stays light.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING

from stresskit.core.version import __version__

_WHERE = {
    "load_study": "stresskit.runs.api",
    "prepare": "stresskit.runs.api",
    "fit": "stresskit.runs.api",
    "project": "stresskit.runs.api",
    "write_run": "stresskit.report.folder",
    "what_if": "stresskit.runs.what_if",
    "verify": "stresskit.repeat.verify",
    "compare": "stresskit.repeat.compare",
    "write_comparison": "stresskit.repeat.folder",
    "import_table": "stresskit.imports.api",
    "write_import": "stresskit.imports.api",
    "RiskSet": "stresskit.core.values",
    "Portfolio": "stresskit.core.values",
    "fit_hazard": "stresskit.hazard.fit",
    "HazardFit": "stresskit.hazard.result",
    "risk_set_from_rows": "stresskit.panel.rows",
    "product_limit": "stresskit.hazard.curves",
    "read_workouts": "stresskit.recovery.read",
    "recovery_curve": "stresskit.recovery.curves",
    "cumulative_incidence": "stresskit.hazard.curves",
}

__all__ = [
    "HazardFit",
    "Portfolio",
    "RiskSet",
    "__version__",
    "compare",
    "cumulative_incidence",
    "fit",
    "fit_hazard",
    "import_table",
    "load_study",
    "prepare",
    "product_limit",
    "project",
    "read_workouts",
    "recovery_curve",
    "risk_set_from_rows",
    "verify",
    "what_if",
    "write_comparison",
    "write_import",
    "write_run",
]

if TYPE_CHECKING:
    from stresskit.core.values import Portfolio, RiskSet
    from stresskit.hazard.curves import cumulative_incidence, product_limit
    from stresskit.hazard.fit import fit_hazard
    from stresskit.hazard.result import HazardFit
    from stresskit.imports.api import import_table, write_import
    from stresskit.panel.rows import risk_set_from_rows
    from stresskit.recovery.curves import recovery_curve
    from stresskit.recovery.read import read_workouts
    from stresskit.repeat.compare import compare
    from stresskit.repeat.folder import write_comparison
    from stresskit.repeat.verify import verify
    from stresskit.report.folder import write_run
    from stresskit.runs.api import fit, load_study, prepare, project
    from stresskit.runs.what_if import what_if


def __getattr__(name: str) -> object:
    if name in _WHERE:
        return getattr(importlib.import_module(_WHERE[name]), name)
    raise AttributeError(f"module 'stresskit' has no attribute {name!r}")
