"""A search in sentences: what a reader must know before believing the ranking."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from stresskit.core.period import format_period
from stresskit.search.judge import Judged, difference_error, stationarity_text
from stresskit.search.measures import StationarityTest
from stresskit.search.result import Span, title_of
from stresskit.search.sample import Sample
from stresskit.spec.search import SearchSpec

#: Fewer periods than this and clustered errors are said to be small.
_FEW = 40


def notes(
    search: SearchSpec,
    judged: Sequence[Judged],
    sample: Sample,
    counts: Sequence[int],
    left_out: Sequence[str],
    tests: Mapping[str, StationarityTest],
    spans: Mapping[str, Span],
) -> tuple[str, ...]:
    """The sentences, most important first; ``judged`` in order of rank, ``tests`` and ``spans`` by feature."""
    out = [_tried(judged, counts), _criterion(search), _sample(sample)]
    if left_out:
        out.append(
            f"Left out of every specification: {', '.join(left_out)} (the study's macro terms that are searched, and "
            "interactions with them)."
        )
    out.append(_windows(search, sample))
    accepted = [j for j in judged if j.rank is not None]
    if accepted:
        out += _winner(accepted[0], len(judged))
        out += _gates(accepted)
        out.append(_seen(accepted[0], spans))
        out.append(_persistence(accepted[0], tests))
        out += _rivals(accepted, search)
    else:
        out.append("No specification satisfies every rule; the table shows by which rule each was refused.")
    unsigned = sum(o.expect is None for j in judged for o in j.trial.chosen if len(j.trial.chosen) == 1)
    if unsigned:
        out.append(
            f"{unsigned} feature{'s' if unsigned > 1 else ''} without an expected sign: the sign rule says nothing of "
            f"{'them' if unsigned > 1 else 'it'}."
        )
    periods = int((sample.rows.by_period()[0] > 0).sum())
    if periods < _FEW and any(np.isfinite(j.trial.p_value) for j in judged):
        out.append(
            f"Clustered p-values rest on {periods} periods only; with so few they tend to be too small "
            "(Cameron, Gelbach and Miller 2008)."
        )
    return tuple(out)


def _plural(n: int, one: str, many: str) -> str:
    return f"{n:,} {one if n == 1 else many}"


def _tried(judged: Sequence[Judged], counts: Sequence[int]) -> str:
    split = ", ".join(f"{n:,} of {_plural(k, 'term', 'terms')}" for k, n in enumerate(counts, 1))
    accepted = sum(j.rank is not None for j in judged)
    failed = sum(bool(j.trial.error) for j in judged)
    return (
        f"{_plural(len(judged), 'specification was', 'specifications were')} tried ({split}): {accepted:,} satisfy every "
        f"rule, {len(judged) - accepted:,} do not ({failed:,} of them could not be fitted). The number tried is part of "
        "the evidence: searches made before this one count as well, and are not known here."
    )


def _criterion(search: SearchSpec) -> str:
    if search.rank_by == "aic":
        return "Ranked by AIC on the common rows, smallest first; the out-of-time gain stands beside it."
    return (
        "Ranked by out-of-time gain: mean log-likelihood per row in windows that the refits did not see, less that of "
        "the same hazard without the searched terms; AIC stands beside it."
    )


def _sample(sample: Sample) -> str:
    first, last = (format_period(p, sample.frequency) for p in (sample.first, sample.last))
    text = (
        f"All specifications are fitted to the same {sample.rows.total_weight:,.0f} rows with "
        f"{sample.rows.event_weight:,.0f} events, {first} to {last}"
    )
    gone = sample.rows_before - sample.rows.total_weight
    if gone <= 0:
        return text + "."
    more = f" and {len(sample.binding) - 3} more" if len(sample.binding) > 3 else ""
    return (
        f"{text}; {gone:,.0f} earlier rows with {sample.events_before - sample.rows.event_weight:,.0f} events are not used, "
        f"because {', '.join(sample.binding[:3])}{more} cannot be computed before."
    )


def _windows(search: SearchSpec, sample: Sample) -> str:
    cuts = ", ".join(format_period(w.cutoff, sample.frequency) for w in sample.windows)
    rows, events = sum(w.rows for w in sample.windows), sum(w.events for w in sample.windows)
    return (
        f"Scored on {_plural(len(sample.windows), 'window', 'windows')} of {search.out_of_time.window} "
        f"{sample.frequency.value}s after {cuts}: {rows:,.0f} rows with {events:,.0f} events. The macro values of a "
        "window are those that came, so the scores judge the response to a known path, as a scenario gives it, and no "
        "forecast of the path."
    )


def _winner(best: Judged, tried: int) -> list[str]:
    t = best.trial
    if np.isnan(t.p_value):
        chance = (
            f"Its searched terms have no p-value, because {t.df + 1:.0f} periods are too few: whether it is more than the "
            f"best of {tried:,} tried by chance is not known."
        )
    else:
        chance = (
            f"Largest p-value of its searched terms, clustered by {t.df + 1:.0f} periods: {t.p_value:.2g}, "
            f"{best.holm:.2g} after Holm's adjustment for {tried:,} tried."
        )
    out = [f"First: {title_of(t.chosen)}. {chance}"]
    if np.isfinite(best.holm) and best.holm > 0.05:
        out.append(
            "After the adjustment the first specification is not significant at 5%: among so many tried, one as good "
            "as this may come about by chance. Prior reasons for its terms must carry the weight."
        )
    size = f"{best.gain_total:.3g} log-likelihood units over the windows"
    if np.isnan(best.gain_se):
        size += ", whose error one scored period does not tell"
        weak = ""
    else:
        size += f", standard error {best.gain_se:.2g}"
        weak = "" if best.gain_total > 2 * best.gain_se else ", not clearly above 0"
    out.append(
        f"Its out-of-time gain is {size}{weak}; better in {best.better} of {len(t.scores)} "
        "windows. It was chosen from many, so it flatters."
    )
    return out


def _gates(accepted: Sequence[Judged]) -> list[str]:
    """Rules of a search are not the gates of a fit: a specification may come first and still not be projected."""
    failed = accepted[0].trial.failed_gates
    if not failed:
        return []
    sound = next((j for j in accepted if not j.trial.failed_gates), None)
    instead = (
        f"The best that passes every gate is {title_of(sound.trial.chosen)} (rank {sound.rank})."
        if sound
        else "None of those that satisfy every rule passes every gate."
    )
    which = f"gate{'s' if len(failed) > 1 else ''} {', '.join(failed)}"
    return [
        f"The first does not pass the {which}: fitted in the study it can be looked at, and is not projected without a reason "
        f"there. {instead}"
    ]


def _seen(best: Judged, spans: Mapping[str, Span]) -> str:
    """How much of each feature's range the windows saw: calm windows say little about stress."""
    said = []
    for o in best.trial.chosen:
        s = spans[o.name]
        if s.highest == s.lowest:
            # A hazard without intercept can be fitted with such a feature: it stands in for the intercept.
            said.append(f"{o.name} at {s.lowest:.3g}, as all rows do: it does not move")
            continue
        said.append(
            f"{o.name} from {s.window_lowest:.3g} to {s.window_highest:.3g}, which is {s.share_scored:.0%} of its range "
            f"over all rows ({s.lowest:.3g} to {s.highest:.3g})"
        )
    return f"The windows saw {'; '.join(said)}. What they did not see they did not judge."


def _persistence(best: Judged, tests: Mapping[str, StationarityTest]) -> str:
    said = ", ".join(f"{o.name} {stationarity_text(tests[o.name])}" for o in best.trial.chosen)
    shaky = any(tests[o.name].verdict != "stationary" for o in best.trial.chosen)
    doubt = "; a feature that wanders can follow defaults by accident" if shaky else ""
    return f"Histories of its features: {said}{doubt}."


def _rivals(accepted: Sequence[Judged], search: SearchSpec) -> list[str]:
    """How far the first is ahead of the others, out of time and by the criterion that did not rank."""
    first, others = accepted[0], accepted[1:]
    if not others:
        return []
    ahead = [first.trial.period_llf - j.trial.period_llf for j in others]
    near = sum(abs(float(d.sum())) <= 2 * difference_error(d) for d in ahead)
    # By AIC the first may predict worse than others, and the windows tell that as well.
    better = sum(float(d.sum()) < -2 * difference_error(d) for d in ahead)
    total, error = float(ahead[0].sum()), difference_error(ahead[0])
    told = (
        f"standard error of the difference {error:.2g}"
        if np.isfinite(error)
        else "one scored period tells no error of that"
    )
    out = [
        f"Second: {title_of(others[0].trial.chosen)}, {abs(total):.3g} log-likelihood units "
        f"{'ahead' if total < 0 else 'behind'} out of time ({told})."
    ]
    count = _plural(len(others), "other that satisfies", "others that satisfy")
    if near:
        where = "from" if any(d.sum() < 0 for d in ahead) else "behind"
        out[0] += (
            f" {near:,} of {count} every rule {'lies' if near == 1 else 'lie'} less than two standard errors {where} the first: the windows do not "
            "tell them apart."
        )
    if better:
        out[0] += (
            f" {better:,} of {count} every rule {'lies' if better == 1 else 'lie'} more than two standard errors ahead of the first: "
            "the windows speak for them."
        )
    if np.isfinite(error) and not near and not better:
        out[0] += f" None of {count} every rule lies less than two standard errors behind the first."
    by_aic = search.rank_by == "aic"
    rival = max(accepted, key=lambda j: j.gain) if by_aic else min(accepted, key=lambda j: j.trial.aic)
    if rival is not first:
        what = "Out of time" if by_aic else "By AIC"
        less = (
            f"gain {rival.gain_total:.3g} units"
            if by_aic
            else f"AIC {first.trial.aic - rival.trial.aic:.3g} lower"
        )
        out.append(f"{what} {title_of(rival.trial.chosen)} would be first ({less}).")
    return out
