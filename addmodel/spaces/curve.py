"""curve(x): the smoothing spline, J(f) = ∫ (f^(m)(t))² dt with x scaled to t in [0, 1].

m = 2, the cubic one, unless `order=` says 1 (broken lines) or 3 (quintic splines).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.fft
import scipy.interpolate
import scipy.linalg

from addmodel.spaces.base import BoolArray, FloatArray, orthonormal, support
from addmodel.spaces.spline import (
    FEWEST_KNOTS,
    KNOTS,
    Spline,
    choose_knots,
    demmler_reinsch,
    hermite,
)


@dataclass(frozen=True)
class Curve(Spline):
    """Natural splines with knots at the data: polynomials below degree m, and what bends.

    Outside the data a natural spline goes on as a polynomial of degree m − 1.
    """

    centre: FloatArray  # (m − 1,) weighted means of the columns below in the data
    turn: FloatArray  # (m − 1, m − 1) makes them orthonormal

    @classmethod
    def lay(
        cls,
        key: str,
        x: FloatArray,
        weights: FloatArray,
        size: int,
        cap: int | None,
        order: int = 2,
    ) -> Curve:
        """Lay the space on the data.

        Parameters
        ----------
        key : str
            Key of the covariate's column.
        x, weights : (n,)
            The covariate and the prior weights of the rows.
        size : int
            Number of penalised functions wanted; fewer where the distinct points allow fewer.
        cap : int or None
            The formula's `detail=`.
        order : int
            m, the derivative that is penalised.
        """
        low, high = float(x.min()), float(x.max())
        points, omega = support((x - low) / (high - low), weights)
        size = min(size, len(points) - order)
        knots = choose_knots(points, omega, max(FEWEST_KNOTS, int(KNOTS * size)))
        r = len(knots)
        null = np.zeros((order * r, order))
        for i in range(order):  # t^k and its derivatives
            for k in range(i, order):
                null[i * r : (i + 1) * r, k] = np.prod(range(k - i + 1, k + 1)) * knots ** (k - i)
        bending = bent(knots) if order == 2 else integrated(knots, order)
        functions, gamma = demmler_reinsch(
            hermite(knots, points, order), bending, null, omega, r - 1
        )
        centre, turn = orthonormal(_powers((x - low) / (high - low), order), weights)
        return cls(
            keys=(key,),
            distinct=len(points),
            gamma=gamma,
            cap=cap,
            low=low,
            length=high - low,
            order=order,
            knots=knots,
            functions=functions,
            centre=centre,
            turn=turn,
        )

    @property
    def unpenalised_names(self) -> tuple[str, ...]:
        parts = ("straight part", "quadratic part")
        return tuple(f"{self.key}: {part}" for part in parts[: self.order - 1])

    def unpenalised(self, x: npt.NDArray[Any]) -> FloatArray:
        columns = _powers(self.scaled(x), self.order) - self.centre
        return columns * self.length ** np.arange(1.0, self.order)

    def null(self, x: npt.NDArray[Any]) -> FloatArray:
        columns: FloatArray = (_powers(self.scaled(x), self.order) - self.centre) @ self.turn
        return columns

    def scaled(self, x: npt.NDArray[Any]) -> FloatArray:
        return (np.asarray(x, dtype=np.float64) - self.low) / self.length

    def outside(self, x: npt.NDArray[Any]) -> BoolArray:
        t = self.scaled(x)
        beyond: BoolArray = (t < 0) | (t > 1)
        return beyond

    def waves(self, cells: FloatArray) -> FloatArray:
        transformed: FloatArray = scipy.fft.dct(cells, norm="ortho")[self.order :]
        return transformed


def _powers(t: FloatArray, order: int) -> FloatArray:
    """t, t², ... below the order, (n, m − 1)."""
    return np.column_stack([np.empty((len(t), 0)), *(t**k for k in range(1, order))])


def bent(knots: FloatArray) -> FloatArray:
    """Values, then slopes, at the knots of functions B with ∫ (Bz)''² = Σz², shape (2r, r − 2).

    A natural cubic spline has f'' = Σ_j c_j hat_j, hat_j the broken line that is 1 at inner knot j,
    so ∫ f''² = c'Rc with R tridiagonal (Green & Silverman 1994, ch. 2); with R = LL', c = L^{-T}z.
    Integrated twice from the left, hat_j is mass·(t − centroid) beyond its right end: all terms
    positive, no digits lost however uneven the knots.
    """
    h = np.diff(knots)
    before, after = h[:-1], h[1:]
    mass = (before + after) / 2
    index = np.arange(len(knots))[:, None]
    inner = np.arange(1, len(knots) - 1)
    distance = knots[:, None] - knots[1:-1] - (after - before) / 3
    value = np.where(index > inner, mass * distance, 0.0)
    slope = np.where(index > inner, mass, 0.0)
    value[inner, inner - 1] = before**2 / 6
    slope[inner, inner - 1] = before / 2
    banded = np.stack([(before + after) / 3, np.append(after[:-1] / 6, 0.0)])
    factor = scipy.linalg.cholesky_banded(banded, lower=True)
    stacked = np.concatenate([value, slope])
    return np.asarray(scipy.linalg.solve_banded((1, 0), factor, stacked.T).T, dtype=np.float64)


def integrated(knots: FloatArray, order: int) -> FloatArray:
    """As `bent` for any m: value to (m − 1)-th derivative at the knots, shape (m·r, r − m).

    f^(m) = Σ_j c_j B_j with B_j the B-splines of degree m − 1 on m + 1 neighbouring knots, so
    ∫ (f^(m))² = c'Rc, R their Gram matrix (banded) = LL', c = L^{-T}z; f is its m-fold integral.
    """
    r, degree = len(knots), order - 1
    count = r - order
    padded = np.concatenate([np.repeat(knots[0], degree), knots, np.repeat(knots[-1], degree)])
    every = len(padded) - order
    inner = np.eye(every)[:, degree : degree + count]
    spline = scipy.interpolate.BSpline(padded, inner, degree)
    pieces = [spline.antiderivative(order - i)(knots) for i in range(order)]
    nodes, shares = np.polynomial.legendre.leggauss(order)
    h = np.diff(knots)
    banded = np.zeros((order, count))
    for node, share in zip(nodes, shares, strict=True):
        at = knots[:-1] + h * (node + 1) / 2
        values = scipy.interpolate.BSpline.design_matrix(at, padded, degree).toarray()
        values = values[:, degree : degree + count]
        for k in range(order):
            products = values[:, : count - k] * values[:, k:]
            banded[k, : count - k] += (h * share / 2) @ products
    factor = scipy.linalg.cholesky_banded(banded, lower=True)
    stacked = np.concatenate(pieces)
    solved = scipy.linalg.solve_banded((degree, 0), factor, stacked.T)
    return np.asarray(solved.T, dtype=np.float64)
