"""How much of a stressed loss is model choice: the same book and scenarios under other specifications, each refitted."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

from stresskit.analyses.said import log_likelihood
from stresskit.analyses.variants import STUDY, Variant, variants
from stresskit.core.errors import NumericError, StresskitError, UsageError
from stresskit.core.values import FeatureTable, RiskSet, ScenarioPath, no_features
from stresskit.evidence.rows import fit_rows, window
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.loss.result import LossResult
from stresskit.macro.features import build_features
from stresskit.runs.gates import gate_table
from stresskit.runs.records import Analysis, AnalysisTable
from stresskit.runs.setting import Setting
from stresskit.runs.tables import coefficient_table
from stresskit.spec.base import meant
from stresskit.spec.model_choice import ModelChoice
from stresskit.spec.terms import HazardSpec

KEY = "model_choice"
TITLE = "How much is model choice"
AVERAGE = "weighted average"
FIGURES = ("pd_baseline", "pd_stressed", "lgd_stressed", "el_baseline", "el_stressed")


@dataclass(frozen=True, slots=True, eq=False)
class _Bench:
    """What all variants share: scenarios, and the last periods on which they are scored (None: not)."""

    setting: Setting
    reference: ScenarioPath
    stressed: ScenarioPath
    score_from: int | None
    known: Mapping[str, HazardFit]


def model_choice(setting: Setting, spec: ModelChoice, say: Any, progress: Any) -> Analysis:
    """Raises UsageError for a scenario or weight that names nothing, NumericError when the study itself gives no figure."""
    stressed = _stressed(setting, spec)
    r = setting.data.loans.risk_set
    last = int((r.stay_origin + r.stay_exit).max())
    length = setting.file.frequency.per_year if spec.out_of_time is None else spec.out_of_time
    bench = _Bench(setting, setting.reference(), stressed, last - length if length else None, setting.fits)
    every = variants(setting, spec, say)
    _check_weights(spec, every)
    rows = []
    progress(0, len(every))
    for k, variant in enumerate(every, start=1):
        say(variant.change)
        rows.append(_row(bench, variant))
        progress(k, len(every))
    table = _compared(pd.DataFrame(rows))
    own = str(table["result"].iloc[0])
    if own != "projected":
        raise NumericError(f"the study as it stands cannot be projected here: {own}")
    if spec.weights:
        table = _with_average(table, spec.weights)
    return _analysis(bench, table, spec)


def _stressed(setting: Setting, spec: ModelChoice) -> ScenarioPath:
    reference = setting.reference()
    if spec.scenario is not None:
        chosen = setting.path(spec.scenario)
        if chosen.name == reference.name:
            raise UsageError(
                f"{chosen.name!r} is the scenario that differences are taken to; name a stressed one"
            )
        return chosen
    others = [p for p in setting.data.paths if p.name != reference.name]
    if not others:
        raise UsageError("the study has one scenario; a stressed one is needed beside it")
    if len(others) == 1:
        return others[0]
    losses = [float(x.loans["el_lifetime"].sum()) for x in setting.along(others)]
    return others[int(np.argmax(losses))]


def _check_weights(spec: ModelChoice, every: Sequence[Variant]) -> None:
    names = [v.name for v in every]
    for name in spec.weights:
        if name not in names:
            raise UsageError(
                f"analyses.model_choice.weights: no row {name!r}{meant(name, names)} (rows: {', '.join(names)})"
            )


def _row(bench: _Bench, variant: Variant) -> dict[str, Any]:
    out: dict[str, Any] = {"name": variant.name, "kind": variant.kind, "change": variant.change}
    try:
        setting, features = _refitted(bench, variant)
        verdicts = gate_table(variant.study, setting.fits)
        failed = [f"{v.cause}: {v.gate.name}" for v in verdicts if not v.usable]
        base, stressed = setting.along([bench.reference, bench.stressed])
        rows = _rows(bench.setting.data.loans.risk_set, variant)
        out |= {
            "gates_failed": ", ".join(failed),
            "signs_against": _signs(setting.fits),
            **_figures(setting, base, stressed),
            "in_range": "no" if failed or not variant.in_range else "yes",
            "rows": setting.fits["default"].facts.nobs,
            "aic": sum(f.aic for f in setting.fits.values()),
            "log_score": _score(bench, variant, rows, features),
            "result": "projected",
        }
    except StresskitError as error:
        out |= {"in_range": "no", "result": f"not possible: {str(error).splitlines()[0]}"}
    return out


def _rows(risk_set: RiskSet, variant: Variant) -> RiskSet:
    if variant.first is None and variant.last is None:
        return risk_set
    return window(risk_set, first=variant.first, last=variant.last)


def _refitted(bench: _Bench, variant: Variant) -> tuple[Setting, FeatureTable]:
    """The study under the variant, every hazard that it changes fitted again."""
    now = bench.setting
    study, macro = variant.study, variant.study.macro
    start = now.data.features.start
    features = now.data.features
    if macro is not None and now.data.history is not None and macro is not now.file.study.macro:
        features = build_features(
            macro, now.data.history, model=now.file.frequency, start=start, end=now.file.as_of
        )
    elif macro is None:
        features = no_features(now.file.frequency, start, now.file.as_of - start + 1)
    rows = _rows(now.data.loans.risk_set, variant)
    fits: dict[str, HazardFit] = {n: f for n, f in now.fitted.items() if n not in now.fits}
    for cause, spec in study.hazards.items():
        same = rows is now.data.loans.risk_set and _same(spec, cause, variant, now)
        fits[cause] = bench.known[cause] if same else fit_hazard(spec, rows, features, cause=cause)
    changed = replace(now, file=replace(now.file, study=study), data=replace(now.data, features=features))
    return changed.with_fits(fits), features


def _same(spec: HazardSpec, cause: str, variant: Variant, now: Setting) -> bool:
    """Whether a fit at hand is that of the variant: same text, same features."""
    before, after = now.file.study.macro, variant.study.macro
    if spec is not now.file.study.hazards.get(cause):  # type: ignore[call-overload]
        return False
    if before is after or before is None or after is None:
        return True
    return all(before.features[n] == after.features[n] for n in spec.macro_features())


def _figures(setting: Setting, base: LossResult, stressed: LossResult) -> dict[str, float]:
    def mean(r: LossResult) -> float:
        if setting.portfolio.count is not None:
            return float(np.average(r.loans["pd_lifetime"], weights=setting.portfolio.count))
        return float(r.loans["pd_lifetime"].mean())

    def total(r: LossResult, name: str = "el_lifetime") -> float:
        return float(r.loans[name].sum())

    exposed = total(stressed, "exposed_lifetime")
    return {
        "pd_baseline": mean(base),
        "pd_stressed": mean(stressed),
        "lgd_stressed": total(stressed) / exposed if exposed > 0 else float("nan"),
        "el_baseline": total(base),
        "el_stressed": total(stressed),
    }


def _signs(fits: Mapping[str, HazardFit]) -> str:
    table = coefficient_table(fits)
    wrong = table[table["sign_ok"].eq(False)] if "sign_ok" in table else table.iloc[:0]
    return ", ".join(map(str, wrong["cause"] + ": " + wrong["term"]))


def _score(bench: _Bench, variant: Variant, rows: RiskSet, features: FeatureTable) -> float:
    """Mean log-likelihood per loan-period of the default hazard on the last periods, fitted without them."""
    if bench.score_from is None:
        return float("nan")
    spec = variant.study.hazards["default"]
    try:
        fit = fit_hazard(spec, window(rows, last=bench.score_from), features, cause="default")
        seen = window(bench.setting.data.loans.risk_set, first=bench.score_from + 1)
        scored = fit_rows(fit, seen, features, as_predicted=True)
    except StresskitError:
        return float("nan")
    total, weight = 0.0, 0.0
    for b in scored.blocks():
        total += float(b.weight @ log_likelihood(scored, b.eta, b.event))
        weight += float(b.weight.sum())
    return total / weight


def _compared(table: pd.DataFrame) -> pd.DataFrame:
    """Differences to the first row; AIC only where the rows are the same, or it compares nothing."""
    for name in (*FIGURES, "aic", "rows", "log_score", "gates_failed", "signs_against"):
        if name not in table:
            table[name] = np.nan
    own = table.iloc[0]
    table["uplift_change"] = table["el_stressed"] / table["el_baseline"] - 1.0
    table["el_difference"] = table["el_stressed"] - own["el_stressed"]
    table["difference_change"] = table["el_stressed"] / own["el_stressed"] - 1.0
    comparable = (table["rows"] == own["rows"]) & ~table["kind"].isin(["payoff", "estimation window"])
    table["aic_difference"] = np.where(comparable, table["aic"] - own["aic"], np.nan)
    table["log_score_difference"] = table["log_score"] - own["log_score"]
    for name in ("gates_failed", "signs_against"):
        table[name] = table[name].fillna("")
    order = [
        "name", "change", "kind", "pd_baseline", "pd_stressed", "lgd_stressed", "el_baseline", "el_stressed", "uplift_change", "el_difference",
        "difference_change", "in_range", "gates_failed", "signs_against", "aic_difference", "log_score", "log_score_difference", "result",
    ]  # fmt: skip
    return table[order]


def _with_average(table: pd.DataFrame, weights: Mapping[str, float]) -> pd.DataFrame:
    by = table.set_index("name")
    lacking = [n for n in weights if by.loc[n, "result"] != "projected"]
    if lacking:
        raise NumericError(
            f"analyses.model_choice.weights: {lacking[0]} was {by['result'][lacking[0]]}, so there is no mean over it"
        )
    share = pd.Series(dict(weights)) / sum(weights.values())
    row: dict[str, Any] = {c: float(share @ by.loc[share.index, c]) for c in FIGURES}
    own = table.iloc[0]
    row |= {
        "name": "average",
        "change": f"{AVERAGE}: " + ", ".join(f"{n} {_percent(share[n])}" for n in weights),
        "kind": "average",
        "uplift_change": row["el_stressed"] / row["el_baseline"] - 1.0,
        "el_difference": row["el_stressed"] - own["el_stressed"],
        "difference_change": row["el_stressed"] / own["el_stressed"] - 1.0,
        "in_range": "no",
        "gates_failed": "",
        "signs_against": "",
        "result": "averaged",
    }
    return pd.concat([table, pd.DataFrame([row])], ignore_index=True)


# ---- words


def _amount(value: float) -> str:
    return f"{value:,.0f}"


def _percent(value: float) -> str:
    return f"{value:.0%}"


def _signed(value: float) -> str:
    return f"{value:+.0%}"


def _analysis(bench: _Bench, table: pd.DataFrame, spec: ModelChoice) -> Analysis:
    inside = table[table["in_range"] == "yes"]
    own = table.iloc[0]
    narrow = [
        "name",
        "pd_stressed",
        "el_baseline",
        "el_stressed",
        "uplift_change",
        "difference_change",
        "in_range",
    ]
    low, high = inside["el_stressed"].min(), inside["el_stressed"].max()
    cautions = []
    refused = int(table["result"].str.startswith("not possible").sum())
    outside = table[(table["gates_failed"] != "") & (table["name"] != STUDY)]
    if len(inside) > 1 and high > 1.5 * own["el_stressed"]:
        top = inside.sort_values("el_stressed").iloc[-1]
        cautions.append(
            f"Model choice: under {bench.stressed.name} one change that passes every gate ({top['change']}) raises the loss by "
            f"{_percent(top['difference_change'])}."
        )
    return Analysis(
        KEY, TITLE, _answer(bench, table, inside),
        (
            AnalysisTable("choices", "Loss under other specifications", table[narrow]),
            AnalysisTable("details", "Each change in full", table, shown=False),
        ),
        notes=_notes(bench, spec, refused, len(outside)),
        cautions=tuple(cautions),
        facts={
            "scenario": bench.stressed.name, "reference": bench.reference.name, "tried": len(table), "in_range": len(inside),
            "not_possible": refused, "el_stressed": float(own["el_stressed"]), "el_low": float(low), "el_high": float(high),
            "weights": dict(spec.weights),
        },
    )  # fmt: skip


def _answer(bench: _Bench, table: pd.DataFrame, inside: pd.DataFrame) -> str:
    own = table.iloc[0]
    if len(inside) < 2:
        return (
            f"No other specification passed every gate, so no range can be given; the study's loss under {bench.stressed.name} is "
            f"{_amount(own['el_stressed'])}."
        )
    ordered = inside.sort_values("el_stressed", kind="stable")
    low, high = ordered.iloc[0], ordered.iloc[-1]
    text = (
        f"Under {bench.stressed.name} the lifetime loss runs from {_amount(low['el_stressed'])} ({low['change']}) to "
        f"{_amount(high['el_stressed'])} ({high['change']}) across {len(inside)} specifications that pass every gate; the study's is "
        f"{_amount(own['el_stressed'])}, so model choice moves it by {_signed(low['difference_change'])} to "
        f"{_signed(high['difference_change'])}."
    )
    uplift = inside["uplift_change"]
    return (
        f"{text} The increase over {bench.reference.name} runs from {_percent(uplift.min())} to {_percent(uplift.max())}; "
        f"the study's is {_percent(own['uplift_change'])}."
    )


def _notes(bench: _Bench, spec: ModelChoice, refused: int, outside: int) -> tuple[str, ...]:
    notes = [
        "Each row changes one thing in the study as it stands; every hazard it touches is fitted again and the whole book is projected "
        "again. The range counts rows whose fits pass every gate that the study does not accept; it is the spread of these choices, not a "
        "confidence band, and choices that were not listed are not in it.",
        "aic_difference is to the study, smaller is better, and stands only where the rows fitted to are the same. log_score_difference: mean "
        "log-likelihood per loan-period of the default hazard on the last periods after a fit without them, above 0 is better than the study.",
        "Recoveries are those of the study in every row; LGD moves with the ages and periods at which defaults fall.",
    ]
    if outside:
        notes.append(f"{outside} rows failed a gate and stand outside the range.")
    if refused:
        notes.append(f"{refused} rows were not possible; details give the reasons.")
    if spec.weights:
        notes.append(
            "The weighted average is a mean of losses with the weights stated; it is no better founded than the weights."
        )
    return tuple(notes)
