"""Carries the rules out: reasons for rows as SQL, counts and first cases, findings, and what must stop the run."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

import duckdb

from stresskit.core.errors import DataError, Problem
from stresskit.core.period import format_period
from stresskit.panel.plan import Plan
from stresskit.panel.result import Finding
from stresskit.panel.rules.base import Case, Columns, Rule, Step
from stresskit.panel.rules.registry import RULES
from stresskit.spec.study import Policy

#: Cases shown with a finding.
SHOWN = 5


@dataclass(frozen=True, slots=True)
class Entry:
    """One case of one rule with its number: reasons with lower numbers take a row first."""

    number: int
    rule: Rule
    case: Case
    policy: Policy

    @property
    def reason(self) -> str:
        return self.rule.code if self.case.column is None else f"{self.rule.code}: {self.case.column}"

    @property
    def takes_rows(self) -> bool:
        return self.rule.reason and self.policy != "keep"


def words_to_policy(word: str) -> Policy:
    """A study may word "keep" in its own way (observed_to_maturity, date_at_maturity)."""
    return "reject" if word == "reject" else "leave_out" if word == "leave_out" else "keep"


@dataclass(slots=True)
class Judge:
    """Collects findings while the stages run; :meth:`verdict` raises when one of them must stop the run.

    words  policy of every rule as the study words it
    taken  what left rows or loans out, in the form of problems: they become some if no row is left
    """

    connection: duckdb.DuckDBPyConnection
    plan: Plan
    columns: Columns
    words: Mapping[str, str]
    findings: list[Finding] = field(default_factory=list)
    problems: list[Problem] = field(default_factory=list)
    taken: list[Problem] = field(default_factory=list)
    entries: tuple[Entry, ...] = ()

    def __post_init__(self) -> None:
        rules = [rule for rule in RULES if rule.step != "end" and self.plan.layout in rule.layouts]
        cases = [(rule, case) for rule in rules for case in rule.cases(self.plan, self.columns)]
        self.entries = tuple(
            Entry(i, rule, case, words_to_policy(self.words[rule.code]))
            for i, (rule, case) in enumerate(cases, 1)
        )

    def reason_sql(self, step: Step) -> str:
        """Number of the first entry of this step that leaves the row out, else NULL."""
        whens = [
            f"WHEN {e.case.sql} THEN {e.number}" for e in self.entries if e.rule.step == step and e.takes_rows
        ]
        return f"(CASE {' '.join(whens)} END)::SMALLINT" if whens else "NULL::SMALLINT"

    def reason_text(self, number: int) -> str:
        return self.entries[number - 1].reason

    def survey(
        self, step: Step, relation: str, *, period: bool, notes: Mapping[str, str] | None = None
    ) -> None:
        """Counts every entry of ``step`` over ``relation`` (with column ``reason``) and files the findings.

        A case counts where no earlier entry left the row out. notes: rule code -> further words for its message.
        """
        entries = [e for e in self.entries if e.rule.step == step]
        if not entries:
            return
        tests = {e.number: f"({e.case.sql}) AND coalesce(reason >= {e.number}, true)" for e in entries}
        counts = self.connection.execute(
            "SELECT "
            + ", ".join(f"count(*) FILTER (WHERE {test})" for test in tests.values())
            + f" FROM {relation}"
        ).fetchone()
        for entry, count in zip(entries, counts or (), strict=True):
            if count:
                first = self._first(relation, tests[entry.number], period=period)
                note = (notes or {}).get(entry.rule.code, "")
                self.file(entry.rule, count, first, column=entry.case.column, note=note)

    def _first(self, relation: str, test: str, *, period: bool) -> tuple[str, ...]:
        columns = "loan, t" if period else "loan"
        rows = self.connection.execute(
            f"SELECT {columns} FROM {relation} LEFT JOIN loans USING (k) WHERE {test} "
            f"ORDER BY {columns} NULLS FIRST LIMIT {SHOWN}"
        ).fetchall()
        return tuple(self._case(*row) for row in rows)

    def _case(self, loan: str | None, t: int | None = None) -> str:
        name = "(no identifier)" if loan is None else loan
        return name if t is None else f"{name} @ {format_period(t, self.plan.calendar)}"

    def file(
        self, rule: Rule, count: int, first: Iterable[str], *, column: str | None = None, note: str = ""
    ) -> None:
        """Files one finding, and a problem when its policy is reject."""
        word = self.words[rule.code]
        policy = words_to_policy(word)
        about = f" (column {column!r})" if column is not None else ""
        message = f"{rule.says}{about}: {count:,} {rule.counts}"
        if policy == "leave_out":
            message += "; left out" + (f": {rule.left}" if rule.left else "")
        elif policy == "keep" and rule.kept:
            message += (
                f"; {'the default is dated at the contract end' if word == 'date_at_maturity' else rule.kept}"
            )
        message += f". {note}" if note else ""
        shown = tuple(first)[:SHOWN]
        severity = "error" if policy == "reject" else rule.severity
        self.findings.append(Finding(rule.code, word, severity, count, shown, message))
        if policy != "keep":
            remedy = self._remedy(rule, note, choose=policy == "reject")
            problems = self.problems if policy == "reject" else self.taken
            problems.append(Problem(rule.code, rule.says + about, count, shown, remedy))

    def _remedy(self, rule: Rule, note: str, *, choose: bool) -> str:
        softer = [p for p in rule.allowed if p != "reject"] if choose else []
        choice = (
            f"Or set loans.rules: {{{rule.code}: {' | '.join(softer)}}}." if softer and not rule.study else ""
        )
        return " ".join(part for part in (note, rule.remedy, choice) if part)

    def note(self, code: str, count: int, message: str, first: Iterable[str] = ()) -> None:
        """Files something that is no fault but changes what the result means."""
        self.findings.append(Finding(code, "keep", "note", count, tuple(first)[:SHOWN], message))

    def verdict(self) -> None:
        """Raises one DataError with every problem, if there is any."""
        if self.problems:
            raise DataError("the loan data cannot be used as the study asks", self.problems)
