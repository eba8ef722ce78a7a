"""Components: the product of spaces that a term of the formula is, as columns.

{N_a ⊕ P_a} ⊗ {N_b ⊕ P_b} = N_aN_b (unpenalised) and the ridge blocks N_aP_b, P_aN_b, P_aP_b, each
with a smoothing parameter of its own; columns are row-wise products of the factors' columns. The
functions of a block P_aP_b are the pairs with the smallest γ_jγ_k (the hyperbolic cross).
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from functools import reduce
from typing import Literal

import numpy as np

from addmodel.matrix import IntArray
from addmodel.spaces.base import BoolArray, FloatArray, Penalised, Space, Values
from addmodel.spaces.group import Group
from addmodel.spaces.levels import Levels

TIED = 1e-6
"""Roughnesses this close, relatively, belong together: a sine and its cosine."""


@dataclass(frozen=True)
class View:
    """How one factor enters a product.

    "plain": N as reported; "full": every level; "null": N as an orthonormal basis; "level": one
    level alone; "bend": P, by the block's functions; "group": exchangeable levels; "apart": those
    of the group that is set apart, of which a row sees its own level's columns alone.
    """

    factor: int
    kind: Literal["plain", "full", "null", "level", "bend", "group", "apart"]
    level: int = 0
    centre: float = 0.0
    """Subtracted from a plain number."""


@dataclass(frozen=True)
class Strand:
    """Unpenalised columns: a product of views."""

    views: tuple[View, ...]


@dataclass(frozen=True)
class Block:
    """Columns with one ridge penalty."""

    views: tuple[View, ...]
    functions: IntArray  # (q, number of "bend" views) which functions of each, smoothest first
    width: int
    """Columns beside each function, those of a group that is set apart not counted."""
    means: FloatArray  # (q · width,) weighted means of the columns, taken off
    fixed: float | None
    """The formula's `smoothing=`."""
    df: float | None
    """The formula's `df=`."""
    everything: bool
    """The formula's `detail="all"`."""

    @property
    def apart(self) -> bool:
        """Whether it belongs to the group that is set apart."""
        return any(view.kind == "apart" for view in self.views)

    @property
    def grouped(self) -> bool:
        """Whether exchangeable levels take part in it."""
        return any(view.kind in ("group", "apart") for view in self.views)

    @property
    def size(self) -> int:
        """Number of columns; of a block set apart, for each level."""
        return len(self.functions) * self.width

    @property
    def bends(self) -> tuple[int, ...]:
        """The factors that enter with their penalised part."""
        return tuple(v.factor for v in self.views if v.kind == "bend")


@dataclass(frozen=True)
class Seen:
    """Covariate values of n rows, and the bending columns that were made of them so far."""

    values: Values
    n: int
    _made: dict[int, tuple[Space, FloatArray]] = field(default_factory=dict)

    def bent(self, space: Space, count: int) -> FloatArray:
        """The first `count` penalised columns of a space, or more, made once for all components."""
        _, made = self._made.get(id(space), (space, np.empty((self.n, 0))))
        if made.shape[1] < count:
            made = space.penalised(space.seen(self.values), count)
            self._made[id(space)] = (space, made)  # the space too, so that its id is not reused
        return made


@dataclass(frozen=True)
class Component:
    """One term of the formula."""

    name: str
    spaces: tuple[Space, ...]
    strands: tuple[Strand, ...]
    own: tuple[int, ...]
    """Which of its unpenalised columns it keeps: those that no other component spans."""
    blocks: tuple[Block, ...]

    @property
    def single(self) -> Space | None:
        """Its space, where it is no product."""
        return self.spaces[0] if len(self.spaces) == 1 else None

    @property
    def keys(self) -> tuple[str, ...]:
        """Keys of its covariates, each once."""
        return tuple(dict.fromkeys(key for space in self.spaces for key in space.keys))

    @property
    def unpenalised_names(self) -> tuple[str, ...]:
        """Names of the unpenalised columns it keeps."""
        every = [
            " × ".join(parts)
            for strand in self.strands
            for parts in itertools.product(*(self.view_names(view) for view in strand.views))
        ]
        return tuple(every[i] for i in self.own)

    def view_names(self, view: View) -> tuple[str, ...]:
        """Names of the columns of one view of an unpenalised product."""
        space = self.spaces[view.factor]
        if view.kind == "full" and isinstance(space, Levels):
            return tuple(f"{space.key}: {label}" for label in space.labels)
        return space.unpenalised_names

    def unpenalised(self, seen: Seen) -> FloatArray:
        """Unpenalised columns it keeps, (n, p)."""
        columns = [np.empty((seen.n, 0))]
        for strand in self.strands:
            columns.append(row_products([self._view(v, seen) for v in strand.views], seen.n))
        return np.concatenate(columns, axis=1)[:, list(self.own)]

    def _view(self, view: View, seen: Seen) -> FloatArray:
        space = self.spaces[view.factor]
        x = space.seen(seen.values)
        if view.kind == "plain":
            return space.unpenalised(x) - view.centre
        if view.kind == "null":
            return space.null(x) - view.centre
        if view.kind == "group":
            return space.penalised(x)
        assert isinstance(space, Levels)
        full = space.indicators(x)
        return full if view.kind == "full" else full[:, [view.level]]

    def columns(self, block: Block, seen: Seen) -> FloatArray:
        """A block's columns, (n, size); of one set apart, those of each row's own level."""
        beside = [self._view(v, seen) for v in block.views if v.kind not in ("bend", "apart")]
        bent = np.ones((seen.n, len(block.functions)))
        for i, factor in enumerate(block.bends):
            which = block.functions[:, i]
            bent *= seen.bent(self.spaces[factor], int(which.max(initial=0)) + 1)[:, which]
        return row_products([bent, *beside], seen.n) - block.means

    def codes(self, block: Block, seen: Seen) -> IntArray:
        """The level of the group set apart that each row has, (n,)."""
        (view,) = (v for v in block.views if v.kind == "apart")
        return self.group_codes(self.spaces[view.factor], seen.values)

    def group_codes(self, space: Space, values: Values) -> IntArray:
        """The level of a group of its that each row has, (n,)."""
        assert isinstance(space, Group)
        return space.codes(space.seen(values))

    def unknown_groups(self, block: Block, seen: Seen) -> BoolArray:
        """Rows of a group that the fit has not seen, (n,)."""
        unknown = np.zeros(seen.n, dtype=bool)
        for view in block.views:
            space = self.spaces[view.factor]
            if isinstance(space, Group):
                unknown |= space.codes(space.seen(seen.values)) < 0
        return unknown

    def group_squares(self, block: Block, seen: Seen) -> FloatArray:
        """Σ of squares of a block's columns beside its groups' indicators, (n,).

        Times φ/λ it is the variance of a group that is not known.
        """
        own = tuple(v for v in block.views if v.kind not in ("group", "apart"))
        alone = replace(block, views=own, means=np.zeros(1))
        return np.asarray((self.columns(alone, seen) ** 2).sum(axis=1), dtype=np.float64)

    def outside(self, values: Values) -> BoolArray:
        """Rows outside the data it was laid on, (n,)."""
        beyond: BoolArray = np.any([s.outside(s.seen(values)) for s in self.spaces], axis=0)
        return beyond


def row_products(parts: Sequence[FloatArray], n: int) -> FloatArray:
    """Row-wise products of every choice of one column from each part, the last varying fastest."""
    return reduce(
        lambda a, b: (a[:, :, None] * b[:, None, :]).reshape(n, -1), parts, np.ones((n, 1))
    )


def cross(gammas: Sequence[FloatArray], count: int) -> IntArray:
    """The `count` choices of one function from each with the smallest product of γ, (q, factors).

    Ascending; functions of one roughness stay together, so there may be a few more.
    """
    if not gammas:
        return np.zeros((1, 0), dtype=np.int64)
    # A choice among the first `count` has at most `count` choices below it in every coordinate.
    logs = [np.log(gamma[:count]) for gamma in gammas]
    total = reduce(np.add.outer, logs)
    order = np.argsort(total, axis=None, kind="stable")
    ascending = total.ravel()[order]
    count = min(count, len(order))
    while count < len(order) and ascending[count] - ascending[count - 1] < TIED:
        count += 1
    return np.stack(np.unravel_index(order[:count], total.shape), axis=1).astype(np.int64)


def most_functions(block: Block, spaces: Sequence[Space]) -> int:
    """How many functions a block can have on these data."""
    return int(np.prod([float(spaces[factor].most) for factor in block.bends]))


def gammas_of(block: Block, spaces: Sequence[Space]) -> list[FloatArray]:
    """Roughnesses at hand for each bending factor of a block, within the caps."""
    found = []
    for factor in block.bends:
        space = spaces[factor]
        assert isinstance(space, Penalised)
        found.append(space.gamma[: space.most])
    return found
