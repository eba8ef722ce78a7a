"""Where an effect is shown: along one covariate, over two, and at chosen values of the rest."""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import pandas as pd

from addmodel.columns import Column, bare_name, level_label
from addmodel.errors import ModelError, nearest
from addmodel.estimate import Estimate
from addmodel.spaces.base import FloatArray, Space, Values
from addmodel.spaces.cycle import Cycle
from addmodel.spaces.group import Group
from addmodel.spaces.levels import Levels
from addmodel.spaces.line import Line
from addmodel.spaces.scattered import Scattered

GRID = 201
SURFACE = 51
CUTS = (10, 50, 90)
"""Percent points at which a number is held beside another."""


@dataclass(frozen=True)
class Axis:
    """One covariate of an effect (a group of several columns counts as one)."""

    keys: tuple[str, ...]
    space: Space
    kind: Literal["number", "cut", "levels", "group"]
    """"cut": a number held at a few values beside others."""
    values: npt.NDArray[Any]  # (g,), or (g, k) for a group of k columns

    @property
    def discrete(self) -> bool:
        """Whether it tells curves apart, and is no direction of a picture."""
        return self.kind != "number"

    def labels(self, columns: Mapping[str, Column]) -> list[str]:
        """What each value is called."""
        if isinstance(self.space, Group):
            codes = self.space.codes(self.values)
            return [self.space.labels[code] for code in codes]
        if self.kind == "levels":
            return levels_of(self.space, columns[self.keys[0]], self.values)
        return [f"{self.keys[0]} = {value:.4g}" for value in self.values]


def levels_of(space: Space, column: Column, values: npt.NDArray[Any]) -> list[str]:
    """Labels of the levels that values stand for."""
    assert isinstance(space, Levels)
    if column.kind == "levels":
        return [column.levels[int(code)] for code in values]
    return [f"{value:g}" for value in values]


def axes(estimate: Estimate, chosen: Sequence[int], at: object) -> tuple[Axis, ...]:
    """The covariates of some components, with the values that they are shown at.

    Levels first, then numbers; at most two numbers run, the others are held.
    """
    design = estimate.design
    spaces: dict[tuple[str, ...], Space] = {}
    for j in chosen:
        for space in design.components[j].spaces:
            for keys in (
                [(k,) for k in space.keys] if not isinstance(space, Group) else [space.keys]
            ):
                known = spaces.get(keys)
                if known is None or isinstance(known, Line):
                    spaces[keys] = space
    given = _at(at, spaces)
    numbers = [keys for keys, s in spaces.items() if not isinstance(s, Levels | Group)]
    bending = [keys for keys in numbers if not isinstance(spaces[keys], Line)]
    running = (bending + [keys for keys in numbers if keys not in bending])[:2]
    if len(bending) == 1 or not bending:
        running = running[:1]
    found = []
    for keys, space in spaces.items():
        kind: Literal["number", "cut", "levels", "group"] = "number" if keys in running else "cut"
        if isinstance(space, Levels):
            kind = "levels"
        elif isinstance(space, Group):
            kind = "group"
        if keys in given:
            values = _given(estimate, keys, space, given[keys])
        else:
            held = len(bending) > 2 or bool(len(bending) == 2 and len(numbers) > 2)
            values = _default(estimate, keys, space, kind, len(running) > 1, held)
        if kind == "number" and len(values) == 1 and len(spaces) > 1:
            kind = "cut"  # held at one value, it is no direction of a picture
        found.append(Axis(keys, space, kind, values))
    return tuple(sorted(found, key=lambda axis: (not axis.discrete, axis.kind != "levels")))


def product(found: Sequence[Axis]) -> tuple[Values, int]:
    """Every combination of the axes' values, the last varying fastest: covariates and rows."""
    index = list(itertools.product(*(range(len(axis.values)) for axis in found)))
    where = np.array(index, dtype=np.int64).reshape(len(index), len(found))
    values: dict[str, npt.NDArray[Any]] = {}
    for k, axis in enumerate(found):
        taken = axis.values[where[:, k]]
        for i, key in enumerate(axis.keys):
            values[key] = taken[:, i] if taken.ndim == 2 else taken
    return values, len(index)


def shown(values: Values, columns: Mapping[str, Column]) -> dict[str, Any]:
    """Covariates as the caller knows them."""
    result: dict[str, Any] = {}
    for key, x in values.items():
        column, name = columns[key], plain_name(key, columns)
        if column.kind == "levels":
            codes = np.asarray(x, dtype=np.int64)
            result[name] = pd.Categorical.from_codes(codes, categories=pd.Index(column.levels))
        elif column.kind == "date":
            result[name] = np.datetime64(0, "us") + (x * 86_400e6).round().astype("timedelta64[us]")
        else:
            result[name] = x
    return result


def plain_name(key: str, columns: Mapping[str, Column]) -> str:
    """The covariate's own name: x for C(x), unless x stands in the model as a number too."""
    own = columns[key].name
    return key if own in columns else own


def _at(at: object, spaces: Mapping[tuple[str, ...], Space]) -> dict[tuple[str, ...], object]:
    if at is None:
        return {}
    known = [bare_name(key) for keys in spaces for key in keys]
    if isinstance(at, Mapping):
        found: dict[tuple[str, ...], object] = {}
        for key, values in at.items():
            bare = {keys: [bare_name(k) for k in keys] for keys in spaces}
            fits = [k for k in spaces if key in (", ".join(k), *k, ", ".join(bare[k]), *bare[k])]
            if not fits:
                raise ModelError(f"at= names '{key}'. {nearest(str(key), known)}")
            found[fits[0]] = values
        return found
    if len(spaces) > 1:
        raise ModelError(
            f"The effect has several covariates: give at= as a mapping, such as "
            f"{{'{known[0]}': [...]}}."
        )
    return {next(iter(spaces)): at}


def _default(
    estimate: Estimate, keys: tuple[str, ...], space: Space, kind: str, joint: bool, held: bool
) -> npt.NDArray[Any]:
    """Where an axis is shown unless asked otherwise: over the data, evenly."""
    design = estimate.design
    if isinstance(space, Group):
        codes = space.combinations
        return codes if len(keys) > 1 else codes[:, 0]
    column, quantiles = design.columns[keys[0]], design.spreads[keys[0]].quantiles
    if isinstance(space, Levels):
        return space.numbers if len(space.numbers) else np.arange(len(column.levels))
    if kind == "cut":
        middle = np.interp(50 if held else CUTS, np.linspace(0, 100, len(quantiles)), quantiles)
        return np.unique(middle)
    count = SURFACE if joint else GRID
    if isinstance(space, Cycle) and not isinstance(space.period, str):
        return np.linspace(0.0, space.period, count)
    if isinstance(space, Cycle):
        # A calendar period has no length of its own: days of the data's first full period.
        return _calendar(float(quantiles[0]), str(space.period), count)
    if isinstance(space, Line):
        return np.linspace(space.low, space.high, count)
    return np.linspace(float(quantiles[0]), float(quantiles[-1]), count)


def _calendar(first: float, period: str, count: int) -> FloatArray:
    day = np.datetime64(int(np.floor(first)), "D")
    if period in ("year", "month"):
        unit = period[0].upper()
        start = (day.astype(f"datetime64[{unit}]") + 1).astype("datetime64[D]")
        stop = (start.astype(f"datetime64[{unit}]") + 1).astype("datetime64[D]")
    else:
        length = 7 if period == "week" else 1
        monday = 4  # 1970-01-05
        offset = (int(day.astype(np.int64)) - monday) % 7 if period == "week" else 0
        start = day - offset
        stop = start + length
    low, high = float(start.astype(np.int64)), float(stop.astype(np.int64))
    return np.linspace(low, high, count)


def _given(estimate: Estimate, keys: tuple[str, ...], space: Space, at: object) -> npt.NDArray[Any]:
    """Values that the caller asks for, as the space takes them."""
    if isinstance(space, Group):
        name = ", ".join(bare_name(key) for key in keys)
        wanted = [at] if isinstance(at, str) or not isinstance(at, Iterable) else list(at)
        labels = [
            ", ".join(map(level_label, w)) if isinstance(w, tuple) else level_label(w)
            for w in wanted
        ]
        pairs = " Name each as a tuple in a list." if len(keys) > 1 else ""
        for label in labels:
            if label not in space.labels:
                near = nearest(label, space.labels)
                raise ModelError(f"at={label!r} is no group of {name}. {near}{pairs}")
        rows = space.combinations[[space.labels.index(label) for label in labels]]
        return rows if len(keys) > 1 else rows[:, 0]
    values = values_given(estimate.design.columns[keys[0]], at)
    if isinstance(space, Levels) and (space.codes(values) < 0).any():
        listed = " and ".join(space.labels)
        raise ModelError(f"at= of {keys[0]}: it has the values {listed} alone; got {at!r}.")
    return values


def values_given(column: Column, at: object) -> FloatArray:
    """Values of a column that the caller asks for: numbers, days or codes."""
    listed: list[Any] = list(at) if isinstance(at, Iterable) and not isinstance(at, str) else [at]
    if not listed:
        raise ModelError(f"at= needs at least one value of {column.name}.")
    if column.kind == "levels":
        for label in listed:
            if level_label(label) not in column.levels:
                raise ModelError(
                    f"at={label!r} is not a level of {column.name}. "
                    f"{nearest(level_label(label), column.levels)}"
                )
        codes = [column.levels.index(level_label(label)) for label in listed]
        return np.array(codes, dtype=np.float64)
    try:
        if column.kind == "date":
            times = np.asarray(pd.to_datetime(listed), dtype="datetime64[us]")
            days: FloatArray = (times - np.datetime64(0, "us")) / np.timedelta64(1, "D")
            return days
        values = np.asarray(listed, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise ModelError(f"at= needs values of {column.name}; got {at!r}.") from error
    if values.ndim != 1 or not np.isfinite(values).all():
        raise ModelError(f"at= needs finite values of {column.name}; got {at!r}.")
    return values


def along(axis: Axis) -> FloatArray:
    """Positions on a figure's axis: for a cycle within its period."""
    x = np.asarray(axis.values, dtype=np.float64)
    if not isinstance(axis.space, Cycle):
        return x
    return within(axis.space, x)


def within(space: Cycle, x: FloatArray) -> FloatArray:
    """Positions within the period, 0 to its length (1 for a calendar period)."""
    t = space.scaled(x) % 1.0
    if len(t) > 2 and t[-1] == t[0]:
        t[-1] = 1.0  # the grid ends where it began
    return t if isinstance(space.period, str) else t * space.period


def near_data(estimate: Estimate, found: Sequence[Axis], values: Values) -> npt.NDArray[np.bool_]:
    """Rows of a grid that lie among the data, as far as their components know, (n,)."""
    n = len(next(iter(values.values())))
    inside = np.ones(n, dtype=bool)
    running = [axis.keys[0] for axis in found if not axis.discrete]
    for space in {id(a.space): a.space for a in found if isinstance(a.space, Scattered)}.values():
        if set(space.keys) <= set(values):
            inside &= ~space.outside(space.seen(values))
    joint = estimate.design.joints.get(tuple(sorted(running)))
    if joint is not None and not any(isinstance(axis.space, Cycle) for axis in found):
        inside &= joint.holds(values)
    return inside
