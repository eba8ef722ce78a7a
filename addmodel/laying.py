"""From a factor of the formula and the data to its space, laid on them."""

from __future__ import annotations

from typing import Any

import numpy as np

from addmodel.algebra import Nature
from addmodel.columns import Column, column_key
from addmodel.data import Table
from addmodel.errors import FormulaError, nearest
from addmodel.formula import Factor, Model
from addmodel.spaces.base import FloatArray, Space
from addmodel.spaces.curve import Curve
from addmodel.spaces.cycle import Cycle
from addmodel.spaces.globe import Globe
from addmodel.spaces.group import Group
from addmodel.spaces.levels import Levels
from addmodel.spaces.line import Line
from addmodel.spaces.place import Place


def nature(factor: Factor, table: Table) -> Nature:
    """What a factor is on these data."""
    if factor.kind == "group":
        return "group"
    if factor.kind not in ("plain", "levels"):
        return "smooth"
    (key,) = keys_of(factor)
    column = table.columns[key]
    if column.kind == "levels":
        return "levels"
    return "two" if len(np.unique(column.values)) == 2 else "number"


def keys_of(factor: Factor) -> tuple[str, ...]:
    """Keys of a factor's columns."""
    return tuple(column_key(factor, expression) for expression in factor.arguments)


def lay_space(
    factor: Factor, model: Model, table: Table, weights: FloatArray, size: int, levelled: bool
) -> Space:
    """The factor's space.

    Parameters
    ----------
    factor, model, table
        The factor; the model it stands in, for messages; the checked data.
    weights : (n,)
        Prior weights of the rows.
    size : int
        Number of penalised functions wanted, where their number can be chosen.
    levelled : bool
        Whether a number with two distinct values is to be levels.

    Raises
    ------
    FormulaError
        Where it has no meaning on these data.
    """
    keys = keys_of(factor)
    column = table.columns[keys[0]]
    if factor.kind == "group":
        own = [table.columns[key] for key in keys]
        codes = np.column_stack([c.values for c in own])
        return Group.lay(keys, codes, tuple(c.levels for c in own))
    if factor.kind in ("place", "globe"):
        return _map(factor, model, table, weights)
    if factor.kind in ("curve", "cycle"):
        return _spline(factor, model, column, weights, size)
    if column.kind == "levels":
        base = _base(factor.options.get("base"), column, weights, model, factor)
        return Levels.lay(keys[0], column.values, weights, column.levels, base)
    if levelled:
        numbers, codes = np.unique(column.values, return_inverse=True)
        labels = tuple(f"{value:g}" for value in numbers)
        return Levels.lay(keys[0], codes, weights, labels, 0, numbers)
    return Line.lay(keys[0], column.values)


def _spline(
    factor: Factor, model: Model, column: Column, weights: FloatArray, size: int
) -> Curve | Cycle:
    (key,) = keys_of(factor)
    options: dict[str, Any] = dict(factor.options)
    period, order = options.get("period"), int(options.get("order", 2))
    if isinstance(period, str) and column.kind != "date":
        raise FormulaError(
            f"{factor.name} needs dates for period='{period}', and {key} is a number. "
            f"Give the period as a number in the units of {key}.",
            model.text,
            factor.span,
        )
    cap = cap_of(factor)
    distinct = len(np.unique(column.values))
    least = max(4, order + 2) if factor.kind == "curve" else 3
    if distinct >= least:
        if factor.kind == "curve":
            return Curve.lay(key, column.values, weights, size, cap, order)
        assert period is not None
        space = Cycle.lay(key, column.values, weights, size, cap, period)
        if space.distinct >= least:
            return space
        distinct = space.distinct
    where = "" if factor.kind == "curve" else " within its period"
    raise FormulaError(
        f"{factor.name} has {distinct} distinct values{where} and needs at least {least}. "
        f"Write `{key}` for a straight line or `C({key})` for levels.",
        model.text,
        factor.span,
    )


def _map(factor: Factor, model: Model, table: Table, weights: FloatArray) -> Place | Globe:
    keys = keys_of(factor)
    x = np.column_stack([table.columns[key].values for key in keys])
    sites = len(np.unique(x, axis=0))
    if sites < 6:
        raise FormulaError(
            f"{factor.name} has {sites} distinct sites and needs at least 6. "
            f"Write `group({', '.join(keys)})` or levels for so few.",
            model.text,
            factor.span,
        )
    everything = factor.options.get("detail") == "all"
    if factor.kind == "globe":
        check_degrees(factor.name, keys, x[:, 0], x[:, 1], model, factor)
        return Globe.lay(keys, x, weights, cap_of(factor), everything)
    share = weights / weights.sum()
    about = x - share @ x
    shape = np.linalg.svd(np.sqrt(share)[:, None] * about, compute_uv=False)
    if shape[1] < 1e-6 * shape[0]:
        raise FormulaError(
            f"The sites of {factor.name} lie on one line, so they are no map. "
            f"Write `curve({keys[0]})`.",
            model.text,
            factor.span,
        )
    return Place.lay(keys, x, weights, cap_of(factor), everything)


def check_degrees(
    name: str, keys: tuple[str, ...], lat: FloatArray, lon: FloatArray, model: Model, factor: Factor
) -> None:
    """Latitude first, both in degrees."""
    for key, values, most in ((keys[0], lat, 90.0), (keys[1], lon, 360.0)):
        wrong = np.abs(values) > most
        if wrong.any():
            raise FormulaError(
                f"{name} takes latitude, then longitude, in degrees: {key} should lie between "
                f"{-most:g} and {most:g}, and has {values[wrong][0]:g}. For other coordinates "
                f"write place({', '.join(keys)}).",
                model.text,
                factor.span,
            )


def cap_of(factor: Factor) -> int | None:
    """The formula's `detail=` where it is a number."""
    detail = factor.options.get("detail")
    return detail if isinstance(detail, int) else None


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
