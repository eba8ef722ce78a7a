"""The contract of rows: the solver knows them only as sums.

`sweep` goes over the rows once, at given coefficients, and returns what is needed of them. Sums are
additive over chunks of rows, so that a chunk may be anything that can be summed.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass, replace
from typing import NamedTuple, Self

import numpy as np

from addmodel.matrix import IntArray, Layout
from addmodel.outcomes import Outcome
from addmodel.posterior import Posterior
from addmodel.spaces.base import FloatArray


class Gram(NamedTuple):
    """X'WX: the dense columns with each other, with each level's own, and those of each level."""

    dense: FloatArray  # (D, D)
    across: FloatArray  # (levels, b, D)
    own: FloatArray  # (levels, b, b)

    def times(self, vector: FloatArray, layout: Layout) -> FloatArray:
        """X'WX · vector (P,)."""
        first = vector[: layout.dense]
        product = self.dense @ first
        if not layout.parts:
            return np.asarray(product, dtype=np.float64)
        apart = layout.by_level(vector)
        product = product + self.across.reshape(-1, layout.dense).T @ apart.ravel()
        theirs = self.across @ first + np.einsum("lbc,lc->lb", self.own, apart)
        return np.concatenate([product, layout.flat(theirs)])

    def diagonal(self, layout: Layout) -> FloatArray:
        """(P,)."""
        own = np.diagonal(self.own, axis1=1, axis2=2)
        return np.concatenate([np.diag(self.dense), layout.flat(own)])


@dataclass(frozen=True)
class Sums:
    """What one sweep over the rows gives, at coefficients `at`.

    With η = offset + Xβ the deviance is, to second order about `at`,
    D(at + δ) = deviance − 2 score'δ + δ' gram δ (exactly so for a Gaussian outcome).
    """

    at: FloatArray  # (P,) coefficients
    gram: Gram
    score: FloatArray  # (P,) φ ∂ℓ/∂β
    deviance: float
    layout: Layout

    def moved(self, to: FloatArray) -> Sums:
        """The same quadratic, written about other coefficients."""
        step = to - self.at
        along = self.gram.times(step, self.layout)
        return Sums(
            at=to,
            gram=self.gram,
            score=self.score - along,
            deviance=self.deviance - 2 * float(self.score @ step) + float(step @ along),
            layout=self.layout,
        )


@dataclass(frozen=True)
class Rows(ABC):
    """Rows of the model's columns, with outcome, weights and offset.

    How the columns are held is each kind's own; what is asked of them is the same.
    """

    y: FloatArray  # (n,)
    weights: FloatArray  # (n,) prior weight, times count, times trials
    offset: FloatArray  # (n,)

    @property
    @abstractmethod
    def layout(self) -> Layout:
        """Where the coefficients are."""

    @abstractmethod
    def gram(self, weight: FloatArray) -> Gram:
        """X'WX with these weights (n,)."""

    @abstractmethod
    def summed(self, values: FloatArray) -> FloatArray:
        """X' · values (n,), shape (P,)."""

    @abstractmethod
    def linear_predictor(self, coefficients: FloatArray) -> FloatArray:
        """offset + Xβ, shape (n,)."""

    @abstractmethod
    def variances(self, inner: Posterior) -> FloatArray:
        """x_i'Mx_i of each row, M = `inner`, (n,)."""

    @abstractmethod
    def part(self, chosen: IntArray) -> Rows:
        """Only those rows."""

    @abstractmethod
    def without(self, columns: IntArray) -> Rows:
        """The same rows without some of the dense columns."""

    @abstractmethod
    def log_det_design(self, p: int, counts: FloatArray) -> float:
        """log|T'T| of the first p columns T, each row counted `counts` (n,) times."""

    def sweep(
        self,
        coefficients: FloatArray,
        outcome: Outcome,
        *,
        fisher: bool = False,
        gram: Gram | None = None,
    ) -> Sums:
        """Sums over all rows at the coefficients (P,).

        X'WX has the observed weights, or the Fisher weights if asked for; `gram` where it is known
        already.
        """
        eta = self.linear_predictor(coefficients)
        curvature = outcome.curvature(self.y, eta, self.weights)
        if gram is None:
            gram = self.gram(curvature.fisher if fisher else curvature.observed)
        return Sums(
            at=coefficients,
            gram=gram,
            score=self.summed(curvature.slope),
            deviance=outcome.deviance(self.y, outcome.mean(eta), self.weights),
            layout=self.layout,
        )

    def deviance(self, coefficients: FloatArray, outcome: Outcome) -> float:
        """The deviance alone."""
        mean = outcome.mean(self.linear_predictor(coefficients))
        return outcome.deviance(self.y, mean, self.weights)

    def leverage_sweep(
        self, coefficients: FloatArray, outcome: Outcome, inner: Posterior, *, fisher: bool = False
    ) -> FloatArray:
        """Σ_i (x_i' M x_i) w_i′ x_i (P,), M = `inner`, w′ the derivative of the weight in η."""
        eta = self.linear_predictor(coefficients)
        observed, expected = outcome.weight_slopes(self.y, eta, self.weights)
        return self.summed(self.variances(inner) * (expected if fisher else observed))

    def fitted_to(self, part: FloatArray) -> Self:
        """The same columns and weights with another outcome (n,), and no offset."""
        return replace(self, y=part, offset=np.zeros_like(part))

    def variation(self) -> float:
        """The outcome's weighted sum of squares about its mean."""
        about = self.y - np.average(self.y, weights=self.weights)
        return float(self.weights @ about**2)
