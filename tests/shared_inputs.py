"""Inputs and check values that lie beside the repository and are no part of it."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

REPOSITORY = Path(__file__).resolve().parents[1]


def under_ci() -> bool:
    """Whether what is missing is a failure."""
    return os.environ.get("CI", "").lower() in ("true", "1")


def shared(name: str) -> Path:
    """A file or folder below the folder that STRESSKIT_SHARED names, else below ../shared seen from the repository.

    Without it the test fails under CI and is skipped elsewhere.
    """
    folder = os.environ.get("STRESSKIT_SHARED")
    place = (Path(folder) if folder else REPOSITORY.parent / "shared") / name
    if not place.exists():
        words = f"the shared inputs are not beside the repository: expected {place}"
        if under_ci():
            pytest.fail(words)
        pytest.skip(words)
    return place
