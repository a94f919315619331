"""What a reverse stress test drives to a threshold: a loss, the PD of a segment, the use of a capital figure."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import partial

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import UsageError
from stresskit.core.values import ScenarioPath
from stresskit.kernels.blocks import processors
from stresskit.loss.result import LossResult
from stresskit.runs.contracts import moving_now
from stresskit.runs.recovery import lgd_in_default
from stresskit.runs.setting import Setting
from stresskit.runs.year_setup import year_view
from stresskit.runs.years import YearView
from stresskit.spec.base import meant
from stresskit.spec.reverse import CapitalUse, Reverse
from stresskit.spec.study import RecoveryLgd

Floats = NDArray[np.float64]

#: Paths that go through the book together.
BATCH = 8


@dataclass(slots=True, eq=False)
class Measured:
    """A figure of a path that can be driven up, and its threshold.

    what       in words: "lifetime expected loss", for the answer
    share      whether it is a share, written in percent, or an amount
    of         paths -> figures, one projection each
    threshold  the figure to reach; NaN until it is known
    count      projections made so far
    """

    what: str
    share: bool
    of: Callable[[Sequence[ScenarioPath]], Floats]
    threshold: float = float("nan")
    count: int = 0

    def __call__(self, paths: Sequence[ScenarioPath]) -> Floats:
        """(m,) figures of the paths."""
        out = []
        for first in range(0, len(paths), BATCH):
            part = paths[first : first + BATCH]
            out.append(self.of(part))
            self.count += len(part)
        return np.concatenate(out) if out else np.zeros(0)

    def words(self, value: float) -> str:
        return f"{100 * value:.2f}%" if self.share else f"{value:,.0f}"


def measured(setting: Setting, spec: Reverse) -> Measured:
    """The figure that a section asks for, its threshold where it does not depend on the reference scenario.

    Raises UsageError for a segment that is not there and for capital without the section capital.
    """
    if spec.capital is not None:
        return _capital(setting, spec.capital)
    mask, where = segment_mask(setting, spec.segment)
    if spec.pd_12m is not None:
        name, what, share = "pd_12m", f"mean 12-month PD of {where}", True
    elif spec.loss == "12m":
        name, what, share = "el_12m", f"expected loss of the next 12 months of {where}", False
    else:
        name, what, share = "el_lifetime", f"lifetime expected loss of {where}", False
    counts = setting.portfolio.counts[mask] if share else None
    divisor = 1.0 if counts is None else float(counts.sum())

    def of(paths: Sequence[ScenarioPath]) -> Floats:
        return np.array([_sum(r, name, mask, counts) / divisor for r in setting.along(paths)])

    given = spec.pd_12m if share else spec.el
    return Measured(what, share, of, float("nan") if given is None else float(given))


def _sum(result: LossResult, name: str, mask: NDArray[np.bool_], counts: Floats | None) -> float:
    """Sum of a measure over loans; with ``counts`` of a probability over all loans for which they stand."""
    values = result.loans[name][mask]
    return float((values if counts is None else values * counts).sum())


def segment_mask(setting: Setting, segment: Mapping[str, str]) -> tuple[NDArray[np.bool_], str]:
    """(n,) loans of a segment, and what it is called. Raises UsageError for a column or value that is not there."""
    book = setting.portfolio
    mask = np.ones(book.n_loans, dtype=np.bool_)
    known = sorted(book.static)
    for column, value in segment.items():
        if column not in book.static:
            raise UsageError(
                f"segment: the book has no column {column!r}{meant(column, known)} (columns: {', '.join(known)})"
            )
        found = book.static[column].astype(str)
        values = sorted({str(x) for x in found})
        if value not in values:
            told = f"{', '.join(values[:12])}{' ...' if len(values) > 12 else ''}"
            raise UsageError(
                f"segment: no loan has {column} {value!r}{meant(value, values)} (values: {told})"
            )
        mask &= found == value
    if not mask.any():
        raise UsageError(f"segment: no loan has {_told(segment)} together")
    return mask, _told(segment) if segment else "the whole book"


def _told(segment: Mapping[str, str]) -> str:
    return " and ".join(f"{c} {v}" for c, v in segment.items())


def _capital(setting: Setting, spec: CapitalUse) -> Measured:
    """Losses up to a year end plus what is asked for the risk-weighted amount then, over the capital figure; worst year end."""
    study, data = setting.file.study, setting.data
    if study.capital is None:
        raise UsageError(
            "a capital threshold needs risk-weighted amounts, and the study has no section capital: add one (see capital.md), or "
            "give a loss"
        )
    known: dict[str, ScenarioPath] = {p.name: p for p in data.paths}
    in_default = None
    if setting.recovery is not None and isinstance(study.loss.lgd, RecoveryLgd):
        in_default = partial(lgd_in_default, setting.recovery, study.loss.lgd)
    empty = year_view(
        study, data.loans, setting.fits, data.features, lambda n: setting.features(known[n]), tuple(known),
        moving=moving_now(study, setting.portfolio, data.history, data.paths[0]), lgd_in_default=in_default,
    )  # fmt: skip
    assert empty is not None

    def of(paths: Sequence[ScenarioPath]) -> Floats:
        view = replace(empty, standing=None, _open={}, cells={}, held={})
        names = [f"path {k}" for k in range(len(paths))]
        routes = [setting.route(p, on_years=view.sink(n)) for n, p in zip(names, paths, strict=True)]
        found = setting.book.along(routes, years=view.edges.tolist(), threads=processors())
        for name, result in zip(names, found, strict=True):
            view.close(name, result.loans)
        return _uses(view, names, spec)

    return Measured("use of capital", True, of, spec.use)


def _uses(view: YearView, names: Sequence[str], spec: CapitalUse) -> Floats:
    table = view.table(dict.fromkeys(names))
    table = table[table["by"] == ""]
    out = []
    for name in names:
        rows = table[table["scenario"] == name]
        lost = rows["loss"].fillna(0.0).cumsum().to_numpy(dtype=float)
        asked = spec.ratio * rows["rwa"].to_numpy(dtype=float)
        out.append(float((lost + asked).max()) / spec.amount)
    return np.array(out)
