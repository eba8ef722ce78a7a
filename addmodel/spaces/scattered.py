"""Splines over scattered sites, from a kernel: what `place` and `globe` share.

f = Σ_i c_i K(·, knot_i) + a polynomial of the null space, J(f) = c'Kc over c orthogonal to the null
space's polynomials at the knots (Duchon 1977; Wahba 1990, Spline Models for Observational Data,
ch. 2). All distinct sites are knots up to a few hundred; beyond, so many of them, well spread.
"""

from __future__ import annotations

from abc import abstractmethod
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt
import scipy.linalg

from addmodel.spaces.base import BoolArray, FloatArray, Penalised, support

MOST_KNOTS = 300
"""Unless the formula says detail="all"."""
CANDIDATES = 20_000
CHUNK = 4096


class Parts(NamedTuple):
    """What `laid_parts` finds."""

    distinct: int
    knots: FloatArray  # (r, d)
    kernel_part: FloatArray  # (r, K) coefficients c of each z_k
    polynomial_part: FloatArray  # (1 + p, K)
    gamma: FloatArray  # (K,)
    reach: float


@dataclass(frozen=True)
class Scattered(Penalised):
    """A space of splines over sites."""

    knots: FloatArray
    kernel_part: FloatArray
    polynomial_part: FloatArray
    reach: float
    """A site farther than this from every knot counts as outside the data."""

    @property
    def most(self) -> int:
        return min(super().most, self.size)

    @property
    def growth(self) -> float:
        return 2.0  # about m·2/d in two dimensions, m = 2

    @staticmethod
    @abstractmethod
    def kernel(sites: FloatArray, knots: FloatArray) -> FloatArray:
        """K at each pair, (n, r)."""

    @staticmethod
    @abstractmethod
    def polynomials(sites: FloatArray) -> FloatArray:
        """The null space, the constant first, (n, 1 + p)."""

    @abstractmethod
    def scaled(self, x: npt.NDArray[Any]) -> FloatArray:
        """Sites as the kernel takes them, (n, d)."""

    @property
    def everywhere(self) -> bool:
        """Whether every distinct site is a knot."""
        return len(self.knots) == self.distinct

    def penalised(self, x: npt.NDArray[Any], count: int | None = None) -> FloatArray:
        sites = self.scaled(x)
        kernel_part, polynomial_part = self.kernel_part[:, :count], self.polynomial_part[:, :count]
        columns = np.empty((len(sites), kernel_part.shape[1]))
        for start in range(0, len(sites), CHUNK):
            part = sites[start : start + CHUNK]
            columns[start : start + CHUNK] = self.kernel(part, self.knots) @ kernel_part
            columns[start : start + CHUNK] += self.polynomials(part) @ polynomial_part
        return columns

    def outside(self, x: npt.NDArray[Any]) -> BoolArray:
        sites = self.scaled(x)
        nearest = np.concatenate(
            [
                distances(sites[i : i + CHUNK], self.knots).min(axis=1)
                for i in range(0, len(sites), CHUNK)
            ]
        )
        return np.asarray(nearest > self.reach, dtype=bool)


def distances(sites: FloatArray, others: FloatArray) -> FloatArray:
    """Straight distance of each pair, (n, r)."""
    squares = sum((sites[:, None, k] - others[None, :, k]) ** 2 for k in range(sites.shape[1]))
    return np.asarray(np.sqrt(squares), dtype=np.float64)


def well_spread(sites: FloatArray, count: int) -> FloatArray:
    """At most `count` of the sites, each next one the farthest from those chosen.

    It begins with the site nearest to their middle; of very many sites every so many-th is looked
    at. Nothing is random (Gonzalez 1985, Theor. Comput. Sci. 38).
    """
    if len(sites) <= count:
        return sites
    pool = sites[:: -(-len(sites) // CANDIDATES)]
    first = int(np.argmin(((pool - pool.mean(axis=0)) ** 2).sum(axis=1)))
    chosen = [first]
    nearest = distances(pool, pool[[first]])[:, 0]
    while len(chosen) < count:
        farthest = int(nearest.argmax())
        chosen.append(farthest)
        nearest = np.minimum(nearest, distances(pool, pool[[farthest]])[:, 0])
    return np.asarray(pool[np.sort(chosen)], dtype=np.float64)


def laid_parts(kind: type[Scattered], sites: FloatArray, weights: FloatArray, all_: bool) -> Parts:
    """Knots and Demmler–Reinsch functions of a kind of space over sites (n, d)."""
    points, omega = support(sites, weights)
    knots = points if all_ else well_spread(points, MOST_KNOTS)
    at_knots = kind.polynomials(knots)
    p = at_knots.shape[1]
    # c orthogonal to the polynomials: for the sphere, whose kernel is positive, no constraint.
    free = np.linalg.qr(at_knots, mode="complete")[0][:, p:] if p > 1 else np.eye(len(knots))
    inner = free.T @ kind.kernel(knots, knots) @ free
    values, vectors = scipy.linalg.eigh((inner + inner.T) / 2)
    solid = values > 1e-13 * values[-1]
    start = free @ (vectors[:, solid] / np.sqrt(values[solid]))  # J(Σ z_k start_k) = Σ z_k²
    functions = np.concatenate(
        [kind.kernel(points[i : i + CHUNK], knots) @ start for i in range(0, len(points), CHUNK)]
    )
    root = np.sqrt(omega / omega.sum())[:, None]
    flat, turn = np.linalg.qr(root * kind.polynomials(points))
    tall = root * functions
    taken = flat.T @ tall
    tall = tall - flat @ taken
    again = flat.T @ tall  # twice is enough: orthogonal to working precision
    tall = tall - flat @ again
    if len(tall) > 4 * tall.shape[1]:
        tall = np.linalg.qr(tall, mode="r")
    _, singular, rows = scipy.linalg.svd(tall, full_matrices=False, check_finite=False)
    count = min(len(points) - p, int(np.sum(singular > 1e-12 * singular[0])))
    right = rows[:count].T
    kernel_part = start @ right
    polynomial_part = -np.linalg.solve(turn, (taken + again) @ right)
    gaps = np.array([np.sort(distances(knots[[i]], knots)[0])[1] for i in range(len(knots))])
    cover = max(
        float(distances(points[i : i + CHUNK], knots).min(axis=1).max())
        for i in range(0, len(points), CHUNK)
    )
    return Parts(
        len(points),
        knots,
        kernel_part,
        polynomial_part,
        singular[:count] ** -2.0,
        max(cover, 2.0 * float(np.quantile(gaps, 0.9))),
    )
