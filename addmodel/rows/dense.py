"""Rows held as one dense matrix: exact columns and BLAS, for up to some ten thousand rows."""

from __future__ import annotations

from dataclasses import dataclass

from addmodel.outcomes import Outcome
from addmodel.rows.base import Rows, Sums
from addmodel.spaces.base import FloatArray


@dataclass(frozen=True)
class DenseRows(Rows):
    """All rows in memory."""

    columns: FloatArray  # (n, P)
    y: FloatArray  # (n,)
    weights: FloatArray  # (n,) prior weight times count
    offset: FloatArray  # (n,)

    def sweep(self, coefficients: FloatArray, outcome: Outcome) -> Sums:
        eta = self.linear_predictor(coefficients)
        slope, weight = outcome.slope_and_weight(self.y, eta, self.weights)
        return Sums(
            at=coefficients,
            gram=self.columns.T @ (self.columns * weight[:, None]),
            score=self.columns.T @ slope,
            deviance=outcome.deviance(self.y, outcome.mean(eta), self.weights),
        )

    def linear_predictor(self, coefficients: FloatArray) -> FloatArray:
        eta: FloatArray = self.offset + self.columns @ coefficients
        return eta
