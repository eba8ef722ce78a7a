"""A⁻¹, or the posterior covariance φA⁻¹, in the form that groups of many levels allow.

With the coefficients in a dense part d and, for each level l of the group set apart, a part of its
own, A = [[D, C'], [C, H]] with H block-diagonal. Then with B = H⁻¹C and R = (D − C'B)⁻¹

    A⁻¹ = [[R, −RB'], [−BR, H⁻¹ + BRB']],

so R, B and the blocks of H⁻¹ are all of it. For a row x with level l and own columns w,
x'A⁻¹x = z'Rz + w'H_l⁻¹w with z = x_d − B_l'w.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg

from addmodel.matrix import DesignMatrix, Layout
from addmodel.spaces.base import FloatArray


@dataclass(frozen=True)
class Posterior:
    """A covariance of all coefficients."""

    dense: FloatArray  # (D, D) R
    bridge: FloatArray  # (levels, b, D) B
    own: FloatArray  # (levels, b, b) H⁻¹
    layout: Layout

    @classmethod
    def of_dense(cls, matrix: FloatArray) -> Posterior:
        """Where no group is set apart."""
        size = len(matrix)
        return cls(matrix, np.zeros((0, 0, size)), np.zeros((0, 0, 0)), Layout(size, 0, ()))

    def scaled(self, scale: float) -> Posterior:
        """All of it times a number."""
        return Posterior(scale * self.dense, self.bridge, scale * self.own, self.layout)

    def reduced(self, matrix: DesignMatrix) -> FloatArray:
        """z of each row, (n, D)."""
        if not self.layout.parts:
            return matrix.dense
        known = matrix.codes >= 0
        wide = matrix.wide * known[:, None]
        reduced = matrix.dense.copy()
        for k in range(wide.shape[1]):
            reduced -= wide[:, [k]] * self.bridge[matrix.codes, k]
        return reduced

    def variance(self, matrix: DesignMatrix) -> FloatArray:
        """x'Vx of each row, (n,)."""
        z = self.reduced(matrix)
        variance = np.einsum("ij,ij->i", z @ self.dense, z)
        if self.layout.parts:
            wide = matrix.wide * (matrix.codes >= 0)[:, None]
            variance += np.einsum("ib,ibc,ic->i", wide, self.own[matrix.codes], wide)
        return np.asarray(variance, dtype=np.float64)

    def covariance(self, matrix: DesignMatrix) -> FloatArray:
        """XVX' of the rows with each other, (n, n)."""
        z = self.reduced(matrix)
        covariance = z @ self.dense @ z.T
        if self.layout.parts:
            wide = matrix.wide * (matrix.codes >= 0)[:, None]
            alike = matrix.codes[:, None] == matrix.codes[None, :]
            theirs = np.einsum("ib,ibc,jc->ij", wide, self.own[matrix.codes], wide)
            covariance += np.where(alike, theirs, 0.0)
        return np.asarray(covariance, dtype=np.float64)

    def times(self, vectors: FloatArray) -> FloatArray:
        """V · vectors (P, k)."""
        layout = self.layout
        if not layout.parts:
            return np.asarray(self.dense @ vectors, dtype=np.float64)
        products = []
        for vector in vectors.T:
            apart = layout.by_level(vector)
            pulled = self.bridge.reshape(-1, layout.dense).T @ apart.ravel()
            first = self.dense @ (vector[: layout.dense] - pulled)
            theirs = np.einsum("lbc,lc->lb", self.own, apart) - self.bridge @ first
            products.append(np.concatenate([first, layout.flat(theirs)]))
        return np.array(products).reshape(-1, layout.total).T

    def diagonal(self) -> FloatArray:
        """(P,)."""
        if not self.layout.parts:
            return np.diag(self.dense).copy()
        crossed = ((self.bridge @ self.dense) * self.bridge).sum(axis=2)
        own = np.diagonal(self.own, axis1=1, axis2=2) + crossed
        return np.concatenate([np.diag(self.dense), self.layout.flat(own)])

    def whole(self) -> FloatArray:
        """The matrix written out, (P, P)."""
        layout = self.layout
        if not layout.parts:
            return self.dense
        places = layout.by_level(np.arange(layout.total, dtype=np.float64)).astype(np.int64)
        bridge = np.zeros((layout.total - layout.dense, layout.dense))
        bridge[places.ravel() - layout.dense] = self.bridge.reshape(-1, layout.dense)
        apart = bridge @ self.dense @ bridge.T
        for level, at in enumerate(places - layout.dense):
            apart[np.ix_(at, at)] += self.own[level]
        across = -bridge @ self.dense
        return np.block([[self.dense, across.T], [across, apart]])

    def draws(self, count: int, rng: np.random.Generator) -> FloatArray:
        """Draws from N(0, V), (count, P): the dense part first, then the levels given it."""
        layout = self.layout
        first = _normal(self.dense, count, rng)
        if not layout.parts:
            return first
        roots = np.linalg.cholesky(self.own + 1e-300 * np.eye(self.own.shape[1]))
        draws = np.empty((count, layout.total))
        for i, given in enumerate(first):
            noise = rng.standard_normal((layout.levels, sum(layout.parts)))
            theirs = np.einsum("lbc,lc->lb", roots, noise) - self.bridge @ given
            draws[i] = np.concatenate([given, layout.flat(theirs)])
        return draws


def root_of(covariance: FloatArray) -> FloatArray:
    """B with BB' a covariance (k, k), whose scales may differ by many orders of magnitude."""
    spread = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    unit = np.where(spread > 0, spread, 1.0)
    values, vectors = scipy.linalg.eigh(covariance / np.outer(unit, unit))
    root: FloatArray = unit[:, None] * vectors * np.sqrt(np.maximum(values, 0.0))
    return root


def _normal(covariance: FloatArray, count: int, rng: np.random.Generator) -> FloatArray:
    used = np.diag(covariance) > 0
    draws = np.zeros((count, len(covariance)))
    root = root_of(covariance[np.ix_(used, used)])
    draws[:, used] = rng.standard_normal((count, int(used.sum()))) @ root.T
    return draws
