"""A study with workouts from text to run folder: LGD of the losses, saved regressions, refusals."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from stresskit.core.errors import DataError, NumericError, StresskitError, TextError, UsageError
from stresskit.core.period import parse_period
from stresskit.report.html import render_report
from stresskit.report.workbook import sheets
from stresskit.runs.api import fit, load_study, prepare, project
from stresskit.runs.folder import read_models
from tests import program
from tests.cli.small_study import STUDY, write_small_study

RECOVERY = """\
recovery:
  cases: workouts.csv
  columns: {case: id, default: since, amount: owed, closed: closed, kind: how}
  kinds: {write_off: [W], full: [R]}
  flows: {file: flows.csv, columns: {case: id, date: month, recovery: got, cost: cost}}
  end: 18
  discount: none
  by: [product]
  resamples: 40
  hazard:
    terms:
      - {age: linear}
      - {macro: unemployment_change, expect: negative}
"""


def write_workouts(folder: Path, n: int = 400) -> None:
    """Cases of 2017 to 2020 that recover more slowly while unemployment rises; quick ones close."""
    rng = np.random.default_rng(99)
    cases, flows = [], []
    months = pd.period_range("2017-01", "2020-12", freq="M")
    quarter = np.arange(60) // 3
    slump = np.where((quarter >= 6) & (quarter < 11), 1.0, 0.0)
    for i in range(n):
        start, amount = int(rng.integers(0, 46)), float(rng.uniform(1e3, 1e4))
        product = str(rng.choice(["fixed", "floating"]))
        left, how, closed = amount, "", ""
        for u in range(1, 19):
            if start + u >= 48:
                break
            if rng.random() < 0.3 - 0.15 * slump[start + u]:
                paid = round(left * rng.uniform(0.1, 0.6), 2)
                flows.append((f"D{i:04d}", str(months[start + u]), paid, round(0.03 * paid, 2)))
                left -= paid
            if left < 0.1 * amount or u == 18:
                how, closed = ("R" if u < 18 else "W"), str(months[start + u])
                break
        cases.append((f"D{i:04d}", str(months[start]), amount, closed, how, product))
    pd.DataFrame(cases, columns=["id", "since", "owed", "closed", "how", "product"]).to_csv(
        folder / "workouts.csv", index=False
    )
    pd.DataFrame(flows, columns=["id", "month", "got", "cost"]).to_csv(folder / "flows.csv", index=False)


def text(lgd: str) -> str:
    whole = STUDY.replace("  lgd: {by: product, values: {fixed: 0.3, floating: 0.45}}\n", f"  lgd: {lgd}\n")
    return whole.replace("loss:\n", RECOVERY + "loss:\n")


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    place = tmp_path_factory.mktemp("workouts")
    write_small_study(place)
    write_workouts(place)
    (place / "hazard.yaml").write_text(text("{recovery: hazard, floor: 0.02}"))
    (place / "curve.yaml").write_text(text("{recovery: curve, costs: false}"))
    return place


@pytest.mark.slow
def test_lgd_of_the_losses_is_the_recovery_along_the_path(folder: Path) -> None:
    """Per loan: sum of q_d * EAD * D * LGD(h) with LGD(h) by a plain loop over workout months, to 1e-10."""
    file = load_study(folder / "hazard.yaml")
    data = prepare(file)
    fits = fit(file, data)
    assert list(fits) == ["default", "payoff", "recovered"]
    assert fits["recovered"].params["unemployment_change"] < 0
    result = project(file, data, fits)
    assert result.recovery is not None
    p, as_of = fits["recovered"].params, parse_period("2020-12", file.frequency)
    # the slump is in the features: LGD of the slump lies above the baseline's
    book = result.summary[result.summary["by"] == ""].set_index("scenario")["lgd"]
    assert book["slump"] > book["baseline"]
    frame = result.features[
        (result.features["scenario"] == "slump") & (result.features["feature"] == "unemployment_change")
    ]
    macro = frame["value"].to_numpy()
    horizon = data.horizon
    assert macro.size == horizon + 18  # the path reaches the end of the last workout
    lgd = np.ones(horizon)
    for h in range(1, horizon + 1):
        for u in range(1, 19):
            eta = p["intercept"] + p["age[linear]"] * u + p["unemployment_change"] * macro[h + u - 1]
            lgd[h - 1] *= np.exp(-np.exp(eta))
    cost = {c: float(result.recovery.curves[c].cost[-1]) for c in ("fixed", "floating")}
    from_segments = result.segments[
        (result.segments["scenario"] == "slump") & (result.segments["by"] == "product")
    ]
    for product in ("fixed", "floating"):
        rows = from_segments[from_segments["segment"] == product]
        amount, el = rows["default_amount"].to_numpy(), rows["el"].to_numpy()
        used = amount > 0
        # undiscounted in month 1 up to the half period: the ratio is LGD(h) times the discount factors of the cell
        factor = el[used] / amount[used] / np.clip(lgd[used] + cost[product], 0.02, 1.0)
        assert (factor < 1.0).all()
        assert (np.diff(factor[:12]) < 0).all()
        assert factor[0] > 0.99
    assert as_of == file.as_of


@pytest.mark.slow
def test_without_discount_the_cell_figures_give_the_lgd_exactly(folder: Path) -> None:
    (folder / "flat.yaml").write_text(
        text("{recovery: hazard, costs: false}").replace("discount: rate", "discount: none")
    )
    file = load_study(folder / "flat.yaml")
    data = prepare(file)
    fits = fit(file, data)
    result = project(file, data, fits)
    p = fits["recovered"].params
    for scenario in ("baseline", "slump"):
        frame = result.features[
            (result.features["scenario"] == scenario) & (result.features["feature"] == "unemployment_change")
        ]
        macro = frame["value"].to_numpy()
        rows = result.segments[(result.segments["scenario"] == scenario) & (result.segments["by"] == "")]
        for h in (1, 2, 7, 20, data.horizon):
            left = 1.0
            for u in range(1, 19):
                left *= np.exp(
                    -np.exp(
                        p["intercept"] + p["age[linear]"] * u + p["unemployment_change"] * macro[h + u - 1]
                    )
                )
            row = rows.iloc[h - 1]
            if row["default_amount"] > 0:
                assert row["el"] / row["default_amount"] == pytest.approx(left, rel=1e-10)


@pytest.mark.slow
def test_a_curve_gives_every_loan_its_segments_lgd(folder: Path) -> None:
    file = load_study(folder / "curve.yaml")
    data = prepare(file)
    fits = fit(file, data)
    result = project(file, data, fits)
    assert result.recovery is not None
    for product, rows in result.loans.groupby("product"):
        np.testing.assert_allclose(rows["lgd"], result.recovery.curves[str(product)].lgd, rtol=1e-12)
    words = render_report(result)
    assert "What the treatment of open workouts changes" in words
    assert "LGD: by recovery time, the amount-weighted product limit of workouts" in words
    assert "all cases, open ones censored" in words
    names = [s.name for s in sheets(result)]
    assert {
        "LGD by segment",
        "recovery curves",
        "treatment of open cases",
        "recovery triangle",
        "open cases",
    } <= set(names)
    assert any("workouts are open" in c for c in result.cautions)


@pytest.mark.slow
def test_commands_and_saved_regressions(folder: Path) -> None:
    def run(*words: str) -> str:
        done = program.stresskit(*words, cwd=folder)
        assert done.returncode == 0, done.stderr
        return done.stdout

    told = json.loads(run("lgd", "hazard.yaml", "--out", "lgd1", "--json"))
    assert told["treatments"][0]["treatment"] == "all cases, open ones censored"
    assert (folder / "lgd1" / "models" / "recovered.json").is_file()
    run("fit", "hazard.yaml", "--out", "models")
    run("project", "hazard.yaml", "--models", "models", "--out", "run1", "--no-evidence")
    run("run", "hazard.yaml", "--out", "run2", "--no-evidence")
    for name in ("summary.csv", "recovery/curves.csv", "recovery/open_cases.csv", "loans.parquet"):
        assert (folder / "run1" / name).read_bytes() == (folder / "run2" / name).read_bytes(), name
    manifest = json.loads((folder / "run1" / "manifest.json").read_text())
    assert {"workouts.csv", "flows.csv"} <= set(manifest["inputs"])
    assert set(read_models(folder / "run1")) == {"default", "payoff", "recovered"}


@pytest.mark.parametrize(
    ("change", "error", "says"),
    [
        (("recovery: hazard", "recovery: hazrd"), TextError, "curve"),
        (("by: [product]", "by: [place]"), DataError, "place"),
        (("  hazard:\n    terms:\n      - {age: linear}\n      - {macro: unemployment_change, expect: negative}\n", ""), TextError, "lgd from the recovery hazard needs recovery.hazard"),
        (("{macro: unemployment_change, expect: negative}\nloss", "{macro: unemployment_chnge}\nloss"), TextError, "no macro feature 'unemployment_chnge'; did you mean 'unemployment_change'"),
        (("end: 18", "end: 0"), TextError, "end"),
        (("{write_off: [W], full: [R]}", "{write_off: [W]}"), DataError, "kind_unknown"),
    ],
)  # fmt: skip
def test_refusals_say_where(
    folder: Path, tmp_path: Path, change: tuple[str, str], error: type[StresskitError], says: str
) -> None:
    for name in ("loans.csv", "macro.csv", "baseline.yaml", "slump.yaml", "workouts.csv", "flows.csv"):
        (tmp_path / name).write_bytes((folder / name).read_bytes())
    whole = text("{recovery: hazard}")
    assert change[0] in whole
    (tmp_path / "study.yaml").write_text(whole.replace(*change))
    with pytest.raises(error, match=says):
        prepare(load_study(tmp_path / "study.yaml"))


@pytest.mark.slow
def test_loans_without_workouts_of_their_kind_and_models_that_lack_a_regression(
    folder: Path, tmp_path: Path
) -> None:
    file = load_study(folder / "hazard.yaml")
    data = prepare(file)
    fits = dict(fit(file, data))
    with pytest.raises(UsageError, match="no fitted model for hazard 'recovered'"):
        project(file, data, {k: v for k, v in fits.items() if k != "recovered"})
    some = pd.read_csv(folder / "workouts.csv")
    only = prepare(load_study(folder / "curve.yaml"), workouts=some[some["product"] == "fixed"])
    with pytest.raises(DataError, match=r"lgd_missing|no workout tells the LGD of some loans"):
        project(load_study(folder / "curve.yaml"), only, fits)
    with pytest.raises(NumericError, match="cases are observed in the first workout period"):
        few = prepare(load_study(folder / "curve.yaml"), workouts=some.head(6))
        project(load_study(folder / "curve.yaml"), few, fits)
