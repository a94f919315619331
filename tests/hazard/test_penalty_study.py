"""Bounds, pooling and a ridge stated in a study reach the figures, the tables and the cautions."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest

import stresskit as sk
from tests.cli.small_study import write_small_study


@pytest.fixture(scope="module")
def file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The small study with a product of loans that never defaulted and a bound against what the data say."""
    path = write_small_study(tmp_path_factory.mktemp("options"))
    loans = pd.read_csv(path.parent / "loans.csv")
    sound = loans.groupby("id")["state"].transform(lambda s: (s != "D").all())
    chosen = sorted(loans.loc[sound, "id"].unique())[:8]
    loans.loc[loans["id"].isin(chosen), "product"] = "staff"
    loans.to_csv(path.parent / "loans.csv", index=False)
    text = path.read_text(encoding="utf-8")
    for old, new in (
        ("{macro: unemployment_change, expect: positive}", "{macro: unemployment_change, bound: negative}"),
        ("lgd: {by: product, values: {fixed: 0.3, floating: 0.45}}", "lgd: {constant: 0.4}"),
        (
            "    link: cloglog\n    terms:\n      - {age: log}",
            "    link: cloglog\n    when_separated: pool\n    ridge: 0.5\n    terms:\n      - {age: log}",
        ),
    ):
        assert text.count(old) == 1
        text = text.replace(old, new)
    path.write_text(text, encoding="utf-8")
    return path


def test_a_study_with_all_of_them(file: Path, tmp_path: Path) -> None:
    study = sk.load_study(file)
    data = sk.prepare(study)
    fits = sk.fit(study, data)
    result = sk.project(study, data, fits)
    rows = result.coefficients[result.coefficients["cause"] == "default"].set_index("term")
    macro = rows.loc["unemployment_change"]
    assert macro["coef"] == 0.0
    assert macro["at_bound"]
    assert pd.isna(macro["se"])
    assert macro["coef_free"] > 0.1
    assert "product[staff]" not in rows.index
    facts = result.fits["default"]
    assert facts["estimator"] == "ridge"
    assert facts["at_bound"] == ["unemployment_change"]
    said = " ".join(result.cautions)
    assert "coefficient of unemployment_change is held at its bound 0" in said
    assert "joins what its data cannot tell apart: product[staff]" in said
    loans = result.loans[result.loans["scenario"] == "baseline"]
    assert (loans["product"] == "staff").any()
    assert loans["pd_12m"].notna().all()
    sk.write_run(result, fits, tmp_path / "run")
    (report,) = (tmp_path / "run").glob("*.html")
    page = report.read_text(encoding="utf-8")
    assert "held at its bound" in page
    assert "joins what its data cannot tell apart" in page
    again = pd.read_csv(next((tmp_path / "run").rglob("coefficients.csv"))).set_index("term")
    assert again.loc["unemployment_change", "coef_free"] == pytest.approx(macro["coef_free"], rel=1e-12)
