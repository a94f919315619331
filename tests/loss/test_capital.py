"""Risk weights against the published table, and each formula against itself written out in full precision."""

from __future__ import annotations

from pathlib import Path

import mpmath
import numpy as np
import pandas as pd
import pytest

from stresskit.loss import capital as c
from stresskit.loss.provision_inputs import capital_loans
from stresskit.spec.provisions import Capital
from tests.loss.books import book

TABLE = pd.read_csv(Path(__file__).parents[1] / "data" / "irb" / "irb_risk_weights.csv")
KIND = {"corp": c.CORPORATE, "mort": c.RESIDENTIAL, "qrre": c.REVOLVING, "other": c.OTHER_RETAIL}


def test_published_risk_weights_to_the_last_digit() -> None:
    kind = TABLE["asset_class"].map(KIND).to_numpy()
    ours = 100 * c.risk_weight(
        TABLE["pd_pct"].to_numpy() / 100,
        TABLE["lgd"].to_numpy(),
        kind,
        turnover=TABLE["turnover_meur"].to_numpy(),
    )
    assert len(TABLE) == 216
    assert set(TABLE["asset_class"]) == set(KIND)
    # 0.01 percentage point: half a unit of the last printed digit and a little for what the printer rounded
    assert np.abs(ours - TABLE["published_rw_pct"].to_numpy()).max() <= 0.01


def slow(pd_: float, lgd: float, kind: int, maturity: float = 2.5, turnover: float | None = None) -> float:
    """K by the text of CRE31, at 40 digits."""
    with mpmath.workdps(40):
        p, s = mpmath.mpf(pd_), mpmath.mpf(lgd)

        def share(k: int) -> mpmath.mpf:
            return (1 - mpmath.e ** (-k * p)) / (1 - mpmath.e ** (-k))

        corporate = mpmath.mpf("0.12") * share(50) + mpmath.mpf("0.24") * (1 - share(50))
        if kind == c.CORPORATE and turnover is not None:
            corporate -= mpmath.mpf("0.04") * (1 - (min(max(mpmath.mpf(turnover), 5), 50) - 5) / 45)
        r = {
            c.RESIDENTIAL: mpmath.mpf("0.15"), c.REVOLVING: mpmath.mpf("0.04"), c.TRANSACTOR: mpmath.mpf("0.04"),
            c.OTHER_RETAIL: mpmath.mpf("0.03") * share(35) + mpmath.mpf("0.16") * (1 - share(35)),
            c.CORPORATE: corporate, c.FINANCIAL: mpmath.mpf("1.25") * corporate,
            c.HIGH_VOLATILITY: mpmath.mpf("0.12") * share(50) + mpmath.mpf("0.30") * (1 - share(50)),
        }[kind]  # fmt: skip

        def quantile(q: mpmath.mpf) -> mpmath.mpf:
            return mpmath.sqrt(2) * mpmath.erfinv(2 * q - 1)

        stressed = mpmath.ncdf(
            quantile(p) / mpmath.sqrt(1 - r) + mpmath.sqrt(r / (1 - r)) * quantile(mpmath.mpf("0.999"))
        )
        k = s * stressed - p * s
        if kind in (c.CORPORATE, c.FINANCIAL, c.HIGH_VOLATILITY):
            b = (mpmath.mpf("0.11852") - mpmath.mpf("0.05478") * mpmath.log(p)) ** 2
            k *= (1 + (mpmath.mpf(maturity) - mpmath.mpf("2.5")) * b) / (1 - mpmath.mpf("1.5") * b)
        return float(k)


@pytest.mark.parametrize("kind", range(len(c.CLASSES)), ids=c.CLASSES)
def test_every_class_in_full_precision(kind: int) -> None:
    for pd_ in (0.0003, 0.0021, 0.037, 0.4):
        for maturity in (1.0, 2.5, 4.2):
            ours = c.capital_requirement(
                np.array([pd_]), np.array([0.43]), np.array([kind]), maturity=maturity
            )
            assert ours[0] == pytest.approx(slow(pd_, 0.43, kind, maturity), rel=1e-12)


@pytest.mark.parametrize(
    ("turnover", "as_if"), [(2.0, 5.0), (5.0, 5.0), (20.0, 20.0), (50.0, None), (900.0, None)]
)
def test_firm_size_lowers_the_weight_between_5_and_50_millions(turnover: float, as_if: float | None) -> None:
    loans = book(1, product=["firm"], sales=[turnover])
    spec = Capital.model_validate(
        {"class": "product", "values": {"firm": "corporate"}, "stressed_weight": 0.5, "turnover": "sales"}
    )
    inputs = capital_loans(spec, loans)
    ours = c.capital_requirement(np.array([0.01]), np.array([0.45]), inputs.kind, turnover=inputs.turnover)
    assert ours[0] == pytest.approx(slow(0.01, 0.45, c.CORPORATE, turnover=as_if), rel=1e-12)


def test_certain_default_and_no_default_need_no_capital() -> None:
    ours = c.capital_requirement(
        np.array([0.0, 1.0]), np.array([0.4, 0.4]), np.array([c.CORPORATE, c.RESIDENTIAL])
    )
    assert ours.tolist() == [0.0, 0.0]


def test_defaulted_exposures_need_what_the_best_estimate_leaves_open() -> None:
    ours = c.defaulted_requirement(np.array([0.5, 0.3]), np.array([0.42, 0.35]))
    np.testing.assert_allclose(ours, [0.08, 0.0], rtol=1e-15)


def test_floors_as_in_force() -> None:
    """CRE32.4 and CRE32.58: PD 0.05 %, revolvers 0.1 %; LGD floors of CRE32.17 and CRE32.58 by class and security."""
    values = {
        "home": "residential_mortgage", "card": "qualifying_revolving", "charge": "qualifying_transactor",
        "car": "other_retail", "personal": "other_retail", "firm": "corporate", "depot": "corporate",
        "stock": "corporate", "cash": "corporate",
    }  # fmt: skip
    secured = {"car": "other_physical", "depot": "real_estate", "stock": "receivables", "cash": "financial"}
    spec = Capital.model_validate(
        {
            "class": "product",
            "values": values,
            "secured": secured,
            "stressed_weight": 1.0,
            "downturn_lgd": {"home": 0.12},
        }
    )
    found = capital_loans(spec, book(len(values), product=list(values)))
    want = [0.12, 0.50, 0.50, 0.15, 0.30, 0.25, 0.10, 0.10, 0.0]
    assert found.lgd_floor.tolist() == want
    assert found.pd_floor.tolist() == [0.0005, 0.001, 0.0005, 0.0005, 0.0005, 0.0005, 0.0005, 0.0005, 0.0005]
    off = capital_loans(
        spec.model_copy(update={"input_floors": False}), book(len(values), product=list(values))
    )
    assert off.lgd_floor.tolist() == [0.12] + [0.0] * 8
    assert not off.pd_floor.any()
