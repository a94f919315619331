"""Sums over rows that the covariances on request need: outer products of row scores, information by period."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.sums import RowBlockSums
from stresskit.kernels.blocks import in_order

Floats = NDArray[np.float64]


class RowProducts(RowBlockSums):
    """Row blocks that know more than a fit needs. Cost: once over all rows, k columns squared each."""

    @property
    def n_rows(self) -> int:
        return self._rows.n_rows

    def of_scores(self, params: Floats) -> Floats:
        """(k, k) sum over rows of the outer product of the row's score."""

        def work(b: int) -> Floats:
            block = self._block(b)
            _, score, _ = self._terms(block, params, "observed")
            rows = block.x * (block.weight * score)[:, None]
            out: Floats = rows.T @ rows
            return out

        total = np.zeros((self.k, self.k))
        for part in in_order(work, self.blocks, self._threads):
            total = total + part
        return total

    def by_period(self, params: Floats) -> Floats:
        """(periods, k, k) observed information of every calendar period from the first at risk to the last."""
        size, k = self._rows.by_period()[0].size, self.k

        def work(b: int) -> tuple[NDArray[np.int64], Floats]:
            block = self._block(b)
            _, _, information = self._terms(block, params, "observed")
            order = np.argsort(block.period, kind="stable")
            period, x = block.period[order], block.x[order]
            weighted = x * (block.weight * information)[order, None]
            first = np.flatnonzero(np.concatenate(([True], period[1:] != period[:-1])))
            edges = [*first.tolist(), period.size]
            parts = np.empty((first.size, k, k))
            for g, (a, z) in enumerate(pairwise(edges)):
                parts[g] = x[a:z].T @ weighted[a:z]
            return period[first], parts

        total = np.zeros((size, k, k))
        for at, parts in in_order(work, self.blocks, self._threads):
            total[at] += parts
        return 0.5 * (total + total.transpose(0, 2, 1))
