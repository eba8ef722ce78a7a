"""What an infinite smoothing parameter adds to the uncertainty.

The first-order term J V_ρ J' vanishes where a smoothing parameter ran to infinity, exactly where it
is needed: the data cannot tell no bend from a little. There the posterior is integrated over that
parameter, the others held (Rue, Martino & Chopin 2009, J. R. Stat. Soc. B 71):

    E[(β − β̂)(β − β̂)'] = Σ_g w_g [V_g + (β_g − β̂)(β_g − β̂)'],  w_g ∝ exp(−cost(λ_g)) λ_g^{-1/10} Δ,

over a grid of log λ. The prior of the standard deviation τ of the block's functions, in proportion
to λ^{-½}, is then τ^{-4/5}: between the flat one (Gelman 2006, Bayesian Anal. 1), whose bands
covered 97 to 98 % in trials, and 1/τ, whose bands fell below 88 % for weak quadratics (see
validation/coverage.py). What that is beyond V is positive semi-definite, of low rank, and kept as
its root.
"""

from __future__ import annotations

import numpy as np

from addmodel.laid import Laid
from addmodel.solve.criteria import Criterion
from addmodel.solve.quadratic import Solution
from addmodel.solve.smoothness import ridges_for
from addmodel.spaces.base import FloatArray

POWER = 0.1
GRID = 16
LEAST_DF, MOST_DF = 0.02, 8.0
"""The grid runs over smoothing parameters that leave a block alone so many degrees of freedom."""
KEPT = 1e-4
"""Directions with less than this part of the largest addition are left out."""


def beyond(laid: Laid, solution: Solution, criterion: Criterion) -> FloatArray:
    """The root (P, r) of what blocks held at infinity add to A⁻¹φ; no columns where none is.

    Groups are left as they are: their variance is zero at infinity, and that is the answer.
    """
    total = len(solution.coefficients())
    roots = [np.zeros((total, 0))]
    if criterion.name != "reml":
        return roots[0]
    free = laid.free_blocks
    for k, block in enumerate(laid.design.blocks):
        if np.isinf(solution.smoothing[k]) and k in free and not block.grouped:
            roots.append(_of_block(laid, solution, criterion, k))
    return np.concatenate(roots, axis=1)


def _of_block(laid: Laid, solution: Solution, criterion: Criterion, block: int) -> FloatArray:
    problem = solution.problem
    targets = np.geomspace(LEAST_DF, min(MOST_DF, 0.5 * problem.sizes[block]), GRID)
    grid = np.sort(ridges_for(problem, block, targets))
    costs, points = [], []
    for lam in grid:
        smoothing = solution.smoothing.copy()
        smoothing[block] = lam
        point = laid.modes.solution(smoothing, solution.coefficients())
        points.append(point)
        costs.append(criterion.cost(point))
    step = np.gradient(np.log(grid))
    log_weights = -np.array(costs) - POWER * np.log(grid) + np.log(step)
    weights = np.exp(log_weights - log_weights.max())
    weights /= weights.sum()
    used = np.flatnonzero(weights > 1e-3)
    base = solution.posterior().dense * criterion.scale(solution)
    more = np.zeros_like(base)
    wide = len(base)
    for g in used:
        point = points[g]
        scale = criterion.scale(point)
        moved = (point.coefficients() - solution.coefficients())[:wide]
        more += weights[g] * (scale * point.posterior().dense - base + np.outer(moved, moved))
    # In units of the standard deviations, so that every column counts alike.
    spread = np.sqrt(np.maximum(np.diag(base), 0.0) + np.maximum(np.diag(more), 0.0))
    unit = np.where(spread > 0, spread, 1.0)
    values, vectors = np.linalg.eigh((more + more.T) / 2 / np.outer(unit, unit))
    kept = values > KEPT * max(float(values[-1]), np.finfo(float).tiny)
    root = np.zeros((len(solution.coefficients()), int(kept.sum())))
    root[:wide] = unit[:, None] * vectors[:, kept] * np.sqrt(values[kept])
    return root
