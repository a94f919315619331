"""Fit a tail to the age hazard: binomial likelihood over the later supported ages, other terms as offset."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import NumericError
from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.design import INTERCEPT
from stresskit.hazard.link import Link
from stresskit.hazard.sums import HazardData
from stresskit.hazard.tail import AgeTail, tail_curve
from stresskit.hazard.terms import AgeSpline
from stresskit.kernels.blocks import block_cuts, stay_rows, totals
from stresskit.spec.terms import AgeTerm

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Fewer events than this at the tail's ages say nothing about two parameters.
FEWEST_EVENTS = 20.0
#: Rows worked on at a time.
TAIL_ROWS = 1 << 18
#: Converged when half the squared Newton step, measured by the information, is below this.
DECREMENT = 1e-12
#: |ln shape| beyond this: the data ask for a hazard that the family cannot bend to.
EXTREME_LOG_SHAPE = 4.0


@dataclass(frozen=True, slots=True, eq=False)
class _Rows:
    """Rows of a block at the tail's ages: position of the age, other terms, event, weight."""

    age: Ints
    rest: Floats
    event: NDArray[np.bool_]
    weight: Floats


@dataclass(frozen=True, slots=True, eq=False)
class _AtAges:
    """llf, and per age (m,) score and information on the linear predictor."""

    llf: float
    score: Floats
    information: Floats


def fit_tail(term: AgeTerm, data: HazardData, params: Floats, supported: int) -> AgeTail:
    """The tail that ``term.beyond`` names, fitted by Fisher scoring.

    params     (k,) fitted coefficients of ``data.design``
    supported  last supported age, the last one the tail is fitted on

    Raises NumericError when events are too few or the family does not fit.
    """
    first, events = _window(term, data.rows, supported)
    ages = np.arange(first, supported + 1)
    window = _Window(data, params, first, supported)
    theta = _start(term.beyond, data.link, ages, window, float(events))
    theta, information = _maximise(term.beyond, ages, window, data.link, theta)
    covariance = np.linalg.inv(information)
    se = np.sqrt(np.diag(covariance))
    join = _constant_from(data, supported)
    value, _ = tail_curve(term.beyond, data.link.name, np.array([join]), *theta)
    return AgeTail(
        family=term.beyond,
        link=data.link.name,
        shape=float(np.exp(theta[0])),
        scale=float(np.exp(theta[1])),
        log_shape_se=float(se[0]),
        log_scale_se=float(se[1]),
        log_correlation=float(covariance[0, 1] / (se[0] * se[1])),
        first=first,
        last=supported,
        events=float(events),
        join=join,
        step=_baseline(data, params, join) + window.mean - float(value[0]),
    )


def _window(term: AgeTerm, rows: CauseRows, supported: int) -> tuple[int, float]:
    """First age of the tail and the events from there to the last supported age."""
    _, events = rows.by_age()
    running = np.cumsum(events[: supported + 1])
    half = int(np.searchsorted(running, 0.5 * running[-1], side="left"))
    first = term.tail_from if term.tail_from is not None else max(half, int(rows.entry.min()) + 1)
    if first >= supported:
        raise NumericError(
            f"age: a {term.beyond} tail needs at least two ages, and it would be fitted on ages {first} to {supported} "
            "(the last supported age). State an earlier `tail_from`, or use beyond: hold."
        )
    inside = float(events[first : supported + 1].sum())
    if inside < FEWEST_EVENTS:
        raise NumericError(
            f"age: a {term.beyond} tail has two parameters, and ages {first} to {supported} hold {inside:g} events, fewer than "
            f"{FEWEST_EVENTS:g}. State an earlier `tail_from`, or use beyond: hold."
        )
    return first, inside


def _constant_from(data: HazardData, supported: int) -> int:
    """Age from which the predicted age effect is constant: a spline's last knot, else the last supported age."""
    for term in data.design.terms:
        if isinstance(term, AgeSpline):
            return min(int(np.ceil(term.knots[-1])), supported)
    return supported


def _baseline(data: HazardData, params: Floats, age: int) -> float:
    """Intercept and age effect at an age."""
    design = data.design
    by_age = design.age_matrix(np.array([age]))[0]
    value = 0.0
    for j in range(design.k):
        if design.labels[j] == INTERCEPT:
            value += float(params[j])
        elif design.index["age"][j] >= 0:
            value += float(params[j] * by_age[design.index["age"][j]])
    return value


class _Window:
    """Rows at the tail's ages, with the linear predictor of everything but intercept and age as offset.

    mean  weighted mean of that offset over these rows; it is taken off, so that the tail is that of the
          average row and does not depend on units or on where a covariate has its zero
    """

    def __init__(self, data: HazardData, params: Floats, first: int, last: int) -> None:
        self._data, self._params, self._first, self._last = data, params, first, last
        rows, design = data.rows, data.design
        self._entry, self._exit = np.maximum(rows.entry, first - 1), np.minimum(rows.exit, last)
        self._cuts = block_cuts(np.maximum(self._exit - self._entry, 0), rows.loan, TAIL_ROWS)
        self._loan, self._period, self._rest = data.offset.copy(), np.zeros(data.periods.shape[0]), []
        for j in range(design.k):
            loan, period, moving = (int(design.index[s][j]) for s in ("loan", "feature", "moving"))
            if design.index["age"][j] >= 0 or design.labels[j] == INTERCEPT:
                continue
            if moving < 0 and period < 0:
                self._loan += params[j] * data.loan_side.column(loan)
            elif moving < 0 and loan < 0:
                self._period += params[j] * data.periods[:, period]
            else:
                self._rest.append(j)
        self._loans = data.loans if self._rest else np.empty((0, 0))
        self.ages = last - first + 1
        self.mean = 0.0
        total = weight = 0.0
        for block in self._blocks():
            total += float((block.weight * block.rest).sum())
            weight += float(block.weight.sum())
        self.mean = total / weight
        self._kept: _Rows | None = None
        self._survived: Floats | None = None
        if data.link.log_hazard:
            self._condense()

    def _blocks(self) -> Iterator[_Rows]:
        rows, design = self._data.rows, self._data.design
        for a, b in zip(self._cuts[:-1], self._cuts[1:], strict=True):
            at = a + np.flatnonzero(self._exit[a:b] > self._entry[a:b])
            stay, age = stay_rows(self._entry[at], self._exit[at])
            stay = at[stay]
            loan, period = rows.loan[stay], rows.origin[stay] + age - rows.first_period
            period = self._data.feature_rows(loan, period)
            rest = self._loan[loan] + self._period[period] - self.mean
            moving = np.empty((stay.size, 0))
            if design.products["moving"] or design.has_offset("moving"):
                place = rows.first_row[stay] + age - rows.entry[stay] - 1
                columns = {name: rows.moving[name][place] for name in design.sources("moving")}
                moving = design.matrix("moving", columns, stay.size, rows.loan_ids[loan])
                rest = rest + design.offset("moving", columns, stay.size)
            for j in self._rest:
                product = np.full(stay.size, self._params[j])
                for side, values, where in (
                    ("loan", self._loans, loan), ("feature", self._data.periods, period), ("moving", moving, None)
                ):  # fmt: skip
                    p = int(design.index[side][j])  # type: ignore[index]
                    if p >= 0:
                        product *= values[:, p] if where is None else values[where, p]
                rest = rest + product
            yield _Rows(
                age - self._first, rest, rows.event[stay] & (age == rows.exit[stay]), rows.weight[stay]
            )

    def _condense(self) -> None:
        """A surviving row of a log hazard enters as -e^rest e^tail(age): one sum per age stands for all of them."""
        survived, kept = np.zeros(self.ages), []
        for block in self._blocks():
            stays = ~block.event
            survived += totals(block.age[stays], (block.weight * np.exp(block.rest))[stays], self.ages)
            kept.append((block.age[block.event], block.rest[block.event], block.weight[block.event]))
        age, rest, weight = (np.concatenate([k[i] for k in kept]) for i in range(3))
        self._kept = _Rows(age, rest, np.ones(age.size, dtype=bool), weight)
        self._survived = survived

    def evaluate(self, tail: Floats) -> _AtAges:
        """At a linear predictor ``tail`` per age."""
        llf, score, information = 0.0, np.zeros(self.ages), np.zeros(self.ages)
        if self._survived is not None:
            with np.errstate(over="ignore"):
                gone = self._survived * np.exp(tail)
            llf, score, information = -float(gone.sum()), -gone, gone.copy()
        link = self._data.link
        for block in self._blocks() if self._kept is None else iter((self._kept,)):
            eta = tail[block.age] + block.rest
            parts = [np.asarray(v) for v in link.survive(eta, "observed")]
            at = np.flatnonzero(block.event)
            for part, value in zip(parts, link.event(eta[at], "observed"), strict=True):
                part[at] = value
            llf += float((block.weight * parts[0]).sum())
            score = score + totals(block.age, block.weight * parts[1], self.ages)
            information = information + totals(block.age, block.weight * parts[2], self.ages)
        return _AtAges(llf, score, information)

    @property
    def at_risk(self) -> float:
        return float(np.maximum(self._exit - self._entry, 0) @ self._data.rows.weight)


def _start(family: str, link: Link, ages: Ints, window: _Window, events: float) -> Floats:
    """The best of a few shapes, each with the scale that gives about the number of events seen."""
    hazard = events / window.at_risk
    middle = 0.5 * float(ages[0] + ages[-1])
    best, best_llf = np.zeros(2), -np.inf
    for shape in (0.7, 1.0, 1.5, 2.5):
        # The hazard at the middle age is shape * H / age (weibull) and less for the log-logistic.
        cumulative = hazard * middle / shape
        power = cumulative if family == "weibull" else np.expm1(min(cumulative, 20.0))
        theta = np.array([np.log(shape), np.log(middle) - np.log(power) / shape])
        tail, _ = tail_curve(family, link.name, ages, *theta)
        llf = window.evaluate(tail).llf
        if np.isfinite(llf) and llf > best_llf:
            best, best_llf = theta, llf
    return best


def _maximise(family: str, ages: Ints, window: _Window, link: Link, theta: Floats) -> tuple[Floats, Floats]:
    """(ln shape, ln scale) and their information; NumericError when there is no maximum to be found."""

    def at(point: Floats) -> tuple[float, Floats, Floats]:
        tail, slope = tail_curve(family, link.name, ages, *point)
        if not (np.isfinite(tail).all() and np.isfinite(slope).all()):
            return -np.inf, np.zeros(2), np.eye(2)
        here = window.evaluate(tail)
        return here.llf, slope.T @ here.score, slope.T @ (slope * here.information[:, None])

    llf, gradient, information = at(theta)
    for _ in range(100):
        if np.linalg.cond(information) > 1e14 or abs(theta[0]) > EXTREME_LOG_SHAPE:
            break
        step = np.linalg.solve(information, gradient)
        if 0.5 * float(gradient @ step) <= DECREMENT * (1.0 + abs(llf)):
            return theta, information
        length = min(1.0, 1.0 / float(np.abs(step).max()))
        while length > 1e-6:
            there = at(theta + length * step)
            if there[0] >= llf - 1e-12 * (1.0 + abs(llf)):
                break
            length *= 0.5
        else:
            break
        theta = theta + length * step
        llf, gradient, information = there
    raise NumericError(
        f"age: the {family} tail on ages {ages[0]} to {ages[-1]} has no maximum likelihood: the search stopped at shape "
        f"{np.exp(theta[0]):.3g}, scale {np.exp(theta[1]):.3g}. The hazard there does not have this form (neither family "
        "falls faster than 1/age); state another `tail_from`, or use beyond: hold."
    )
