"""The model's columns at some rows: dense ones, and those of the groups that are set apart.

A grouping of many levels has a column for each, but a row sees only those of its own level. So they
are kept as what each row sees, and are never written out: `wide` (n, b) holds the b columns of the
row's own level. Coefficients are laid out as the dense ones, then block by block the levels'.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from addmodel.spaces.base import BoolArray, FloatArray

IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class Layout:
    """Where coefficients are: `dense` of them, then for each block apart levels × its part."""

    dense: int
    levels: int
    parts: tuple[int, ...]
    """For each block apart, how many of the b columns are its own."""

    @property
    def total(self) -> int:
        """Number of coefficients P."""
        return self.dense + self.levels * sum(self.parts)

    def by_level(self, coefficients: FloatArray) -> FloatArray:
        """The coefficients apart, (levels, b), of all (P,)."""
        if not self.parts:
            return np.empty((self.levels, 0))
        ends = self.dense + self.levels * np.cumsum([0, *self.parts])
        return np.concatenate(
            [
                coefficients[ends[i] : ends[i + 1]].reshape(self.levels, part)
                for i, part in enumerate(self.parts)
            ],
            axis=1,
        )

    def flat(self, by_level: FloatArray) -> FloatArray:
        """The reverse of `by_level`, without the dense ones: (levels · b,)."""
        ends = np.cumsum([0, *self.parts])
        return np.concatenate(
            [
                np.empty(0),
                *(by_level[:, ends[i] : ends[i + 1]].ravel() for i in range(len(self.parts))),
            ]
        )


@dataclass(frozen=True)
class DesignMatrix:
    """Columns at n rows."""

    dense: FloatArray  # (n, dense)
    wide: FloatArray  # (n, b)
    codes: IntArray  # (n,) the row's level; −1: none that is known
    layout: Layout

    def times(self, coefficients: FloatArray) -> FloatArray:
        """X · coefficients (P,), shape (n,)."""
        result: FloatArray = self.dense @ coefficients[: self.layout.dense]
        if self.layout.parts:
            own = self.layout.by_level(coefficients)[self.codes]
            result = result + np.where(self.codes >= 0, (self.wide * own).sum(axis=1), 0.0)
        return result

    def against(self, columns: FloatArray) -> FloatArray:
        """X · columns (P, k), shape (n, k)."""
        result = self.dense @ columns[: self.layout.dense]
        if self.layout.parts and columns.shape[1]:
            known = np.where(self.codes >= 0, 1.0, 0.0)
            for j, column in enumerate(columns.T):
                own = self.layout.by_level(column)[self.codes]
                result[:, j] += known * (self.wide * own).sum(axis=1)
        return np.asarray(result, dtype=np.float64)

    def __len__(self) -> int:
        return len(self.dense)

    def masked(self, dense: BoolArray, wide: BoolArray) -> DesignMatrix:
        """The same with the other columns at zero."""
        return replace(self, dense=self.dense * dense, wide=self.wide * wide)

    def minus(self, other: DesignMatrix) -> DesignMatrix:
        """Row by row, where both rows have the same level."""
        return replace(self, dense=self.dense - other.dense, wide=self.wide - other.wide)

    def whole(self) -> FloatArray:
        """All columns written out, (n, P)."""
        layout = self.layout
        full = np.zeros((len(self), layout.total))
        full[:, : layout.dense] = self.dense
        known = np.flatnonzero(self.codes >= 0)
        start, first = layout.dense, 0
        for part in layout.parts:
            for k in range(part):
                full[known, start + self.codes[known] * part + k] = self.wide[known, first + k]
            start, first = start + layout.levels * part, first + part
        return full
