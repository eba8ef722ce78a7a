"""What is assumed about the outcome: an outcome wraps a statsmodels family and its link.

The families carry link, variance, deviance and log-likelihood as McCullagh & Nelder (1989) define
them; what a smoothness criterion needs beyond that stands here.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from addmodel.errors import ModelError, nearest
from addmodel.spaces.base import FloatArray

NAMES = ("gaussian",)


@dataclass(frozen=True)
class Outcome:
    """An outcome's distribution, with its link."""

    name: str
    family: Any

    def mean(self, linear_predictor: FloatArray) -> FloatArray:
        """The outcome's mean μ at the linear predictor η, same shape."""
        return np.asarray(self.family.link.inverse(linear_predictor), dtype=np.float64)

    def deviance(self, y: FloatArray, mean: FloatArray, weights: FloatArray) -> float:
        """Weighted deviance; for a Gaussian outcome the residual sum of squares."""
        return float(self.family.deviance(y, mean, freq_weights=weights))

    def slope_and_weight(
        self, y: FloatArray, linear_predictor: FloatArray, weights: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """φ ∂ℓ/∂η and the working weight φ·(−∂²ℓ/∂η²), each (n,), for the identity link."""
        return weights * (y - linear_predictor), weights


def outcome_named(name: str) -> Outcome:
    """The outcome of that name.

    Raises
    ------
    ModelError
        If there is none.
    """
    from statsmodels.genmod import families

    if name == "gaussian":
        return Outcome(name, families.Gaussian())
    raise ModelError(f"outcome='{name}' is not known. {nearest(name, NAMES)}")
