"""Hypothesis draws the same examples in every run, so that a red run can be repeated.

HYPOTHESIS_PROFILE=explore draws new ones: for hunting, not for the gate.
"""

from __future__ import annotations

import os

from hypothesis import settings

settings.register_profile("repeatable", derandomize=True)
settings.register_profile("explore", derandomize=False)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "repeatable"))
