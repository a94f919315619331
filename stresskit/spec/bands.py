"""The section ``analyses.bands``."""

from __future__ import annotations

from stresskit.spec.base import Strict


class Bands(Strict):
    """Draws of what is uncertain."""
