"""The contract of a space.

Which space when: `line` for a number whose effect is straight, `levels` for categories, `curve`
for a number whose effect bends, `cycle` for one that comes round again (hour, direction, season),
`place` for a map in plane coordinates, `globe` for one in degrees, `group` for many levels that are
a sample of all that could be (postcodes, persons, schools).

A space is *laid* on the data: over its distinct support points t_1..t_m with weights ω_l it has a
roughness J with a known null space. The constant is dropped (the intercept has it); the rest of the
null space is the unpenalised part N; the penalised part P has columns z_k = φ_k/√γ_k, where the φ_k
are orthonormal in the data's weights, Σ_l ω_l φ_j φ_k / Σ ω = δ_jk, orthogonal to the null space,
and have roughness γ_k, ascending (Demmler & Reinsch 1975, Numer. Math. 24). So J(Σ u_k z_k) is
Σ u_k².
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]
Values = Mapping[str, npt.NDArray[Any]]
"""Covariate values by the key of their column, each (n,)."""


@dataclass(frozen=True)
class Space(ABC):
    """A space laid on data: it turns covariate values into columns, row by row.

    What a row sees of its covariates, x[i], is a number or a short vector (two coordinates).

    Laws (tests/test_spaces.py holds every space to them):

    - row i of every result depends on x[i] only;
    - penalised columns are orthogonal to the constant and to N in the data's weights, and have
      weighted mean square 1/γ_k, γ ascending;
    - `null` spans what `unpenalised` spans beside the constant;
    - the columns of a smaller detail are the first columns of a larger one.
    """

    keys: tuple[str, ...]
    """Keys of the covariates' columns in the table."""

    @property
    def key(self) -> str:
        """The covariates in words."""
        return ", ".join(self.keys)

    def seen(self, values: Values) -> npt.NDArray[Any]:
        """What the space sees of the covariates: (n,), or (n, k) for k of them."""
        if len(self.keys) == 1:
            return values[self.keys[0]]
        return np.column_stack([values[key] for key in self.keys])

    @property
    @abstractmethod
    def unpenalised_names(self) -> tuple[str, ...]:
        """Names of the columns of N, in order."""

    @abstractmethod
    def unpenalised(self, x: npt.NDArray[Any]) -> FloatArray:
        """Columns of N at x as they are reported, shape (n, len(unpenalised_names))."""

    @abstractmethod
    def null(self, x: npt.NDArray[Any]) -> FloatArray:
        """The same space of functions as it enters penalised products, (n, p).

        An orthonormal basis, so that no direction of it is preferred.
        """

    @property
    def size(self) -> int:
        """Number of penalised functions at hand."""
        return 0

    @property
    def most(self) -> int:
        """Number of penalised functions that the distinct points allow."""
        return 0

    def penalised(self, x: npt.NDArray[Any], count: int | None = None) -> FloatArray:
        """The first `count` columns of P at x (all at hand, if None), shape (n, count)."""
        return np.empty((len(x), 0))

    def outside(self, x: npt.NDArray[Any]) -> BoolArray:
        """Which rows lie outside the data the space was laid on, shape (n,)."""
        return np.zeros(len(x), dtype=bool)


@dataclass(frozen=True)
class Penalised(Space):
    """What all spaces of smooth functions share: they have a roughness."""

    distinct: int
    """Number of distinct points m in the data."""
    gamma: FloatArray  # (K,) roughness of the orthonormal functions at hand, ascending
    cap: int | None
    """The formula's `detail=`: never more functions than this; None where the data choose."""

    @property
    def growth(self) -> float:
        """γ_k grows as this power of k."""
        return 4.0

    @property
    def size(self) -> int:
        return len(self.gamma)

    @property
    def most(self) -> int:
        allowed = self.distinct - 1 - len(self.unpenalised_names)
        return allowed if self.cap is None else min(self.cap, allowed)


def support(t: FloatArray, weights: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Distinct points (rows, if t is two-dimensional), ascending, and the weight summed at each."""
    points, where = np.unique(t, axis=0, return_inverse=True)
    summed: FloatArray = np.bincount(where.ravel(), weights, minlength=len(points)).astype(float)
    return points, summed


def orthonormal(columns: FloatArray, weights: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Centre (p,) and matrix T (p, p): (columns − centre) T is orthonormal in the weights."""
    share = weights / weights.sum()
    centre = share @ columns
    rooted = np.sqrt(share)[:, None] * (columns - centre)
    turn = np.linalg.inv(np.linalg.qr(rooted)[1])
    return centre, np.asarray(turn, dtype=np.float64)
