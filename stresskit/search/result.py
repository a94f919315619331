"""What a search found, as tables and sentences."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from stresskit.core.period import format_period
from stresskit.search.candidates import Option
from stresskit.search.judge import RULES, Judged, difference_error
from stresskit.search.measures import StationarityTest
from stresskit.search.sample import Sample
from stresskit.search.trial import Trial


@dataclass(frozen=True, slots=True, eq=False)
class SearchResult:
    """A search with every specification tried, as frames.

    table       number, rank (NA: refused), specification, terms, accepted, reasons, p_value, p_bonferroni, p_holm,
                signs_ok, stationarity, vif, aic, llf, oot_llf, oot_gain (per row), oot_gain_total, oot_gain_se, windows_better,
                coefficients, error: a row per specification, best first
    terms       number, feature, expect, coef, se_period, p_value, vif, effect (of one standard deviation)
    windows     number (0: without searched terms, -1: study as written), cutoff, rows, events, llf, gain, error
    features    feature, of, transform, over, lag, expect, lowest, highest, window_lowest, window_highest, values, adf, adf_p, adf_lags, kpss, kpss_p,
                kpss_lags, verdict, note
    references  specification, coefficients, llf, aic, oot_llf, oot_gain, oot_gain_total, oot_gain_se: hazards not tried
    refused     rule -> specifications that it refused (one may be refused by several)
    counts      specifications tried with 1, 2, ... searched terms
    notes       sentences for the reader
    winner      YAML to paste into the study, "" when no specification satisfies every rule
    record      texts, inputs, versions
    """

    name: str
    cause: str
    table: pd.DataFrame
    terms: pd.DataFrame
    windows: pd.DataFrame
    features: pd.DataFrame
    references: pd.DataFrame
    refused: Mapping[str, int]
    counts: tuple[int, ...]
    notes: tuple[str, ...]
    winner: str
    record: Mapping[str, Any]
    base: Path | None = None

    @property
    def tried(self) -> int:
        return sum(self.counts)

    @property
    def accepted(self) -> int:
        return int(self.table["accepted"].sum())


@dataclass(frozen=True, slots=True)
class Span:
    """Smallest and largest value of a feature over the rows at risk, and in the scored windows."""

    lowest: float
    highest: float
    window_lowest: float
    window_highest: float

    @property
    def share_scored(self) -> float:
        """Part of the whole range that the windows saw; NaN for a feature that never moves, which has none."""
        if self.highest == self.lowest:
            return float("nan")
        return (self.window_highest - self.window_lowest) / (self.highest - self.lowest)


def title_of(chosen: Sequence[Option]) -> str:
    return " + ".join(o.name for o in chosen)


def search_table(
    judged: Sequence[Judged], sample: Sample, tests: Mapping[str, StationarityTest]
) -> pd.DataFrame:
    """A row per specification; columns as in SearchResult.table."""
    rows = sum(w.rows for w in sample.windows)
    out = []
    for j in judged:
        t = j.trial
        signs = [f.sign_ok for f in t.terms if f.sign_ok is not None]
        out.append(
            {
                "number": j.number,
                "rank": j.rank,
                "specification": title_of(t.chosen),
                "terms": len(t.chosen),
                "accepted": j.rank is not None,
                "reasons": "; ".join(f"{r.rule}: {r.text}" for r in j.refusals),
                "p_value": t.p_value,
                "p_bonferroni": j.bonferroni,
                "p_holm": j.holm,
                "signs_ok": all(signs) if signs else None,
                "stationarity": "; ".join(f"{o.name} {tests[o.name].verdict}" for o in t.chosen),
                "vif": t.vif,
                "aic": t.aic,
                "llf": t.llf,
                "oot_llf": float(t.period_llf.sum()) / rows,
                "oot_gain": j.gain,
                "oot_gain_total": j.gain_total,
                "oot_gain_se": j.gain_se,
                "windows_better": j.better,
                "coefficients": "; ".join(f"{f.name} {f.coef:.6g}" for f in t.terms),
                "failed_gates": "; ".join(t.failed_gates),
                "error": t.error or t.score_error,
            }
        )
    frame = pd.DataFrame(out)
    frame["rank"] = frame["rank"].astype("Int64")
    frame["signs_ok"] = frame["signs_ok"].astype("boolean")
    return frame


def term_table(judged: Sequence[Judged]) -> pd.DataFrame:
    names = ["number", "feature", "expect", "coef", "se_period", "p_value", "vif", "effect"]
    rows = [
        (j.number, f.name, f.expect, f.coef, f.se, f.p_value, f.vif, f.effect)
        for j in judged
        for f in j.trial.terms
    ]
    return pd.DataFrame(rows, columns=names)


def window_table(
    judged: Sequence[Judged], references: Sequence[tuple[int, Trial]], sample: Sample
) -> pd.DataFrame:
    """A row per specification and window; ``references`` come first, the one numbered 0 is what gains refer to."""
    base = dict(references)[0].window_llf
    rows = []
    for number, trial in [*references, *((j.number, j.trial) for j in judged)]:
        for k, window in enumerate(sample.windows):
            llf = float(trial.scores[k].llf.sum())
            label = format_period(window.cutoff, sample.frequency)
            error = trial.scores[k].error
            rows.append(
                (number, label, window.rows, window.events, llf, (llf - base[k]) / window.rows, error)
            )
    return pd.DataFrame(rows, columns=["number", "cutoff", "rows", "events", "llf", "gain", "error"])


def feature_table(
    chosen: Sequence[Option], tests: Mapping[str, StationarityTest], spans: Mapping[str, Span]
) -> pd.DataFrame:
    rows = []
    for o in chosen:
        t, f = tests[o.name], o.feature
        rows.append(
            {
                "feature": o.name,
                "of": f.variable,
                "transform": f.transform,
                "over": f.over,
                "lag": f.lag,
                "expect": o.expect or "",
            }
            | asdict(spans[o.name])
            | asdict(t)
        )
    return pd.DataFrame(rows)


def reference_table(references: Sequence[tuple[str, Trial]], base: Trial, sample: Sample) -> pd.DataFrame:
    """Hazards that were fitted for comparison and are not among those tried."""
    rows = sum(w.rows for w in sample.windows)
    out = []
    for name, t in references:
        difference = t.period_llf - base.period_llf
        out.append(
            {
                "specification": name,
                "coefficients": t.n_coefficients,
                "llf": t.llf,
                "aic": t.aic,
                "oot_llf": float(t.period_llf.sum()) / rows,
                "oot_gain": float(difference.sum()) / rows,
                "oot_gain_total": float(difference.sum()),
                "oot_gain_se": difference_error(difference),
                "failed_gates": "; ".join(t.failed_gates),
                "error": t.error or t.score_error,
            }
        )
    return pd.DataFrame(out)


def refusals_by_rule(judged: Sequence[Judged]) -> dict[str, int]:
    return {rule: sum(any(r.rule == rule for r in j.refusals) for j in judged) for rule in RULES}


def winner_yaml(best: Judged | None, *, cause: str, existing: Sequence[str], left_out: Sequence[str]) -> str:
    """The winner's features and terms as lines for the study, "" without a winner.

    existing  features that the study has already; they are not repeated
    """
    if best is None:
        return ""
    lines = ["# under macro.features:"]
    new = [o for o in best.trial.chosen if o.name not in existing]
    for o in new:
        f = o.feature
        span = f", over: {f.over}" if f.over != 1 else ""
        lines.append(f"    {o.name}: {{of: {f.variable}, transform: {f.transform}{span}, lag: {f.lag}}}")
    if not new:
        lines.append("    # nothing to add: the study has these features already")
    gone = f", instead of the terms {', '.join(left_out)}" if left_out else ""
    lines.append(f"# under hazards.{cause}.terms{gone}:")
    for o in best.trial.chosen:
        expect = f", expect: {o.expect}" if o.expect else ""
        lines.append(f"      - {{macro: {o.name}{expect}}}")
    return "\n".join(lines) + "\n"
