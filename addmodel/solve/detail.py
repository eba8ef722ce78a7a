"""Is there detail enough? Whether the functions kept are all that the data can use.

The user never chooses a number of basis functions, and never gets a wrong one silently: a component
gets more functions while any of the last tenth of those kept is shrunk by less than 99 %, and while
the residuals still hold waves finer than those kept.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import scipy.linalg
import scipy.special

from addmodel.spaces.base import FloatArray
from addmodel.spaces.spline import Spline

CEILING = 800
"""More functions than this are kept only when the formula says detail="all"."""
SHRUNK = 0.99
GROWTH = 1.5
FASTEST = 4.0
LEVEL = 0.001
CELLS = 8192
SLOWEST = 6
"""Bands of waves begin about here."""


def enough(shrinkage: FloatArray, growth: float) -> int | None:
    """A larger number of functions, where the last tenth of those kept is shrunk too little.

    Parameters
    ----------
    shrinkage : (q,)
        λ(A⁻¹)_kk of each function: 0 is free, 1 is gone; ones where λ is infinite.
    growth : float
        Roughness grows as this power of the function's number.
    """
    size = len(shrinkage)
    least = float(shrinkage[-max(1, size // 10) :].min())
    if least >= SHRUNK:
        return None
    # Shrinkage is λγ/(n + λγ), γ growing as that power: about as many as are needed.
    odds = max(least / (1 - least), 1e-9)
    factor = (SHRUNK / (1 - SHRUNK) / odds) ** (1 / growth)
    return int(np.ceil(np.clip(1.1 * factor, GROWTH, FASTEST) * size))


def left_over_functions(
    kept: FloatArray,
    omitted: FloatArray,
    residuals: FloatArray,
    weights: FloatArray,
    scale: float,
    bands: int,
) -> bool:
    """Whether functions that a block leaves out stand out of the noise.

    Parameters
    ----------
    kept, omitted : (n, q), (n, m)
        Columns of the block, and those that come next, smoothest first.
    residuals, weights : (n,)
        Working residuals and working weights of the rows.
    scale : float
        Variance of a residual of weight one.
    bands : int
        Into how many bands the omitted ones are cut.

    With Z a band of omitted columns less their projection on the kept ones, s = Z'Wr has covariance
    φ Z'WZ at most when nothing is left over: s'(Z'WZ)⁻¹s/φ against chi-square.
    """
    root = np.sqrt(weights)[:, None]
    base = np.linalg.qr(root * np.concatenate([np.ones((len(kept), 1)), kept], axis=1))[0]
    outside = root * omitted
    outside = outside - base @ (base.T @ outside)
    target = root[:, 0] * residuals
    target = target - base @ (base.T @ target)
    for band in np.array_split(np.arange(outside.shape[1]), bands):
        values, vectors = np.linalg.eigh(outside[:, band].T @ outside[:, band])
        solid = values > 1e-8 * max(float(values[-1]), np.finfo(float).tiny)
        along = (vectors[:, solid].T @ (outside[:, band].T @ target)) ** 2 / values[solid]
        if scipy.special.chdtrc(int(solid.sum()), along.sum() / scale) < LEVEL / bands:
            return True
    return False


def left_over(
    space: Spline,
    size: int,
    x: FloatArray,
    residuals: FloatArray,
    weights: FloatArray,
    scale: float,
) -> int | None:
    """A larger number of functions, where waves that those kept cannot make stand out of the noise.

    The residuals are summed over cells of equal weight along the covariate, Σwr/√Σw in each, which
    are independent N(0, σ²) when nothing is left over; their orthonormal wave coefficients v are
    then N(0, σ²), or less where kept functions overlap a wave, and Σv²/σ² over the bands
    ..K/1.5..K..1.5K.. is held against chi-square. On uneven points the kept functions cannot make
    even some waves slower than K where the data are dense, so slow bands are looked at too; what
    the kept functions could take if they were not shrunk is taken off before that counts.
    """
    if _outstanding(space, size, x, residuals, weights, scale) is None:
        return None
    rest = residuals - _could_take(space, size, x, residuals, weights)
    return _outstanding(space, size, x, rest, weights, scale)


def _outstanding(
    space: Spline,
    size: int,
    x: FloatArray,
    residuals: FloatArray,
    weights: FloatArray,
    scale: float,
) -> int | None:
    t = space.scaled(x)
    cells = min(space.distinct, CELLS)
    order = np.argsort(t, kind="stable")
    heaviness = weights[order]
    middle = (np.cumsum(heaviness) - heaviness / 2) / heaviness.sum()
    # Rows with the same t belong into one cell, the one where the middle of their weight lies.
    starts = np.flatnonzero(np.diff(t[order], prepend=-np.inf) > 0)
    group = np.repeat(np.arange(len(starts)), np.diff(np.append(starts, len(t))))
    centre = np.bincount(group, middle * heaviness) / np.bincount(group, heaviness)
    cell = np.minimum((centre[group] * cells).astype(np.int64), cells - 1)
    sums = np.bincount(cell, heaviness * residuals[order], minlength=cells)
    mass = np.bincount(cell, heaviness, minlength=cells)
    values = np.divide(sums, np.sqrt(mass), out=np.zeros(cells), where=mass > 0)
    squares = space.waves(values) ** 2 / scale
    edges = [size]
    while edges[-1] < len(squares):
        edges.append(int(np.ceil(GROWTH * edges[-1])))
    while edges[0] > SLOWEST:
        edges.insert(0, int(edges[0] / GROWTH))
    bands = list(pairwise(edges))
    for start, stop in bands:
        band = squares[start:stop]
        if len(band) and scipy.special.chdtrc(len(band), band.sum()) < LEVEL / len(bands):
            return max(stop, int(np.ceil(GROWTH * size)))
    return None


def _could_take(
    space: Spline, size: int, x: FloatArray, residuals: FloatArray, weights: FloatArray
) -> FloatArray:
    """The weighted projection of the residuals on the constant and the space's own columns."""
    columns = [np.ones((len(x), 1)), space.null(x), space.penalised(x, size)]
    rooted = np.concatenate(columns, axis=1) * np.sqrt(weights)[:, None]
    gram = rooted.T @ rooted
    lengths = np.sqrt(np.maximum(np.diag(gram), np.finfo(float).tiny))
    right = rooted.T @ (np.sqrt(weights) * residuals) / lengths
    unit = gram / np.outer(lengths, lengths)
    unit[np.diag_indices_from(unit)] += 1e-9  # columns may repeat each other under other weights
    taken = scipy.linalg.solve(unit, right, assume_a="pos", check_finite=False) / lengths
    projection: FloatArray = rooted @ taken / np.sqrt(weights)
    return projection
