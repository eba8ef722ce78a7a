"""Rows held as one dense matrix: exact columns and BLAS, for up to some ten thousand rows."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from addmodel.outcomes import Outcome
from addmodel.rows.base import Rows, Sums
from addmodel.spaces.base import FloatArray


@dataclass(frozen=True)
class DenseRows(Rows):
    """All rows in memory."""

    columns: FloatArray  # (n, P)
    y: FloatArray  # (n,)
    weights: FloatArray  # (n,) prior weight, times count, times trials
    offset: FloatArray  # (n,)

    def sweep(
        self,
        coefficients: FloatArray,
        outcome: Outcome,
        *,
        fisher: bool = False,
        gram: FloatArray | None = None,
    ) -> Sums:
        eta = self.linear_predictor(coefficients)
        curvature = outcome.curvature(self.y, eta, self.weights)
        if gram is None:
            gram = self._gram(curvature.fisher if fisher else curvature.observed)
        return Sums(
            at=coefficients,
            gram=gram,
            score=self.columns.T @ curvature.slope,
            deviance=outcome.deviance(self.y, outcome.mean(eta), self.weights),
        )

    def _gram(self, weight: FloatArray) -> FloatArray:
        if (weight == 1).all():
            return self.columns.T @ self.columns
        if weight.min() < 0:
            return self.columns.T @ (self.columns * weight[:, None])
        rooted = self.columns * np.sqrt(weight)[:, None]
        return rooted.T @ rooted

    def deviance(self, coefficients: FloatArray, outcome: Outcome) -> float:
        mean = outcome.mean(self.linear_predictor(coefficients))
        return outcome.deviance(self.y, mean, self.weights)

    def leverage_sweep(
        self, coefficients: FloatArray, outcome: Outcome, inner: FloatArray, *, fisher: bool = False
    ) -> FloatArray:
        eta = self.linear_predictor(coefficients)
        observed, expected = outcome.weight_slopes(self.y, eta, self.weights)
        leverage = np.einsum("ij,ij->i", self.columns @ inner, self.columns)
        total: FloatArray = self.columns.T @ (leverage * (expected if fisher else observed))
        return total

    def linear_predictor(self, coefficients: FloatArray) -> FloatArray:
        eta: FloatArray = self.offset + self.columns @ coefficients
        return eta
