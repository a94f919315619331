"""The section ``analyses.attribution``."""

from __future__ import annotations

from stresskit.spec.base import Strict


class Attribution(Strict):
    """Split of the difference between two scenarios."""
