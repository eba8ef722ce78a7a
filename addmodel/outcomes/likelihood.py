"""The likelihood with all its constants, and how the scale φ is found.

ℓ(μ; φ) = ℓ_sat(φ) − D/(2φ), ℓ_sat the log-likelihood at μ = y (McCullagh & Nelder 1989, ch. 2).
For given smoothing parameters the mode does not depend on φ, so φ enters a restricted criterion
only through D_p/(2φ) − ℓ_sat(φ) − ½ p log φ, D_p the penalised deviance and p the number of
unpenalised coefficients, and is profiled out by a root in one variable.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import scipy.optimize
from numpy.polynomial import Chebyshev
from scipy.special import gammaln, psi, xlogy

from addmodel.outcomes.outcome import Outcome
from addmodel.spaces.base import FloatArray

PIECE = 4.0
DEGREE = 28


@dataclass(frozen=True)
class Likelihood:
    """An outcome with the data that its constants need.

    A row stands for `counts` equal rows; `weights` are precision weights; `trials` are a binomial
    row's.
    """

    outcome: Outcome
    y: FloatArray
    weights: FloatArray
    counts: FloatArray
    trials: FloatArray
    fixed: float | None
    """The scale where it is known (or, for quasi-likelihood, taken as known for now)."""

    @property
    def n(self) -> float:
        """Rows, counts counted."""
        return float(self.counts.sum())

    def saturated(self, scale: float) -> float:
        """ℓ_sat(φ)."""
        y, w, c, kind = self.y, self.weights, self.counts, self.outcome.kind
        if kind == "Gaussian":
            return float(-0.5 * c @ np.log(2 * np.pi * scale / w))
        if kind == "InverseGaussian":
            return float(-0.5 * c @ np.log(2 * np.pi * scale * y**3 / w))
        if kind == "Gamma":
            shape = w / scale
            return float(c @ (xlogy(shape, shape) - shape - np.log(y) - gammaln(shape)))
        if kind == "Poisson":
            return float((c * w) @ (xlogy(y, y) - y - gammaln(y + 1))) / scale
        if kind == "Binomial":
            m, k = self.trials, self.trials * self.y
            ways = gammaln(m + 1) - gammaln(k + 1) - gammaln(m - k + 1)
            return float((c * w) @ (ways + m * (xlogy(y, y) + xlogy(1 - y, 1 - y)))) / scale
        if kind == "NegativeBinomial":
            a = 1 / float(self.outcome.family.alpha)
            best = xlogy(y, y) - (y + a) * np.log(y + a) + xlogy(a, a)
            rest = gammaln(y + a) - gammaln(a) - gammaln(y + 1)
            return float((c * w) @ (best + rest)) / scale
        piece = int(np.floor(np.log(scale) / PIECE))
        if piece not in self._pieces:
            ends = (PIECE * piece, PIECE * (piece + 1))
            self._pieces[piece] = Chebyshev.interpolate(self._saturated_tweedie, DEGREE, ends)
        return float(self._pieces[piece](np.log(scale)))

    @cached_property
    def _pieces(self) -> dict[int, Chebyshev]:
        """ℓ_sat of a Tweedie outcome along log φ, in pieces of length PIECE as they are needed.

        It is a long series for every row, and the search for φ asks for it thousands of times.
        """
        return {}

    def _saturated_tweedie(self, log_scales: FloatArray) -> FloatArray:
        rows = self.y > 0
        y, w, c = self.y[rows], self.weights[rows], self.counts[rows]
        density = self.outcome.family.loglike_obs
        return np.array([c @ density(y, y, w, scale) for scale in np.exp(log_scales)])

    def saturated_slope(self, scale: float) -> float:
        """∂ℓ_sat/∂log φ."""
        kind = self.outcome.kind
        if kind in ("Gaussian", "InverseGaussian"):
            return -self.n / 2
        if kind == "Gamma":
            shape = self.weights / scale
            return float(-self.counts @ (shape * (np.log(shape) - psi(shape))))
        h = 1e-4
        up, down = self.saturated(scale * np.exp(h)), self.saturated(scale * np.exp(-h))
        return (up - down) / (2 * h)

    def scale(self, penalised: float, p: int) -> float:
        """φ: as known, or the root of D_p/(2φ) + ∂ℓ_sat/∂log φ + p/2 = 0."""
        if self.fixed is not None:
            return self.fixed
        start = penalised / (self.n - p)
        if self.outcome.kind in ("Gaussian", "InverseGaussian") or not start > 0:
            return start

        def excess(log_scale: float) -> float:
            scale = float(np.exp(log_scale))
            return penalised / (2 * scale) + self.saturated_slope(scale) + p / 2

        low = high = float(np.log(start))
        for _ in range(60):
            low -= 1.0
            if excess(low) > 0:
                break
        for _ in range(60):
            if excess(high) < 0:
                break
            high += 1.0
        if not excess(low) > 0 > excess(high):
            return start  # the likelihood has no best scale on these few rows: the moment's instead
        return float(np.exp(scipy.optimize.brentq(excess, low, high, xtol=1e-13, rtol=1e-14)))

    def log_likelihood(self, deviance: float, scale: float) -> float:
        """ℓ at the fitted mean."""
        return self.saturated(scale) - deviance / (2 * scale)
