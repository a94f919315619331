"""An invented, finished study for the tests of report and workbook: plausible and consistent numbers.

Cells are product x region; every coarser row is the sum (amounts) or the loan-weighted mean (shares) of
its cells, so that a test can check totals. No engine is involved.
"""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from stresskit.core.period import Frequency, format_period, parse_period
from stresskit.runs.records import PORTFOLIO, WEIGHTED, StudyResult
from stresskit.spec.study import Study

SHOCK = {"baseline": 0.0, "deep_recession": 1.0, "rates_up": 0.45}
WEIGHTS = {"baseline": 0.6, "deep_recession": 0.2, "rates_up": 0.2}
VARIABLES = {
    # variable: unit, long-run level, swing of history, size and sign of the shock's peak
    "unemployment_rate": ("percent", 5.2, 1.4, 4.1),
    "house_price_index": ("index", 148.0, 9.0, -36.0),
    "policy_rate": ("percent", 2.4, 1.1, 1.9),
}
FEATURES = {"unemployment_change": ("unemployment_rate", 4), "house_price_growth": ("house_price_index", 4)}


@dataclass(frozen=True)
class Recipe:
    """What the sample study looks like."""

    products: tuple[str, ...] = ("fixed", "floating")
    regions: tuple[str, ...] = ("coast", "inland", "north")
    scenarios: tuple[str, ...] = ("baseline", "deep_recession", "rates_up")
    weighted: bool = True
    payoff: bool = True
    macro: bool = True
    breakdowns: bool = True
    left_out: bool = True
    frequency: str = "month"
    steps: int = 120
    as_of: str = "2025-12"
    name: str = "harbour-retail"
    balance: float = 84_000.0

    @property
    def clock(self) -> Frequency:
        return Frequency(self.frequency)

    @property
    def start(self) -> int:
        return parse_period(self.as_of, self.clock)

    def label(self, step: int) -> str:
        return format_period(self.start + step, self.clock)


def sample(recipe: Recipe | None = None, **changes: object) -> StudyResult:
    """A StudyResult by ``recipe``; ``changes`` replace fields of the recipe."""
    recipe = Recipe(**{**(recipe or Recipe()).__dict__, **changes})  # type: ignore[arg-type]
    cells = _cells(recipe)
    return StudyResult(
        study=_study(recipe),
        summary=_summary(recipe, cells),
        segments=_segments(recipe, cells),
        loan_rows=_loans(recipe),
        paths=_paths(recipe),
        features=_features(recipe),
        hazard_by_age=_hazards(recipe),
        actual_expected=_actual_expected(recipe),
        coefficients=_coefficients(recipe),
        fits=_fits(recipe),
        reconciliation=_reconciliation(),
        findings=_findings(),
        alignment=_alignment(recipe),
        not_projected=_not_projected(recipe),
        cautions=(
            "8 of 48 quarters of the macro history lie in one downturn: the unemployment coefficient rests on it.",
            "deep_recession leaves the estimation range of unemployment_change for 5 quarters.",
            "14.2% of lifetime PD comes from ages beyond those observed (rule: hold).",
            "Payoff hazards do not read the policy rate; early repayment is the same in every scenario.",
            "A stressed figure is a model estimate. Independent validation, the supervisor's own rules and the "
            "bank's accounting policy decide what it may be used for.",
            "Not for decisions on single borrowers.",
        ),
        record=_record(recipe),
        hazard_by_macro=_responses(recipe),
    )


def _causes(recipe: Recipe) -> tuple[str, ...]:
    return ("default", "payoff") if recipe.payoff else ("default",)


def _study(recipe: Recipe) -> Study:
    text: dict[str, object] = {
        "study": recipe.name,
        "frequency": recipe.frequency,
        "as_of": recipe.as_of,
        "loans": {
            "file": "loans.parquet",
            "layout": "panel",
            "columns": {"loan": "loan_id", "period": "month", "origination": "opened", "maturity": "matures"},
            "outcome": {"column": "status", "default": ["D"], "payoff": ["P"]},
            "segments": ["product", "region"],
        },
        "hazards": {
            cause: {
                "link": "cloglog",
                "terms": [
                    {"age": "spline", "knots": 5},
                    {"loan": "product", "as": "category"},
                    *([{"macro": f, "expect": "positive"} for f in FEATURES] if recipe.macro else []),
                ],
            }
            for cause in _causes(recipe)
        },
        "loss": {"lgd": {"by": "product", "values": {"fixed": 0.35, "floating": 0.42}}},
        "scenarios": [f"scenarios/{s}.yaml" for s in recipe.scenarios],
    }
    if recipe.macro:
        text["macro"] = {
            "file": "macro.csv",
            "variables": {v: {"unit": u[0], "place": "linear"} for v, u in VARIABLES.items()},
            "features": {
                f: {"of": of, "transform": "difference", "over": over, "lag": 1}
                for f, (of, over) in FEATURES.items()
            },
        }
    return Study.model_validate_json(json.dumps(text))


@dataclass(frozen=True)
class Cell:
    """One product and region under one scenario: curves (steps,) and sizes."""

    scenario: str
    product: str
    region: str
    loans: int
    exposure: float
    lgd: float
    survival: np.ndarray
    default: np.ndarray
    payoff: np.ndarray
    matured: np.ndarray
    balance: np.ndarray
    el: np.ndarray
    no_payoff: np.ndarray


def _shape(recipe: Recipe, scenario: str) -> np.ndarray:
    """The stress by step, 0..1: rises over 15 months, fades by 72."""
    months = np.arange(1, recipe.steps + 1) * (12 // recipe.clock.per_year)
    rise_and_fall = np.interp(months, [0, 15, 30, 72], [0.0, 1.0, 0.85, 0.0])
    return SHOCK.get(scenario, 0.3) * rise_and_fall


def _cells(recipe: Recipe) -> list[Cell]:
    out = []
    n = recipe.steps
    per_month = 12 / recipe.clock.per_year
    step = np.arange(1, n + 1)
    seasoning = 0.0018 * per_month * (0.35 + np.exp(-(((step * per_month - 38) / 34) ** 2)))
    for scenario in recipe.scenarios:
        for i, product in enumerate(recipe.products):
            for j, region in enumerate(recipe.regions):
                risk = (0.8 + 0.45 * i % 1.6) * (0.75 + 0.28 * j % 1.4)
                hazard = seasoning * risk * np.exp((0.9 + 0.25 * (i % 2)) * _shape(recipe, scenario))
                prepay = np.full(n, 0.009 * per_month if recipe.payoff else 0.0)
                ending = 1.0 / (n - step + 1.0) ** 1.15
                loans = int(4200 / (1 + 0.6 * i) / (1 + 0.35 * j)) + 11
                lgd = 0.35 + 0.07 * (i % 3)
                out.append(
                    _roll(
                        scenario, product, region, loans, loans * recipe.balance, lgd, hazard, prepay, ending
                    )
                )
    return out


def _roll(scenario, product, region, loans, exposure, lgd, hazard, prepay, ending) -> Cell:  # type: ignore[no-untyped-def]
    n = hazard.shape[0]
    alive, alive_without, matured = 1.0, 1.0, 0.0
    rows = np.zeros((n, 5))
    for k in range(n):
        d, p = alive * hazard[k], alive * prepay[k]
        m = (alive - d - p) * min(1.0, ending[k])
        no_payoff = alive_without * hazard[k]
        alive_without = (alive_without - no_payoff) * (1 - min(1.0, ending[k]))
        matured += m
        alive = alive - d - p - m
        rows[k] = alive, d, p, matured, no_payoff
    before = np.concatenate([[1.0], rows[:-1, 0]])
    balance = exposure * before * np.linspace(1.0, 0.35, n)
    el = balance / np.where(before > 0, before, 1) * rows[:, 1] * lgd * 1.04 ** (-(np.arange(n) + 0.5) / 12)
    return Cell(
        scenario, product, region, loans, exposure, lgd, rows[:, 0], rows[:, 1], rows[:, 2], rows[:, 3], balance, el,
        rows[:, 4],
    )  # fmt: skip


def _groups(recipe: Recipe, cells: Sequence[Cell]) -> list[tuple[str, str, str, list[Cell]]]:
    """scenario, by, segment, cells; the whole book first."""
    out = []
    for scenario in recipe.scenarios:
        mine = [c for c in cells if c.scenario == scenario]
        out.append((scenario, "", PORTFOLIO, mine))
        if not recipe.breakdowns:
            continue
        for product in recipe.products:
            out.append((scenario, "product", product, [c for c in mine if c.product == product]))
        for region in recipe.regions:
            out.append((scenario, "region", region, [c for c in mine if c.region == region]))
        out.extend((scenario, "product+region", f"{c.product} / {c.region}", [c]) for c in mine)
    return out


def _mean(cells: Sequence[Cell], name: str) -> np.ndarray:
    weights = np.array([c.loans for c in cells], dtype=float)
    total: np.ndarray = (
        np.tensordot(weights, np.array([getattr(c, name) for c in cells]), axes=1) / weights.sum()
    )
    return total


def _total(cells: Sequence[Cell], name: str) -> np.ndarray:
    total: np.ndarray = np.sum([getattr(c, name) for c in cells], axis=0)
    return total


def _with_weighted(recipe: Recipe, frame: pd.DataFrame, keys: list[str]) -> pd.DataFrame:
    if not recipe.weighted:
        return frame
    numbers = [c for c in frame.columns if c not in (*keys, "scenario")]
    total = sum(WEIGHTS.get(s, 0.1) for s in recipe.scenarios)
    weight = frame["scenario"].map(lambda s: WEIGHTS.get(s, 0.1) / total)
    weighted = frame[numbers].mul(weight, axis=0).join(frame[keys]).groupby(keys, sort=False)[numbers].sum()
    weighted = weighted.reset_index().assign(scenario=WEIGHTED)
    return pd.concat([frame, weighted[frame.columns]], ignore_index=True)


def _summary(recipe: Recipe, cells: Sequence[Cell]) -> pd.DataFrame:
    year = recipe.clock.per_year
    rows = []
    for scenario, by, segment, group in _groups(recipe, cells):
        default, el = _mean(group, "default"), _total(group, "el")
        rows.append({
            "scenario": scenario, "by": by, "segment": segment,
            "loans": sum(c.loans for c in group), "exposure": sum(c.exposure for c in group),
            "pd_12m": default[:year].sum(), "pd_lifetime": default.sum(),
            "pd_no_payoff": _mean(group, "no_payoff").sum(), "payoff_lifetime": _mean(group, "payoff").sum(),
            "lgd": float(np.average([c.lgd for c in group], weights=[c.el.sum() for c in group])),
            "el_12m": el[:year].sum(), "el_lifetime": el.sum(),
            "from_extrapolated_age": 0.142, "beyond_path": 0.31 if recipe.macro else 0.0,
        })  # fmt: skip
    frame = pd.DataFrame(rows)
    out = _with_weighted(recipe, frame, ["by", "segment"])
    out["loans"] = out["loans"].round().astype("int64")
    return out


def _segments(recipe: Recipe, cells: Sequence[Cell]) -> pd.DataFrame:
    frames = []
    step = np.arange(1, recipe.steps + 1)
    labels = [recipe.label(int(k)) for k in step]
    for scenario, by, segment, group in _groups(recipe, cells):
        default = _mean(group, "default")
        frames.append(pd.DataFrame({
            "scenario": scenario, "by": by, "segment": segment, "step": step, "period": labels,
            "survival": _mean(group, "survival"), "default": default, "payoff": _mean(group, "payoff"),
            "matured": _mean(group, "matured"), "default_cumulative": default.cumsum(),
            "balance": _total(group, "balance"), "default_amount": _total(group, "el") / 0.4,
            "el": _total(group, "el"),
        }))  # fmt: skip
    return _with_weighted(recipe, pd.concat(frames, ignore_index=True), ["by", "segment", "step", "period"])


def _loans(recipe: Recipe) -> pd.DataFrame:
    rng = np.random.default_rng(3)
    n = 40
    frames = []
    for scenario in recipe.scenarios:
        pd12 = rng.uniform(0.002, 0.05, n)
        frames.append(pd.DataFrame({
            "scenario": scenario, "loan": [f"L{k:05d}" for k in range(n)],
            "product": [recipe.products[k % len(recipe.products)] for k in range(n)],
            "region": [recipe.regions[k % len(recipe.regions)] for k in range(n)],
            "balance": 90_000.0, "pd_12m": pd12, "pd_lifetime": 3 * pd12, "pd_no_payoff": 4 * pd12,
            "payoff_lifetime": 0.4, "lgd": 0.4, "el_12m": pd12 * 36_000, "el_lifetime": 3 * pd12 * 36_000,
        }))  # fmt: skip
    return pd.concat(frames, ignore_index=True)


def _paths(recipe: Recipe) -> pd.DataFrame:
    columns = ["scenario", "variable", "unit", "period", "value", "flag"]
    if not recipe.macro:
        return pd.DataFrame(columns=columns)
    last = parse_period(recipe.as_of, Frequency.QUARTER)
    quarters = max(1, recipe.steps * 4 // recipe.clock.per_year)
    rows: list[tuple[object, ...]] = []
    for variable, (unit, level, swing, peak) in VARIABLES.items():
        past = [level + swing * np.sin(k / 5.5) for k in range(-47, 1)]
        rows += [("history", variable, unit, format_period(last - 47 + k, Frequency.QUARTER), v, "observed")
                 for k, v in enumerate(past)]  # fmt: skip
        for scenario in recipe.scenarios:
            for q in range(1, quarters + 1):
                shock = SHOCK.get(scenario, 0.3) * peak * float(np.interp(q, [0, 5, 10, 20], [0, 1, 0.85, 0]))
                value = level + (past[-1] - level) * 0.85**q + shock
                flag = "given" if q <= 13 else "afterwards"
                rows.append(
                    (scenario, variable, unit, format_period(last + q, Frequency.QUARTER), value, flag)
                )
    return pd.DataFrame(rows, columns=columns)


def _features(recipe: Recipe) -> pd.DataFrame:
    columns = ["scenario", "feature", "period", "value", "lowest", "highest", "outside", "flag"]
    if not recipe.macro:
        return pd.DataFrame(columns=columns)
    rows = []
    for feature, (sign, lowest, highest) in {
        "unemployment_change": (1.0, -1.3, 2.1), "house_price_growth": (-0.11, -0.09, 0.12),
    }.items():  # fmt: skip
        for k in range(-23, 1):
            rows.append(
                (
                    "history",
                    feature,
                    recipe.label(k),
                    (lowest + highest) / 2,
                    lowest,
                    highest,
                    0.0,
                    "observed",
                )
            )
        for scenario in recipe.scenarios:
            shape = np.diff(_shape(recipe, scenario), prepend=0.0) * 40 * sign
            for k in range(recipe.steps):
                value = float(shape[k])
                outside = max(lowest - value, value - highest, 0.0)
                flag = "given" if k < 60 else "afterwards"
                rows.append((scenario, feature, recipe.label(k + 1), value, lowest, highest, outside, flag))
    return pd.DataFrame(rows, columns=columns)


def _responses(recipe: Recipe) -> pd.DataFrame | None:
    """Factors exp(b (x - x0)) of both features on the default hazard, with an interval."""
    if not recipe.macro:
        return None
    frames = []
    for feature, slope, lowest, highest in (
        ("unemployment_change", 0.4, -1.3, 2.1),
        ("house_price_growth", -2.0, -0.09, 0.12),
    ):
        value = np.unique(
            np.concatenate([np.linspace(lowest - 0.3, highest + 0.3, 21), [lowest, highest, 0.0]])
        )
        eta = slope * value
        frames.append(pd.DataFrame({
            "cause": "default", "feature": feature, "link": "cloglog", "over": "book", "reference": 0.0, "lowest": lowest,
            "highest": highest, "value": value, "factor": np.exp(eta), "lower": np.exp(eta - 0.3 * abs(eta)),
            "upper": np.exp(eta + 0.3 * abs(eta)), "least": np.exp(0.9 * eta), "most": np.exp(1.1 * eta),
        }))  # fmt: skip
    return pd.concat(frames, ignore_index=True)


def _hazards(recipe: Recipe) -> pd.DataFrame:
    rng = np.random.default_rng(11)
    frames = []
    for cause in _causes(recipe):
        age = np.arange(1, recipe.steps + 1)
        at_risk = np.maximum((24_000 * np.exp(-age / (0.3 * recipe.steps))).astype(int), 3)
        hump = np.exp(-(((age - 0.3 * recipe.steps) / (0.28 * recipe.steps)) ** 2))
        fitted = (0.0018 * (0.35 + hump)) if cause == "default" else 0.004 + 0.006 * (1 - np.exp(-age / 20))
        events = rng.binomial(at_risk, fitted)
        observed = events / at_risk
        half = 1.96 * np.sqrt(observed * (1 - observed) / at_risk)
        frames.append(pd.DataFrame({
            "cause": cause, "age": age, "at_risk": at_risk, "events": events, "observed": observed,
            "lower": np.maximum(observed - half, 0), "upper": observed + half, "fitted": fitted,
        }))  # fmt: skip
    return pd.concat(frames, ignore_index=True)


def _actual_expected(recipe: Recipe) -> pd.DataFrame:
    rng = np.random.default_rng(12)
    frames = []
    for cause in _causes(recipe):
        n = 10 * recipe.clock.per_year
        at_risk = np.linspace(4_000, 14_000, n).astype(int)
        rate = 0.0016 * (1 + 0.6 * np.sin(np.arange(n) / 14)) * (1 if cause == "default" else 6)
        frames.append(pd.DataFrame({
            "cause": cause, "period": [recipe.label(k - n + 1) for k in range(n)], "at_risk": at_risk,
            "events": rng.binomial(at_risk, rate), "expected": at_risk * rate,
        }))  # fmt: skip
    return pd.concat(frames, ignore_index=True)


def _coefficients(recipe: Recipe) -> pd.DataFrame:
    rows = []
    for cause in _causes(recipe):
        terms = [
            ("intercept", -6.71, ""),
            ("age[1]", 0.84, ""),
            ("age[2]", -0.35, ""),
            ("product[floating]", 0.41, ""),
        ]
        if recipe.macro:
            terms += [("unemployment_change", 0.182, "positive"), ("house_price_growth", 0.62, "negative")]
        for k, (term, coef, expect) in enumerate(terms):
            macro = term in FEATURES
            se_model, se_loan = 0.021 + 0.006 * k, 0.022 + 0.006 * k
            se_period = (se_model * 3.4) if macro else se_model * 1.1
            sign_ok = None if not expect else (coef > 0) == (expect == "positive")
            rows.append((cause, term, coef, se_period, "period", coef / se_period, math.erfc(abs(coef / se_period) / math.sqrt(2)),
                         coef - 2.01 * se_period, coef + 2.01 * se_period, se_model, se_loan, se_period,
                         expect or None, sign_ok))  # fmt: skip
    return pd.DataFrame(rows, columns=[
        "cause", "term", "coef", "se", "se_kind", "statistic", "p_value", "lower", "upper", "se_model", "se_loan",
        "se_period", "expect", "sign_ok"])  # fmt: skip


def _fits(recipe: Recipe) -> dict[str, dict[str, object]]:
    facts = {"link": "cloglog", "rows": 812_345, "loans": 19_876, "events": 1_432, "periods": 120, "llf": -9876.54321,
             "converged": True, "iterations": 7, "largest_age": 96, "df": 119}  # fmt: skip
    return {cause: dict(facts) for cause in _causes(recipe)}


def _reconciliation() -> pd.DataFrame:
    return pd.DataFrame(
        [
            ("in", "", 820_410, 20_000, 1_447, 8_211, 6.512e8),
            ("left out", "duplicate row, exact", 41, 0, 0, 0, 0.0),
            ("left out", "row after an event", 6_310, 0, 9, 0, 0.0),
            ("left out", "missing balance", 1_714, 124, 6, 31, 1.1e6),
            ("used", "", 812_345, 19_876, 1_432, 8_180, 6.501e8),
        ],
        columns=["what", "reason", "rows", "loans", "events_default", "events_payoff", "balance"],
    )


def _findings() -> pd.DataFrame:
    return pd.DataFrame(
        [
            (
                "duplicate-exact",
                "leave_out",
                "warning",
                41,
                "L00017, L00212",
                "identical rows: one of each is used",
            ),
            ("row-after-event", "leave_out", "warning", 6310, "L00031", "rows after the first exit"),
            ("amount-missing", "leave_out", "warning", 1714, "L00044, L00091", "no balance in the row"),
            ("segment-rare", "keep", "note", 1, "floating / north", "fewer than 30 defaults in a segment"),
        ],
        columns=["code", "policy", "severity", "count", "first", "message"],
    )


def _alignment(recipe: Recipe) -> pd.DataFrame:
    if not recipe.macro:
        return pd.DataFrame(columns=["model_period", "feature", "macro_period", "value"])
    return pd.DataFrame(
        [
            ("2025-10", "unemployment_change", "2024Q2, 2024Q3, 2025Q2, 2025Q3", "4.1, 4.2, 4.5, 4.62", 0.41),
            ("2025-12", "unemployment_change", "2024Q3, 2025Q3", "4.2, 4.62", 0.42),
        ],
        columns=["model_period", "feature", "macro_period", "macro_value", "value"],
    )


def _not_projected(recipe: Recipe) -> pd.DataFrame:
    rows = [
        ("L00044", "no balance", np.nan),
        ("L00091", "no balance", np.nan),
        ("L00120", "matured by as_of", 0.0),
    ]
    return pd.DataFrame(rows if recipe.left_out else [], columns=["loan", "reason", "balance"])


def _record(recipe: Recipe) -> dict[str, object]:
    return {
        "format": 1,
        "study": recipe.name,
        "as_of": recipe.as_of,
        "study_digest": "5e1f" * 16,
        "study_text": "study: harbour-retail\nfrequency: month\nas_of: 2025-12\n",
        "scenarios": [
            {
                "name": s,
                "file": f"{s}.yaml",
                "digest": "77aa" * 16,
                "text": f"scenario: {s}\nstarts: 2026Q1\n",
            }
            for s in recipe.scenarios
        ],
        "inputs": {"loans.parquet": "9f2c" * 16, "macro.csv": "01ab" * 16},
        "versions": {"python": "3.11.7", "numpy": "2.4.6"},
        "seeds": {},
        "seeds_note": "nothing in this run draws random numbers",
    }
