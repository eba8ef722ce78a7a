"""How uncertain the smoothing parameters are, and what that adds to the coefficients' uncertainty.

Near an optimum ρ̂ of REML the parameters ρ = log λ have covariance V_ρ = H⁻¹, H the Hessian of the
cost; to first order the coefficients' posterior covariance then gains V' = J V_ρ J', J = ∂β̂/∂ρ
(Kass & Steffey 1989, J. Am. Stat. Assoc. 84).
"""

from __future__ import annotations

import numpy as np

from addmodel.solve.criteria import Criterion
from addmodel.solve.quadratic import Solution
from addmodel.spaces.base import FloatArray

STEP = 1e-3
FLAT = 1e-6
"""A direction in which the cost curves less than this part of the most curved says nothing."""


def smoothing_spread(
    point: Solution, criterion: Criterion, free: list[int]
) -> tuple[FloatArray, FloatArray]:
    """J V_ρ^½ (P, k) and V_ρ^½ (blocks, k): times their transposes they are V' and V_ρ.

    No columns where nothing was chosen.
    """
    chosen = [i for i, j in enumerate(point.blocks) if j in free]
    moves = point.full_moves[:, chosen]
    if criterion.name != "reml" or not chosen:
        return moves[:, :0], np.zeros((len(point.smoothing), 0))
    hessian = _exact_hessian(point, criterion, chosen)
    values, vectors = np.linalg.eigh((hessian + hessian.T) / 2)
    curved = values > FLAT * max(float(values.max()), FLAT)
    root = vectors[:, curved] / np.sqrt(values[curved])
    every = np.zeros((len(point.smoothing), root.shape[1]))
    every[[point.blocks[i] for i in chosen]] = root
    return moves @ root, every


def _exact_hessian(point: Solution, criterion: Criterion, chosen: list[int]) -> FloatArray:
    """The criterion's Hessian; where weights change with the mean, differences of the gradient."""
    if point.mode is None:
        return criterion.hessian(point)[np.ix_(chosen, chosen)]
    rows = []
    for i in chosen:
        ends = []
        for sign in (1, -1):
            trial = point.smoothing.copy()
            trial[point.blocks[i]] *= np.exp(sign * STEP)
            ends.append(criterion.gradient(point.elsewhere(trial))[chosen])
        rows.append((ends[0] - ends[1]) / (2 * STEP))
    return np.array(rows)
