"""Components and the design: each component a product of spaces, laid on the data.

The columns of the whole model are the intercept, the unpenalised columns component by component,
then the penalised blocks; each block carries one ridge penalty. Inside the program the unpenalised
columns are standardised (so that sums over rows keep their digits); `Design.reporting` leads back
to the columns as written.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import reduce
from typing import Any

import numpy as np
import numpy.typing as npt

from addmodel.columns import Column, column_key
from addmodel.data import Table
from addmodel.errors import FormulaError, nearest
from addmodel.formula import Factor, Model, Term
from addmodel.spaces.base import BoolArray, FloatArray, Penalised, Space
from addmodel.spaces.curve import Curve
from addmodel.spaces.cycle import Cycle
from addmodel.spaces.levels import Levels
from addmodel.spaces.line import Line
from addmodel.spanning import check_rank, spanned

Values = Mapping[str, npt.NDArray[Any]]
"""Covariate values by the key of their column, each (n,)."""


@dataclass(frozen=True)
class Component:
    """One term of the formula: the tensor product of its factors' spaces.

    {N_a ⊕ P_a} ⊗ {N_b ⊕ P_b} = N_aN_b (unpenalised) and the ridge blocks N_aP_b, P_aN_b, P_aP_b;
    columns are row-wise products of the factors' columns.
    """

    name: str
    spaces: tuple[Space, ...]
    own: tuple[int, ...]
    """Which of its unpenalised columns it keeps: those that no other component spans."""
    smoothing: float | None
    """The formula's `smoothing=`."""
    df: float | None
    """The formula's `df=`."""
    everything: bool
    """The formula's `detail="all"`."""

    @property
    def unpenalised_names(self) -> tuple[str, ...]:
        """Names of the unpenalised columns it keeps."""
        every = [
            ":".join(parts)
            for parts in itertools.product(*(s.unpenalised_names for s in self.spaces))
        ]
        return tuple(every[i] for i in self.own)

    def unpenalised(self, values: Values) -> FloatArray:
        """Unpenalised columns it keeps, (n, p)."""
        return row_products([s.unpenalised(values[s.key]) for s in self.spaces])[:, list(self.own)]

    def blocks(self, values: Values) -> list[FloatArray]:
        """Its penalised blocks, each (n, q)."""
        parts = [(s.unpenalised(values[s.key]), s.penalised(values[s.key])) for s in self.spaces]
        mixed = itertools.product(*((0, 1) if p.shape[1] else (0,) for _, p in parts))
        return [
            row_products([part[c] for part, c in zip(parts, choice, strict=True)])
            for choice in mixed
            if any(choice)
        ]

    @property
    def block_sizes(self) -> tuple[int, ...]:
        """Number of columns of each block."""
        sizes = [(len(s.unpenalised_names), s.size) for s in self.spaces]
        mixed = itertools.product(*((0, 1) if size else (0,) for _, size in sizes))
        return tuple(
            int(np.prod([size[c] for size, c in zip(sizes, choice, strict=True)]))
            for choice in mixed
            if any(choice)
        )

    def outside(self, values: Values) -> BoolArray:
        """Rows outside the data it was laid on, (n,)."""
        beyond: BoolArray = np.any([s.outside(values[s.key]) for s in self.spaces], axis=0)
        return beyond


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


@dataclass(frozen=True)
class Design:
    """All components laid on the data; frozen here, and evaluated the same for new data."""

    components: tuple[Component, ...]
    columns: Mapping[str, Column]
    """The covariates as checked, without their values: kinds and levels."""
    spreads: Mapping[str, Spread]
    centres: FloatArray  # (p − 1,) weighted means of the unpenalised columns
    scales: FloatArray  # (p − 1,) their standard deviations
    notes: tuple[str, ...]

    @classmethod
    def lay(cls, model: Model, table: Table) -> Design:
        """Lay the formula's components on the data.

        Raises
        ------
        FormulaError
            Where a term has no meaning on these data; the message marks it.
        ModelError
            If unpenalised columns depend linearly on each other.
        """
        weights = table.weights * table.counts
        bending = sum(f.kind in ("curve", "cycle") for t in model.terms for f in t.factors)
        components = tuple(_component(t, model, table, weights, bending) for t in model.terms)
        values = {key: column.values for key, column in table.columns.items()}
        _refuse_twins(components, values, model)
        components, notes = _without_spanned(components, values)
        columns = [c.unpenalised(values) for c in components]
        raw = np.concatenate([np.empty((len(weights), 0)), *columns], axis=1)
        share = weights / weights.sum()
        centres = share @ raw
        scales = np.sqrt(share @ (raw - centres) ** 2)
        names = [name for c in components for name in c.unpenalised_names]
        check_rank((raw - centres) / scales, names)
        return cls(
            components=components,
            columns={k: replace(c, values=c.values[:0]) for k, c in table.columns.items()},
            spreads={k: Spread.of(c, weights) for k, c in table.columns.items()},
            centres=centres,
            scales=scales,
            notes=notes,
        )

    def resized(self, sizes: Sequence[int], table: Table) -> Design:
        """The same design with other numbers of penalised functions, one a component."""
        weights = table.weights * table.counts
        components = []
        for component, size in zip(self.components, sizes, strict=True):
            (space,) = component.spaces
            if isinstance(space, Penalised) and size != space.size:
                grown = _regrown(space, size, table.columns[space.key].values, weights)
                components.append(replace(component, spaces=(grown,)))
            else:
                components.append(component)
        return replace(self, components=tuple(components))

    @property
    def p(self) -> int:
        """Number of unpenalised columns, the intercept included."""
        return 1 + len(self.centres)

    @property
    def count(self) -> int:
        """Number of components."""
        return len(self.components)

    @property
    def block_sizes(self) -> tuple[int, ...]:
        """Number of columns of each penalised block, component by component."""
        return tuple(size for c in self.components for size in c.block_sizes)

    @property
    def block_owners(self) -> tuple[int, ...]:
        """The component that each block belongs to."""
        return tuple(j for j, c in enumerate(self.components) for _ in c.block_sizes)

    @property
    def unpenalised_places(self) -> tuple[slice, ...]:
        """Each component's unpenalised columns among all columns."""
        ends = np.cumsum([1, *(len(c.own) for c in self.components)])
        return tuple(slice(int(a), int(b)) for a, b in itertools.pairwise(ends))

    @property
    def block_places(self) -> tuple[slice, ...]:
        """Each block's columns among all columns."""
        ends = self.p + np.cumsum([0, *self.block_sizes])
        return tuple(slice(int(a), int(b)) for a, b in itertools.pairwise(ends))

    def places(self, component: int) -> npt.NDArray[np.int64]:
        """All columns of a component."""
        own = self.unpenalised_places[component]
        blocks = [
            np.arange(place.start, place.stop)
            for owner, place in zip(self.block_owners, self.block_places, strict=True)
            if owner == component
        ]
        return np.concatenate([np.arange(own.start, own.stop), *blocks])

    @property
    def names(self) -> tuple[str, ...]:
        """Name of every column: the intercept, unpenalised columns, block columns numbered."""
        penalised = [
            f"{self.components[owner].name}[{k + 1}]"
            for owner, size in zip(self.block_owners, self.block_sizes, strict=True)
            for k in range(size)
        ]
        unpenalised = [name for c in self.components for name in c.unpenalised_names]
        return ("intercept", *unpenalised, *penalised)

    def matrix(self, values: Values, n: int) -> FloatArray:
        """The model's columns as the solver has them, (n, P)."""
        first = np.ones((n, 1))
        unpenalised = np.concatenate(
            [np.empty((n, 0)), *(c.unpenalised(values) for c in self.components)], axis=1
        )
        blocks = [block for c in self.components for block in c.blocks(values)]
        standard = (unpenalised - self.centres) / self.scales
        return np.concatenate([first, standard, *blocks], axis=1)

    def component_matrix(self, component: int, values: Values) -> FloatArray:
        """A component's columns as the solver has them, in the order of `places`."""
        c = self.components[component]
        own = self.unpenalised_places[component]
        part = slice(own.start - 1, own.stop - 1)
        standard = (c.unpenalised(values) - self.centres[part]) / self.scales[part]
        return np.concatenate([standard, *c.blocks(values)], axis=1)

    def reporting(self) -> FloatArray:
        """Matrix C (P, P): coefficients as reported = C · coefficients of the solver.

        The columns as written are then X with X C = `matrix`.
        """
        change = np.eye(self.p + sum(self.block_sizes))
        inner = np.arange(1, self.p)
        change[inner, inner] = 1 / self.scales
        change[0, inner] = -self.centres / self.scales
        return change


def row_products(parts: Sequence[FloatArray]) -> FloatArray:
    """Row-wise products of every choice of one column from each part, the last varying fastest."""
    return reduce(lambda a, b: (a[:, :, None] * b[:, None, :]).reshape(len(a), -1), parts)


def first_size(distinct: int, n: int, bending: int) -> int:
    """How many penalised functions a curve starts with.

    All of them up to about 200 distinct points (fewer when many curves share the work), and never
    fewer than 60: a start with few functions sees nothing of a fast wave and calls it straight.
    Beyond, the number that a smoothing spline of n rows can use grows as n^{2/9}
    (n^{2/(4m+1)} for m = 2; Kim & Gu 2004, J. R. Stat. Soc. B 66).
    """
    if distinct <= 200:
        return min(distinct, max(60, 240 // bending))
    return max(60, int(np.ceil(4 * n ** (2 / 9))))


def _component(
    term: Term, model: Model, table: Table, weights: FloatArray, bending: int
) -> Component:
    (factor,) = term.factors
    options = dict(factor.options)
    space = _space(factor, model, table, weights, bending)
    df = options.get("df")
    if isinstance(df, int | float):
        least = len(space.unpenalised_names)
        if not least < df < least + space.most:
            raise FormulaError(
                f"{factor.name} can have between {least} and {least + space.most} effective "
                f"degrees of freedom on these data, so df={df:g} is out of reach.",
                model.text,
                factor.span,
            )
    smoothing = options.get("smoothing")
    return Component(
        name=term.name,
        spaces=(space,),
        own=tuple(range(len(space.unpenalised_names))),
        smoothing=None if smoothing is None else float(smoothing),
        df=float(df) if isinstance(df, int | float) else None,
        everything=options.get("detail") == "all",
    )


def _space(factor: Factor, model: Model, table: Table, weights: FloatArray, bending: int) -> Space:
    (expression,) = factor.arguments
    key = column_key(factor, expression)
    column = table.columns[key]
    options: dict[str, Any] = dict(factor.options)
    if factor.kind in ("plain", "levels"):
        if column.kind != "levels":
            return Line.lay(key, column.values)
        base = _base(options.get("base"), column, weights, model, factor)
        return Levels.lay(key, column.values, weights, column.levels, base)
    period = options.get("period")
    if isinstance(period, str) and column.kind != "date":
        raise FormulaError(
            f"{factor.name} needs dates for period='{period}', and {key} is a number. "
            f"Give the period as a number in the units of {key}.",
            model.text,
            factor.span,
        )
    detail = options.get("detail")
    cap = detail if isinstance(detail, int) else None
    distinct = len(np.unique(column.values))
    if detail == "all":
        size = distinct
    else:
        size = first_size(distinct, len(weights), bending)
        size = size if cap is None else min(size, cap)
    least = 4 if factor.kind == "curve" else 3
    space: Penalised | None = None
    if distinct >= least:
        if factor.kind == "curve":
            space = Curve.lay(key, column.values, weights, size, cap)
        else:
            assert period is not None
            space = Cycle.lay(key, column.values, weights, size, cap, period)
            distinct = space.distinct
    if space is None or distinct < least:
        where = "" if factor.kind == "curve" else " within its period"
        raise FormulaError(
            f"{factor.name} has {distinct} distinct values{where} and needs at least {least}. "
            f"Write `{key}` for a straight line or `C({key})` for levels.",
            model.text,
            factor.span,
        )
    return space


def _base(wanted: object, column: Column, weights: FloatArray, model: Model, factor: Factor) -> int:
    """Code of the base level."""
    if wanted is None:
        return 0
    if wanted == "largest" and "largest" not in column.levels:
        return int(np.bincount(column.values.astype(int), weights).argmax())
    label = f"{wanted:g}" if isinstance(wanted, int | float) else str(wanted)
    if label not in column.levels:
        raise FormulaError(
            f"base={wanted!r} is not a level of {column.name}. {nearest(label, column.levels)}",
            model.text,
            factor.span,
        )
    return column.levels.index(label)


def _regrown(space: Penalised, size: int, x: FloatArray, weights: FloatArray) -> Penalised:
    if size <= len(space.gamma):
        return space.keep(size)
    if isinstance(space, Cycle):
        return Cycle.lay(space.key, x, weights, size, space.cap, space.period)
    return Curve.lay(space.key, x, weights, size, space.cap)


def _without_spanned(
    components: tuple[Component, ...], values: Values
) -> tuple[tuple[Component, ...], tuple[str, ...]]:
    """Drop unpenalised columns that another component's unpenalised part already spans."""
    gone = spanned([c.unpenalised(values) for c in components])
    notes: dict[str, None] = {}
    for (j, k), i in gone.items():
        own = components[j]
        part = f"The straight part of {own.name}"
        what = part if own.block_sizes else own.unpenalised_names[k]
        notes[f"{what} is already in {components[i].name}: it is kept once, there."] = None
    kept = tuple(
        replace(c, own=tuple(k for k in c.own if (j, k) not in gone))
        for j, c in enumerate(components)
    )
    return kept, tuple(notes)


def _refuse_twins(components: tuple[Component, ...], values: Values, model: Model) -> None:
    """Two curves of covariates that are straight functions of each other are one curve."""
    curves = [c.spaces[0] for c in components if isinstance(c.spaces[0], Curve)]
    for a, b in itertools.combinations(curves, 2):
        x, z = a.scaled(values[a.key]), b.scaled(values[b.key])
        if np.allclose(x, z, rtol=0, atol=1e-9) or np.allclose(x, 1 - z, rtol=0, atol=1e-9):
            raise FormulaError(
                f"{a.key} and {b.key} are straight functions of each other, so their curves are "
                "one. Leave one of them out.",
                model.text,
            )
