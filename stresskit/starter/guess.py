"""Which column of a loan table plays which role, guessed from its name and its values. Every guess is for a person to check."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from types import MappingProxyType

from stresskit.core.period import Frequency, format_period
from stresskit.starter.columns import Column, Looked

#: role -> kinds of column that can play it, words of names from the likeliest down.
_ROLES: Mapping[str, tuple[tuple[str, ...], tuple[str, ...]]] = MappingProxyType(
    {
        "loan": (
            ("text", "number", "flag"),
            ("loan_id", "loan", "loan_number", "account_id", "account", "contract_id", "contract", "facility", "id", "key"),
        ),
        "period": (
            ("date",),
            ("period", "month", "quarter", "reporting_date", "report_date", "snapshot", "observation", "as_of", "date"),
        ),
        "maturity": (("date",), ("maturity", "matures", "matures_on", "expiry", "expires", "due", "end", "final")),
        "default_date": (
            ("date",),
            ("default_date", "defaulted", "default", "charged_off", "chargeoff", "charge_off", "write_off", "written_off", "npl"),
        ),
        "payoff_date": (("date",), ("payoff", "paid", "repaid", "prepaid", "prepayment", "settled", "closed")),
        "last_seen": (("date",), ("last_seen", "last", "until")),
        "entry": (("date",), ("first_seen", "entry", "acquired", "bought")),
        "origination": (
            ("date",),
            ("origination", "originated", "opened", "opening", "disbursed", "disbursement", "issued", "issue", "granted", "booked",
             "start", "vintage"),
        ),
        "term_months": (("number",), ("term_months", "term", "tenor", "original_term")),
        "balance": (("number",), ("balance", "outstanding", "owed", "exposure", "ead", "current_balance")),
        "amount": (
            ("number",),
            ("amount", "original_amount", "loan_amount", "original_balance", "gross_disbursed", "disbursed", "principal", "approved"),
        ),
        "rate": (("number",), ("annual_rate", "interest_rate", "rate", "interest", "coupon")),
        "status": (
            ("text", "flag", "number"),
            ("status", "final_status", "loan_status", "state", "outcome", "ended", "exit"),
        ),
    }
)  # fmt: skip
_DEFAULT = (
    "default",
    "chgoff",
    "chargeoff",
    "writeoff",
    "writtenoff",
    "npl",
    "bad",
    "foreclos",
    "loss",
    "insolv",
)
_PAYOFF = ("paid", "pif", "payoff", "repaid", "prepa", "settled", "redeemed", "full")
_SEGMENTS = (
    "product",
    "segment",
    "region",
    "class",
    "type",
    "purpose",
    "channel",
    "collateral",
    "property",
    "grade",
    "state",
)
_MOST_LEVELS = 12


@dataclass(frozen=True, slots=True)
class Guess:
    """What the table seems to be.

    roles      role -> column, for those that were found
    layout     panel (a row per loan and period) or spells (a row per loan)
    frequency  month or quarter
    as_of      label of the last period seen, or None
    default, payoff, performing  codes of the status column
    segments   columns to break results down by
    others     columns that play no role
    unwritable number of codes with characters that no study text can hold
    percent    whether rates look like 4.5 and not like 0.045
    first      label of the first period that the macro history has to reach, or None
    why        role -> what spoke for it
    """

    looked: Looked
    roles: Mapping[str, str]
    layout: str
    frequency: str
    as_of: str | None
    default: tuple[str, ...]
    payoff: tuple[str, ...]
    performing: tuple[str, ...]
    segments: tuple[str, ...]
    others: tuple[str, ...]
    unwritable: int
    percent: bool
    first: str | None
    why: Mapping[str, str]


def guess(looked: Looked) -> Guess:
    """Roles of the columns of a table."""
    columns = [c for c in looked.columns if c.name.isprintable()]
    by_name = {c.name: c for c in columns}
    roles: dict[str, str] = {}
    loan = _best("loan", columns, taken=())
    if loan is not None:
        roles["loan"] = loan.name
    repeated = loan is not None and loan.distinct < 0.7 * looked.rows
    for role in _ROLES:
        if role == "loan" or (role == "period") > repeated or (repeated and role in _SPELLS_ONLY):
            continue
        found = _best(role, columns, taken=roles.values())
        if found is not None:
            roles[role] = found.name
    if not repeated and "origination" not in roles:
        _leftover_origination(columns, roles)
    codes = by_name[roles["status"]].levels if "status" in roles else {}
    default, payoff, performing = _codes({c: n for c, n in codes.items() if c.isprintable()})
    segments = _segments(columns, taken=roles.values())
    dates = [by_name[roles[r]] for r in ("period", "last_seen", "default_date", "payoff_date") if r in roles]
    quarterly = repeated and "period" in roles and by_name[roles["period"]].quarterly
    frequency = Frequency.QUARTER if quarterly else Frequency.MONTH
    ends = [c.last for c in dates if c.last is not None]
    begins = [by_name[roles["period"]].first] if "period" in roles else [
        by_name[roles["origination"]].first if "origination" in roles else None
    ]  # fmt: skip
    return Guess(
        looked, MappingProxyType(roles), "panel" if repeated else "spells", frequency.value,
        _label(max(ends), frequency) if ends else None, default, payoff, performing, segments,
        tuple(c.name for c in columns if c.name not in roles.values() and c.name not in segments),
        sum(not c.isprintable() for c in codes),
        "rate" in roles and by_name[roles["rate"]].median > 1.0,
        _label(begins[0], frequency) if begins[0] is not None else None,
        MappingProxyType({r: _reason(r, by_name[c]) for r, c in roles.items()}),
    )  # fmt: skip


_SPELLS_ONLY = ("default_date", "payoff_date", "last_seen", "entry")


def _label(month: int, frequency: Frequency) -> str:
    return format_period(month if frequency is Frequency.MONTH else month // 3, frequency)


def _plain(name: str) -> str:
    """``loanStatus``, ``Loan Status`` and ``loan-status`` are ``loan_status``."""
    split = re.sub(r"(?<=[a-z0-9])(?=[A-Z])", "_", name)
    return re.sub(r"[^a-z0-9]+", "_", split.lower()).strip("_")


def _best(role: str, columns: Iterable[Column], *, taken: Iterable[str]) -> Column | None:
    """The column whose name fits the role best among those that can play it; the first of equals."""
    kinds, words = _ROLES[role]
    free = [c for c in columns if c.kind in kinds and c.name not in set(taken)]
    scored = [(_score(_plain(c.name), words), c) for c in free]
    good = [(s, c) for s, c in scored if s > 0]
    return max(good, key=lambda pair: pair[0])[1] if good else None


def _score(name: str, words: tuple[str, ...]) -> float:
    """More for a whole name than for a part of one, and for a word that stands earlier in the list."""
    best = 0.0
    for k, word in enumerate(words):
        late = 1.0 - k / (2 * len(words))
        if name == word:
            best = max(best, 2.0 * late + 1.0)
        elif re.search(rf"(^|_){word}(_|$)", name):
            best = max(best, late)
    return best


def _leftover_origination(columns: Iterable[Column], roles: dict[str, str]) -> None:
    """The one date that is always filled and plays no other role is the start of the loan."""
    free = [c for c in columns if c.kind == "date" and c.filled > 0.95 and c.name not in roles.values()]
    if len(free) == 1:
        roles["origination"] = free[0].name


def _codes(levels: Mapping[str, int]) -> tuple[tuple[str, ...], tuple[str, ...], tuple[str, ...]]:
    """Status codes that mean default, full repayment and neither."""
    default, payoff, rest = [], [], []
    for code in levels:
        word = re.sub(r"[^a-z0-9]", "", code.lower())
        if word == "d" or word == "1" or any(w in word for w in _DEFAULT):
            default.append(code)
        elif word == "p" or any(w in word for w in _PAYOFF):
            payoff.append(code)
        else:
            rest.append(code)
    return tuple(default), tuple(payoff), tuple(rest)


def _segments(columns: Iterable[Column], *, taken: Iterable[str]) -> tuple[str, ...]:
    """Up to two columns of few words, those first whose name says that it is a kind of loan or place."""
    used = set(taken)
    few = [
        c
        for c in columns
        if c.name not in used
        and c.kind in ("text", "flag")
        and 2 <= c.distinct <= _MOST_LEVELS
        and c.filled > 0.99
    ]
    named = [c.name for c in few if any(w in _plain(c.name).split("_") for w in _SEGMENTS)]
    return tuple((named or [c.name for c in few])[:2])


def _reason(role: str, column: Column) -> str:
    """What spoke for a guess, in a few words."""
    if column.kind == "date":
        return f"dates, {column.filled:.0%} filled"
    if role == "status":
        shown = ", ".join(f"{code} {n:,}" for code, n in list(column.levels.items())[:6])
        return f"{column.distinct} codes" + (f": {shown}" if shown else "")
    if role == "loan":
        return f"{column.distinct:,} different values"
    return f"numbers, median {column.median:,.6g}"
