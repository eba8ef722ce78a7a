"""A plain number: a straight line, unpenalised, as it is written."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from addmodel.spaces.base import BoolArray, FloatArray, Space


@dataclass(frozen=True)
class Line(Space):
    """The column x itself."""

    low: float
    high: float

    @classmethod
    def lay(cls, key: str, x: FloatArray) -> Line:
        """Lay the space on the data: x is (n,)."""
        return cls((key,), float(x.min()), float(x.max()))

    @property
    def unpenalised_names(self) -> tuple[str, ...]:
        return (self.key,)

    def unpenalised(self, x: npt.NDArray[Any]) -> FloatArray:
        return np.asarray(x, dtype=np.float64)[:, None]

    def null(self, x: npt.NDArray[Any]) -> FloatArray:
        """The number unscaled: a varying coefficient keeps its units."""
        return self.unpenalised(x)

    def outside(self, x: npt.NDArray[Any]) -> BoolArray:
        beyond: BoolArray = (x < self.low) | (x > self.high)
        return beyond
