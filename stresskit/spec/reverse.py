"""The section ``analyses.reverse``."""

from __future__ import annotations

from stresskit.spec.base import Strict


class Reverse(Strict):
    """Search for the most plausible path that reaches a threshold."""
