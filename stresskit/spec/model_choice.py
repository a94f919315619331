"""The section ``analyses.model_choice``."""

from __future__ import annotations

from stresskit.spec.base import Strict


class ModelChoice(Strict):
    """Other specifications of the same model."""
