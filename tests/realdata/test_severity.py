"""Final losses of real small-business loans as a table of severities: no cash flows, one closing per case."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest

from stresskit.core.period import Frequency, parse_period
from stresskit.recovery.curves import curves_by, recovery_curve
from stresskit.recovery.read import read_workouts
from stresskit.spec.recovery import Recovery
from tests.realdata.test_small_business import demand_inputs

pytestmark = pytest.mark.realdata


def test_charged_off_principal_over_what_was_disbursed() -> None:
    """LGD = charged off over disbursed of the charged-off loans, amount-weighted, whole and by real-estate backing: added up by hand from the file."""
    frame = pd.read_csv(demand_inputs() / "small_business_loans.csv")
    lost = frame[(frame["final_status"] == "CHGOFF") & frame["charged_off"].notna()].copy()
    lost["backed"] = lost["real_estate_backed"].map({0: "no", 1: "yes"})
    spec = Recovery.model_validate(
        {
            "cases": "small_business_loans.csv", "end": 4, "discount": "none", "by": ("backed",),
            "columns": {"case": "loan", "default": "charged_off", "amount": "gross_disbursed", "closed": "charged_off",
                        "kind": "final_status", "loss": "charged_off_principal"},
            "kinds": {"write_off": ("CHGOFF",)}, "rules": {"loss_out_of_range": "keep"},
        }
    )  # fmt: skip
    until = parse_period("2014Q4", Frequency.QUARTER)
    data = read_workouts(spec, base=Path(), frequency=Frequency.QUARTER, as_of=until, cases=lost)
    w = data.workouts
    assert w.n_cases > 600
    inside = lost["charged_off_principal"].clip(upper=lost["gross_disbursed"])
    assert recovery_curve(w).lgd == pytest.approx(inside.sum() / lost["gross_disbursed"].sum(), rel=1e-12)
    by = inside.groupby(lost["backed"]).sum() / lost.groupby("backed")["gross_disbursed"].sum()
    curves = curves_by(w, ("backed",))
    for label, want in by.items():
        assert curves[str(label)].lgd == pytest.approx(float(want), rel=1e-12)
    part = data.reconciliation[data.reconciliation["table"] == "cases"]
    assert int(part.loc[part["what"] == "in", "count"].iloc[0]) == len(lost)
