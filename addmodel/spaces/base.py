"""The contract of a space, and the Demmler–Reinsch form that every penalised space is brought to.

Which space when: `line` for a number whose effect is straight, `levels` for categories, `curve`
for a number whose effect bends, `cycle` for one that comes round again (hour, direction, season).

A space is *laid* on the data: over its distinct support points t_1..t_m with weights ω_l it has a
roughness J with a known null space. The constant is dropped (the intercept has it); the rest of the
null space is the unpenalised part N; the penalised part P has columns z_k = φ_k/√γ_k, where the φ_k
are orthonormal in the data's weights, Σ_l ω_l φ_j φ_k / Σ ω = δ_jk, orthogonal to the null space,
and have roughness γ_k, ascending (Demmler & Reinsch 1975, Numer. Math. 24). So J(Σ u_k z_k) is
Σ u_k².
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass, replace
from typing import Any, Self

import numpy as np
import numpy.typing as npt
import scipy.linalg
import scipy.sparse

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class Space(ABC):
    """A space laid on data: it turns covariate values into columns, row by row.

    Laws (tests/test_spaces.py holds every space to them):

    - row i of every result depends on x[i] only;
    - penalised columns are orthogonal to the constant and to N in the data's weights, and have
      weighted mean square 1/γ_k, γ ascending;
    - the columns of a smaller detail are the first columns of a larger one.
    """

    key: str
    """Key of the covariate's column in the table."""

    @property
    @abstractmethod
    def unpenalised_names(self) -> tuple[str, ...]:
        """Names of the columns of N, in order."""

    @abstractmethod
    def unpenalised(self, x: npt.NDArray[Any]) -> FloatArray:
        """Columns of N at x, shape (n, len(unpenalised_names))."""

    @property
    def size(self) -> int:
        """Number of penalised functions kept."""
        return 0

    @property
    def most(self) -> int:
        """Number of penalised functions that the distinct points allow."""
        return 0

    def penalised(self, x: npt.NDArray[Any]) -> FloatArray:
        """Columns of P at x, shape (n, size)."""
        return np.empty((len(x), 0))

    def outside(self, x: npt.NDArray[Any]) -> BoolArray:
        """Which rows lie outside the data the space was laid on, shape (n,)."""
        return np.zeros(len(x), dtype=bool)


@dataclass(frozen=True)
class Penalised(Space):
    """What `curve` and `cycle` share: a cubic spline kept as value and slope at its knots.

    Every kept function is a cubic between knots, so value and slope there are all of it (cubic
    Hermite form). `knots`, `value` and `slope` are in the scaled covariate t.
    """

    low: float
    """The covariate's value at t = 0."""
    length: float
    """The covariate's range: t = (x − low) / length."""
    distinct: int
    """Number of distinct points m in the data."""
    size_kept: int
    knots: FloatArray  # (r,)
    value: FloatArray  # (r, K), K >= size_kept
    slope: FloatArray  # (r, K), d/dt
    gamma: FloatArray  # (K,) roughness of the orthonormal functions
    cap: int | None
    """The formula's `detail=`: never more functions than this; None where the data choose."""

    @property
    def size(self) -> int:
        return self.size_kept

    @property
    def most(self) -> int:
        allowed = self.distinct - 1 - len(self.unpenalised_names)
        return allowed if self.cap is None else min(self.cap, allowed)

    def keep(self, size: int) -> Self:
        """The same space with its first `size` functions; pairs of one roughness stay whole."""
        size = min(size, len(self.gamma), self.most)
        if 1 < size < len(self.gamma) and self.gamma[size] < (1 + 1e-6) * self.gamma[size - 1]:
            size -= 1
        return replace(self, size_kept=size)

    @abstractmethod
    def scaled(self, x: npt.NDArray[Any]) -> FloatArray:
        """The scaled covariate t at x, shape (n,)."""

    @abstractmethod
    def waves(self, cells: FloatArray) -> FloatArray:
        """Orthonormal wave coefficients of cell values, slow waves first, the constant left out.

        A cheap stand-in for the functions beyond those kept: cosines (`curve`) or sine–cosine pairs
        (`cycle`) over equal cells of the data's weight, the k-th with about k half waves.
        """

    def penalised(self, x: npt.NDArray[Any]) -> FloatArray:
        t = self.scaled(x)
        k = self.size
        inside = np.clip(t, self.knots[0], self.knots[-1])
        columns: FloatArray = hermite(self.knots, inside) @ np.concatenate(
            [self.value[:, :k], self.slope[:, :k]]
        )
        # Outside the data a natural spline goes on as a straight line.
        for beyond, end in ((t < self.knots[0], 0), (t > self.knots[-1], -1)):
            if beyond.any():
                columns[beyond] += np.outer(t[beyond] - self.knots[end], self.slope[end, :k])
        return columns


def hermite(knots: FloatArray, t: FloatArray) -> scipy.sparse.csr_array:
    """Matrix H (n, 2r): f(t) = H [values; slopes] for a piecewise cubic f, t within the knots."""
    r, n = len(knots), len(t)
    left = np.clip(np.searchsorted(knots, t, side="right") - 1, 0, r - 2)
    h = knots[left + 1] - knots[left]
    s = (t - knots[left]) / h
    weights = np.stack(
        [
            (1 + 2 * s) * (1 - s) ** 2,
            s**2 * (3 - 2 * s),
            h * s * (1 - s) ** 2,
            -h * s**2 * (1 - s),
        ],
        axis=1,
    )
    where = np.stack([left, left + 1, left + r, left + r + 1], axis=1)
    return scipy.sparse.csr_array(
        (weights.ravel(), where.ravel(), np.arange(0, 4 * n + 1, 4)), shape=(n, 2 * r)
    )


def demmler_reinsch(
    at_points: scipy.sparse.csr_array,
    functions: FloatArray,
    null: FloatArray,
    weights: FloatArray,
) -> tuple[FloatArray, FloatArray]:
    """Demmler–Reinsch form of functions B with roughness J(Bz) = Σz².

    Parameters
    ----------
    at_points : (m, 2r)
        `hermite` at the support points.
    functions : (2r, q)
        B, as values and slopes at the knots.
    null : (2r, p)
        The functions without roughness, the constant first.
    weights : (m,)
        Weights ω.

    Returns
    -------
    columns : (2r, K)
        The columns z_k = φ_k/√γ_k as values and slopes, smoothest first.
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
    last = len(functions) // 2 - 1
    return columns * np.where(columns[last] < 0, -1.0, 1.0), np.asarray(gamma, dtype=np.float64)


def support(t: FloatArray, weights: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Distinct points, ascending, and the weight summed at each."""
    points, where = np.unique(t, return_inverse=True)
    summed: FloatArray = np.bincount(where, weights, minlength=len(points)).astype(np.float64)
    return points, summed


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
