"""Bands: pointwise with the smoothing parameters' uncertainty, and simultaneous.

Var f(x) = x'(V + V_ρ)x with V the posterior covariance and V_ρ what uncertain smoothing parameters
add (`solve.uncertainty`, `straight`). A simultaneous band is f ± c·se, c the quantile over draws
of max_x |f*(x) − f(x)|/se(x) (Ruppert, Wand & Carroll 2003, Semiparametric Regression, ch. 6).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from addmodel.estimate import Estimate
from addmodel.inference import DEFAULT_SEED, check_seed, freedom, linear, quantile, uncertain
from addmodel.matrix import DesignMatrix
from addmodel.posterior import root_of
from addmodel.spaces.base import FloatArray

DRAWS = 4_000
FEWER = 1_000
"""Draws where levels of a group have noise of their own."""
CHUNK = 500


@dataclass(frozen=True)
class Band:
    """Values at n rows, their standard errors, and half-widths of both bands, each (n,)."""

    value: FloatArray
    error: FloatArray
    half: FloatArray
    half_whole: FloatArray


def band(estimate: Estimate, matrix: DesignMatrix, level: float, seed: int = DEFAULT_SEED) -> Band:
    """Both bands of columns · coefficients."""
    value, error = linear(estimate, matrix)
    half = quantile(estimate, level) * error
    whole = critical(estimate, matrix, error, level, seed) * error
    return Band(value, error, half, np.maximum(whole, half))


def critical(
    estimate: Estimate, matrix: DesignMatrix, error: FloatArray, level: float, seed: int
) -> float:
    """How many standard errors a simultaneous band is wide."""
    rows = np.flatnonzero(error > 1e-9 * error.max(initial=0.0))
    if len(rows) < 2:
        return quantile(estimate, level)
    largest = np.abs(draws_of(estimate, matrix, seed)[:, rows] / error[rows]).max(axis=1)
    left = freedom(estimate)
    if np.isfinite(left):
        rng = np.random.default_rng(seed + 1)
        largest = largest * np.sqrt(left / rng.chisquare(left, len(largest)))
    return float(np.quantile(largest, level))


def draws_of(estimate: Estimate, matrix: DesignMatrix, seed: int) -> FloatArray:
    """Draws of columns · (coefficients less the estimated ones), (draws, n)."""
    check_seed(seed)
    rng = np.random.default_rng(seed)
    reduced = estimate.posterior.reduced(matrix)
    used = np.flatnonzero(np.abs(reduced).max(axis=0, initial=0.0) > 0)
    grouped = bool(matrix.layout.parts) and bool(matrix.wide.any())
    count = FEWER if grouped else DRAWS
    root = reduced[:, used] @ root_of(estimate.posterior.dense[np.ix_(used, used)])
    root = np.concatenate([root, matrix.against(uncertain(estimate))], axis=1)
    draws = rng.standard_normal((count, root.shape[1])) @ root.T
    if grouped:
        levels, where = np.unique(matrix.codes, return_inverse=True)
        known = levels >= 0
        roots = np.zeros((len(levels), *estimate.posterior.own.shape[1:]))
        roots[known] = np.linalg.cholesky(
            estimate.posterior.own[levels[known]] + 1e-300 * np.eye(roots.shape[1])
        )
        turned = np.einsum("ib,ibc->ic", matrix.wide, roots[where])
        for start in range(0, count, CHUNK):
            noise = rng.standard_normal((min(CHUNK, count - start), len(levels), turned.shape[1]))
            draws[start : start + len(noise)] += np.einsum("ic,dic->di", turned, noise[:, where])
    return np.asarray(draws, dtype=np.float64)
