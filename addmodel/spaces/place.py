"""place(u, v): thin-plate spline in plane coordinates, m = 2.

J(f) = ∬ f_uu² + 2 f_uv² + f_vv² over the plane, u and v on one common scale: t = (x − low) / L with
L the larger of the two ranges. The kernel is r² log r / 8π (Duchon 1977; Wahba & Wendelberger 1980,
Mon. Weather Rev. 108), the null space 1, u, v.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.special import xlogy

from addmodel.spaces.base import FloatArray, orthonormal
from addmodel.spaces.scattered import Scattered, laid_parts


@dataclass(frozen=True)
class Place(Scattered):
    """Surfaces over a plane: a tilted plane, and what bends."""

    low: FloatArray  # (2,)
    length: float
    centre: FloatArray  # (2,) weighted mean of the scaled coordinates
    turn: FloatArray  # (2, 2) makes them orthonormal

    @classmethod
    def lay(
        cls,
        keys: tuple[str, ...],
        x: FloatArray,
        weights: FloatArray,
        cap: int | None,
        everything: bool,
    ) -> Place:
        """Lay the space on the data: x (n, 2); `everything`: every distinct site is a knot."""
        low = x.min(axis=0)
        length = float((x.max(axis=0) - low).max())
        sites = (x - low) / length
        parts = laid_parts(cls, sites, weights, everything)
        centre, turn = orthonormal(sites, weights)
        return cls(
            keys=keys,
            distinct=parts.distinct,
            gamma=parts.gamma,
            cap=cap,
            knots=parts.knots,
            kernel_part=parts.kernel_part,
            polynomial_part=parts.polynomial_part,
            reach=parts.reach,
            low=low,
            length=length,
            centre=centre,
            turn=turn,
        )

    @staticmethod
    def kernel(sites: FloatArray, knots: FloatArray) -> FloatArray:
        squares = sum((sites[:, None, k] - knots[None, :, k]) ** 2 for k in range(2))
        return np.asarray(xlogy(squares, squares) / (16 * np.pi), dtype=np.float64)

    @staticmethod
    def polynomials(sites: FloatArray) -> FloatArray:
        return np.column_stack([np.ones(len(sites)), sites])

    def scaled(self, x: npt.NDArray[Any]) -> FloatArray:
        return np.asarray((np.asarray(x, dtype=np.float64) - self.low) / self.length)

    @property
    def unpenalised_names(self) -> tuple[str, ...]:
        return tuple(f"{key}: straight part" for key in self.keys)

    def unpenalised(self, x: npt.NDArray[Any]) -> FloatArray:
        return (self.scaled(x) - self.centre) * self.length

    def null(self, x: npt.NDArray[Any]) -> FloatArray:
        columns: FloatArray = (self.scaled(x) - self.centre) @ self.turn
        return columns
