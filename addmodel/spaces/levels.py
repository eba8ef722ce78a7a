"""Levels (text, categories, yes/no, C(x)): contrasts against the base level, unpenalised."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from addmodel.spaces.base import FloatArray, Space


@dataclass(frozen=True)
class Levels(Space):
    """One indicator column for every level but the base."""

    labels: tuple[str, ...]
    base: int
    means: FloatArray
    """Weighted mean of each indicator column in the data: the row of an average level."""

    @classmethod
    def lay(
        cls,
        key: str,
        codes: npt.NDArray[Any],
        weights: FloatArray,
        labels: tuple[str, ...],
        base: int,
    ) -> Levels:
        """Lay the space on the data: codes (n,) count into labels; base is a code."""
        codes = np.asarray(codes, dtype=np.int64)
        shares = np.bincount(codes, weights, minlength=len(labels)) / weights.sum()
        return cls(key, labels, base, np.delete(shares, base))

    @property
    def unpenalised_names(self) -> tuple[str, ...]:
        return tuple(
            f"{self.key}: {label}" for i, label in enumerate(self.labels) if i != self.base
        )

    def unpenalised(self, x: npt.NDArray[Any]) -> FloatArray:
        """Indicator columns for codes x (n,); a code below zero stands for an average level."""
        codes = np.asarray(x, dtype=np.int64)
        full = codes[:, None] == np.arange(len(self.labels))
        columns: FloatArray = np.delete(full.astype(np.float64), self.base, axis=1)
        columns[codes < 0] = self.means
        return columns
