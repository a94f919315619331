"""What a model says of a past book: given who was still under observation, and rolled forward from the cut-off."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stresskit.analyses.observed import Observed
from stresskit.analyses.past_cells import PastCells
from stresskit.core.values import FeatureTable, Portfolio, RiskSet, ScenarioPath
from stresskit.evidence.rows import FitRows, fit_rows, window
from stresskit.hazard.result import HazardFit
from stresskit.kernels.blocks import processors
from stresskit.loss.book import Route, prepare_book
from stresskit.loss.result import LossResult
from stresskit.runs.setting import Setting
from stresskit.spec.study import ConstantLgd

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, eq=False)
class Given:
    """Of one cause, given who was under observation: the sum of the hazard over the rows that were seen.

    expected, at_risk  (cells, H)
    llf                (H,) log-likelihood of the rows of each period
    variance           (H,) binomial
    jacobian           (H, k) derivative of a period's expected exits by the coefficients; None without a fit
    """

    expected: Floats
    at_risk: Floats
    llf: Floats
    variance: Floats
    jacobian: Floats | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Rolled:
    """Rolled forward from the cut-off, nothing after it known but the path.

    flows         cause -> (cells, H) expected exits
    pd, pd_year   (n,) probability of default within H steps, and within a year
    amount, loss  (cells, H) exposure at default and loss, not discounted; None without money
    """

    flows: Mapping[str, Floats]
    pd: Floats
    pd_year: Floats
    amount: Floats | None = None
    loss: Floats | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Said:
    """A model's name, and what it says of each cause it knows."""

    name: str
    given: Mapping[str, Given]
    rolled: Rolled


def roll(
    setting: Setting, book: Portfolio, path: ScenarioPath, code: Ints, count: int, *, money: bool = True
) -> LossResult:
    """Losses of some loans of the study along a path, summed by cells of the caller's; without ``money`` exits alone."""
    study = setting.file.study
    loss = study.loss if money else study.loss.model_copy(update={"lgd": ConstantLgd(constant=0.0)})
    own = prepare_book(book, setting.fits, loss, cells=code, n_cells=count, cap=study.horizon)
    part = replace(setting, book=own)
    features = part.features(path)
    contracts, lgd = part.terms(path, features)
    if not money:
        lgd = None
    return part.book.along([Route(features, contracts, None, lgd)], threads=processors())[0]


def rolled(
    setting: Setting,
    book: Portfolio,
    path: ScenarioPath,
    cells: PastCells,
    steps: int,
    *,
    money: bool = True,
) -> Rolled:
    """Roll-forward under the setting's own fits. Shorter lives than ``steps`` leave zeros."""
    found = roll(setting, book, path, cells.code, cells.count, money=money)

    def wide(name: str) -> Floats:
        out = np.zeros((cells.count, steps))
        short = found.cells[name][:, :steps]
        out[:, : short.shape[1]] = short
        return out

    flows = {cause: wide(cause) for cause in setting.fits}
    year = np.minimum(found.loans["pd_12m"], found.loans["pd_lifetime"])
    amounts = (wide("default_amount"), wide("el")) if money else (None, None)
    return Rolled(flows, found.loans["pd_lifetime"], year, *amounts)


def given(fit: HazardFit, seen: Observed, features: FeatureTable, cells: PastCells) -> Given:
    """The fit on the rows that were under observation, with the macro values that came.

    Raises DataError for a level that the fit has not seen.
    """
    rows = fit_rows(fit, seen.risk_set, features, as_predicted=True)
    place = np.searchsorted(seen.book.loan_ids, rows.rows.loan_ids)
    code = cells.code[place]
    h, first = seen.steps, rows.first_period - seen.book.as_of - 1
    expected, at_risk = np.zeros(cells.count * h), np.zeros(cells.count * h)
    llf, variance, jacobian = np.zeros(h), np.zeros(h), np.zeros((h, rows.k))
    for b in rows.blocks():
        step = b.period + first
        cell = code[b.loan] * h + step
        at_risk += np.bincount(cell, b.weight, cells.count * h)
        expected += np.bincount(cell, b.weight * b.p, cells.count * h)
        llf += np.bincount(step, b.weight * log_likelihood(rows, b.eta, b.event), h)
        variance += np.bincount(step, b.variance, h)
        slope = b.weight * rows.scores(b)[1]
        for j in range(rows.k):
            jacobian[:, j] += np.bincount(step, b.x[:, j] * slope, h)
    return Given(expected.reshape(-1, h), at_risk.reshape(-1, h), llf, variance, jacobian)


def log_likelihood(rows: FitRows, eta: Floats, event: NDArray[np.bool_]) -> Floats:
    """(n,) of single rows."""
    link = rows.fit.link
    out = link.survive(eta, "observed")[0].copy()
    at = np.flatnonzero(event)
    out[at] = link.event(eta[at], "observed")[0]
    return out


def of_fits(
    name: str, setting: Setting, seen: Observed, path: ScenarioPath, cells: PastCells, *, money: bool = True
) -> Said:
    """What fitted hazards say along a path; ``setting`` is the past study under these fits."""
    features = setting.features(path)
    known = {cause: given(fit, seen, features, cells) for cause, fit in setting.fits.items()}
    flows = rolled(setting, seen.book, path, cells, seen.steps, money=money)
    return Said(name, known, flows)


# ---- rates by segment


def segment_rates(
    risk_set: RiskSet,
    segments: tuple[str, ...],
    book: Portfolio,
    cells: PastCells,
    causes: tuple[str, ...],
    *,
    last_year: bool,
) -> Mapping[str, Floats]:
    """cause -> (cells,) exits per row at risk of that cause in the cell's segment, up to the cut-off.

    Half an exit and one row are added, so that a segment without exits is not called safe for certain: (D + 1/2) / (n + 1).
    A segment without rows gets the rate of all loans.

    last_year  only the last year before the cut-off
    """
    per_year = risk_set.frequency.per_year
    rows = window(risk_set, first=book.as_of - per_year + 1, last=book.as_of) if last_year else risk_set
    size = len(cells.segment_labels)
    at = _segment_of(rows, segments, book, cells)
    used = at >= 0
    length = ((rows.stay_exit - rows.stay_entry) * rows.weight).astype(np.float64)
    out = {}
    exits = np.zeros((len(rows.causes) + 1, size + 1))
    for k in range(1, len(rows.causes) + 1):
        mine = (rows.stay_cause == k) & used
        exits[k, :size] = np.bincount(at[mine], rows.weight[mine], size)
        exits[k, size] = rows.weight[rows.stay_cause == k].sum()
    n = np.append(np.bincount(at[used], length[used], size), length.sum())
    for cause in causes:
        k = rows.causes.index(cause) + 1
        of_cause = n - (exits[1:].sum(axis=0) - exits[k])
        rate = (exits[k] + 0.5) / (of_cause + 1.0)
        rate = np.where(n > 0, rate, rate[size])
        out[cause] = rate[cells.segment]
    return out


def _segment_of(rows: RiskSet, segments: tuple[str, ...], book: Portfolio, cells: PastCells) -> Ints:
    """(stays,) place of a stay's segment among those of the cells, -1 for a segment that the book does not have."""
    if not segments:
        return np.zeros(rows.stay_loan.size, dtype=np.int64)
    places, first = np.unique(cells.segment[cells.code], return_index=True)
    mine = [book.static[s].astype(str)[first] for s in segments]
    known = {tuple(map(str, k)): int(c) for c, k in zip(places, zip(*mine, strict=True), strict=True)}
    columns = [rows.static[s].astype(str) for s in segments]
    keys, inverse = np.unique(np.stack(columns, axis=1), axis=0, return_inverse=True)
    place = np.array([known.get(tuple(map(str, k)), -1) for k in keys], dtype=np.int64)
    out: Ints = place[inverse.ravel()][rows.stay_loan]
    return out


def of_rates(name: str, rates: Mapping[str, Floats], seen: Observed, cells: PastCells) -> Said:
    """What constant rates by cell say."""
    h, steps = np.arange(1, seen.steps + 1), seen.steps
    ends = np.zeros((cells.count, steps))
    np.add.at(ends, (cells.code, seen.end - 1), seen.book.counts)
    there = ends[:, ::-1].cumsum(axis=1)[:, ::-1]
    exits = {c: seen.counts(c, cells.code, cells.count) for c in seen.causes}
    known = {}
    for cause, rate in rates.items():
        others = sum((exits[c] for c in seen.causes if c != cause), np.zeros_like(there))
        n, d, p = there - others, exits[cause], rate[:, None]
        llf = (d * np.log(p) + (n - d) * np.log1p(-p)).sum(axis=0)
        known[cause] = Given(n * p, n, llf, (n * p * (1.0 - p)).sum(axis=0))
    odds = {c: r / (1.0 - r) for c, r in rates.items()}
    total = 1.0 + sum(odds.values(), np.zeros(cells.count))
    before = total[:, None] ** -(h[None, :] - 1.0)
    life = np.zeros((cells.count, steps))
    np.add.at(life, (cells.code, np.minimum(seen.book.remaining, steps) - 1), seen.book.counts)
    alive = life[:, ::-1].cumsum(axis=1)[:, ::-1]
    flow = {c: before * (o / total)[:, None] for c, o in odds.items()}
    cumulative = flow["default"].cumsum(axis=1)
    last = np.minimum(seen.book.remaining, steps) - 1
    year = np.minimum(last, seen.book.frequency.per_year - 1)
    return Said(
        name, known,
        Rolled({c: f * alive for c, f in flow.items()}, cumulative[cells.code, last], cumulative[cells.code, year]),
    )  # fmt: skip
