"""Partial effects: what a component, or a sum of them, adds along its covariates, with its band."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import TYPE_CHECKING, Literal

import numpy as np
import pandas as pd

from addmodel import figures, joints
from addmodel.bands import Band, band
from addmodel.errors import ModelError
from addmodel.estimate import Estimate
from addmodel.formula import find_sum
from addmodel.grids import Axis, along, axes, near_data, plain_name, product, shown, within
from addmodel.inference import linear, quantile
from addmodel.matrix import DesignMatrix
from addmodel.spaces.base import FloatArray
from addmodel.spaces.cycle import Cycle
from addmodel.spaces.group import Group
from addmodel.spaces.levels import Levels
from addmodel.spaces.line import Line
from addmodel.spaces.scattered import Scattered

if TYPE_CHECKING:
    from matplotlib.axes import Axes

NO_UNITS: Mapping[str, str] = MappingProxyType({})
MOST_NAMED = 40
"""Groups up to which a figure names each."""


@dataclass(frozen=True, repr=False)
class Effect:
    """A partial effect.

    Attributes
    ----------
    component : str
        Its name.
    table : pandas.DataFrame
        The covariates under their own names, then effect, std_error, lower, upper (pointwise),
        lower_whole, upper_whole (simultaneous over the rows of the table): the difference from the
        average over the data, on the scale of the linear predictor.
        Over two numbers also `outside`: no data are near.
    panel : figures.Panel, joints.Surface or joints.Family
        The same as a picture.
    """

    component: str
    table: pd.DataFrame
    panel: figures.AnyPanel

    def __repr__(self) -> str:
        return f"Effect of {self.component}, {len(self.table)} rows\n{self.table.head()}"

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw the effect, on `ax` if it is given (a curve or levels only); returns the axes."""
        return figures.draw(self.panel, ax)


def effect(
    estimate: Estimate,
    name: str,
    *,
    at: object,
    level: float,
    units: Mapping[str, str] = NO_UNITS,
) -> Effect:
    """See `Fit.effect`."""
    if not isinstance(name, str):
        raise ModelError(f"Name one component, such as 'curve(x)'; got {name!r}.")
    known = [c.name for c in estimate.design.components]
    chosen = [known.index(found) for found in find_sum(name, known)]
    found = axes(estimate, chosen, at)
    values, n = product(found)
    matrix = estimate.design.of_components(values, n, chosen)
    both = band(estimate, matrix, level)
    table = pd.DataFrame({**shown(values, estimate.design.columns), **banded("effect", both)})
    running = [axis for axis in found if not axis.discrete]
    if len(running) > 1:
        table["outside"] = ~near_data(estimate, found, values)
    whole = known[chosen[0]] if len(chosen) == 1 else name
    picture = _with_units(_picture(estimate, found, table, matrix, level), units)
    if not isinstance(picture, figures.Panel):
        picture = replace(picture, caption=_caption(estimate, whole, found, picture))
    return Effect(whole, table, picture)


def _with_units(picture: figures.AnyPanel, units: Mapping[str, str]) -> figures.AnyPanel:
    """Units on the axes, from a mapping of covariates' names; the outcome's belongs to effects."""

    def named(label: str) -> str:
        unit = units.get(label.split(",")[0])
        return f"{label}, {unit}" if unit else label

    if isinstance(picture, figures.Panel):
        return replace(picture, covariate=named(picture.covariate))
    picture = replace(picture, across=replace(picture.across, label=named(picture.across.label)))
    if isinstance(picture, joints.Surface):
        return replace(picture, upward=replace(picture.upward, label=named(picture.upward.label)))
    return picture


def partial_residuals(estimate: Estimate, component: int) -> FloatArray:
    """The covariate, and the component plus the working residual, of each row, (n, 2).

    None where the component has more than one covariate, or levels.
    """
    c = estimate.design.components[component]
    table, eta = estimate.table, estimate.linear_predictor
    if len(c.keys) != 1 or isinstance(c.single, Levels | Group) or table is None or eta is None:
        return np.empty((0, 2))
    values = table.values
    part = estimate.design.of_components(values, len(eta), [component])
    curvature = estimate.outcome.curvature(table.outcome, eta, table.prior)
    residual = curvature.slope / np.maximum(curvature.fisher, 1e-300)
    x = values[c.keys[0]]
    at = within(c.single, x) if isinstance(c.single, Cycle) else x
    return np.column_stack([at, part.times(estimate.coefficients) + residual])


def banded(name: str, both: Band) -> dict[str, FloatArray]:
    """Columns of a table of effects."""
    return {
        name: both.value,
        "std_error": both.error,
        "lower": both.value - both.half,
        "upper": both.value + both.half,
        "lower_whole": both.value - both.half_whole,
        "upper_whole": both.value + both.half_whole,
    }


def _caption(
    estimate: Estimate, name: str, found: Sequence[Axis], picture: figures.AnyPanel
) -> str:
    """Which component a picture shows, and at which values of what it has no direction for."""
    columns = estimate.design.columns
    held = []
    for axis in found:
        shown_once = isinstance(picture, joints.Surface) or len(axis.values) == 1
        if axis.discrete and shown_once:
            label, count = axis.labels(columns)[0], len(axis.values)
            names = ", ".join(plain_name(key, columns) for key in axis.keys)
            value = label if axis.kind == "cut" else f"{names} = {label}"
            more = f" (the first of {count}; the table has all)" if count > 1 else ""
            held.append(f"at {value}{more}")
    return ", ".join([name, *held])


def effect_to_draw(
    estimate: Estimate, component: int, units: Mapping[str, str] = NO_UNITS
) -> Effect:
    """A component's effect as a sheet shows it: curves by level together with their margins.

    The deviations are beside them; a surface is the component alone.
    """
    design = estimate.design
    name = design.components[component].name
    alone = effect(estimate, name, at=None, level=0.95, units=units)
    if not isinstance(alone.panel, joints.Family):
        return alone
    own = {f.name for f in estimate.model.terms[component].factors}
    names = [t.name for t in estimate.model.terms if {f.name for f in t.factors} <= own]
    together = effect(estimate, " + ".join(names), at=None, level=0.95, units=units)
    if not isinstance(together.panel, joints.Family):
        return alone
    panel = replace(together.panel, caption=f"{name}, with its margins")
    return replace(together, component=name, panel=panel)


def _picture(
    estimate: Estimate,
    found: Sequence[Axis],
    table: pd.DataFrame,
    matrix: DesignMatrix,
    level: float,
) -> figures.AnyPanel:
    """A panel for one covariate, a family for curves by level, a surface over two numbers."""
    running = [axis for axis in found if not axis.discrete]
    apart = [axis for axis in found if axis.discrete and len(axis.values) > 1]
    if len(running) == 2:
        return _surface(estimate, running, table)
    if len(running) == 1 and apart:
        return _family(estimate, running[0], apart, table, matrix, level)
    if len(running) == 1:
        return _curve(estimate, running[0], table, level)
    return _levels(estimate, found, table, level)


def _curve(estimate: Estimate, axis: Axis, table: pd.DataFrame, level: float) -> figures.Panel:
    space = axis.space
    spread, cyclic = estimate.design.spreads[axis.keys[0]], isinstance(space, Cycle)
    x = along(axis)
    order = np.argsort(x, kind="stable")  # at= may come in any order; a picture ascends
    quantiles = spread.quantiles
    return figures.Panel(
        kind=_kind(axis),
        covariate=_axis_label(axis),
        quantity=quantity(estimate),
        x=x[order],
        effect=table["effect"].to_numpy()[order],
        lower=table["lower"].to_numpy()[order],
        upper=table["upper"].to_numpy()[order],
        lower_whole=table["lower_whole"].to_numpy()[order],
        upper_whole=table["upper_whole"].to_numpy()[order],
        level=level,
        quantiles=np.sort(within(space, quantiles)) if isinstance(space, Cycle) else quantiles,
        dates=estimate.design.columns[axis.keys[0]].kind == "date" and not cyclic,
        period=space.period if isinstance(space, Cycle) else None,
    )


def _levels(
    estimate: Estimate, found: Sequence[Axis], table: pd.DataFrame, level: float
) -> figures.Panel:
    """Levels in their order; groups from the lowest effect to the highest."""
    design = estimate.design
    each = [axis.labels(design.columns) for axis in found]
    labels = [" · ".join(parts) for parts in _combinations(each)]
    shares = np.empty(0)
    order = np.arange(len(labels))
    if len(found) == 1 and isinstance(found[0].space, Levels):
        space = found[0].space
        shares = space.shares[space.codes(found[0].values)]
    if any(isinstance(axis.space, Group) for axis in found):
        order = np.argsort(table["effect"].to_numpy(), kind="stable")
    crowded = len(labels) > MOST_NAMED
    return figures.Panel(
        kind="ranked" if crowded else "levels",
        covariate=", ".join(plain_name(key, design.columns) for a in found for key in a.keys),
        quantity=quantity(estimate),
        x=np.arange(len(labels), dtype=np.float64),
        effect=table["effect"].to_numpy()[order],
        lower=table["lower"].to_numpy()[order],
        upper=table["upper"].to_numpy()[order],
        level=level,
        labels=() if crowded else tuple(labels[i] for i in order),
        shares=shares[order] if len(shares) else shares,
        alone=any(isinstance(axis.space, Group) for axis in found),
    )


def _combinations(each: Sequence[list[str]]) -> list[list[str]]:
    combined: list[list[str]] = [[]]
    for labels in each:
        combined = [[*before, label] for before in combined for label in labels]
    return combined


def _family(
    estimate: Estimate,
    axis: Axis,
    apart: Sequence[Axis],
    table: pd.DataFrame,
    matrix: DesignMatrix,
    level: float,
) -> joints.Family:
    design = estimate.design
    labels = [" · ".join(p) for p in _combinations([a.labels(design.columns) for a in apart])]
    x = along(axis)
    order = np.argsort(x, kind="stable")
    shape = (len(labels), len(x))
    effects = table["effect"].to_numpy().reshape(shape)
    weights = np.ones(len(labels))
    if len(apart) == 1 and isinstance(apart[0].space, Levels):
        space = apart[0].space
        weights = space.shares[space.codes(apart[0].values)]
    weights = weights / weights.sum()
    deviation = effects - weights @ effects
    error = np.full(shape, np.nan)
    if not matrix.layout.parts or not matrix.wide.any():
        dense = matrix.dense.reshape(*shape, -1)
        about = (dense - np.einsum("c,cgd->gd", weights, dense)).reshape(shape[0] * shape[1], -1)
        apart_too = replace(matrix, dense=about)
        error = linear(estimate, apart_too)[1].reshape(shape)
    half = quantile(estimate, level) * error
    return joints.Family(
        across=_scale(estimate, axis),
        quantity=quantity(estimate),
        x=x[order],
        labels=tuple(labels),
        effect=effects[:, order],
        lower=table["lower"].to_numpy().reshape(shape)[:, order],
        upper=table["upper"].to_numpy().reshape(shape)[:, order],
        deviation=deviation[:, order],
        deviation_lower=(deviation - half)[:, order],
        deviation_upper=(deviation + half)[:, order],
        level=level,
    )


def _surface(estimate: Estimate, running: Sequence[Axis], table: pd.DataFrame) -> joints.Surface:
    """Over the first values of whatever else there is."""
    x, y = (along(axis) for axis in running)
    shape = (len(x), len(y))
    first = table.iloc[: shape[0] * shape[1]]
    masked = np.where(first["outside"], np.nan, first["effect"]).reshape(shape)
    rows, columns = np.argsort(x, kind="stable"), np.argsort(y, kind="stable")
    map_ = all(isinstance(axis.space, Scattered) for axis in running)
    across, upward = (_scale(estimate, axis) for axis in running)
    effects, errors = masked[rows][:, columns], first["std_error"].to_numpy().reshape(shape)
    errors = errors[rows][:, columns]
    if map_ and type(running[0].space).__name__ == "Globe":  # north upward
        x, y, across, upward = y, x, upward, across
        rows, columns, effects, errors = columns, rows, effects.T, errors.T
    return joints.Surface(
        across=across,
        upward=upward,
        quantity=quantity(estimate),
        x=x[rows],
        y=y[columns],
        effect=effects,
        std_error=errors,
        map=map_,
    )


def quantity(estimate: Estimate) -> str:
    """What an effect's axis says."""
    link = type(estimate.outcome.family.link).__name__
    scales = {"Identity": "", "Log": ", log scale", "Logit": ", log odds"}
    return f"Effect on {estimate.model.outcome.text}{scales.get(link, ', link scale')}"


def _scale(estimate: Estimate, axis: Axis) -> joints.Scale:
    cyclic = isinstance(axis.space, Cycle)
    dates = estimate.design.columns[axis.keys[0]].kind == "date" and not cyclic
    period = axis.space.period if isinstance(axis.space, Cycle) else None
    return joints.Scale(_axis_label(axis), dates, period)


def _axis_label(axis: Axis) -> str:
    space, key = axis.space, axis.keys[0]
    if isinstance(space, Cycle) and isinstance(space.period, str):
        part = {"day": "hour", "week": "day", "month": "day", "year": "time"}[space.period]
        return f"{key}, {part} of the {space.period}"
    return key


def _kind(axis: Axis) -> Literal["curve", "cycle", "line"]:
    if isinstance(axis.space, Line):
        return "line"
    return "cycle" if isinstance(axis.space, Cycle) else "curve"
