"""The section ``analyses.backtest``."""

from __future__ import annotations

from stresskit.spec.base import Strict


class Backtest(Strict):
    """Past dates at which the study is done again."""
