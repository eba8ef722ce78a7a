"""Rows held in memory: exact columns and BLAS, for up to some ten thousand rows.

The columns of the group set apart are kept as each row sees them, so that many levels cost little.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import scipy.sparse

from addmodel.matrix import DesignMatrix, IntArray, Layout
from addmodel.posterior import Posterior
from addmodel.rows.base import Gram, Rows
from addmodel.spaces.base import FloatArray


@dataclass(frozen=True)
class DenseRows(Rows):
    """All rows in memory."""

    matrix: DesignMatrix

    @property
    def layout(self) -> Layout:
        return self.matrix.layout

    def gram(self, weight: FloatArray) -> Gram:
        dense, wide, layout = self.matrix.dense, self.matrix.wide, self.matrix.layout
        b, levels = wide.shape[1], layout.levels
        across = np.zeros((levels, b, layout.dense))
        own = np.zeros((levels, b, b))
        for k in range(b):
            across[:, k] = self._by_level(weight * wide[:, k]) @ dense
            for m in range(k + 1):
                own[:, k, m] = own[:, m, k] = np.bincount(
                    self.matrix.codes, weight * wide[:, k] * wide[:, m], minlength=levels
                )
        return Gram(self._dense_gram(weight), across, own)

    def _dense_gram(self, weight: FloatArray) -> FloatArray:
        columns = self.matrix.dense
        if (weight == 1).all():
            return columns.T @ columns
        if weight.min() < 0:
            return columns.T @ (columns * weight[:, None])
        rooted = columns * np.sqrt(weight)[:, None]
        return rooted.T @ rooted

    @cached_property
    def _order(self) -> tuple[IntArray, IntArray]:
        """The rows level by level, and where each level begins."""
        codes, levels = self.matrix.codes, self.matrix.layout.levels
        starts = np.concatenate([[0], np.cumsum(np.bincount(codes, minlength=levels))])
        return np.argsort(codes, kind="stable"), starts

    def _by_level(self, values: FloatArray) -> scipy.sparse.csr_array:
        """(levels, n) matrix that sums values (n,) times what follows it over each level."""
        order, starts = self._order
        return scipy.sparse.csr_array(
            (values[order], order, starts), shape=(len(starts) - 1, len(order))
        )

    def summed(self, values: FloatArray) -> FloatArray:
        """X' · values (P,)."""
        total: FloatArray = self.matrix.dense.T @ values
        if not self.matrix.layout.parts:
            return total
        layout, wide = self.matrix.layout, self.matrix.wide
        apart = [
            np.bincount(self.matrix.codes, values * column, minlength=layout.levels)
            for column in wide.T
        ]
        return np.concatenate([total, layout.flat(np.stack(apart, axis=1))])

    def without(self, columns: IntArray) -> DenseRows:
        matrix = self.matrix
        kept = np.delete(matrix.dense, columns, axis=1)
        layout = replace(matrix.layout, dense=kept.shape[1])
        return replace(self, matrix=replace(matrix, dense=kept, layout=layout))

    def part(self, chosen: IntArray) -> DenseRows:
        matrix = self.matrix
        fewer = replace(
            matrix,
            dense=matrix.dense[chosen],
            wide=matrix.wide[chosen],
            codes=matrix.codes[chosen],
        )
        return DenseRows(self.y[chosen], self.weights[chosen], self.offset[chosen], fewer)

    def variances(self, inner: Posterior) -> FloatArray:
        return inner.variance(self.matrix)

    def log_det_design(self, p: int, counts: FloatArray) -> float:
        plain = self.matrix.dense[:, :p] * np.sqrt(counts)[:, None]
        return 2 * float(np.log(np.abs(np.diag(np.linalg.qr(plain)[1]))).sum())

    def linear_predictor(self, coefficients: FloatArray) -> FloatArray:
        return self.offset + self.matrix.times(coefficients)
