"""Partial effects: what each component adds, along its covariate, with its band."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import pandas as pd

from addmodel import figures
from addmodel.columns import Column
from addmodel.component import Component
from addmodel.errors import ModelError, nearest
from addmodel.estimate import Estimate
from addmodel.inference import linear, quantile
from addmodel.prediction import components_named
from addmodel.spaces.base import FloatArray
from addmodel.spaces.cycle import Cycle
from addmodel.spaces.levels import Levels
from addmodel.spaces.line import Line

if TYPE_CHECKING:
    from matplotlib.axes import Axes

GRID = 201


@dataclass(frozen=True, repr=False)
class Effect:
    """A component's partial effect.

    Attributes
    ----------
    component : str
        Its name.
    table : pandas.DataFrame
        The covariate under its own name, then effect, std_error, lower, upper: the difference from
        the component's average over the data, on the scale of the linear predictor, with a
        pointwise band.
    panel : figures.Panel
        The same as a picture.
    """

    component: str
    table: pd.DataFrame
    panel: figures.Panel

    def __repr__(self) -> str:
        return f"Effect of {self.component}, {len(self.table)} rows\n{self.table.head()}"

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw the effect, on `ax` if it is given; returns the axes."""
        return figures.draw(self.panel, ax)


def effect(estimate: Estimate, name: str, *, at: object, level: float) -> Effect:
    """See `Fit.effect`."""
    if not isinstance(name, str):
        raise ModelError(f"Name one component, such as 'curve(x)'; got {name!r}.")
    (j,) = components_named(estimate, name)
    component = estimate.design.components[j]
    (space,) = component.spaces
    column = estimate.design.columns[space.key]
    x = grid(estimate, component) if at is None else _given(column, at)
    places = estimate.design.places(j)
    columns = estimate.design.component_matrix(j, {space.key: x})
    value, error = linear(estimate, columns, places)
    half = quantile(estimate, level) * error
    table = pd.DataFrame(
        {
            space.key: _shown(x, column.kind, column.levels, space),
            "effect": value,
            "std_error": error,
            "lower": value - half,
            "upper": value + half,
        }
    )
    spread = estimate.design.spreads[space.key]
    cyclic = isinstance(space, Cycle)
    codes = x.astype(np.int64) if column.kind == "levels" else np.empty(0, dtype=np.int64)
    along = np.arange(len(x), dtype=np.float64) if len(codes) else _along(space, x)
    order = np.argsort(along, kind="stable")  # at= may come in any order; a picture ascends
    panel = figures.Panel(
        kind=_kind(space),
        covariate=_axis_label(space),
        quantity=_quantity(estimate),
        x=along[order],
        effect=value[order],
        lower=(value - half)[order],
        upper=(value + half)[order],
        level=level,
        labels=tuple(column.levels[code] for code in codes),
        quantiles=np.sort(_along(space, spread.quantiles)) if cyclic else spread.quantiles,
        shares=spread.shares[codes],
        dates=column.kind == "date" and not cyclic,
        period=space.period if isinstance(space, Cycle) else None,
    )
    return Effect(component.name, table, panel)


def grid(estimate: Estimate, component: Component) -> FloatArray:
    """Where an effect is shown unless asked otherwise: over the data, evenly."""
    (space,) = component.spaces
    column = estimate.design.columns[space.key]
    if isinstance(space, Levels):
        return np.arange(len(column.levels), dtype=np.float64)
    if isinstance(space, Cycle) and not isinstance(space.period, str):
        return np.linspace(0.0, space.period, GRID)
    if isinstance(space, Cycle):
        # A calendar period has no length of its own: days of the data's first full period.
        first = float(estimate.design.spreads[space.key].quantiles[0])
        return _calendar(first, str(space.period))
    spread = estimate.design.spreads[space.key].quantiles
    low, high = (
        (space.low, space.high)
        if isinstance(space, Line)
        else (float(spread[0]), float(spread[-1]))
    )
    return np.linspace(low, high, GRID)


def _calendar(first: float, period: str) -> FloatArray:
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
    return np.linspace(low, high, GRID)


def _quantity(estimate: Estimate) -> str:
    link = type(estimate.outcome.family.link).__name__
    scales = {"Identity": "", "Log": ", log scale", "Logit": ", log odds"}
    return f"Effect on {estimate.model.outcome.text}{scales.get(link, ', link scale')}"


def _axis_label(space: object) -> str:
    if isinstance(space, Cycle) and isinstance(space.period, str):
        part = {"day": "hour", "week": "day", "month": "day", "year": "time"}[space.period]
        return f"{space.key}, {part} of the {space.period}"
    return str(getattr(space, "key", ""))


def _kind(space: object) -> Literal["curve", "cycle", "line", "levels"]:
    if isinstance(space, Levels):
        return "levels"
    if isinstance(space, Line):
        return "line"
    return "cycle" if isinstance(space, Cycle) else "curve"


def _along(space: object, x: FloatArray) -> FloatArray:
    """Position on the figure's axis: for a cycle within its period."""
    if not isinstance(space, Cycle):
        return x
    t = space.scaled(x) % 1.0
    if len(t) > 2 and t[-1] == t[0]:
        t[-1] = 1.0  # the grid ends where it began
    return t if isinstance(space.period, str) else t * space.period


def _shown(x: FloatArray, kind: str, levels: tuple[str, ...], space: object) -> Any:
    if kind == "levels":
        return pd.Categorical.from_codes(x.astype(np.int64), categories=pd.Index(levels))
    if kind == "date":
        return np.datetime64(0, "us") + (x * 86_400e6).round().astype("timedelta64[us]")
    return x


def _given(column: Column, at: object) -> FloatArray:
    """Values that the caller asks for, as the space takes them."""
    listed: list[Any] = list(at) if isinstance(at, Iterable) and not isinstance(at, str) else [at]
    if not listed:
        raise ModelError(f"at= needs at least one value of {column.name}.")
    if column.kind == "levels":
        for label in listed:
            if str(label) not in column.levels:
                raise ModelError(
                    f"at={label!r} is not a level of {column.name}. "
                    f"{nearest(str(label), column.levels)}"
                )
        return np.array([column.levels.index(str(label)) for label in listed], dtype=np.float64)
    try:
        if column.kind == "date":
            times = np.asarray(pd.to_datetime(listed), dtype="datetime64[us]")
            days: FloatArray = (times - np.datetime64(0, "us")) / np.timedelta64(1, "D")
            return days
        values = np.asarray(listed, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise ModelError(f"at= needs values of {column.name}; got {at!r}.") from error
    if not np.isfinite(values).all():
        raise ModelError(f"at= needs finite values of {column.name}; got {at!r}.")
    return values
