"""Models that were fitted before, as a run is given them."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from stresskit.hazard.result import HazardFit
from stresskit.runs.record import digest_text


class SavedModels(dict[str, HazardFit]):
    """Cause -> model read from a file. A run that gets them records that its models are inputs, and which ones."""


def model_text(fit: HazardFit) -> str:
    """A model as it is written to models/<cause>.json."""
    return fit.to_json() + "\n"


def model_record(fits: Mapping[str, HazardFit]) -> dict[str, Any]:
    """given: whether the models were handed over; digests: of the text of each one that was."""
    if not isinstance(fits, SavedModels):
        return {"given": False}
    return {"given": True, "digests": {cause: digest_text(model_text(f)) for cause, f in fits.items()}}
