"""The design: all components laid on the data, and where their columns and coefficients are.

The columns of the whole model are the intercept, the unpenalised columns component by component,
then the penalised blocks, those of the group set apart last. Inside the program the unpenalised
columns are standardised (so that sums over rows keep their digits); `Design.reporting` leads back
to the columns as written.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import scipy.ndimage

from addmodel.columns import Column
from addmodel.component import Block, Component, Seen
from addmodel.matrix import DesignMatrix, IntArray, Layout
from addmodel.spaces.base import BoolArray, FloatArray, Values


@dataclass(frozen=True)
class Spread:
    """How a covariate is spread over the data: what figures and reference values need of it."""

    quantiles: FloatArray  # (201,) weighted quantiles; empty for levels
    shares: FloatArray  # (levels,) share of the weight; empty for numbers

    @classmethod
    def of(cls, column: Column, weights: FloatArray) -> Spread:
        none = np.empty(0)
        if column.kind == "levels":
            sums = np.bincount(column.values.astype(int), weights, minlength=len(column.levels))
            return cls(none, sums / sums.sum())
        order = np.argsort(column.values, kind="stable")
        middle = np.cumsum(weights[order]) - weights[order] / 2
        at = np.linspace(0, 1, 201) * weights.sum()
        return cls(np.interp(at, middle, column.values[order]), none)


CELLS = 24


@dataclass(frozen=True)
class Joint:
    """Where the data are in the plane of two numbers: cells with data in them or beside them."""

    keys: tuple[str, str]
    low: FloatArray  # (2,)
    high: FloatArray  # (2,)
    cells: BoolArray  # (CELLS, CELLS)

    @classmethod
    def of(cls, keys: tuple[str, str], values: Values) -> Joint:
        x = np.column_stack([values[key] for key in keys])
        low, high = x.min(axis=0), x.max(axis=0)
        at = _cells(x, low, high)
        cells = np.zeros((CELLS, CELLS), dtype=bool)
        cells[at[:, 0], at[:, 1]] = True
        return cls(
            keys, low, high, scipy.ndimage.binary_dilation(cells, np.ones((3, 3), dtype=bool))
        )

    def holds(self, values: Values) -> BoolArray:
        """Whether rows lie among the data, (n,)."""
        x = np.column_stack([values[key] for key in self.keys])
        at = _cells(x, self.low, self.high)
        inside = ((x >= self.low) & (x <= self.high)).all(axis=1)
        return np.asarray(inside & self.cells[at[:, 0], at[:, 1]], dtype=bool)


def _cells(x: FloatArray, low: FloatArray, high: FloatArray) -> IntArray:
    at = np.floor(CELLS * (x - low) / np.where(high > low, high - low, 1.0))
    return np.clip(at, 0, CELLS - 1).astype(np.int64)


@dataclass(frozen=True)
class Design:
    """All components laid on the data; frozen, and evaluated the same for new data."""

    components: tuple[Component, ...]
    columns: Mapping[str, Column]
    """The covariates as checked, without their values: kinds and levels."""
    spreads: Mapping[str, Spread]
    joints: Mapping[tuple[str, ...], Joint]
    """For the numbers of each product, two by two in alphabetical order."""
    centres: FloatArray  # (p − 1,) weighted means of the unpenalised columns
    scales: FloatArray  # (p − 1,) their standard deviations
    levels_apart: int
    """Number of levels of the group that is set apart; 0 where there is none."""
    notes: tuple[str, ...]

    @property
    def p(self) -> int:
        """Number of unpenalised columns, the intercept included."""
        return 1 + len(self.centres)

    @property
    def count(self) -> int:
        """Number of components."""
        return len(self.components)

    @cached_property
    def owned_blocks(self) -> tuple[tuple[int, Block], ...]:
        """Every block with the number of its component: dense ones first, then those apart."""
        every = [(j, block) for j, c in enumerate(self.components) for block in c.blocks]
        return tuple(sorted(every, key=lambda owned: owned[1].apart))

    @property
    def blocks(self) -> tuple[Block, ...]:
        """Every penalised block."""
        return tuple(block for _, block in self.owned_blocks)

    @property
    def block_owners(self) -> tuple[int, ...]:
        """The component that each block belongs to."""
        return tuple(j for j, _ in self.owned_blocks)

    @property
    def block_sizes(self) -> tuple[int, ...]:
        """Number of coefficients of each penalised block."""
        return tuple(b.size * (self.levels_apart if b.apart else 1) for b in self.blocks)

    @property
    def layout(self) -> Layout:
        """Where the coefficients are."""
        dense = self.p + sum(b.size for b in self.blocks if not b.apart)
        return Layout(dense, self.levels_apart, tuple(b.size for b in self.blocks if b.apart))

    @property
    def unpenalised_places(self) -> tuple[slice, ...]:
        """Each component's unpenalised columns among all columns."""
        ends = np.cumsum([1, *(len(c.own) for c in self.components)])
        return tuple(slice(int(a), int(b)) for a, b in itertools.pairwise(ends))

    @property
    def block_places(self) -> tuple[slice, ...]:
        """Each block's coefficients among all."""
        ends = self.p + np.cumsum([0, *self.block_sizes])
        return tuple(slice(int(a), int(b)) for a, b in itertools.pairwise(ends))

    def blocks_of(self, component: int) -> list[int]:
        """The blocks of a component."""
        return [k for k, owner in enumerate(self.block_owners) if owner == component]

    def places(self, component: int) -> IntArray:
        """All coefficients of a component."""
        own = self.unpenalised_places[component]
        blocks = [
            np.arange(place.start, place.stop)
            for k, place in enumerate(self.block_places)
            if self.block_owners[k] == component
        ]
        return np.concatenate([np.arange(own.start, own.stop), *blocks]).astype(np.int64)

    def masks(self, components: Sequence[int], intercept: bool) -> tuple[BoolArray, BoolArray]:
        """Which dense and which wide columns belong to some components."""
        layout = self.layout
        dense = np.zeros(layout.dense, dtype=bool)
        dense[0] = intercept
        wide: list[BoolArray] = [np.zeros(0, dtype=bool)]
        for j in components:
            dense[self.unpenalised_places[j]] = True
        for (owner, block), place in zip(self.owned_blocks, self.block_places, strict=True):
            if block.apart:
                wide.append(np.full(block.size, owner in components))
            elif owner in components:
                dense[place] = True
        return dense, np.concatenate(wide)

    @property
    def names(self) -> tuple[str, ...]:
        """Name of every coefficient: the intercept, unpenalised ones, those of blocks numbered."""
        unpenalised = [name for c in self.components for name in c.unpenalised_names]
        numbered: dict[int, int] = {}
        penalised = []
        for owner, size in zip(self.block_owners, self.block_sizes, strict=True):
            first = numbered.get(owner, 0)
            name = self.components[owner].name
            penalised += [f"{name}[{first + k + 1}]" for k in range(size)]
            numbered[owner] = first + size
        return ("intercept", *unpenalised, *penalised)

    def matrix(self, values: Values, n: int, chosen: Sequence[int] | None = None) -> DesignMatrix:
        """The model's columns as the solver has them.

        `chosen`: the components whose columns are wanted (those of the others are left at zero, and
        their covariates may be missing from the values); None: all.
        """
        every = range(self.count) if chosen is None else chosen
        layout, seen = self.layout, Seen(values, n)
        dense = np.zeros((n, layout.dense))
        dense[:, 0] = 1.0
        for j in every:
            own = self.unpenalised_places[j]
            part = slice(own.start - 1, own.stop - 1)
            raw = self.components[j].unpenalised(seen)
            dense[:, own] = (raw - self.centres[part]) / self.scales[part]
        wide = [np.empty((n, 0))]
        codes = np.full(n, -1)
        for (owner, block), place in zip(self.owned_blocks, self.block_places, strict=True):
            if owner not in every:
                wide += [np.zeros((n, block.size))] if block.apart else []
            elif block.apart:
                wide.append(self.components[owner].columns(block, seen))
                codes = self.components[owner].codes(block, seen)
            else:
                dense[:, place] = self.components[owner].columns(block, seen)
        return DesignMatrix(dense, np.concatenate(wide, axis=1), codes, layout)

    def of_components(self, values: Values, n: int, chosen: Sequence[int]) -> DesignMatrix:
        """The columns of some components alone, without the intercept."""
        matrix = self.matrix(values, n, chosen)
        return matrix.masked(*self.masks(chosen, intercept=False))

    def reporting(self) -> FloatArray:
        """Matrix C (p, p): unpenalised coefficients as reported = C · those of the solver.

        The penalised ones are reported as they are. The columns as written are then X with
        X C = `matrix`.
        """
        change = np.eye(self.p)
        inner = np.arange(1, self.p)
        change[inner, inner] = 1 / self.scales
        change[0, inner] = -self.centres / self.scales
        return change


def without_values(columns: Mapping[str, Column]) -> dict[str, Column]:
    """The columns' kinds and levels."""
    return {key: replace(c, values=c.values[:0]) for key, c in columns.items()}
