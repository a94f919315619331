"""A quality rule: what it looks for, where, and what the study may decide about it.

A rule belongs to one step. At each step its condition is SQL over one relation, whose columns are:

row       every row of the input, as parsed by :mod:`stresskit.panel.parse`:
          k (loan number, NULL without identifier), o (origination), mat (maturity), term_bad, bal, amount,
          rate, bad (bit i set: column i could not be read), twin (1 copy, 2 contradiction), out (0 none,
          1 default, 2 payoff, NULL unknown); panel: t (period), two_exits;
          spells: entry, seen, dd and pd (dates of default and payoff)
loan      every loan, from the rows that no row rule left out: k, o, mat, term_bad, o_moves,
          c0, c1, .. (static columns, NULL when missing) and moved0, moved1, ..;
          count_bad where the study names a column of counts
observed  the rows that no row rule left out. panel: k, t, age, out, bal, rate, mat, is_first,
          t_before (period of the loan's previous row), after_exit, m0, m1, .. (moving columns);
          spells: k, o, mat, out, bal, rate, exit_t, cause, entry_age, exit_age
end       no condition; the rule's module looks at the finished risk set

Periods are ordinals of the study's calendar. A NULL condition counts as false.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Literal

from stresskit.panel.plan import Layout, Plan
from stresskit.panel.result import Severity
from stresskit.spec.study import Policy

Step = Literal["row", "loan", "observed", "end"]
BOTH: tuple[Layout, ...] = ("panel", "spells")


@dataclass(frozen=True, slots=True)
class Case:
    """One condition of a rule: SQL, and the column it is about when a rule goes column by column."""

    sql: str
    column: str | None = None


@dataclass(frozen=True, slots=True)
class Columns:
    """Where a plan's columns stand in the relations.

    bits     column read as number or date -> its bit in ``bad``
    dates    the columns among them that hold dates
    static   static column -> i of c_i;  moving: moving column -> i of m_i
    numbers  names of carried columns that are numbers; all other carried ones are categories
    count    i of the c_i that says for how many loans a line stands; None: each for itself
    """

    bits: dict[str, int]
    dates: tuple[str, ...]
    static: dict[str, int]
    moving: dict[str, int]
    numbers: frozenset[str]
    count: int | None = None


@dataclass(frozen=True, slots=True)
class Rule:
    """One quality rule.

    code      key under loans.rules, and the reason in the reconciliation when rows are left out for it
    says      what was found, to be read as "<says>: 12 rows"
    counts    what is counted
    default   policy unless loans.rules names another; allowed: those that can be named there
    kept      what keep does; left: what leave_out does beyond leaving the rows out
    reason    False: rows are flagged, the reason that takes them is another rule's
    study     place in the study that holds the policy instead of loans.rules, if any
    """

    code: str
    step: Step
    says: str
    default: Policy
    allowed: tuple[Policy, ...]
    cases: Callable[[Plan, Columns], Sequence[Case]] = lambda plan, columns: ()
    layouts: tuple[Layout, ...] = BOTH
    counts: Literal["rows", "loans", "levels", "columns"] = "rows"
    kept: str = ""
    left: str = ""
    remedy: str = ""
    severity: Severity = "warning"
    reason: bool = True
    study: str | None = None


def when(sql: str) -> Callable[[Plan, Columns], Sequence[Case]]:
    """A condition that is the same for every study."""

    def cases(plan: Plan, columns: Columns) -> Sequence[Case]:
        return (Case(sql),)

    return cases


def of_plan(build: Callable[[Plan], str | None]) -> Callable[[Plan, Columns], Sequence[Case]]:
    """A condition that depends on the plan; None when it does not apply."""

    def cases(plan: Plan, columns: Columns) -> Sequence[Case]:
        sql = build(plan)
        return () if sql is None else (Case(sql),)

    return cases
