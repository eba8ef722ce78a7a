"""Rows as tables: each component sees a row by an integer, the cell of its covariates.

With Z_a the columns of component a at its cells and T_ab the weights summed over the rows in each
pair of cells, X_a'WX_b = Z_a' T_ab Z_b: a sweep over n rows costs a few counts, whatever the number
of columns. The mirror image gives leverages: h_i = Σ_ab H_ab[i_a, i_b] with H_ab = Z_a M_ab Z_b',
one look-up a pair.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import scipy.sparse

from addmodel.matrix import DesignMatrix, IntArray, Layout
from addmodel.posterior import Posterior
from addmodel.rows.base import Gram, Rows
from addmodel.spaces.base import FloatArray

LARGEST = 4_000_000
"""Pairs of cells up to which a table is dense."""
CHUNK = 100_000


@dataclass(frozen=True)
class Part:
    """One component's columns at its cells, and the cell of each row."""

    columns: FloatArray  # (m, q)
    cells: IntArray  # (n,)
    places: IntArray  # (q,) among the dense columns

    @property
    def count(self) -> int:
        """Number of cells."""
        return len(self.columns)


@dataclass(frozen=True)
class TableRows(Rows):
    """All rows, by cells."""

    parts: tuple[Part, ...]
    wide: FloatArray  # (n, b) columns of the group set apart
    codes: IntArray  # (n,) its levels
    arranged: Layout

    @property
    def layout(self) -> Layout:
        return self.arranged

    def gram(self, weight: FloatArray) -> Gram:
        dense = np.zeros((self.layout.dense, self.layout.dense))
        for i, a in enumerate(self.parts):
            mass = np.bincount(a.cells, weight, minlength=a.count)
            dense[np.ix_(a.places, a.places)] = a.columns.T @ (a.columns * mass[:, None])
            for b in self.parts[:i]:
                block = a.columns.T @ _table(a, b, weight) @ b.columns
                dense[np.ix_(a.places, b.places)] = block
                dense[np.ix_(b.places, a.places)] = block.T
        levels, count = self.layout.levels, self.wide.shape[1]
        across = np.zeros((levels, count, self.layout.dense))
        own = np.zeros((levels, count, count))
        for k in range(count):
            for part in self.parts:
                table = scipy.sparse.coo_array(
                    (weight * self.wide[:, k], (self.codes, part.cells)),
                    shape=(levels, part.count),
                ).tocsr()
                across[:, k, part.places] = np.asarray(table @ part.columns)
            for m in range(k + 1):
                own[:, k, m] = own[:, m, k] = np.bincount(
                    self.codes, weight * self.wide[:, k] * self.wide[:, m], minlength=levels
                )
        return Gram(dense, across, own)

    def summed(self, values: FloatArray) -> FloatArray:
        total = np.zeros(self.layout.dense)
        for part in self.parts:
            total[part.places] = part.columns.T @ np.bincount(
                part.cells, values, minlength=part.count
            )
        if not self.layout.parts:
            return total
        apart = [
            np.bincount(self.codes, values * column, minlength=self.layout.levels)
            for column in self.wide.T
        ]
        return np.concatenate([total, self.layout.flat(np.stack(apart, axis=1))])

    def variances(self, inner: Posterior) -> FloatArray:
        if self.layout.parts:
            return self._variances_by_rows(inner)
        total = np.zeros(len(self.y))
        for i, a in enumerate(self.parts):
            turned = a.columns @ inner.dense[np.ix_(a.places, a.places)]
            total += np.einsum("ij,ij->i", turned, a.columns)[a.cells]
            for b in self.parts[:i]:
                turned = a.columns @ inner.dense[np.ix_(a.places, b.places)]
                if a.count * b.count <= LARGEST:
                    total += 2 * (turned @ b.columns.T).ravel()[a.cells * b.count + b.cells]
                    continue
                for start in range(0, len(total), CHUNK):
                    at = slice(start, start + CHUNK)
                    left, right = turned[a.cells[at]], b.columns[b.cells[at]]
                    total[at] += 2 * np.einsum("ij,ij->i", left, right)
        return total

    def _variances_by_rows(self, inner: Posterior) -> FloatArray:
        """Where a group is set apart a row's z has no cell: chunk by chunk."""
        total = np.empty(len(self.y))
        for start in range(0, len(total), CHUNK):
            at = slice(start, start + CHUNK)
            dense = np.zeros((len(total[at]), self.layout.dense))
            for part in self.parts:
                dense[:, part.places] = part.columns[part.cells[at]]
            chunk = DesignMatrix(dense, self.wide[at], self.codes[at], self.layout)
            total[at] = inner.variance(chunk)
        return total

    def without(self, columns: IntArray) -> TableRows:
        kept = np.setdiff1d(np.arange(self.layout.dense), columns)
        new = np.full(self.layout.dense, -1)
        new[kept] = np.arange(len(kept))
        parts = []
        for part in self.parts:
            stays = new[part.places] >= 0
            places = new[part.places][stays]
            parts.append(replace(part, columns=part.columns[:, stays], places=places))
        layout = replace(self.layout, dense=len(kept))
        return replace(self, parts=tuple(parts), arranged=layout)

    def part(self, chosen: IntArray) -> TableRows:
        return replace(
            self,
            parts=tuple(replace(p, cells=p.cells[chosen]) for p in self.parts),
            wide=self.wide[chosen],
            codes=self.codes[chosen],
            y=self.y[chosen],
            weights=self.weights[chosen],
            offset=self.offset[chosen],
        )

    def log_det_design(self, p: int, counts: FloatArray) -> float:
        gram = self.gram(counts).dense[:p, :p]
        return float(np.linalg.slogdet(gram)[1])

    def linear_predictor(self, coefficients: FloatArray) -> FloatArray:
        eta = self.offset.copy()
        for part in self.parts:
            eta += (part.columns @ coefficients[part.places])[part.cells]
        if self.layout.parts:
            own = self.layout.by_level(coefficients)[self.codes]
            eta += (self.wide * own).sum(axis=1)
        return eta


def _table(a: Part, b: Part, weight: FloatArray) -> FloatArray | scipy.sparse.csr_array:
    """Weights summed over the rows in each pair of cells, (m_a, m_b)."""
    if a.count * b.count <= LARGEST:
        flat = np.bincount(a.cells * b.count + b.cells, weight, minlength=a.count * b.count)
        return np.asarray(flat.reshape(a.count, b.count), dtype=np.float64)
    return scipy.sparse.coo_array((weight, (a.cells, b.cells)), shape=(a.count, b.count)).tocsr()
