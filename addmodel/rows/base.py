"""The contract of rows: the solver knows them only as sums.

`sweep` goes over the rows once, at given coefficients, and returns what is needed of them. Sums are
additive over chunks of rows, so that a chunk may be anything that can be summed.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass

from addmodel.outcomes import Outcome
from addmodel.spaces.base import FloatArray


@dataclass(frozen=True)
class Sums:
    """What one sweep over the rows gives, at coefficients `at`.

    With η = offset + Xβ the deviance is, to second order about `at`,
    D(at + δ) = deviance − 2 score'δ + δ' gram δ (exactly so for a Gaussian outcome).
    """

    at: FloatArray  # (P,) coefficients
    gram: FloatArray  # (P, P) X'WX
    score: FloatArray  # (P,) φ ∂ℓ/∂β
    deviance: float

    def moved(self, to: FloatArray) -> Sums:
        """The same quadratic, written about other coefficients."""
        step = to - self.at
        along = self.gram @ step
        return Sums(
            at=to,
            gram=self.gram,
            score=self.score - along,
            deviance=self.deviance - 2 * float(self.score @ step) + float(step @ along),
        )


class Rows(ABC):
    """Rows of the model's columns, with outcome, weights and offset."""

    @abstractmethod
    def sweep(
        self,
        coefficients: FloatArray,
        outcome: Outcome,
        *,
        fisher: bool = False,
        gram: FloatArray | None = None,
    ) -> Sums:
        """Sums over all rows at the coefficients (P,).

        X'WX has the observed weights, or the Fisher weights if asked for; `gram` where it is known
        already.
        """

    @abstractmethod
    def deviance(self, coefficients: FloatArray, outcome: Outcome) -> float:
        """The deviance alone."""

    @abstractmethod
    def leverage_sweep(
        self, coefficients: FloatArray, outcome: Outcome, inner: FloatArray, *, fisher: bool = False
    ) -> FloatArray:
        """Σ_i (x_i' M x_i) w_i′ x_i (P,), M = `inner`, w′ the derivative of the weight in η."""

    @abstractmethod
    def linear_predictor(self, coefficients: FloatArray) -> FloatArray:
        """offset + Xβ, shape (n,)."""
