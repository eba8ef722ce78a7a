"""From the formula and the data to the design: the terms' strands and blocks, with their detail."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np

from addmodel.algebra import Nature, Piece, has_margin, is_penalised, pieces
from addmodel.component import (
    Block,
    Component,
    Seen,
    Strand,
    View,
    cross,
    gammas_of,
    most_functions,
)
from addmodel.data import Table
from addmodel.design import Design, Joint, Spread, without_values
from addmodel.errors import FormulaError, ModelError
from addmodel.formula import Model, Term
from addmodel.laying import lay_space, nature
from addmodel.spaces.base import FloatArray, Penalised, Space, Values
from addmodel.spaces.curve import Curve
from addmodel.spaces.group import Group
from addmodel.spaces.levels import Levels
from addmodel.spaces.line import Line
from addmodel.spaces.scattered import Scattered
from addmodel.spanning import check_rank, spanned

ALL_PAIRS = 2_000
"""With detail="all" a product has at most so many functions."""
FEW, SHARED = 20, 240
IN_GROUPS = 12
"""Functions that a curve of its own for each level of a group starts with."""


def assemble(model: Model, table: Table) -> Design:
    """Lay the formula's components on the data.

    Raises
    ------
    FormulaError
        Where a term has no meaning on these data; the message marks it.
    ModelError
        If unpenalised columns depend linearly on each other.
    """
    return _assembled(model, table, None)


def resized(design: Design, sizes: Sequence[int], model: Model, table: Table) -> Design:
    """The design with other numbers of functions, one a block in the order of `design.blocks`."""
    wanted: dict[tuple[int, int], int] = {}
    for (owner, block), size in zip(design.owned_blocks, sizes, strict=True):
        place = next(i for i, b in enumerate(design.components[owner].blocks) if b is block)
        wanted[owner, place] = size
    return _assembled(model, table, wanted)


def _assembled(model: Model, table: Table, sizes: Mapping[tuple[int, int], int] | None) -> Design:
    weights = table.prior
    values = table.values
    natures = {f.name: nature(f, table) for term in model.terms for f in term.factors}
    spaces = _Spaces(model, table, weights, natures)
    apart = _group_apart(model, spaces)
    bare = [_bare(j, model, natures, spaces, apart) for j in range(len(model.terms))]
    bending = sum(len(c.blocks) for c in bare)
    components = []
    seen = Seen(values, len(weights))
    for j, component in enumerate(bare):
        _check_df(component, model, j)
        first = [_first_count(b, component.spaces, len(weights), bending) for b in component.blocks]
        counts = [
            min(
                first[i] if sizes is None else sizes[j, i],
                most_functions(b, component.spaces),
                ALL_PAIRS if len(b.bends) > 1 else table.prior.size,
            )
            for i, b in enumerate(component.blocks)
        ]
        for block, count in zip(component.blocks, counts, strict=True):
            for factor in block.bends:
                spaces.need(model.terms[j].factors[factor].name, count)
        components.append((component, counts))
    filled = tuple(
        _filled(replace(c, spaces=spaces.of(model.terms[j])), counts, seen, weights)
        for j, (c, counts) in enumerate(components)
    )
    _refuse_twins(filled, values, model)
    _check_own_curves(filled, values, model)
    kept, notes = _without_spanned(filled, seen)
    columns = [c.unpenalised(seen) for c in kept]
    raw = np.concatenate([np.empty((len(weights), 0)), *columns], axis=1)
    share = weights / weights.sum()
    centres = share @ raw
    scales = np.sqrt(share @ (raw - centres) ** 2)
    names = [name for c in kept for name in c.unpenalised_names]
    for k in np.flatnonzero(scales <= 1e-14 * np.abs(centres)):
        raise ModelError(f"'{names[k]}' does not vary over the rows used: leave its term out.")
    check_rank((raw - centres) / scales, names)
    return Design(
        components=kept,
        columns=without_values(table.columns),
        spreads={k: Spread.of(c, weights) for k, c in table.columns.items()},
        joints=_joints(kept, table, values),
        centres=centres,
        scales=scales,
        levels_apart=spaces.levels_of(apart),
        notes=notes,
    )


class _Spaces:
    """The spaces of all factors, each laid once, with as many functions as its blocks need."""

    def __init__(
        self, model: Model, table: Table, weights: FloatArray, natures: Mapping[str, Nature]
    ) -> None:
        self.model, self.table, self.weights, self.natures = model, table, weights, natures
        self.factors = {f.name: f for term in model.terms for f in term.factors}
        self.laid: dict[tuple[str, bool], Space] = {}

    def get(self, name: str, levelled: bool, size: int = 0) -> Space:
        key = (name, levelled and self.natures[name] == "two")
        space = self.laid.get(key)
        short = isinstance(space, Penalised) and space.size < min(size, space.most)
        if space is None or (short and not isinstance(space, Scattered)):
            factor = self.factors[name]
            space = lay_space(factor, self.model, self.table, self.weights, max(size, 2), key[1])
            self.laid[key] = space
        return space

    def need(self, name: str, size: int) -> None:
        """Let a smooth factor have at least so many functions."""
        self.get(name, True, size)

    def of(self, term: Term) -> tuple[Space, ...]:
        levelled = is_penalised(term, self.natures)
        return tuple(self.get(f.name, levelled) for f in term.factors)

    def levels_of(self, name: str | None) -> int:
        return 0 if name is None else self.get(name, False).size


def _group_apart(model: Model, spaces: _Spaces) -> str | None:
    """The group with the most levels: its columns are the ones that are set apart."""
    groups = {f.name for t in model.terms for f in t.factors if spaces.natures[f.name] == "group"}
    return max(sorted(groups), key=lambda name: spaces.get(name, False).size, default=None)


def _bare(
    j: int, model: Model, natures: Mapping[str, Nature], spaces: _Spaces, apart: str | None
) -> Component:
    """A term's component; its blocks have no functions and means as yet."""
    term = model.terms[j]
    own = spaces.of(term)
    penalised = is_penalised(term, natures)
    strands: list[Strand] = []
    blocks: list[Block] = []
    for piece in pieces(term, model.terms, natures):
        choices = [_views(i, piece, term, own, spaces, penalised, model) for i in piece.factors]
        for views in itertools.product(*choices):
            if all(v.kind in ("plain", "full") for v in views):
                strands.append(Strand(views))
            else:
                blocks += _blocks(views, own, term, apart)
    component = Component(term.name, own, tuple(strands), (), tuple(blocks))
    return replace(component, own=tuple(range(_count(component))))


def _count(component: Component) -> int:
    """Number of its unpenalised columns."""
    return sum(
        int(np.prod([len(component.view_names(v)) for v in strand.views]))
        for strand in component.strands
    )


def _views(
    i: int,
    piece: Piece,
    term: Term,
    own: Sequence[Space],
    spaces: _Spaces,
    penalised: bool,
    model: Model,
) -> list[View]:
    """The ways in which one factor takes part in a piece."""
    space = own[i]
    if isinstance(space, Group):
        return [View(i, "group")]
    if isinstance(space, Levels):
        return [View(i, "full" if i in piece.full else "plain")]
    if isinstance(space, Line):
        centred = penalised and has_margin(term, i, model.terms)
        weights, x = spaces.weights, spaces.table.columns[space.key].values
        return [View(i, "plain", centre=float(np.average(x, weights=weights)) if centred else 0.0)]
    straight = [View(i, "plain")] if space.unpenalised_names else []
    return [*straight, View(i, "bend")]


def _blocks(
    views: tuple[View, ...], own: Sequence[Space], term: Term, apart: str | None
) -> list[Block]:
    """A penalised product: one block, or one for each level where levels keep their constant."""
    factors = [term.factors[v.factor] for v in views]
    options = dict(factors[0].options) if len(term.factors) == 1 else {}
    fixed, df = options.get("smoothing"), options.get("df")
    every = any(f.options.get("detail") == "all" for f in factors)
    choices: list[list[View]] = []
    width = 1
    for view, factor in zip(views, factors, strict=True):
        space = own[view.factor]
        if view.kind == "full":
            assert isinstance(space, Levels)
            choices.append([View(view.factor, "level", k) for k in range(len(space.labels))])
        elif view.kind == "plain":
            choices.append([replace(view, kind="null")])
            width *= len(space.unpenalised_names)
        elif view.kind == "group" and factor.name == apart:
            choices.append([replace(view, kind="apart")])
        else:
            choices.append([view])
            width *= space.size if view.kind == "group" else 1
    return [
        Block(
            views=chosen,
            functions=np.zeros((1, sum(v.kind == "bend" for v in chosen)), dtype=np.int64),
            width=width,
            means=np.empty(0),
            fixed=float(fixed) if isinstance(fixed, int | float) else None,
            df=float(df) if isinstance(df, int | float) else None,
            everything=every,
        )
        for chosen in itertools.product(*choices)
    ]


def first_size(distinct: int, n: int, bending: int, order: int = 2) -> int:
    """How many penalised functions a curve starts with.

    All of them up to about 200 distinct points (fewer when many curves share the work), and never
    fewer than 60: a start with few functions sees nothing of a fast wave and calls it straight.
    Beyond, the number that a smoothing spline of n rows can use grows as n^{2/(4m+1)}
    (Kim & Gu 2004, J. R. Stat. Soc. B 66).
    """
    if distinct <= 200:
        return min(distinct, max(60, SHARED // max(bending, 1)))
    return max(60, int(np.ceil(4 * n ** (2 / (4 * order + 1)))))


def _check_df(component: Component, model: Model, j: int) -> None:
    """df= lies between the unpenalised columns and all that the distinct points allow."""
    for block in component.blocks:
        if block.df is None:
            continue
        (factor,) = block.bends
        space = component.spaces[factor]
        least = len(space.unpenalised_names)
        if not least < block.df < least + space.most:
            raise FormulaError(
                f"{component.name} can have between {least} and {least + space.most} effective "
                f"degrees of freedom on these data, so df={block.df:g} is out of reach.",
                model.text,
                model.terms[j].factors[factor].span,
            )


def _first_count(block: Block, spaces: Sequence[Space], n: int, bending: int) -> int:
    """How many functions a block starts with."""
    bends = [spaces[factor] for factor in block.bends]
    if not bends:
        return 1
    if block.everything:
        return ALL_PAIRS if len(bends) > 1 else n
    if block.grouped:
        return IN_GROUPS
    surface = max(60, int(np.ceil(4 * n**0.4)))
    if len(bends) > 1 or not isinstance(bends[0], Penalised) or isinstance(bends[0], Scattered):
        return max(FEW, surface // block.width)
    order = bends[0].order if isinstance(bends[0], Curve) else 2
    alone = first_size(bends[0].distinct, n, bending, order)
    repeats = max(block.width, sum(v.kind == "level" for v in block.views) and bending)
    return alone if repeats == 1 else min(alone, max(FEW, SHARED // repeats))


def _filled(
    component: Component, counts: Sequence[int], seen: Seen, weights: FloatArray
) -> Component:
    """The component with its blocks' functions chosen and their columns' means taken."""
    share = weights / weights.sum()
    blocks = []
    for block, count in zip(component.blocks, counts, strict=True):
        functions = cross(gammas_of(block, component.spaces), count)
        block = replace(block, functions=functions, means=np.zeros(len(functions) * block.width))
        # A group's columns stay as they are: a new level is 0 in them.
        if len(block.views) > 1 and not block.grouped:
            block = replace(block, means=share @ component.columns(block, seen))
        blocks.append(block)
    return replace(component, blocks=tuple(blocks))


def _joints(
    components: tuple[Component, ...], table: Table, values: Values
) -> dict[tuple[str, ...], Joint]:
    """Where the data are, for the numbers that stand in a component together."""
    found: dict[tuple[str, ...], Joint] = {}
    for component in components:
        numbers = [key for key in component.keys if table.columns[key].kind != "levels"]
        for pair in itertools.combinations(sorted(numbers), 2):
            if pair not in found:
                found[pair] = Joint.of(pair, values)
    return found


def _without_spanned(
    components: tuple[Component, ...], seen: Seen
) -> tuple[tuple[Component, ...], tuple[str, ...]]:
    """Drop unpenalised columns that another component's unpenalised part already spans."""
    gone = spanned([c.unpenalised(seen) for c in components])
    notes: dict[str, None] = {}
    for (j, k), i in gone.items():
        own = components[j]
        part = f"The straight part of {own.name}"
        what = part if own.blocks else own.unpenalised_names[k]
        notes[f"{what} is already in {components[i].name}: it is kept once, there."] = None
    kept = tuple(
        replace(c, own=tuple(k for k in c.own if (j, k) not in gone))
        for j, c in enumerate(components)
    )
    return kept, tuple(notes)


def _refuse_twins(components: tuple[Component, ...], values: Values, model: Model) -> None:
    """Two curves of covariates that are straight functions of each other are one curve."""
    curves = [c.single for c in components if isinstance(c.single, Curve)]
    for a, b in itertools.combinations(curves, 2):
        if a.order != b.order:
            continue
        x, z = a.scaled(values[a.key]), b.scaled(values[b.key])
        if np.allclose(x, z, rtol=0, atol=1e-9) or np.allclose(x, 1 - z, rtol=0, atol=1e-9):
            raise FormulaError(
                f"{a.key} and {b.key} are straight functions of each other, so their curves are "
                "one. Leave one of them out.",
                model.text,
            )


def _check_own_curves(components: tuple[Component, ...], values: Values, model: Model) -> None:
    """A curve that differs by level needs distinct points in every level."""
    for term, component in zip(model.terms, components, strict=True):
        curves = [s for s in component.spaces if isinstance(s, Curve)]
        levels = [s for s in component.spaces if isinstance(s, Levels)]
        for curve, space in itertools.product(curves, levels):
            codes = space.codes(space.seen(values))
            for code, label in enumerate(space.labels):
                found = len(np.unique(values[curve.key][codes == code]))
                if found < curve.order:
                    raise FormulaError(
                        f"{component.name}: the level '{label}' of {space.key} has {found} "
                        f"distinct value of {curve.key}, and a curve that differs by level needs "
                        f"at least {curve.order} in each. Merge levels, or leave the product out.",
                        model.text,
                        term.span,
                    )
