"""Cautions speak of the whole book, whatever a segment is called."""

from __future__ import annotations

import pandas as pd

from stresskit.runs.cautions import _beyond


def test_a_segment_called_portfolio_is_not_the_book() -> None:
    summary = pd.DataFrame(
        {
            "scenario": "baseline",
            "by": ["", "product", "product"],
            "segment": ["portfolio", "portfolio", "other"],
            "from_extrapolated_age": [0.12, 0.90, 0.01],
            "beyond_path": [0.0, 0.0, 0.0],
        }
    )
    sentences = _beyond(summary)
    assert len(sentences) == 1
    assert sentences[0].startswith("12% of lifetime default incidence")
