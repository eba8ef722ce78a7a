"""Many rows: each number is rounded to the middle of its cell, so that a sweep costs a few counts.

A covariate of few distinct values keeps them. Another is cut into CELLS cells, narrow where the
data are dense: their widths go as density^{-1/3}, so that neither a skewed covariate nor one glitch
can put all rows into one cell. A row's value becomes the weighted mean of its cell, which leaves
sums of a smooth function over the rows right to second order in the cell's width.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from addmodel.columns import Column
from addmodel.data import Table
from addmodel.spaces.base import FloatArray

MANY_ROWS = 20_000
"""Up to so many rows nothing is rounded."""
CELLS = 1_000


@dataclass(frozen=True)
class Rounded:
    """A table whose numbers are rounded, and by how much."""

    table: Table
    cells: Mapping[str, int]
    """Number of cells of each covariate that is rounded."""
    largest: Mapping[str, float]
    """Largest rounding, as a part of the covariate's standard deviation."""


def rounded(table: Table, exact: bool) -> Rounded:
    """Round the numbers of a table of many rows; `exact` leaves them as they are."""
    if exact or len(table.outcome) <= MANY_ROWS:
        return Rounded(table, {}, {})
    weights = table.prior
    columns: dict[str, Column] = {}
    cells: dict[str, int] = {}
    largest: dict[str, float] = {}
    for key, column in table.columns.items():
        columns[key] = column
        if column.kind == "levels":
            continue
        values, count = _middles(column.values, weights)
        if count:
            spread = float(np.std(column.values)) or 1.0
            columns[key] = replace(column, values=values)
            cells[key] = count
            largest[key] = float(np.abs(values - column.values).max()) / spread
    return Rounded(replace(table, columns=columns), cells, largest)


def _middles(x: FloatArray, weights: FloatArray) -> tuple[FloatArray, int]:
    """Each row's cell mean, and the number of cells; 0 where x has few distinct values."""
    order = np.argsort(x, kind="stable")
    ascending = x[order]
    gaps = np.diff(ascending)
    if np.count_nonzero(gaps) < CELLS:
        return x, 0
    # ∫ density^{1/3} dx over each gap is h^{2/3} n^{-1/3}; no gap counts for more than one cell.
    along = gaps ** (2 / 3)
    for _ in range(20):
        cap = along.sum() / CELLS
        if along.max() <= 1.001 * cap:
            break
        along = np.minimum(along, cap)
    place = np.concatenate([[0.0], np.cumsum(along)])
    cell = np.minimum((CELLS * place / place[-1]).astype(np.int64), CELLS - 1)
    # The ends stay where they are: what lies outside the data must not change.
    cell = cell + 1
    cell[ascending == ascending[0]] = 0
    cell[ascending == ascending[-1]] = CELLS + 1
    mass = np.bincount(cell, weights[order], minlength=CELLS + 2)
    sums = np.bincount(cell, weights[order] * ascending, minlength=CELLS + 2)
    middle = np.divide(sums, mass, out=np.zeros(CELLS + 2), where=mass > 0)
    values = np.empty_like(x)
    values[order] = middle[cell]
    values.setflags(write=False)
    return values, int(np.count_nonzero(mass))
