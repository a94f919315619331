"""Cautions: of the whole book, whatever a segment is called; of levels of a feature, one by one or the worst of many."""

from __future__ import annotations

import pandas as pd

from stresskit.runs.cautions import _beyond, _outside


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


def _features(outside: dict[str, float]) -> pd.DataFrame:
    """Two periods per column of one scenario, in the second of which it is that far above its range."""
    return pd.DataFrame(
        [
            (
                "slump",
                name,
                period,
                1.0 + far if period == "2026-02" else 0.0,
                -1.0,
                1.0,
                far if period == "2026-02" else 0.0,
            )
            for name, far in outside.items()
            for period in ("2026-01", "2026-02")
        ],
        columns=["scenario", "feature", "period", "value", "lowest", "highest", "outside"],
    )


def test_few_levels_outside_their_range_are_told_one_by_one() -> None:
    said = _outside(_features({"rate": 0.5, "prices[a]": 0.25, "prices[b]": 0.0, "prices[c]": 1.0}))
    end = "leaves the range on which hazards were estimated: above it in 2026-02, by up to"
    assert said == [
        f"Scenario slump: rate {end} 0.5 (25% of its width).",
        f"Scenario slump: prices[a] {end} 0.25 (12% of its width).",
        f"Scenario slump: prices[c] {end} 1 (50% of its width).",
    ]


def test_of_many_levels_the_furthest_is_told_and_the_others_are_counted() -> None:
    said = _outside(_features({f"prices[{k}]": 0.1 * (k + 1) for k in range(9)} | {"prices[still]": 0.0}))
    assert said == [
        "Scenario slump: prices[8] leaves the range on which hazards were estimated: above it in 2026-02, by up to 0.9 "
        "(45% of its width); so do 8 more levels of prices, less far."
    ]


def test_both_sides_of_a_range_are_told_with_when_and_how_far() -> None:
    values = [0.0, 3.0, 5.0, 0.5, -2.0, 0.0, -1.5]
    frame = pd.DataFrame(
        [
            ("slump", "rate", f"2026-0{k + 1}", v, -1.0, 1.0, max(v - 1.0, -1.0 - v, 0.0))
            for k, v in enumerate(values)
        ],
        columns=["scenario", "feature", "period", "value", "lowest", "highest", "outside"],
    )
    assert _outside(frame) == [
        "Scenario slump: rate leaves the range on which hazards were estimated: above it in 2 periods, 2026-02 to 2026-03, by up to 4 "
        "(200% of its width); below it in 2 periods, 2026-05 to 2026-07, by up to 1 (50% of its width)."
    ]
