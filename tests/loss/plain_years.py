"""Calendar years, stages and capital of one loan as a plain loop over its steps (tests/oracle/plain.py).

Only the math module and the published formula of the risk weights; nothing is shared with the package.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from statistics import NormalDist
from typing import Any

N = NormalDist()


def bucket_ends(as_of: int, per_year: int, count: int) -> list[int]:
    """Last step of each of the first calendar years: walked period by period."""
    ends, step = [], 0
    while len(ends) < count:
        step += 1
        if (as_of + step + 1) % per_year == 0:
            ends.append(step)
    return ends


def loan_years(
    loan: Mapping[str, Any],
    steps: Sequence[Mapping[str, Any]],
    ends: Sequence[int],
    *,
    lgd: float,
    period_rate: float,
) -> list[dict[str, float]]:
    """One dict per point, as_of first: on_book, balance, and the flows of the bucket before the point."""
    remaining, out, before = int(loan["remaining"]), [], 0
    for end in [0, *ends]:
        inside = [s for s in steps if before < s["step"] <= end]
        later = [s for s in steps if s["step"] > end]
        alive = end == 0 or (end < remaining and end <= len(steps))
        survival = 1.0 if end == 0 else (steps[end - 1]["survival"] if alive else 0.0)
        owed = loan["balance"] if end == 0 else (steps[end]["balance"] if end < len(steps) else 0.0)
        out.append(
            {
                "on_book": survival,
                "balance": survival * owed,
                "default": math.fsum(s["flows"]["default"] for s in inside),
                "payoff": math.fsum(s["flows"].get("payoff", 0.0) for s in inside),
                "matured": math.fsum(s["matured"] for s in inside),
                "default_amount": math.fsum(s["flows"]["default"] * s["exposure"] for s in inside),
                "loss": math.fsum(s["flows"]["default"] * s["exposure"] * lgd for s in inside),
                "el": math.fsum(s["loss"] for s in inside),
                "pd_rest": math.fsum(s["flows"]["default"] for s in later) / survival if survival else 0.0,
                "pd_year": math.fsum(s["flows"]["default"] for s in later if s["step"] <= end + loan["per_year"]) / survival
                if survival
                else 0.0,
                # seen from the point: undo the discounting to as_of
                "el_rest": math.fsum(s["loss"] for s in later) * (1 + period_rate) ** end,
                "el_year": math.fsum(s["loss"] for s in later if s["step"] <= end + loan["per_year"]) * (1 + period_rate) ** end,
            }
        )  # fmt: skip
        before = end
    return out


def reference(
    project: Callable[[int, int], Sequence[Mapping[str, Any]]],
    age: int,
    life: int,
    ends: Sequence[int],
    per_year: int,
) -> list[tuple[float, float]]:
    """(rest of life, next year) PDs under standing conditions: for each point a projection begun there anew."""
    out = []
    for end in [0, *ends]:
        if end >= life:
            out.append((0.0, 0.0))
            continue
        steps = project(age + end, life - end)
        q = [s["flows"]["default"] for s in steps]
        out.append((math.fsum(q), math.fsum(q[:per_year])))
    return out


def second(rule: Mapping[str, Any], rest: float, origin: float, year: float, late: bool) -> bool:
    tests = []
    if "ratio" in rule:
        tests.append(rest > rule["ratio"] * origin)
    if "increase" in rule:
        tests.append(rest - origin > rule["increase"])
    worse = bool(tests) and (all(tests) if rule.get("combine", "both") == "both" else any(tests))
    worse = worse or ("backstop_pd" in rule and year > rule["backstop_pd"])
    if "low_risk" in rule and year <= rule["low_risk"]:
        worse = False
    return worse or late


def other_retail_weight(pd: float, lgd: float) -> float:
    """CRE31.16, times 12.5."""
    if pd <= 0 or pd >= 1:
        return 0.0
    share = (1 - math.exp(-35 * pd)) / (1 - math.exp(-35))
    r = 0.03 * share + 0.16 * (1 - share)
    x = N.inv_cdf(pd) / math.sqrt(1 - r) + math.sqrt(r / (1 - r)) * N.inv_cdf(0.999)
    return 12.5 * max(0.0, lgd * N.cdf(x) - pd * lgd)
