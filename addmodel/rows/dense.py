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
    weights: FloatArray  # (n,) prior weight times count
    offset: FloatArray  # (n,)

    def sweep(
        self, coefficients: FloatArray, outcome: Outcome, gram: FloatArray | None = None
    ) -> Sums:
        eta = self.linear_predictor(coefficients)
        slope, weight = outcome.slope_and_weight(self.y, eta, self.weights)
        if gram is None:
            plain = bool((weight == 1).all())
            rooted = self.columns if plain else self.columns * np.sqrt(weight)[:, None]
            gram = rooted.T @ rooted
        return Sums(
            at=coefficients,
            gram=gram,
            score=self.columns.T @ slope,
            deviance=outcome.deviance(self.y, outcome.mean(eta), self.weights),
        )

    def linear_predictor(self, coefficients: FloatArray) -> FloatArray:
        eta: FloatArray = self.offset + self.columns @ coefficients
        return eta
