"""Splines in one covariate: piecewise polynomials kept by what they are at their knots.

What `curve` and `cycle` share. For the penalty on the m-th derivative every kept function is a
polynomial of degree 2m − 1 between knots, so its value and first m − 1 derivatives there are all of
it (Hermite form).
"""

from __future__ import annotations

from abc import abstractmethod
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.linalg
import scipy.sparse

from addmodel.spaces.base import FloatArray, Penalised

KNOTS = 1.6
"""Knots a function: the roughness of the last one kept is then good to a few per cent."""
FEWEST_KNOTS = 96


@dataclass(frozen=True)
class Spline(Penalised):
    """A space of splines in the scaled covariate t = (x − low) / length."""

    low: float
    """The covariate's value at t = 0."""
    length: float
    """The covariate's range."""
    order: int
    """m: the penalty is ∫ (f^(m))²."""
    knots: FloatArray  # (r,) in t
    functions: FloatArray  # (m·r, K) values, slopes, ... of the z_k at the knots

    @property
    def growth(self) -> float:
        return 2.0 * self.order

    @abstractmethod
    def scaled(self, x: npt.NDArray[Any]) -> FloatArray:
        """The scaled covariate t at x, shape (n,)."""

    @abstractmethod
    def waves(self, cells: FloatArray) -> FloatArray:
        """Orthonormal wave coefficients of cell values, slow waves first, the constant left out.

        A cheap stand-in for the functions beyond those kept: cosines (`curve`) or sine–cosine pairs
        (`cycle`) over equal cells of the data's weight, the k-th with about k half waves.
        """

    def penalised(self, x: npt.NDArray[Any], count: int | None = None) -> FloatArray:
        t, r = self.scaled(x), len(self.knots)
        functions = self.functions[:, :count]
        inside = np.clip(t, self.knots[0], self.knots[-1])
        columns: FloatArray = hermite(self.knots, inside, self.order) @ functions
        # Outside the data a natural spline goes on as a polynomial of degree m − 1.
        for beyond, end in ((t < self.knots[0], 0), (t > self.knots[-1], r - 1)):
            if beyond.any():
                away, power = t[beyond] - self.knots[end], np.ones(int(beyond.sum()))
                for i in range(1, self.order):
                    power = power * away / i
                    columns[beyond] += np.outer(power, functions[i * r + end])
        return columns


def hermite(knots: FloatArray, t: FloatArray, order: int = 2) -> scipy.sparse.csr_array:
    """Matrix H (n, m·r): f(t) = H [values; slopes; ...] for f of degree 2m − 1 between knots.

    t lies within the knots.
    """
    r, n = len(knots), len(t)
    left = np.clip(np.searchsorted(knots, t, side="right") - 1, 0, r - 2)
    h = knots[left + 1] - knots[left]
    s = (t - knots[left]) / h
    if order == 1:
        parts = [1 - s, s]
    elif order == 2:
        parts = [
            (1 + 2 * s) * (1 - s) ** 2,
            s**2 * (3 - 2 * s),
            h * s * (1 - s) ** 2,
            -h * s**2 * (1 - s),
        ]
    else:
        back = 1 - s
        parts = [
            back**3 * (1 + 3 * s + 6 * s**2),
            s**3 * (1 + 3 * back + 6 * back**2),
            h * s * back**3 * (1 + 3 * s),
            -h * back * s**3 * (1 + 3 * back),
            h**2 * s**2 * back**3 / 2,
            h**2 * back**2 * s**3 / 2,
        ]
    where = np.stack([left + i * r + side for i in range(order) for side in (0, 1)], axis=1)
    weights = np.stack(parts, axis=1)
    return scipy.sparse.csr_array(
        (weights.ravel(), where.ravel(), np.arange(0, 2 * order * n + 1, 2 * order)),
        shape=(n, order * r),
    )


def demmler_reinsch(
    at_points: scipy.sparse.csr_array,
    functions: FloatArray,
    null: FloatArray,
    weights: FloatArray,
    last: int,
) -> tuple[FloatArray, FloatArray]:
    """Demmler–Reinsch form of functions B with roughness J(Bz) = Σz².

    Parameters
    ----------
    at_points : (m, R)
        `hermite` at the support points.
    functions : (R, q)
        B, as values and derivatives at the knots.
    null : (R, p)
        The functions without roughness, the constant first.
    weights : (m,)
        Weights ω.
    last : int
        Which row of B is the value at the last knot.

    Returns
    -------
    columns : (R, K)
        The columns z_k = φ_k/√γ_k as values and derivatives, smoothest first.
    gamma : (K,)
        Roughness of the φ_k, ascending.

    Notes
    -----
    The singular values of diag(ω)^½ P B / √Σω, P the weighted projection off the null space, are
    γ^{-½}. Worked from this inverse and never from the roughness matrix, whose pencil loses all
    digits on unevenly spread points.
    """
    m, q = at_points.shape[0], functions.shape[1]
    root = np.sqrt(weights / weights.sum())[:, None]
    flat, turn = np.linalg.qr(root * (at_points @ null))
    plain = null @ np.linalg.inv(turn)  # the null space, orthonormal in the weights
    rooted = at_points.multiply(root).tocsr()
    mass = rooted.T @ rooted
    bent = functions
    for _ in range(2):  # twice is enough: orthogonal to working precision
        bent = bent - plain @ (plain.T @ (mass @ bent))
    if m > q:
        squares, vectors = np.linalg.eigh(bent.T @ (mass @ bent))
    if m > q and squares[0] > 1e-8 * squares[-1]:
        # Enough digits are left when squared, and the cost hardly grows with m.
        gamma, right = 1 / squares[::-1], vectors[:, ::-1]
    else:
        tall = rooted @ bent
        bent = bent - plain @ (flat.T @ tall)
        tall -= flat @ (flat.T @ tall)
        _, singular, rows = scipy.linalg.svd(tall, full_matrices=False, check_finite=False)
        count = min(m - null.shape[1], int(np.sum(singular > 1e-15 * singular[0])))
        gamma, right = singular[:count] ** -2.0, rows[:count].T
    columns = bent @ right
    # The sign of a singular vector is arbitrary: take the one that ends above zero.
    return columns * np.where(columns[last] < 0, -1.0, 1.0), np.asarray(gamma, dtype=np.float64)


def choose_knots(points: FloatArray, weights: FloatArray, count: int) -> FloatArray:
    """At most `count` of the points, the first and the last among them.

    The k-th function oscillates with phase ∝ ∫ (γ_k ρ(t))^{1/4} dt, ρ the density of the weights
    (the equation f'''' = γ ρ f in its short-wave limit; Silverman 1984, Ann. Stat. 12, has the same
    power for the local bandwidth), so knots are spread with density ρ^{1/4}. A gap between
    neighbours adds ω^{1/4} h^{3/4}; none counts for more than one knot, so that one far point
    cannot take the knots of all others.
    """
    m = len(points)
    if m <= count:
        return points
    phase = (0.5 * (weights[1:] + weights[:-1])) ** 0.25 * np.diff(points) ** 0.75
    phase /= phase.max()
    # Largest cap c with Σ min(phase/c, 1) = count − 1: try each number of capped gaps.
    descending = np.sort(phase)[::-1]
    rest = phase.sum() - np.concatenate([[0.0], np.cumsum(descending)])
    capped = np.arange(count - 1)
    caps = rest[: count - 1] / (count - 1 - capped)
    fits = np.flatnonzero(caps >= descending[: count - 1])
    cap = caps[fits[0]] if len(fits) else descending[count - 2]
    along = np.concatenate([[0.0], np.cumsum(np.minimum(phase / cap, 1.0))])
    chosen = np.searchsorted(along, np.linspace(0.0, along[-1], count) - 1e-9)
    knots: FloatArray = points[np.unique(np.clip([0, *chosen, m - 1], 0, m - 1))]
    return knots
