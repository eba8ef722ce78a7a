"""globe(lat, lon): spline on the sphere (Wahba 1981, SIAM J. Sci. Stat. Comput. 2, and erratum

1982, vol. 3), m = 2, coordinates in degrees. With z the cosine of the angle between two sites and
W = (1 − z)/2 its kernel is

    K(z) = (q(z)/2 − 1/6) / 2π,  q(z) = ½ [log(1 + W^{-½})(12 W² − 4 W) − 12 W^{3/2} + 6 W + 1],

which is Σ_{l ≥ 1} P_l(z) / (2π (l + 1)(l + 2)(l + 3)); the null space is the constant alone.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from addmodel.spaces.base import BoolArray, FloatArray
from addmodel.spaces.scattered import Scattered, laid_parts


@dataclass(frozen=True)
class Globe(Scattered):
    """Functions on the sphere: poles and the date line are places like any other."""

    @classmethod
    def lay(
        cls,
        keys: tuple[str, ...],
        x: FloatArray,
        weights: FloatArray,
        cap: int | None,
        everything: bool,
    ) -> Globe:
        """Lay the space on the data: x (n, 2) latitude and longitude in degrees."""
        parts = laid_parts(cls, unit_vectors(x), weights, everything)
        return cls(
            keys=keys,
            distinct=parts.distinct,
            gamma=parts.gamma,
            cap=cap,
            knots=parts.knots,
            kernel_part=parts.kernel_part,
            polynomial_part=parts.polynomial_part,
            reach=parts.reach,
        )

    @staticmethod
    def kernel(sites: FloatArray, knots: FloatArray) -> FloatArray:
        return wahba(np.clip(sites @ knots.T, -1.0, 1.0))

    @staticmethod
    def polynomials(sites: FloatArray) -> FloatArray:
        return np.ones((len(sites), 1))

    def scaled(self, x: npt.NDArray[Any]) -> FloatArray:
        return unit_vectors(np.asarray(x, dtype=np.float64))

    def outside(self, x: npt.NDArray[Any]) -> BoolArray:
        beyond: BoolArray = super().outside(x) | (np.abs(x) > [90.0, 360.0]).any(axis=1)
        return beyond

    @property
    def unpenalised_names(self) -> tuple[str, ...]:
        return ()

    def unpenalised(self, x: npt.NDArray[Any]) -> FloatArray:
        return np.empty((len(x), 0))

    def null(self, x: npt.NDArray[Any]) -> FloatArray:
        return np.empty((len(x), 0))


def unit_vectors(degrees: FloatArray) -> FloatArray:
    """Latitude and longitude in degrees (n, 2) -> points on the unit sphere (n, 3).

    Rounded to 14 digits, so that all longitudes of a pole are one site.
    """
    lat_rad, lon_rad = np.radians(degrees).T
    flat = np.cos(lat_rad)
    vectors = np.column_stack([flat * np.cos(lon_rad), flat * np.sin(lon_rad), np.sin(lat_rad)])
    return np.asarray(np.round(vectors, 14) + 0.0, dtype=np.float64)


def wahba(z: FloatArray) -> FloatArray:
    """The kernel at the cosines z."""
    w = (1 - z) / 2
    root = np.sqrt(w)
    with np.errstate(divide="ignore"):
        log = np.log1p(1 / np.maximum(root, 1e-300))
    q = 0.5 * (log * (12 * w**2 - 4 * w) - 12 * w * root + 6 * w + 1)
    return np.asarray((q / 2 - 1 / 6) / (2 * np.pi), dtype=np.float64)
