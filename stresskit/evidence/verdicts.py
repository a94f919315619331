"""What a table says, in a sentence: what was asked, what was found, and whether someone should look."""

from __future__ import annotations

from collections.abc import Hashable, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import pandas as pd

from stresskit.evidence.lags import SUPPORT
from stresskit.evidence.survival import SIMULTANEOUS, middle

Status = Literal["in order", "note", "look at", "not possible"]

#: A p-value below this asks for a look. About nine questions are asked of a fit, so a sound one is
#: flagged somewhere in one study in twelve.
SIGNIFICANCE = 0.01


@dataclass(frozen=True, slots=True)
class Verdict:
    """cause, asked: the question; found: the answer with its figures; status: what to do with it."""

    cause: str
    asked: str
    found: str
    status: Status


def _status(bad: bool) -> Status:
    return "look at" if bad else "in order"


def p_text(p: float) -> str:
    if np.isnan(p):
        return "not computed"
    return "p < 0.0001" if p < 1e-4 else f"p = {p:.2g}"


def not_possible(cause: str, asked: str, reason: str) -> Verdict:
    return Verdict(cause, asked, reason, "not possible")


MATCH = "Do events match those expected in groups of loans?"
SHOCKS = "Do calendar periods vary more than chance?"
SURVIVAL = "Does fitted survival follow the observed curve?"
MEMORY = "Is what the fit leaves unexplained free of memory?"
OUT_OF_TIME = "Would the fit have been calibrated on periods it had not seen?"
RANKING = "Does it rank borrowers?"
LAG = "Is the lag of {} the one that the data prefer?"
STABLE = "Do the coefficients hold before and after {}?"


def on_groups(cause: str, totals: pd.DataFrame) -> Verdict:
    """Every grouping but calendar periods, at SIGNIFICANCE shared out among them (Bonferroni).

    A group that the fit is certain of has no variance and no test: it is named, and a look is asked for where the
    fit is wrong about it, whatever the tests say.
    """
    verdict = _on_tested_groups(cause, totals[(totals["by"] != "period") & (totals["df"] > 0)])
    found, status = verdict.found, verdict.status
    left = totals[totals["note"] != ""]
    if len(left):
        found += " Of " + "; of ".join(f"{r.by}, {r.note}" for r in left.itertuples()) + "."
    wrong = totals[totals["contradicted"] > 0]
    if len(wrong):
        found = f"Not where the fit is certain: other events than it allows by {_list(wrong['by'])}. {found}"
        status = "look at"
    return Verdict(cause, MATCH, found, status)


def _on_tested_groups(cause: str, t: pd.DataFrame) -> Verdict:
    if t.empty:
        return not_possible(cause, MATCH, "No grouping has anything left to test.")
    clustered = t["p_clustered"].notna() & (t["shock_sd"] > 0.0)
    p = t["p_value"].where(~clustered, t["p_clustered"])
    if p.isna().any():
        unknown = f"Not computed by {_list(t['by'][p.isna()])}: the test has no p-value."
        if p.isna().all():
            return not_possible(cause, MATCH, unknown)
        rest = _on_tested_groups(cause, t[p.notna()])
        status: Status = "note" if rest.status == "in order" else rest.status
        return Verdict(cause, MATCH, f"{rest.found} {unknown}", status)
    limit = SIGNIFICANCE / len(t)
    bad = t[p < limit]
    if bad.empty:
        worst = t["by"].iloc[int(np.argmin(p))]
        found = f"Yes by {_list(t['by'])}; the furthest is {worst} ({p_text(float(p.min()))}, {len(t)} looked at)."
        return Verdict(cause, MATCH, found, "in order")
    parts = [f"{by} ({p_text(float(v))})" for by, v in zip(bad["by"], p[bad.index], strict=True)]
    fine = [f"{b} ({p_text(float(v))})" for b, v in zip(t["by"], p, strict=True) if b not in set(bad["by"])]
    found = f"Not by {_list(parts)}" + (f"; yes by {_list(fine)}" if fine else "")
    found += f"; each held to p >= {limit:.2g}, its share of {100 * SIGNIFICANCE:g} %." if len(t) > 1 else "."
    return Verdict(cause, MATCH, found, "look at")


def on_shocks(cause: str, totals: pd.DataFrame) -> Verdict:
    row = totals[totals["by"] == "period"].to_dict("records")[0]
    if row["df"] == 0:
        return not_possible(cause, SHOCKS, "Too few expected events to tell periods apart.")
    if np.isnan(row["p_value"]):
        return not_possible(cause, SHOCKS, "Not computed: the test of periods has no p-value.")
    figures = f"chi-square {row['chi2']:.1f} on {row['df']}, {p_text(row['p_value'])}"
    if row["p_value"] >= SIGNIFICANCE:
        return Verdict(cause, SHOCKS, f"No ({figures}).", "in order")
    size = (
        "by how much all hazards of a period would move together was not computed, as no such move explains them"
        if np.isnan(row["shock_sd"])
        else f"as if all hazards of a period moved together by {100 * row['shock_sd']:.0f} % (one sd)"
    )
    found = f"Yes ({figures}): {size}. Errors that treat loans as independent are too small; those clustered by period allow for it."
    return Verdict(cause, SHOCKS, found, "note")


def on_survival(cause: str, table: pd.DataFrame) -> Verdict:
    inside = middle(table)
    gone = table[(table["fitted"] <= 0.0) & (table["observed"] > 0.0)]
    if len(gone):
        first = gone.iloc[0]
        found = f"No: by the fit no loan is left from age {first['age']:.0f} on, where {100 * first['observed']:.2f} % are."
        return Verdict(cause, SURVIVAL, found, "look at")
    if inside["z_shock"].notna().sum() == 0:
        return not_possible(cause, SURVIVAL, "Too few events to lay the curves side by side.")
    worst = inside.iloc[int(np.nanargmax(inside["z_shock"].abs()))]
    gap = table.iloc[int(np.argmax(table["gap"].abs()))]
    bad = abs(worst["z_shock"]) > SIMULTANEOUS
    found = (
        f"{'No' if bad else 'Yes'}: largest gap {100 * gap['gap']:+.2f} points at age {gap['age']:.0f} (observed "
        f"{100 * gap['observed']:.2f} %, fitted {100 * gap['fitted']:.2f} %); furthest {worst['z_shock']:+.1f} sd at age "
        f"{worst['age']:.0f}, {SIMULTANEOUS} allowed."
    )
    return Verdict(cause, SURVIVAL, found, _status(bad))


def on_memory(cause: str, memory: pd.DataFrame) -> Verdict:
    last = memory.to_dict("records")[-1]
    if np.isnan(last["p_value"]):
        reason = "the residuals of calendar periods do not vary, or some have no value, so they have no autocorrelation"
        return not_possible(cause, MEMORY, f"Not computed: {reason}; {last['periods']} periods.")
    outside = memory[memory["autocorrelation"].abs() > memory["band"]]
    bad = last["p_value"] < SIGNIFICANCE
    where = list(outside["lag"].astype(str))
    found = (
        f"{'No' if bad else 'Yes'}: Ljung-Box {last['ljung_box']:.1f} on {last['lag']} lags, {p_text(last['p_value'])}, "
        f"{last['periods']} periods{f'; outside the band: {_lags(where).lower()}' if where else ''}."
    )
    first = memory.to_dict("records")[0]
    if bad and first["autocorrelation"] > first["band"]:
        found += " A driver that persists is missing, misaligned or misshapen."
    elif bad:
        found += (
            " Neighbouring periods are not alike, so it is no missing cycle; look for a season or for chance."
        )
    return Verdict(cause, MEMORY, found, _status(bad))


def on_out_of_time(cause: str, table: pd.DataFrame, split: str) -> Verdict:
    rows = {str(r["term"]): r for r in table.to_dict("records")}
    slope, level = rows["slope"], rows["level"]
    unknown = [name for name in ("level", "slope") if np.isnan(rows[name]["p_value"])]
    bad = any(rows[name]["p_value"] < SIGNIFICANCE for name in ("level", "slope"))
    half = 0.5 * (level["upper"] - level["lower"])
    vague = not bad and not unknown and half > np.log(2.0)
    found = (
        f"{'No' if bad else 'Not computed' if unknown else 'Cannot be told' if vague else 'Yes'}: fitted up to {split}, then {slope['events']:,.0f} "
        f"events against {slope['expected']:,.1f} expected (level {level['estimate']:+.2f}, "
        f"{p_text(level['p_value'])}), slope {slope['estimate']:.2f} ({p_text(slope['p_value'])}; 1 is ideal), "
        f"{slope['periods']} periods."
    )
    if vague:
        found += f" The earlier data leave its level open by a factor of {np.exp(half):.1f} either way."
    if unknown:
        found += f" The error of the {_list(unknown)} has no value on these rows, so the test was not made."
    status: Status = "look at" if bad else "not possible" if unknown else "note" if vague else "in order"
    return Verdict(cause, OUT_OF_TIME, found, status)


def on_ranking(cause: str, auc: pd.DataFrame) -> Verdict:
    parts, missing, bad = [], [], False
    for sample, part in auc.groupby("sample", sort=False):
        rows = part[part["lower"].notna()]
        unknown = [f"{h}" for h in part["horizon"][part["lower"].isna()]]
        if unknown:
            missing.append(f"{sample} within {_list(unknown)}")
        if len(rows):
            parts.append(
                f"{sample} " + ", ".join(f"{r.auc:.3f} within {r.horizon}" for r in rows.itertuples())
            )
            bad = bad or bool((rows["lower"] <= 0.5).any())
    if not parts:
        return not_possible(cause, RANKING, "Too few events in too few periods.")
    alone = bool((auc["horizon"][auc["lower"].notna()] == 1).all())
    found = f"AUC {'; '.join(parts)} period{'' if alone else 's'}."
    if missing:
        found += f" Not computed, events in too few periods: {'; '.join(missing)}."
    return Verdict(
        cause, RANKING, found + (" An interval reaches down to 0.5, chance." if bad else ""), _status(bad)
    )


def on_lag(cause: str, profile: pd.DataFrame) -> Verdict:
    """In order within SUPPORT of the best; a look beyond SUPPORT + log(lags tried - 1).

    One given wrong lag gains more than c units on the true one with a chance of at most e^-c where
    coefficients are known, somewhat more where they are fitted (Royall 1997, chapter 1); the best of many
    wrong ones needs the log of their number on top.
    """
    name = str(profile["term"].iloc[0])
    asked = LAG.format(name)
    study, best = profile[profile["study"]].iloc[0], profile[profile["best"]]
    if best.empty or np.isnan(study["llf"]):
        return not_possible(cause, asked, "The refits were refused.")
    top = best.iloc[0]
    if np.isnan(study["behind_scaled"]):
        reason = "Not computed: at the best lag there are events in periods where none is expected, so shocks have no size."
        return not_possible(cause, asked, reason)
    within = study["behind"] <= SUPPORT
    behind, tried = float(study["behind_scaled"]), int(profile["llf"].notna().sum())
    status: Status = "in order" if behind <= SUPPORT else "note"
    if behind > SUPPORT + np.log(max(tried - 1, 1)):
        status = "look at"
    near = profile[profile["behind_scaled"] <= SUPPORT]
    # A coefficient of 0 stands at its bound and has no sign.
    same = (np.sign(near["coef"]) == np.sign(study["coef"])) | (near["coef"] == 0.0) | (study["coef"] == 0.0)
    alike, against = (list(near[keep]["lag"].astype(int).astype(str)) for keep in (same, ~same))
    found = (
        f"Best lag {top['lag']:.0f}, the study's is {study['lag']:.0f}, {study['behind']:.1f} log-likelihood units behind"
        f" ({'within' if within else 'beyond'} {SUPPORT:g})"
    )
    if abs(study["behind"] - study["behind_scaled"]) > 0.05:
        found += f", {study['behind_scaled']:.1f} once the shocks of periods are allowed for"
    if len(near) == 1:
        found += "; no other lag comes near" + (", but there the sign is the opposite." if against else ".")
    else:
        found += f". Lags {_list(alike)} cannot be told apart." if len(alike) > 1 else "."
        if against:
            found += (
                f" {_lags(against)} {'does' if len(against) == 1 else 'do'} as well with the opposite sign."
            )
    if study["coef"] == 0.0:
        found += " At the study's lag the coefficient is held at its bound, 0."
    return Verdict(cause, asked, found, status)


def on_stability(cause: str, table: pd.DataFrame, split: str) -> Verdict:
    """Macro coefficients together, each coefficient at SIGNIFICANCE shared out; age and intercept aside.

    What could not be tested is named with the reason, and no verdict is "in order" that leaves it out.
    """
    asked = STABLE.format(split)
    aside = table["term"].str.startswith("age[") & ~table["macro"] | (table["term"] == "intercept")
    t = table[~table["held"] & ~aside]
    if t.empty:
        return not_possible(cause, asked, "No loan or macro coefficient can be estimated on both sides.")
    joint = float(t["joint_p"].iloc[0])
    moved = t[t["p_value"] < SIGNIFICANCE / len(t)]
    bad = joint < SIGNIFICANCE or len(moved) > 0
    parts = [f"{r.term} {r.before:.3g} to {r.after:.3g} (z {r.z:+.1f})" for r in moved.itertuples()]
    untested = list(t["term"][t["p_value"].isna()])
    if len(untested) == len(t) and not bad:
        return not_possible(cause, asked, f"Not computed: {_list(untested)} has no error on a side.")
    if not parts and len(untested) < len(t):
        r = t.to_dict("records")[int(np.nanargmax(t["z"].abs()))]
        parts = [f"furthest {r['term']}, {r['before']:.3g} to {r['after']:.3g} (z {r['z']:+.1f})"]
    row = t.to_dict("records")[0]
    n_macro = int(t["macro"].sum())
    together = f"; macro terms together {p_text(joint)}"
    if np.isnan(joint):
        together = f"{together} ({_why_no_joint(row, n_macro)})" if n_macro else ""
    if untested:
        together += f"; {_list(untested)} not computed (no error on a side)"
    missing = bool(untested) or (np.isnan(joint) and n_macro > 0)
    yes = "Yes, each by itself" if missing else "Yes"
    found = (
        f"{'No' if bad else yes}: {_list(parts)}{together}; {row['events_before']:,.0f} and {row['events_after']:,.0f} "
        f"events, {row['periods_before']} and {row['periods_after']} periods."
    )
    return Verdict(cause, asked, found, "note" if missing and not bad else _status(bad))


def _why_no_joint(row: dict[Hashable, Any], n_macro: int) -> str:
    fewest = min(row["periods_before"], row["periods_after"])
    if fewest <= n_macro:
        return f"{n_macro} of them, {fewest} periods on a side"
    return "their covariance on a side has no inverse"


def _lags(lags: Sequence[str]) -> str:
    return f"{'Lag' if len(lags) == 1 else 'Lags'} {_list(lags)}"


def _list(words: Sequence[str] | pd.Series[str]) -> str:
    items = list(words)
    return items[0] if len(items) == 1 else f"{', '.join(items[:-1])} and {items[-1]}" if items else "none"
