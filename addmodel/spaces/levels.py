"""Levels (text, categories, yes/no, C(x)): contrasts against the base level, unpenalised."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.linalg

from addmodel.spaces.base import BoolArray, FloatArray, Space


@dataclass(frozen=True)
class Levels(Space):
    """One indicator column for every level but the base."""

    labels: tuple[str, ...]
    base: int
    shares: FloatArray
    """(L,) each level's share of the weight in the data: the row of an average level."""
    numbers: FloatArray
    """(L,) where a number stands for levels, its values; else empty, and x holds codes."""

    @classmethod
    def lay(
        cls,
        key: str,
        codes: npt.NDArray[Any],
        weights: FloatArray,
        labels: tuple[str, ...],
        base: int,
        numbers: FloatArray | None = None,
    ) -> Levels:
        """Lay the space on the data: codes (n,) count into labels; base is a code."""
        codes = np.asarray(codes, dtype=np.int64)
        shares = np.bincount(codes, weights, minlength=len(labels)) / weights.sum()
        return cls((key,), labels, base, shares, np.empty(0) if numbers is None else numbers)

    def outside(self, x: npt.NDArray[Any]) -> BoolArray:
        return (self.codes(x) < 0) & bool(len(self.numbers))

    @property
    def unpenalised_names(self) -> tuple[str, ...]:
        return tuple(
            f"{self.key}: {label}" for i, label in enumerate(self.labels) if i != self.base
        )

    def codes(self, x: npt.NDArray[Any]) -> npt.NDArray[np.int64]:
        """Code of each row (n,); below 0 for one that is no level."""
        if not len(self.numbers):
            return np.asarray(x, dtype=np.int64)
        at = np.minimum(np.searchsorted(self.numbers, x), len(self.numbers) - 1)
        return np.where(self.numbers[at] == x, at, -1).astype(np.int64)

    def indicators(self, x: npt.NDArray[Any]) -> FloatArray:
        """One column a level, (n, L); a row that is no level stands for an average one."""
        codes = self.codes(x)
        columns = np.asarray(codes[:, None] == np.arange(len(self.labels)), dtype=np.float64)
        columns[codes < 0] = self.shares
        return columns

    def unpenalised(self, x: npt.NDArray[Any]) -> FloatArray:
        return np.asarray(np.delete(self.indicators(x), self.base, axis=1), dtype=np.float64)

    def null(self, x: npt.NDArray[Any]) -> FloatArray:
        """Orthonormal contrasts that sum to zero over the levels: no level is special."""
        contrasts: FloatArray = self.indicators(x) @ scipy.linalg.helmert(len(self.labels)).T
        return contrasts
