"""The whole method as a slow, plain loop over loans and periods: what the engine is compared with.

Only the math module; no arrays, no shared code with the package. Routes differ from the engine's on
purpose: events compete by products of probabilities and complements, balances roll forward payment by
payment, sums are exact (math.fsum).

    risk_rows        panel of observations -> who was at risk when
    log_likelihood   of one cause on such rows
    project_loan     survival, exits, balance, loss of one loan, step after step
    measures         a loan's probabilities and losses
    portfolio        sums over loans

A row is a dict with "loan", "age", "period", "event" (None or a cause) and any further columns.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import Any

Row = dict[str, Any]
Eta = Callable[[int, int], float]  # (age at the end of the step, step) -> linear predictor


def risk_rows(observed: Iterable[Mapping[str, Any]], first_row: str = "entry") -> list[Row]:
    """Rows at risk from a panel: dicts with "loan", "period", "origin" (last period off book), "event".

    A row counts when the loan was seen performing one period before, or is in its first period on
    book, or (first_row="at_risk") is the first one seen. Nothing counts after an event.
    """
    by_loan: dict[Any, list[Mapping[str, Any]]] = {}
    for row in observed:
        by_loan.setdefault(row["loan"], []).append(row)
    out: list[Row] = []
    for loan in sorted(by_loan):
        seen: int | None = None
        first = True
        for row in sorted(by_loan[loan], key=lambda r: r["period"]):
            age = row["period"] - row["origin"]
            known_before = seen == row["period"] - 1 or age == 1 or (first and first_row == "at_risk")
            if known_before:
                out.append({**row, "age": age})
            first = False
            if row["event"] is not None:
                break
            seen = row["period"]
    return out


def probability(eta: float, link: str) -> float:
    """P(event) of one period."""
    if link == "cloglog":
        return 1.0 if eta > 700 else -math.expm1(-math.exp(eta))
    return 1.0 / (1.0 + math.exp(-eta)) if eta > -700 else math.exp(eta)


def log_survival(eta: float, link: str) -> float:
    """log(1 - P)."""
    if link == "cloglog":
        return -math.exp(eta)
    return -eta - math.log1p(math.exp(-eta)) if eta > 0 else -math.log1p(math.exp(eta))


def log_event(eta: float, link: str) -> float:
    """log P."""
    if link == "cloglog":
        hazard = math.exp(eta)
        # Small hazards: log(1 - e^-L) = log L - L/2 + L^2/24, so that nothing is lost where L underflows 1 - L.
        return eta - hazard / 2 + hazard**2 / 24 if hazard < 1e-4 else math.log(-math.expm1(-hazard))
    return eta - math.log1p(math.exp(eta)) if eta < 0 else -math.log1p(math.exp(-eta))


def log_likelihood(rows: Iterable[Row], cause: str, eta: Callable[[Row], float], link: str) -> float:
    """Of one cause: all rows but those that ended in another cause; "weight" counts if it is there."""
    terms = []
    for row in rows:
        if row["event"] not in (None, cause):
            continue
        value = log_event(eta(row), link) if row["event"] == cause else log_survival(eta(row), link)
        terms.append(row.get("weight", 1.0) * value)
    return math.fsum(terms)


def compete(p: Mapping[str, float], q: Mapping[str, float] | None = None) -> tuple[float, dict[str, float]]:
    """P(survive) and P(each cause) of a period from the conditional P(c | c or survive).

    survive : c = (1 - p_c) : p_c for every c, hence shares prod(1 - p) and p_c * prod over others (1 - p).
    q holds 1 - p where it is known better than by subtraction.
    """
    q = {c: 1.0 - v for c, v in p.items()} if q is None else q
    stay = math.prod(q.values())
    leave = {c: v * math.prod(w for k, w in q.items() if k != c) for c, v in p.items()}
    whole = stay + sum(leave.values())
    return stay / whole, {c: v / whole for c, v in leave.items()}


def balances(balance: float, rate: float, term: int, schedule: str) -> list[float]:
    """Balance at the start of each period of the term, payment by payment; ``rate`` per period."""
    out, owed = [], balance
    payment = balance / term if rate == 0 else balance * rate / -math.expm1(-term * math.log1p(rate))
    for h in range(1, term + 1):
        out.append(owed)
        if schedule == "annuity":
            owed += owed * rate - payment
        elif schedule == "linear":
            owed -= balance / term
        elif schedule == "bullet":
            owed = balance if h < term else 0.0
        else:
            raise ValueError(schedule)
    return out


def project_loan(
    loan: Mapping[str, Any],
    etas: Mapping[str, Eta],
    links: Mapping[str, str],
    *,
    per_year: int = 12,
    cap: int | None = None,
    schedule: str = "annuity",
    accrued: float = 0.0,
    lgd: float = 1.0,
    discount: float | str = "rate",
    timing: str = "mid",
) -> list[dict[str, Any]]:
    """One dict per step 1..min(remaining, cap).

    loan       "age" at as_of, "remaining" periods, "balance", "rate" (nominal annual)
    etas       cause -> eta(age at the end of the step, step); links: cause -> cloglog | logit
    discount   "rate": the loan's own; "none"; or an effective annual rate. timing: mid or end of period
    Keys: step, survival, flows {cause: q}, alone (survival of the default hazard by itself), hazards
    {cause: conditional P}, balance, exposure, factor, loss, on_book, matured (shares at the step's end)
    """
    rate = loan["rate"] / per_year
    if discount == "rate":
        period_rate = rate
    else:
        period_rate = 0.0 if discount == "none" else (1.0 + float(discount)) ** (1.0 / per_year) - 1.0
    owed = balances(loan["balance"], rate, loan["remaining"], schedule)
    steps = loan["remaining"] if cap is None else min(cap, loan["remaining"])
    survival, alone, out = 1.0, 1.0, []
    for h in range(1, steps + 1):
        values = {c: eta(loan["age"] + h, h) for c, eta in etas.items()}
        p = {c: probability(v, links[c]) for c, v in values.items()}
        stay, leave = compete(p, {c: math.exp(log_survival(v, links[c])) for c, v in values.items()})
        flows = {c: survival * v for c, v in leave.items()}
        survival *= stay
        alone *= 1.0 - p["default"]
        exposure = owed[h - 1] * (1.0 + accrued * max(rate, 0.0))
        factor = (1.0 + period_rate) ** -(h - 0.5 if timing == "mid" else h)
        over = h == loan["remaining"]
        out.append(
            {
                "step": h, "survival": survival, "flows": flows, "alone": alone, "hazards": p,
                "balance": owed[h - 1], "exposure": exposure, "factor": factor,
                "loss": flows["default"] * lgd * exposure * factor,
                "on_book": 0.0 if over else survival, "matured": survival if over else 0.0,
            }
        )  # fmt: skip
    return out


def measures(
    steps: Sequence[Mapping[str, Any]], age: int, *, per_year: int = 12, largest_age: int = 10**9
) -> dict[str, float]:
    """A loan's probabilities and losses from its steps. extrapolated: lifetime PD from ages > largest_age."""

    def total(value: Callable[[Mapping[str, Any]], float], within: int = 10**9) -> float:
        return math.fsum(value(s) for s in steps if s["step"] <= within)

    return {
        "pd_12m": total(lambda s: s["flows"]["default"], per_year),
        "pd_lifetime": total(lambda s: s["flows"]["default"]),
        "pd_no_payoff": 1.0 - steps[-1]["alone"],
        "payoff_lifetime": total(lambda s: s["flows"].get("payoff", 0.0)),
        "el_12m": total(lambda s: s["loss"], per_year),
        "el_lifetime": total(lambda s: s["loss"]),
        "exposed_lifetime": total(lambda s: s["flows"]["default"] * s["exposure"] * s["factor"]),
        "extrapolated": total(lambda s: s["flows"]["default"] if age + s["step"] > largest_age else 0.0),
        "matured": steps[-1]["matured"],
        "survival": steps[-1]["survival"],
    }


def cell_totals(projected: Sequence[Sequence[Mapping[str, Any]]], horizon: int) -> list[dict[str, float]]:
    """Sums over loans per step 1..horizon; on_book and matured persist after a loan's last step."""
    out = []
    for h in range(1, horizon + 1):
        live = [steps[h - 1] for steps in projected if len(steps) >= h]
        last = [steps[min(h, len(steps)) - 1] for steps in projected]
        out.append(
            {
                "on_book": math.fsum(s["on_book"] for s in last),
                "matured": math.fsum(s["matured"] for s in last),
                "default": math.fsum(s["flows"]["default"] for s in live),
                "payoff": math.fsum(s["flows"].get("payoff", 0.0) for s in live),
                "balance": math.fsum(
                    (steps[h - 2]["survival"] if h > 1 else 1.0) * steps[h - 1]["balance"]
                    for steps in projected if len(steps) >= h
                ),
                "default_amount": math.fsum(s["flows"]["default"] * s["exposure"] for s in live),
                "exposed": math.fsum(s["flows"]["default"] * s["exposure"] * s["factor"] for s in live),
                "el": math.fsum(s["loss"] for s in live),
            }
        )  # fmt: skip
    return out
