"""Rows at risk of a fit, a block at a time: design, linear predictor, probability, event; and windows in time."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError
from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard.at_risk import CauseRows, cause_rows
from stresskit.hazard.link import Link
from stresskit.hazard.result import HazardFit
from stresskit.hazard.sums import HazardData, hazard_data
from stresskit.hazard.terms import SIDES, Side
from stresskit.kernels.blocks import block_cuts, stay_rows

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Rows whose design is held in memory at one time.
BLOCK_ROWS = 1 << 17
#: Where the hazard is e^eta, P from here on is 1 and 1 - P, an event's score and the expected information are 0, all
#: exactly so in double precision: e^-e^eta is 0 from eta = 6.7 on.
_SATURATED = 30.0
#: Where the hazard is e^eta, survival beyond this has no log-likelihood that sums and products of it can hold.
IMPOSSIBLE = 300.0


@dataclass(frozen=True, slots=True, eq=False)
class Block:
    """Rows of consecutive stays.

    x (n, k) design; eta, p (n,) linear predictor and probability; event (n,) bool; weight (n,)
    stay, loan, age (n,); period (n,) counted from the first period at risk
    """

    x: Floats
    eta: Floats
    p: Floats
    event: NDArray[np.bool_]
    weight: Floats
    stay: Ints
    loan: Ints
    age: Ints
    period: Ints

    @property
    def variance(self) -> Floats:
        """Binomial variance of the event, with weights as counts."""
        return self.weight * self.p * (1.0 - self.p)


def within_reach(link: Link, eta: Floats) -> Floats:
    """``eta`` for what is constant where the link saturates, so that e^eta stays finite; not for rows that survived."""
    return np.minimum(eta, _SATURATED) if link.log_hazard else eta


def survives_the_certain(link: Link, eta: Floats, event: NDArray[np.bool_]) -> bool:
    """Whether a row survived where the hazard is beyond e^IMPOSSIBLE: no log-likelihood to speak of."""
    return link.log_hazard and bool(np.any((eta > IMPOSSIBLE) & ~event))


def estimated_covariance(fit: HazardFit, kind: str) -> Floats:
    """(k, k) covariance with 0 for coefficients held at their bound: they were not estimated and do not move with the data."""
    out = fit.cov_params(kind).to_numpy().copy()
    held = np.isin(np.array(fit.design.labels), np.array(fit.at_bound, dtype=str))
    out[held, :] = 0.0
    out[:, held] = 0.0
    return out


@dataclass(frozen=True, slots=True, eq=False)
class FitRows:
    """The rows of a fit's cause, seen through the fit's frozen design.

    tables  side -> the side's products per loan, per age (index = age), per key and period at risk
    beyond  what the fit's tail adds to the linear predictor, index = age; None where nothing is added
    """

    fit: HazardFit
    data: HazardData
    frequency: Frequency
    tables: Mapping[Side, Floats]
    beyond: Floats | None = None

    @property
    def rows(self) -> CauseRows:
        return self.data.rows

    @property
    def n_periods(self) -> int:
        return self.data.n_periods

    @property
    def first_period(self) -> int:
        return self.rows.first_period

    @property
    def k(self) -> int:
        return self.fit.design.k

    def row_tables(self, stay: Ints, age: Ints) -> tuple[Floats, Floats]:
        """(design (n, k), linear predictor (n,)) of any rows at risk, named by stay and age."""
        rows, design = self.rows, self.fit.design
        loan = rows.loan[stay]
        at: dict[Side, Ints] = {
            "loan": loan,
            "age": age,
            "feature": self.data.feature_rows(loan, rows.origin[stay] + age - self.first_period),
            "moving": np.arange(stay.size),
        }
        tables, offset = dict(self.tables), self.data.offset[loan]
        if design.products["moving"] or design.has_offset("moving"):
            place = rows.first_row[stay] + age - rows.entry[stay] - 1
            columns = {name: rows.moving[name][place] for name in design.sources("moving")}
            tables["moving"] = design.matrix("moving", columns, stay.size, rows.loan_ids[loan])
            offset = offset + design.offset("moving", columns, stay.size)
        x = np.ones((stay.size, self.k), order="F")
        for side in SIDES:
            for j, p in enumerate(design.index[side]):
                if p >= 0:
                    x[:, j] *= tables[side][:, p][at[side]]
        eta = x @ self.fit.coefficients + offset
        return x, eta if self.beyond is None else eta + self.beyond[age]

    def blocks(self, target: int = BLOCK_ROWS) -> Iterator[Block]:
        """All rows, loan after loan, in blocks of about ``target`` rows."""
        rows = self.rows
        cuts = block_cuts(rows.exit - rows.entry, rows.loan, target)
        for low, high in pairwise(cuts.tolist()):
            stay, age = stay_rows(rows.entry[low:high], rows.exit[low:high])
            stay = stay + low
            x, eta = self.row_tables(stay, age)
            event = rows.event[stay] & (age == rows.exit[stay])
            period = rows.origin[stay] + age - self.first_period
            p = self.fit.link.probability(within_reach(self.fit.link, eta))
            yield Block(x, eta, p, event, rows.weight[stay], stay, rows.loan[stay], age, period)

    def scores(self, block: Block) -> tuple[Floats, Floats]:
        """(d log-likelihood / d eta, d probability / d eta) of each row, unweighted."""
        link = self.fit.link
        survive = link.survive(block.eta, "observed")[1]
        score = survive.copy()
        at = np.flatnonzero(block.event)
        score[at] = link.event(block.eta[at], "observed")[1]
        # A row without event has log-likelihood log(1 - p), so its score is -(dp/deta) / (1 - p).
        slope: Floats = -survive * (1.0 - block.p)
        return score, slope


def fit_rows(
    fit: HazardFit, risk_set: RiskSet, features: FeatureTable | None = None, *, as_predicted: bool = False
) -> FitRows:
    """Rows of ``risk_set`` at risk of the fit's cause with every feature known.

    as_predicted  ages past the last supported one follow the fit's rule, as in a projection; else they count as they are,
                  as in the fit itself

    Raises DataError or UsageError as the fit itself does for columns, levels or features that are not there.
    """
    rows = cause_rows(risk_set, fit.cause, features, fit.design.features)
    data = hazard_data(fit.design, rows, features, fit.link)
    ages = np.arange(rows.largest_age + 1)
    beyond = None if fit.tail is None or not as_predicted else fit.tail.shift(ages.clip(min=1))
    tables: dict[Side, Floats] = {
        "loan": data.loans,
        "age": fit.design.age_matrix(ages.clip(min=1, max=fit.supported_age if as_predicted else None)),
        "feature": data.periods,
        "moving": np.empty((0, 0)),
    }
    return FitRows(fit, data, risk_set.frequency, tables, beyond)


def window(risk_set: RiskSet, *, first: int | None = None, last: int | None = None) -> RiskSet:
    """The rows of ``risk_set`` in periods first .. last (ordinals, both included; None: open).

    A stay cut at the end is censored there, one cut at the start enters late. Raises DataError when
    no row is left.
    """
    origin, entry, exit_ = risk_set.stay_origin, risk_set.stay_entry, risk_set.stay_exit
    low = entry if first is None else np.maximum(entry, first - 1 - origin)
    high = exit_ if last is None else np.minimum(exit_, last - origin)
    keep = high > low
    if not keep.any():
        raise DataError("no row at risk lies in the window of periods asked for")
    moving: dict[str, NDArray[Any]] = {}
    if risk_set.moving:
        stay, age = stay_rows(entry, exit_)
        inside = (age > low[stay]) & (age <= high[stay])
        moving = {name: column[inside] for name, column in risk_set.moving.items()}
    return replace(
        risk_set,
        stay_loan=risk_set.stay_loan[keep],
        stay_origin=origin[keep],
        stay_entry=low[keep],
        stay_exit=high[keep],
        stay_cause=np.where(high < exit_, 0, risk_set.stay_cause)[keep],
        weight=risk_set.weight[keep],
        moving=moving,
    )
