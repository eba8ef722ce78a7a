"""group(g), group(a, b): exchangeable levels, a sample of all that could be.

Its columns are the L indicators with penalty Σ a_l²; with the intercept in the model that is the
same criterion, fit and degrees of freedom as Σ (a_l − ā)². A level that the fit has not seen is 0.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from addmodel.spaces.base import FloatArray, Space

IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class Group(Space):
    """Levels, or the combinations of several columns' levels that occur."""

    labels: tuple[str, ...]
    combinations: IntArray  # (L, k) codes of each level, in lexical order

    @classmethod
    def lay(
        cls, keys: tuple[str, ...], codes: npt.NDArray[Any], labels: tuple[tuple[str, ...], ...]
    ) -> Group:
        """Lay the space on the data.

        Parameters
        ----------
        keys : tuple of str
            Keys of the columns.
        codes : (n,) or (n, k)
            Codes that count into the labels of each column.
        labels : tuple of tuple of str
            The columns' labels.
        """
        table = np.asarray(codes, dtype=np.int64).reshape(len(codes), -1)
        found = np.unique(table, axis=0)
        names = tuple(
            ", ".join(own[c] for own, c in zip(labels, row, strict=True)) for row in found.tolist()
        )
        return cls(keys, names, found)

    @property
    def unpenalised_names(self) -> tuple[str, ...]:
        return ()

    def unpenalised(self, x: npt.NDArray[Any]) -> FloatArray:
        return np.empty((len(x), 0))

    def null(self, x: npt.NDArray[Any]) -> FloatArray:
        return np.empty((len(x), 0))

    @property
    def size(self) -> int:
        return len(self.labels)

    @property
    def most(self) -> int:
        return len(self.labels)

    def codes(self, x: npt.NDArray[Any]) -> IntArray:
        """Which level each row has, (n,); −1 for one that the fit has not seen."""
        table = np.asarray(x, dtype=np.int64).reshape(len(x), -1)
        extents = self.combinations.max(axis=0) + 2
        known = np.ravel_multi_index(tuple(self.combinations.T + 1), tuple(extents))
        inside = (table >= 0) & (table < extents - 1)
        safe = np.where(inside, table + 1, 0)
        flat = np.ravel_multi_index(tuple(safe.T), tuple(extents))
        at = np.minimum(np.searchsorted(known, flat), len(known) - 1)
        codes: IntArray = np.where(inside.all(axis=1) & (known[at] == flat), at, -1)
        return codes

    def penalised(self, x: npt.NDArray[Any], count: int | None = None) -> FloatArray:
        columns = self.codes(x)[:, None] == np.arange(len(self.labels))[:count]
        return np.asarray(columns, dtype=np.float64)
