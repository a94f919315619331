"""What a study asks of its loan data: roles, columns to carry, window, all periods as integers."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Literal

from stresskit.core.errors import TextError
from stresskit.core.period import Frequency, frequency_of_label, parse_period
from stresskit.panel.cells import plain_text
from stresskit.spec.provisions import book_columns
from stresskit.spec.study import (
    FlagOutcome,
    LoanColumns,
    Outcome,
    SegmentLgd,
    SpellOutcome,
    Study,
)
from stresskit.spec.terms import LoanTerm, OffsetTerm

Layout = Literal["panel", "spells"]
Kind = Literal["number", "category", "date", "undecided"]
#: Where a study names its column of counts.
COUNT_PLACE = "loans.columns.count"


@dataclass(frozen=True, slots=True)
class Carried:
    """A loan column that later rooms need.

    kind    number, category, date (a period ordinal once read), or undecided: a column that nothing uses yet,
            judged by its content
    moves   no: one value per loan; varying: reported at the end of its row's period; lagged: at its start
    used    where it is used, for messages; empty for a column that is only carried along
    book    where the value at as_of is used, and nothing else: a loan without it is kept
    rows    whether the rows at risk need it; False for a moving column of which only the last value counts
    """

    name: str
    kind: Kind
    moves: Literal["no", "varying", "lagged"]
    used: tuple[str, ...]
    book: tuple[str, ...] = ()
    rows: bool = True

    @property
    def at_risk(self) -> bool:
        """Whether rows at risk need its value, directly or through a moving column."""
        return any(place.startswith(("hazards.", "moving.")) for place in self.used)


@dataclass(frozen=True, slots=True)
class Plan:
    """A study's demands on its loan data.

    calendar        length of a period; as_of, observed_until and window_end are its ordinals
    window_end      last period in which an exit counts: as_of or observed_until, the earlier one
    counter_month   month ordinal of the END of counter 1's period, None when periods are not counters
    causes          exits that the outcome can show, default first
    rate_scale      factor that makes a rate a fraction
    hazards         causes that have a hazard
    contract_rows   whether moving columns will ask for balance, rate and term of every row at risk
    count_alone     whether the column of counts is nothing but that: it is then no column of the loans
    """

    layout: Layout
    calendar: Frequency
    as_of: int
    observed_until: int | None
    counter_month: int | None
    columns: LoanColumns
    outcome: Outcome
    causes: tuple[str, ...]
    carried: tuple[Carried, ...]
    segments: tuple[str, ...]
    hazards: tuple[str, ...]
    hazard_categories: tuple[str, ...]
    first_row: Literal["entry", "at_risk"]
    rate_scale: float
    assumed_rate: float | None
    schedule: str
    rules: Mapping[str, str]
    contract_rows: bool = False
    count_alone: bool = False

    @property
    def window_end(self) -> int:
        return self.as_of if self.observed_until is None else min(self.as_of, self.observed_until)

    @property
    def static(self) -> tuple[Carried, ...]:
        return tuple(c for c in self.carried if c.moves == "no")

    @property
    def moving(self) -> tuple[Carried, ...]:
        return tuple(c for c in self.carried if c.moves != "no")

    @property
    def hidden(self) -> str | None:
        """A static column that is read and is no column of the loans."""
        return self.columns.count if self.count_alone else None

    @property
    def money_column(self) -> str | None:
        """Column whose sum the reconciliation calls balance."""
        return self.columns.balance or self.columns.amount


def plan_of(study: Study, *, own_book: bool = False) -> Plan:
    """The plan of a study; own_book: the portfolio comes from a frame.

    Raises TextError for demands that contradict each other.
    """
    loans = study.loans
    calendar = Frequency(study.frequency)
    outcome = _plain_codes(loans.outcome)
    payoff = bool(outcome.payoff_flag) if isinstance(outcome, FlagOutcome) else bool(outcome.payoff)
    if isinstance(outcome, SpellOutcome):
        payoff = payoff and outcome.payoff_date is not None
    if "payoff" in study.hazards and not payoff:
        raise TextError(
            "hazards.payoff: loans.outcome does not say how a payoff is told and dated: name it there, or drop the hazard"
        )
    _roles(study, own_book)
    _codes(outcome)
    start = None
    if loans.counter_starts is not None:
        start = _period(loans.counter_starts, Frequency.MONTH, "loans.counter_starts")
        if calendar is Frequency.QUARTER and frequency_of_label(loans.counter_starts) is Frequency.MONTH:
            start = start // 3 * 3 + 2
    observed = loans.observed_until
    assumed = loans.assume.get("rate")
    scale = 0.01 if loans.rate_unit == "percent" else 1.0
    carried = _carried(study)
    count = loans.columns.count
    return Plan(
        layout=loans.layout,
        calendar=calendar,
        as_of=_period(study.as_of, calendar, "as_of"),
        observed_until=None if observed is None else _period(observed, calendar, "loans.observed_until"),
        counter_month=start,
        columns=loans.columns,
        outcome=outcome,
        causes=("default", "payoff") if payoff else ("default",),
        carried=carried,
        segments=loans.segments,
        hazards=tuple(study.hazards),
        hazard_categories=tuple(
            dict.fromkeys(
                t.loan
                for h in study.hazards.values()
                for t in h.terms
                if isinstance(t, LoanTerm) and t.as_ == "category"
            )
        ),
        first_row=loans.first_row,
        rate_scale=scale,
        assumed_rate=None if assumed is None else assumed * scale,
        schedule=study.loss.exposure.schedule,
        rules=dict(loans.rules),
        contract_rows=bool(study.moving_in_use),
        count_alone=count not in loans.static
        and any(c.name == count and c.used == (COUNT_PLACE,) and not c.book for c in carried),
    )


def role_columns(plan: Plan, *, book: bool = False) -> list[tuple[str, str]]:
    """(place in the study text, column) of every column that the plan reads; book: of the portfolio's own file."""
    c = plan.columns
    not_here = {"entry", "last_seen"} if book or plan.layout == "panel" else set()
    not_here |= {"period"} if book or plan.layout == "spells" else set()
    not_here |= {"count"}  # carried
    named = {
        name: column for name, column in c.model_dump().items() if column is not None and name not in not_here
    }
    roles = [(f"loans.columns.{name}", column) for name, column in named.items()]
    if not book:
        places = ("column", "default_flag", "payoff_flag", "default_date", "payoff_date")
        found = [(f"loans.outcome.{name}", getattr(plan.outcome, name, None)) for name in places]
        roles += [(place, column) for place, column in found if column is not None]
    carried_for = {"no": "loans.static", "varying": "loans.varying", "lagged": "loans.lagged"}
    return roles + [
        ((*column.used, *column.book, carried_for[column.moves])[0], column.name) for column in plan.carried
    ]


def _period(text: str, calendar: Frequency, place: str) -> int:
    try:
        return parse_period(text, calendar)
    except ValueError as error:
        raise TextError(f"{place}: {error}") from None


def _roles(study: Study, own_book: bool) -> None:
    """Roles that the portfolio needs, said before any file is read."""
    loans, columns, book = study.loans, study.loans.columns, study.portfolio
    if columns.balance is None and columns.amount is None:
        raise TextError("loans.columns: name balance, or amount to roll down by loss.exposure.schedule")
    if columns.maturity is None and columns.term_months is None:
        raise TextError(
            "loans.columns: name maturity or term_months, so that a loan's remaining term is known"
        )
    if columns.rate is None and "rate" not in loans.assume:
        raise TextError("loans.columns: name rate, or give one for all loans under loans.assume: {rate: ...}")
    if columns.rate is not None and "rate" in loans.assume:
        raise TextError("loans.assume.rate: loans.columns names a rate column already; give one of them")
    if columns.balance is None and not (study.loss.exposure.plain and study.rates is None):
        raise TextError(
            "loans.columns: name balance. Without it the amount is rolled down by loss.exposure.schedule, which takes one "
            "schedule of annuity, linear or bullet for all loans and a fixed rate"
        )
    if own_book or book.file is not None:
        return
    if loans.layout == "panel" and book.from_ == "contract":
        raise TextError(
            "portfolio.from: contract belongs to layout spells; a panel shows who was there: last_seen"
        )
    if loans.layout == "spells" and book.from_ == "last_seen" and columns.last_seen is None:
        raise TextError(
            "portfolio.from: last_seen needs loans.columns.last_seen in layout spells; name it, or take "
            "portfolio: {from: contract} or a portfolio.file"
        )


def _plain_codes(outcome: Outcome) -> Outcome:
    """The outcome with its codes as cells are read: "1.0" is 1."""
    if isinstance(outcome, FlagOutcome):
        return outcome
    plain = {
        name: tuple(map(plain_text, getattr(outcome, name))) for name in ("default", "payoff", "performing")
    }
    return outcome.model_copy(update=plain)


def _codes(outcome: Outcome) -> None:
    """A status code means one thing."""
    if isinstance(outcome, FlagOutcome):
        return
    codes = [*outcome.default, *outcome.payoff, *outcome.performing]
    twice = sorted({code for code in codes if codes.count(code) > 1})
    if twice:
        raise TextError(f"loans.outcome: code {twice[0]!r} stands twice among default, payoff and performing")


def term_column(term: LoanTerm | OffsetTerm) -> str:
    return term.loan if isinstance(term, LoanTerm) else term.offset


def _carried(study: Study) -> tuple[Carried, ...]:
    """Every loan column that is used or carried along, in order of first mention."""
    loans = study.loans
    category: dict[str, list[str]] = {}
    number: dict[str, list[str]] = {}
    for name in loans.segments:
        category.setdefault(name, []).append("loans.segments")
    if isinstance(study.loss.lgd, SegmentLgd):
        category.setdefault(study.loss.lgd.by, []).append("loss.lgd.by")
    if loans.columns.count is not None:
        number[loans.columns.count] = [COUNT_PLACE]
    date: dict[str, list[str]] = {}
    kinds = {"category": category, "number": number, "date": date}
    for use in study.contract_columns():
        kinds[use.kind].setdefault(use.column, []).append(".".join(use.place))
    clash = [
        name
        for name in study.moving
        if name in (*loans.segments, *loans.static, *loans.varying, *loans.lagged)
    ]
    if clash:
        raise TextError(
            f"moving.{clash[0]}: the loan file has a column {clash[0]!r} that the study reads; give the moving column a name of "
            "its own"
        )
    for cause, hazard in study.hazards.items():
        for term in hazard.terms:
            if isinstance(term, LoanTerm | OffsetTerm) and term_column(term) in study.moving:
                continue
            if isinstance(term, LoanTerm):
                target = category if term.as_ == "category" else number
                target.setdefault(term.loan, []).append(f"hazards.{cause}")
            elif isinstance(term, OffsetTerm):
                number.setdefault(term.offset, []).append(f"hazards.{cause}")
    at_book, numeric = book_columns(study.staging, study.capital, study.adjustments, study.breakdowns)
    read = {name for hazard in study.hazards.values() for name in hazard.macro_features()}
    for name, by in (study.macro.keys() if study.macro else {}).items():
        if name in read:
            category.setdefault(by, []).append(f"macro.features.{name}.by")
    both = [name for name in category if name in number]
    if both:
        raise TextError(
            f"column {both[0]!r} is a category in {category[both[0]][0]} and a number in {number[both[0]][0]}: "
            "state it as one of them, or carry a second column"
        )
    mixed = [name for name in date if name in number or name in category]
    if mixed:
        raise TextError(
            f"column {mixed[0]!r} is a date in {date[mixed[0]][0]} and a {'number' if mixed[0] in number else 'category'} elsewhere: "
            "state it as one of them, or carry a second column"
        )
    twice = sorted(set(loans.varying) & set(loans.lagged))
    if twice:
        raise TextError(
            f"loans.varying and loans.lagged both name {', '.join(twice)}: a column is one or the other"
        )
    moves: dict[str, Literal["no", "varying", "lagged"]] = dict.fromkeys(loans.varying, "varying")
    moves |= dict.fromkeys(loans.lagged, "lagged")
    fixed_and_moving = sorted(set(loans.static) & set(moves))
    if fixed_and_moving:
        raise TextError(
            f"loans.static names {', '.join(fixed_and_moving)}, which loans.varying or loans.lagged names too"
        )
    if loans.columns.count in moves:
        raise TextError(
            f"{COUNT_PLACE}: column {loans.columns.count!r} is named under loans.{'varying' if moves[loans.columns.count] == 'varying' else 'lagged'} "
            "too; the loans that a line stands for are the same in all its rows"
        )
    places = {"loans.static": loans.static, "loans.varying": loans.varying, "loans.lagged": loans.lagged}
    result = {}
    for name in dict.fromkeys([*category, *number, *date, *(n for names in places.values() for n in names)]):
        kind: Kind = "undecided"
        if name in category or name in number or name in date:
            kind = "category" if name in category else "number" if name in number else "date"
        used = tuple(dict.fromkeys([*category.get(name, []), *number.get(name, []), *date.get(name, [])]))
        result[name] = Carried(name, kind, moves.get(name, "no"), used)
    return tuple(_for_book(study, result, at_book, numeric).values())


def _for_book(
    study: Study, carried: Mapping[str, Carried], category: Mapping[str, str], number: Mapping[str, str]
) -> dict[str, Carried]:
    """The columns that staging, capital, year view and adjustments read of the book, added to those carried."""
    result = dict(carried)
    for name in dict.fromkeys([*category, *number]):
        place = number[name] if name in number else category[name]
        here = carried.get(name)
        if name in number and (name in category or (here is not None and here.kind == "category")):
            raise TextError(
                f"{place}: column {name!r} is a category elsewhere in the study and a number here: carry a second column"
            )
        moves = place == "staging.past_due.column" and study.loans.layout == "panel"
        if here is None:
            kind: Literal["number", "category"] = "number" if name in number else "category"
            result[name] = Carried(name, kind, "varying" if moves else "no", (), (place,), rows=not moves)
        else:
            wanted: Literal["number", "category"] = "number" if name in number else "category"
            result[name] = replace(
                here, kind=wanted if here.kind == "undecided" else here.kind, book=(place,)
            )
    return result
