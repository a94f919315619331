"""The real loans, their rows written out by a plain loop over the published files, in a general GLM program."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

import stresskit as sk
from stresskit.runs.api import Prepared, StudyFile
from stresskit.spec.terms import HazardSpec
from tests.realdata import prepare
from tests.realdata.test_small_business import demand_inputs

pytestmark = pytest.mark.realdata

BANDS = (1, 4), (5, 8), (9, 12), (13, 16), (17, 20), (21, 28), (29, 999)
LAST = pd.Period("2014Q3", "Q")


@pytest.fixture(scope="module")
def prepared(tmp_path_factory: pytest.TempPathFactory) -> tuple[StudyFile, Prepared]:
    demand_inputs()
    study = sk.load_study(prepare.prepare(tmp_path_factory.mktemp("by_hand") / "study"))
    return study, sk.prepare(study)


def rows_by_hand(folder: Path) -> pd.DataFrame:
    """loan, age, quarter, event and columns of every quarter at risk, by the study's declared choices and nothing of ours."""
    out = []
    for r in pd.read_csv(folder / "small_business_loans.csv", dtype=str).itertuples():
        lost = r.final_status == "CHGOFF"
        if not isinstance(r.disbursed, str) or float(r.term_months) <= 0:
            continue
        if not lost and isinstance(r.charged_off, str):
            continue
        first = pd.Period(r.disbursed, "Q")
        end = (pd.Period(r.disbursed, "M") + int(float(r.term_months))).asfreq("Q")
        if lost:
            end = min(pd.Period(r.charged_off, "Q"), end)
        for k in range((min(end, LAST) - first).n + 1):
            out.append(
                (
                    r.loan,
                    k + 1,
                    first + k,
                    int(lost and first + k == end),
                    r.real_estate_backed,
                    r.new_business,
                )
            )
    rows = pd.DataFrame(out, columns=["loan", "age", "quarter", "event", "estate", "new"])
    macro = pd.read_csv(folder / "us_supervisory_2025" / "2025-Table_1A_Historic_Domestic.csv")
    macro.index = pd.PeriodIndex([t.replace(" ", "") for t in macro["Date"]], freq="Q")
    rate, prices = macro["Unemployment rate"].astype(float), macro["House Price Index (Level)"].astype(float)
    rows["unemployment"] = rows["quarter"].map((rate - rate.shift(4)).shift(4))
    rows["prices"] = rows["quarter"].map(np.log(prices / prices.shift(4)).shift(4))
    rows["real"] = rows["quarter"].map(0.07 - macro["CPI inflation rate"].astype(float).shift(1) / 100)
    return rows


def design(rows: pd.DataFrame) -> pd.DataFrame:
    x = {"intercept": np.ones(len(rows))}
    for low, high in BANDS:
        x[f"age[{low}-{high}]" if high < 999 else "age[29+]"] = rows["age"].between(low, high).astype(float)
    x.pop("age[9-12]")
    x["real_estate_backed[1]"] = (rows["estate"] == "1").astype(float)
    x["new_business[1]"] = (rows["new"] == "1").astype(float)
    x["unemployment_change"], x["house_price_growth"], x["real_rate"] = (
        rows["unemployment"],
        rows["prices"],
        rows["real"],
    )
    return pd.DataFrame(x)  # fmt: skip


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_the_studys_fit_is_that_of_rows_written_out_by_hand(
    prepared: tuple[StudyFile, Prepared], link: str
) -> None:
    """Counts, coefficients, errors by the expected information and likelihood; with the logit a category times a macro feature
    and errors clustered by quarter too."""
    study, data = prepared
    plain = study.study.hazards["default"].model_dump(mode="python", by_alias=True)
    plain["link"] = link
    if link == "logit":
        plain["terms"] = (*plain["terms"], {"interaction": ("real_estate_backed", "unemployment_change")})
    fit = sk.fit_hazard(HazardSpec.model_validate(plain), data.loans.risk_set, data.features)
    rows = rows_by_hand(prepare.inputs_folder())
    assert (fit.nobs, fit.n_events) == (len(rows), rows["event"].sum()) == (57_676, 683)
    assert (fit.n_loans, fit.n_periods) == (rows["loan"].nunique(), rows["quarter"].nunique()) == (2085, 103)
    x = design(rows)
    if link == "logit":
        x["real_estate_backed[1]:unemployment_change"] = x["real_estate_backed[1]"] * x["unemployment_change"]
    assert list(x.columns) == list(fit.design.labels)
    family = sm.families.Binomial(
        sm.families.links.CLogLog() if link == "cloglog" else sm.families.links.Logit()
    )
    model = sm.GLM(rows["event"].astype(float), x, family=family)
    wanted = model.fit(tol=1e-12, maxiter=100)
    assert np.abs((fit.params - wanted.params) / wanted.bse).max() < 1e-7
    np.testing.assert_allclose(fit.standard_errors("model_expected"), wanted.bse, rtol=1e-7)
    assert fit.llf == pytest.approx(wanted.llf, rel=1e-10)
    if link == "logit":
        groups = pd.factorize(rows["quarter"])[0]
        clustered = model.fit(
            tol=1e-12, maxiter=100, cov_type="cluster", cov_kwds={"groups": groups, "use_correction": False}
        )
        np.testing.assert_allclose(
            fit.standard_errors("period"), clustered.bse * np.sqrt(103 / 102), rtol=1e-6
        )
