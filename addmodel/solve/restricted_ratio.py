"""The restricted likelihood ratio test that a block's variance is zero, and its exact null law.

In the null model, with the other smoothing parameters estimated there, u = Z'W(z − Xβ̂₀) has under
H0 the covariance φM, M = Z'WZ − Z'WX A₀⁻¹X'WZ. With M = E diag(e) E' the v_k = (E'u)_k/√e_k are
independent N(0, φ), and with τ² > 0 they have variance φ(1 + e_k/λ). The statistic is

    sup_λ Σ_k [v_k² g_k/φ − log(1 + e_k/λ)],  g_k = (e_k/λ)/(1 + e_k/λ),

for φ known; where it is estimated sup_λ [ν log(S₀/(S₀ − Σ v_k² g_k)) − Σ log(1 + e_k/λ)], S₀ the
penalised sum of squares of the null fit, φχ² on ν = n − p. Its null law is that of the same
expression with χ² in place of v_k²/φ (Crainiceanu & Ruppert 2004, J. R. Stat. Soc. B 66; Greven,
Crainiceanu, Küchenhoff & Peters 2008, J. Comput. Graph. Stat. 17, for the far tail).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import scipy.stats

from addmodel.spaces.base import FloatArray

DRAWS = 20_000
GRID = 60
SEED = 20_260_102
FAR = 40
"""With fewer draws than this beyond the statistic the tail is that of a scaled chi-square."""
SMALL = 1e-8


@dataclass(frozen=True)
class Contrasts:
    """The block's own contrasts in the null model."""

    eigenvalues: FloatArray  # (k,) e
    squares: FloatArray  # (k,) v², φ their expectation under H0
    left: float
    """S₀, where φ is estimated."""
    freedom: float
    """ν."""
    scale: float | None
    """φ, where it is known."""

    @classmethod
    def of(
        cls,
        pull: FloatArray,
        information: FloatArray,
        left: float,
        freedom: float,
        scale: float | None,
    ) -> Contrasts:
        """From u (k,) and M (k, k)."""
        values, vectors = np.linalg.eigh((information + information.T) / 2)
        solid = values > SMALL * max(float(values[-1]), np.finfo(float).tiny)
        along = vectors[:, solid].T @ pull
        return cls(values[solid], along**2 / values[solid], left, freedom, scale)


def p_value(contrasts: Contrasts) -> float:
    """P(statistic ≥ the one observed) under H0; 1 where it is zero."""
    e = contrasts.eigenvalues
    if not len(e):
        return 1.0
    gains, penalties = _along(e)
    observed = _statistic(contrasts, contrasts.squares[None, :], np.array([contrasts.left]), gains)
    value = float(_best(observed, penalties)[0])
    if value <= 1e-9:
        return 1.0
    drawn = null_draws(contrasts, gains, penalties)
    beyond = int((drawn >= value).sum())
    if beyond >= FAR:
        return (beyond + 1) / (DRAWS + 1)
    # The positive part is nearly a·χ²_1: a from its upper half's mean over the median.
    positive = drawn[drawn > 0]
    if len(positive) < 20:
        return (beyond + 1) / (DRAWS + 1)
    scale = float(np.quantile(positive, 0.98) / scipy.stats.chi2.ppf(0.98, 1))
    tail = len(positive) / DRAWS * float(scipy.stats.chi2.sf(value / scale, 1))
    return min(tail, (FAR + 1) / DRAWS)


def null_draws(contrasts: Contrasts, gains: FloatArray, penalties: FloatArray) -> FloatArray:
    """The statistic under H0, (DRAWS,), from a fixed seed."""
    k = len(contrasts.eigenvalues)
    squares = _chi_squares(k)
    rest = max(contrasts.freedom - k, 0.0)
    more = np.random.default_rng(SEED + 1).chisquare(rest, DRAWS) if rest > 0 else 0.0
    left = squares.sum(axis=1) + more
    unit = Contrasts(contrasts.eigenvalues, squares[0], 1.0, contrasts.freedom, contrasts.scale)
    if contrasts.scale is not None:
        squares = squares * contrasts.scale
    return _best(_statistic(unit, squares, left, gains), penalties)


@lru_cache(maxsize=2)
def _chi_squares(k: int) -> FloatArray:
    """The same draws for every test of one size, (DRAWS, k)."""
    squares: FloatArray = np.random.default_rng(SEED).standard_normal((DRAWS, k)) ** 2
    return squares


def _along(e: FloatArray) -> tuple[FloatArray, FloatArray]:
    """g (k, grid) and Σ log(1 + e/λ) (grid,) over λ from all but free to all but gone."""
    lam = np.geomspace(1e-4 * e.min() + 1e-12 * e.max(), 1e4 * e.max(), GRID)
    odds = e[:, None] / lam
    return odds / (1 + odds), np.log1p(odds).sum(axis=0)


def _statistic(
    contrasts: Contrasts, squares: FloatArray, left: FloatArray, gains: FloatArray
) -> FloatArray:
    """The first part at each λ, (draws, grid)."""
    taken = squares @ gains
    if contrasts.scale is not None:
        return np.asarray(taken / contrasts.scale, dtype=np.float64)
    kept = np.maximum(left[:, None] - taken, 1e-12 * left[:, None])
    return np.asarray(contrasts.freedom * np.log(left[:, None] / kept), dtype=np.float64)


def _best(first: FloatArray, penalties: FloatArray) -> FloatArray:
    return np.asarray(np.maximum((first - penalties).max(axis=1), 0.0), dtype=np.float64)
