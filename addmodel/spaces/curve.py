"""curve(x): the cubic smoothing spline, J(f) = ∫ f''(t)² dt with x scaled to t in [0, 1]."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.fft
import scipy.linalg

from addmodel.spaces.base import (
    FloatArray,
    Penalised,
    choose_knots,
    demmler_reinsch,
    hermite,
    support,
)


@dataclass(frozen=True)
class Curve(Penalised):
    """Natural cubic splines with knots at the data: a straight line, and what bends."""

    centre: float
    """Weighted mean of x in the data: the straight line is x − centre."""

    @classmethod
    def lay(cls, key: str, x: FloatArray, weights: FloatArray, size: int, cap: int | None) -> Curve:
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
        """
        low, high = float(x.min()), float(x.max())
        points, omega = support((x - low) / (high - low), weights)
        size = min(size, len(points) - 2)
        # 1.6 knots a function: the roughness of the last one kept is then good to a few per cent.
        knots = choose_knots(points, omega, max(96, int(1.6 * size)))
        r = len(knots)
        line = np.zeros((2 * r, 2))
        line[:r, 0], line[:r, 1], line[r:, 1] = 1.0, knots, 1.0
        columns, gamma = demmler_reinsch(hermite(knots, points), bent(knots), line, omega)
        return cls(
            key=key,
            low=low,
            length=high - low,
            distinct=len(points),
            size_kept=min(size, len(gamma)),
            knots=knots,
            value=columns[:r],
            slope=columns[r:],
            gamma=gamma,
            cap=cap,
            centre=float(np.average(x, weights=weights)),
        )

    @property
    def unpenalised_names(self) -> tuple[str, ...]:
        return (f"{self.key}: straight part",)

    def unpenalised(self, x: npt.NDArray[Any]) -> FloatArray:
        return np.asarray(x, dtype=np.float64)[:, None] - self.centre

    def scaled(self, x: npt.NDArray[Any]) -> FloatArray:
        return (np.asarray(x, dtype=np.float64) - self.low) / self.length

    def outside(self, x: npt.NDArray[Any]) -> npt.NDArray[np.bool_]:
        t = self.scaled(x)
        return (t < 0) | (t > 1)

    def waves(self, cells: FloatArray) -> FloatArray:
        transformed: FloatArray = scipy.fft.dct(cells, norm="ortho")[2:]
        return transformed


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
