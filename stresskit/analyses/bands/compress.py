"""A book in which few loans stand for many: those alike in what the projection of all of them says.

Loans are laid out by their own figures along the centre paths (12-month and lifetime PD, loss rate, repayment), age,
remaining term and what each loan column adds to a hazard, all in units of a relative change of loss. Within each finest
segment the box with the largest weighted variance is halved at its mean, again and again (a k-d tree), until there are as
many boxes as asked for or loans in a box do not differ at all: equal loans collapse without error. A box is represented
by the real loan nearest to its mean (of the age that its part of the book favours), with two factors: for how many loans it
stands, so that the sum of lifetime PDs in the reference scenario is exact, and a scale of its amounts, so that the sum of
lifetime losses is. Both are then moved as little as possible so that loan columns keep their weighted means.

Where the book has counts, an entry that stands for several loans weighs as much as they would, each by itself; the boxes
are then those of the loans written out.
"""

from __future__ import annotations

import heapq
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import Portfolio
from stresskit.loss.book import prepare_book
from stresskit.loss.result import LossResult
from stresskit.runs.setting import Setting
from stresskit.spec.exposure import CollateralLgd
from stresskit.spec.moving import BalanceOverValue

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_TINY = 1e-300
#: Boxes to an age, about: lanes are worked on by eights, so fewer would leave some of them empty.
LANES_FULL = 14


@dataclass(frozen=True, slots=True, eq=False)
class Stand:
    """loan (r,) which loans stand for others; weight (r,) for how many; scale (r,) of their amounts.

    Where the book has counts, ``loan`` is an entry with all its loans and their amounts, and ``weight`` a number of such.
    """

    loan: Ints
    weight: Floats
    scale: Floats


def layout(setting: Setting, centre: Sequence[LossResult]) -> Floats:
    """(n, d) where each loan lies; see the module."""
    book = setting.portfolio
    columns = [np.log(book.remaining.astype(np.float64)), 0.5 * np.log1p(book.age.astype(np.float64))]
    for found in centre:
        loans = found.loans
        columns += [_log(loans["pd_12m"]), _log(loans["pd_lifetime"]), loans["payoff_lifetime"]]
        columns.append(
            _log(
                np.divide(
                    loans["el_lifetime"], book.balance, out=np.zeros(book.n_loans), where=book.balance > 0
                )
            )
        )
    for fit in setting.fits.values():
        side = fit.loan_columns_of(book.static, book.n_loans, book.loan_ids)
        columns += [fit.coefficients[j] * c for j, c in zip(side.at, side.columns, strict=True)]
        columns += list(side.U.T)
    columns.append(book.rate)
    return np.column_stack(columns)


def _log(x: Floats) -> Floats:
    floor = x[x > 0.0].min(initial=1.0)
    return np.asarray(np.log(np.maximum(x, floor)))


def boxes(x: Floats, weight: Floats, parts: Ints, count: int) -> list[Ints]:
    """Loans of each box: every part at least one, ``count`` boxes where loans differ in so many ways."""
    heap: list[tuple[float, int, int, Ints]] = []
    serial, done = 0, list[Ints]()

    def add(loans: Ints) -> None:
        nonlocal serial
        cost, axis = _spread(x[loans], weight[loans])
        if cost <= 0.0 or loans.size < 2:
            done.append(loans)
        else:
            heapq.heappush(heap, (-cost, serial, axis, loans))
        serial += 1

    order = np.argsort(parts, kind="stable").astype(np.int64)
    for part in np.split(order, np.flatnonzero(np.diff(parts[order])) + 1):
        add(part)
    while heap and len(heap) + len(done) < count:
        _, _, axis, loans = heapq.heappop(heap)
        values = x[loans, axis]
        left = values <= _middle(values, weight[loans])
        if left.all():
            left = values < values.max()
        add(loans[left])
        add(loans[~left])
    return sorted(done + [h[3] for h in heap], key=lambda loans: int(loans[0]))


def _middle(values: Floats, weight: Floats) -> float:
    return float((values * weight).sum() / weight.sum())


def _spread(x: Floats, weight: Floats) -> tuple[float, int]:
    """(weighted sum of squares of the axis that spreads most, that axis); 0 where all loans are equal."""
    if not np.ptp(x, axis=0).any():
        return 0.0, 0
    mean = np.einsum("ij,i->j", x, weight) / weight.sum()
    square = np.einsum("ij,i->j", (x - mean) ** 2, weight)
    square[np.ptp(x, axis=0) == 0.0] = 0.0
    axis = int(np.argmax(square))
    return float(square[axis]), axis


def _defaults(setting: Setting, reference: LossResult) -> Floats:
    """(n,) expected lifetime defaults among the loans that each entry stands for."""
    return np.asarray(reference.loans["pd_lifetime"] * setting.portfolio.counts)


def importance(setting: Setting, reference: LossResult) -> Floats:
    """(n,) what an error in a loan costs: its share of loss and of defaults, small segments counting more per unit."""
    out = np.zeros(setting.portfolio.n_loans)
    for measure in (reference.loans["el_lifetime"], _defaults(setting, reference)):
        value = measure + _TINY
        share = value / value.sum()
        of_cell = np.bincount(setting.cells.codes, weights=share, minlength=setting.cells.count)
        out += share / np.sqrt(of_cell[setting.cells.codes])
    return np.asarray(out)


def _age_parts(setting: Setting, weight: Floats, count: int) -> tuple[Ints, NDArray[np.bool_]]:
    """(part of each loan, whether it has its part's favoured age).

    A part is a cell and a range of ages, of about equal weight, wide enough for LANES_FULL boxes each: representatives
    that share an age share lanes and tables, and a table row for each of many ages is what a small book would cost most.
    """
    cells, age = setting.cells.codes, setting.portfolio.age
    order = np.lexsort((age, cells))
    part, favoured = np.empty(age.size, np.int64), np.zeros(age.size, np.bool_)
    total, serial = float(weight.sum()), 0
    for loans in np.split(order, np.flatnonzero(np.diff(cells[order])) + 1):
        own = float(weight[loans].sum())
        bins = max(1, round(count * own / total / LANES_FULL))
        ages, place = np.unique(age[loans], return_inverse=True)
        by_age = np.bincount(place, weights=weight[loans])
        group = np.minimum(((np.cumsum(by_age) - 0.5 * by_age) / own * bins).astype(np.int64), bins - 1)
        for g in np.unique(group):
            mine = np.flatnonzero(group == g)
            best = int(mine[np.argmax(by_age[mine])])
            here = loans[np.isin(place, mine)]
            part[here] = serial
            favoured[here] = age[here] == ages[best]
            serial += 1
    return part, favoured


def stand(setting: Setting, x: Floats, weight: Floats, reference: LossResult, count: int) -> Stand:
    """Which loans stand for which, in about ``count`` boxes."""
    parts, favoured = _age_parts(setting, weight, count)
    found = boxes(x, weight, parts, count)
    defaults, el, counts = (
        _defaults(setting, reference),
        reference.loans["el_lifetime"],
        setting.portfolio.counts,
    )
    loan, number, scale = np.empty(len(found), np.int64), np.empty(len(found)), np.ones(len(found))
    scales = amounts(setting) is not None
    for k, loans in enumerate(found):
        here, w = x[loans], weight[loans]
        mean = np.einsum("ij,i->j", here, w) / w.sum()
        apart = ((here - mean) ** 2).sum(axis=1)
        if favoured[loans].any():
            apart = np.where(favoured[loans], apart, np.inf)
        loan[k] = one = loans[int(np.argmin(apart))]
        whole = defaults if defaults[one] > 0.0 else counts
        number[k] = whole[loans].sum() / whole[one]
        if scales and el[one] > 0.0:
            scale[k] = el[loans].sum() / (number[k] * el[one])
    equal = all(not np.ptp(x[loans], axis=0).any() for loans in found)
    chosen = Stand(loan, number, scale)
    return chosen if equal else _calibrated(setting, chosen, defaults, el)


def _calibrated(setting: Setting, chosen: Stand, defaults: Floats, el: Floats) -> Stand:
    """The same loans with numbers and scales such that in each cell the loan columns have their means over all loans.

    Weighted by lifetime defaults for numbers and by lifetime loss for scales: to first order that is how figures answer to
    coefficients. Least change of the weights (linear calibration: Deville & Saerndal 1992, JASA 87).
    """
    columns = _loan_terms(setting)
    if not columns.shape[1]:
        return chosen
    cells, number, scale = setting.cells.codes, chosen.weight.copy(), chosen.scale.copy()
    scales = amounts(setting) is not None
    for cell in np.unique(cells):
        everyone, mine = np.flatnonzero(cells == cell), np.flatnonzero(cells[chosen.loan] == cell)
        if mine.size < 4 * (columns.shape[1] + 1):
            continue
        whole, few = columns[everyone], columns[chosen.loan[mine]]
        change = _least_change(number[mine] * defaults[chosen.loan[mine]], few, defaults[everyone], whole)
        number[mine] *= change
        if scales:
            loss = number[mine] * scale[mine] * el[chosen.loan[mine]]
            scale[mine] *= _least_change(loss, few, el[everyone], whole)
    return Stand(chosen.loan, number, scale)


def _least_change(mine: Floats, few: Floats, theirs: Floats, whole: Floats) -> Floats:
    """(m,) factors g near 1 with sum of g mine (1, few) = sum of theirs (1, whole)."""
    centre = np.einsum("i,ij->j", theirs, whole) / max(float(theirs.sum()), _TINY)
    c = np.column_stack([np.ones(mine.size), few - centre])
    target = np.concatenate([[theirs.sum()], np.zeros(few.shape[1])])
    gap = target - np.einsum("i,ij->j", mine, c)
    system = np.einsum("ij,i,ik->jk", c, mine, c)
    solved = np.linalg.lstsq(system, gap, rcond=1e-10)[0]
    return np.asarray(np.clip(1.0 + np.einsum("ij,j->i", c, solved), 0.25, 4.0))


def _loan_terms(setting: Setting) -> Floats:
    """(n, j) distinct loan columns of all hazards, those of recovery included, that vary; and the default hazard's age
    terms, where the loan stands a year on."""
    book, year = setting.portfolio, setting.file.frequency.per_year
    found: list[Floats] = []
    fit = setting.fits["default"]
    known, place = np.unique(np.minimum(book.age + year, fit.supported_age).clip(min=1), return_inverse=True)
    found += [c for c in fit.design.age_matrix(known)[np.ravel(place)].T if np.ptp(c) > 0.0]
    for fit in setting.fitted.values():
        side = fit.loan_columns_of(book.static, book.n_loans, book.loan_ids)
        for column in (*side.columns, *side.U.T):
            if np.ptp(column) > 0.0 and not any(np.array_equal(column, other) for other in found):
                found.append(column)
    return np.column_stack(found) if found else np.zeros((book.n_loans, 0))


def amounts(setting: Setting) -> tuple[str, ...] | None:
    """Loan columns that are scaled with the balance, each once; None where amounts cannot be scaled without moving something else."""
    study = setting.file.study
    columns = []
    for column in study.moving_in_use.values():
        if not isinstance(column, BalanceOverValue):
            return None
        columns.append(column.balance_over_value.value)
    if study.rates is not None or not study.loss.exposure.plain:
        return None
    if isinstance(study.loss.lgd, CollateralLgd):
        columns.append(study.loss.lgd.collateral.value)
    read = {name for fit in setting.fitted.values() for name in fit.loan_columns}
    return None if read & set(columns) else tuple(dict.fromkeys(columns))


def compressed(setting: Setting, chosen: Stand) -> Setting:
    """The setting with these loans instead of all."""
    book, scale = setting.portfolio, chosen.scale
    static = {name: column[chosen.loan] for name, column in book.static.items()}
    for name in amounts(setting) or ():
        static[name] = np.asarray(static[name], dtype=np.float64) * scale
    small = Portfolio(
        book.frequency, book.as_of, book.loan_ids[chosen.loan], book.age[chosen.loan], book.remaining[chosen.loan],
        book.balance[chosen.loan] * scale, book.rate[chosen.loan], static,
        None if book.count is None else book.count[chosen.loan],
    )  # fmt: skip
    cells = replace(setting.cells, codes=setting.cells.codes[chosen.loan])
    ready = prepare_book(
        small, setting.fits, setting.file.study.loss, cells=cells.codes, n_cells=cells.count,
        cap=setting.file.study.horizon, weight=chosen.weight,
    )  # fmt: skip
    loans = replace(setting.data.loans, portfolio=small)
    return replace(setting, data=replace(setting.data, loans=loans), cells=cells, book=ready)


def snapped(portfolio: Portfolio, columns: Sequence[str], levels: int = 12) -> Portfolio:
    """The book with numbers in these columns put to the means of ``levels`` groups of about equal size."""
    static: dict[str, NDArray[np.float64]] = {}
    for name in columns:
        column = portfolio.static.get(name)
        if column is None or column.dtype.kind not in "fiu" or np.unique(column).size <= levels:
            continue
        values = np.asarray(column, dtype=np.float64)
        group = (np.argsort(np.argsort(values, kind="stable"), kind="stable") * levels) // values.size
        mean = np.bincount(group, weights=values) / np.bincount(group)
        static[name] = mean[group]
    if not static:
        return portfolio
    together: Mapping[str, NDArray[np.generic]] = {**portfolio.static, **static}
    return replace(portfolio, static=together)
