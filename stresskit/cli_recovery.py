"""Recovery in the terminal. Imported only by its command."""

from __future__ import annotations

from collections.abc import Mapping

from rich.text import Text

from stresskit.hazard.result import HazardFit
from stresskit.report import numbers as num
from stresskit.report.terminal import as_json, console, show, show_block, text
from stresskit.runs.recovery import ALL_CASES, RecoveryResult


def show_recovery(found: RecoveryResult, fits: Mapping[str, HazardFit], *, json: bool) -> None:
    """LGD by segment, what the treatment of open cases changes, held-out years, then the regressions."""
    if json:
        print(as_json(dict(found.tables)))
        return
    out = console()

    def percent(value: float) -> str:
        return num.percent(value, 1)

    summary = found.tables["summary"]
    whole = summary[summary["segment"] == ALL_CASES].iloc[0]
    out.print(
        Text(
            f"{num.count(whole['cases'])} workouts, {num.count(whole['open_cases'])} of them open; amounts in the currency of the file"
        )
    )
    show(
        summary.drop(columns=["weibull", "loglogistic", "last_supported", "se"]),
        title="LGD by recovery time (costs apart; band: 90%, whole cases resampled)",
        formats={
            "segment": text,
            **dict.fromkeys(("cases", "open_cases"), num.count),
            "amount": num.amount,
            **dict.fromkeys(("lgd", "lower", "upper", "cost", "lgd_by_cases", "long_run_average"), percent),
        },
        names={
            "lower": "from",
            "upper": "to",
            "lgd_by_cases": "cases alike",
            "long_run_average": "mean of years",
        },
        to=out,
    )
    show(
        found.tables["treatments"],
        title="What the treatment of open cases changes",
        formats={"lgd": percent, "cases": num.count, "against_ours": lambda v: num.signed(num.percent(v, 1))},
        names={"against_ours": "against ours"},
        to=out,
    )
    hold = found.tables["hold_out"]
    if len(hold):
        show(
            hold,
            title="Held-out default years: share still owed, predicted with the information of that date, and realised",
            formats={
                "default_year": lambda v: str(int(v)),
                **dict.fromkeys(("cases", "cases_known", "workout_periods"), num.count),
                **dict.fromkeys(("predicted_unresolved", "realised_unresolved", "difference"), percent),
            },
            names={"predicted_unresolved": "predicted", "realised_unresolved": "realised"},
            to=out,
        )
    for f in fits.values():
        show_block(f.summary())
