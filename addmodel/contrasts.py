"""Contrasts against a reference, slopes, turning points: differences of rows of the design."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from numbers import Real
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from addmodel.bands import Band, band, draws_of
from addmodel.columns import bare_name
from addmodel.effects import banded
from addmodel.errors import ModelError
from addmodel.estimate import Estimate
from addmodel.formula import find_sum
from addmodel.grids import Axis, axes, product, shown, values_given
from addmodel.inference import DEFAULT_SEED, check_level, quantile, uncertain
from addmodel.matrix import DesignMatrix
from addmodel.spaces.base import FloatArray, Values
from addmodel.spaces.cycle import Cycle

STEP = 1e-4
"""Of the covariate's range: the step of a difference quotient."""
EXTREMES = ("minimum", "maximum")
PERIODS = {"day": 1.0, "week": 7.0, "month": 30.4375, "year": 365.25}
RATIOS = {"Log": "ratio of means", "Logit": "odds ratio"}
COUNTS = ("Poisson", "NegativeBinomial")


@dataclass(frozen=True, repr=False)
class Contrast:
    """Differences from a reference.

    Attributes
    ----------
    component : str
    quantity : str
        "difference", or where the link makes it so "rate ratio", "ratio of means", "odds ratio".
    reference : str
        The reference in words.
    table : pandas.DataFrame
        The covariates, then contrast, std_error, lower, upper (pointwise), lower_whole, upper_whole
        (simultaneous). Of ratios, std_error is that of the logarithm.
    covariance : ndarray (n, n)
        Covariance of the contrasts on the scale of the linear predictor, for pooling studies.
    """

    component: str
    quantity: str
    reference: str
    table: pd.DataFrame
    covariance: FloatArray

    def __repr__(self) -> str:
        head = f"{self.component}: {self.quantity} against {self.reference}"
        return f"{head}, {len(self.table)} rows\n{self.table.head()}"


def contrast(
    estimate: Estimate,
    name: str,
    *,
    reference: object,
    at: object,
    by: str | None,
    per: float | None,
    scale: str,
    level: float,
    seed: int,
) -> Contrast:
    """See `Fit.contrast`."""
    check_level(level)
    if scale not in ("outcome", "link"):
        raise ModelError(f"scale={scale!r} is not known; it is 'outcome' or 'link'.")
    if by is not None and (per is not None or reference in EXTREMES):
        raise ModelError("by= goes with a reference value; hold one level by at= instead.")
    chosen = chosen_of(estimate, name)
    found = axes(estimate, chosen, at)
    if at is None and per is None:
        found = _with_reference(estimate, found, reference)
    if at is None and per is not None:
        found = _beyond_the_start(found, positive(per), name)
    values, n = product(found)
    if per is not None:
        axis = _number(found, name)
        size = positive(per)
        words = f"{axis.keys[0]} less {size:g}"
        matrix = _moved(estimate, chosen, values, n, axis.keys[0], 0.0).minus(
            _moved(estimate, chosen, values, n, axis.keys[0], -size)
        )
        both = band(estimate, matrix, level, seed)
    elif isinstance(reference, str) and reference in EXTREMES:
        axis = _number(found, name)
        matrix, both, words = _against_extreme(estimate, chosen, found, str(reference), level, seed)
    else:
        there, words = _reference(estimate, found, values, reference, by)
        own = estimate.design.of_components(values, n, chosen)
        matrix = own.minus(estimate.design.of_components(there, n, chosen))
        matrix = _with_levels(own, matrix)
        both = band(estimate, matrix, level, seed)
    ratio = ratio_words(estimate) if scale == "outcome" else None
    columns = banded("contrast", both)
    if ratio is not None:
        columns = {k: v if k == "std_error" else np.exp(v) for k, v in columns.items()}
    table = pd.DataFrame({**shown(values, estimate.design.columns), **columns})
    return Contrast(name, ratio or "difference", words, table, _covariance(estimate, matrix))


def _with_reference(
    estimate: Estimate, found: Sequence[Axis], reference: object
) -> tuple[Axis, ...]:
    """The reference among the places shown: there the band has no width."""
    running = [axis for axis in found if axis.kind == "number"]
    plain = not isinstance(reference, Mapping) and reference not in EXTREMES
    if len(running) != 1 or not plain:
        return tuple(found)
    key = running[0].keys[0]
    if reference == "median":
        quantiles = estimate.design.spreads[key].quantiles
        place = float(quantiles[len(quantiles) // 2])
    elif isinstance(reference, str) and estimate.design.columns[key].kind != "date":
        return tuple(found)
    else:
        given = values_given(estimate.design.columns[key], reference)
        if len(given) != 1:
            raise ModelError(f"reference= is one value of {key}; got {reference!r}.")
        place = float(given[0])
    if not running[0].values.min() <= place <= running[0].values.max():
        return tuple(found)
    more = np.unique(np.append(running[0].values, place))
    return tuple(replace(a, values=more) if a is running[0] else a for a in found)


def ratio_words(estimate: Estimate) -> str | None:
    """What exp of a difference on the link's scale is called; None where it is nothing."""
    link = type(estimate.outcome.family.link).__name__
    if link == "Log" and estimate.outcome.kind in COUNTS:
        return "rate ratio"
    return RATIOS.get(link)


def chosen_of(estimate: Estimate, name: str) -> list[int]:
    """Components of a name or a sum of names."""
    if not isinstance(name, str):
        raise ModelError(f"Name a component, such as 'curve(x)'; got {name!r}.")
    known = [c.name for c in estimate.design.components]
    return [known.index(found) for found in find_sum(name, known)]


def positive(value: object) -> float:
    """per= as a number."""
    if isinstance(value, bool) or not isinstance(value, Real) or not 0 < float(value) < np.inf:
        raise ModelError(f"per= is a positive number of the covariate's units; got {value!r}.")
    return float(value)


def _beyond_the_start(found: Sequence[Axis], size: float, name: str) -> tuple[Axis, ...]:
    """Places from which `size` less is still within the data."""
    axis = _number(found, name)
    if isinstance(axis.space, Cycle):
        return tuple(found)
    later = axis.values[axis.values >= axis.values.min() + size]
    if not len(later):
        raise ModelError(f"per={size:g} is more than the whole range of {axis.keys[0]}.")
    return tuple(replace(a, values=later) if a is axis else a for a in found)


def _with_levels(own: DesignMatrix, difference: DesignMatrix) -> DesignMatrix:
    """Differences between levels of the group set apart are not written row by row."""
    if own.layout.parts and own.wide.any():
        raise ModelError(
            "Contrasts between the levels of the largest group are not available; use "
            "effect() for each level, or draws()."
        )
    return difference


def _number(found: Sequence[Axis], name: str) -> Axis:
    running = [axis for axis in found if axis.kind == "number"]
    held = [axis for axis in found if axis.kind == "cut" and len(axis.values) == 1]
    if not running and len(held) == 1:
        return held[0]
    if not running:
        raise ModelError(f"{name} has no number to move along.")
    if len(running) != 1:
        raise ModelError(
            f"{name} has {len(running)} running numbers: hold all but one by at=, such as "
            "at={'z': 1.0}."
        )
    return running[0]


def _moved(
    estimate: Estimate, chosen: Sequence[int], values: Values, n: int, key: str, by: float
) -> DesignMatrix:
    there: dict[str, npt.NDArray[Any]] = {**values, key: values[key] + by}
    return estimate.design.of_components(there, n, chosen)


def _reference(
    estimate: Estimate, found: Sequence[Axis], values: Values, reference: object, by: str | None
) -> tuple[Values, str]:
    """The covariates at the reference, row by row, and the reference in words.

    With by= that covariate keeps each row's own value: one contrast for each of its levels.
    """
    design = estimate.design
    bare = {bare_name(key): key for a in found for key in a.keys}
    by = bare.get(by, by) if by is not None else None
    if isinstance(reference, Mapping):
        reference = {bare.get(str(key), str(key)): value for key, value in reference.items()}
    kept = {key for axis in found for key in axis.keys if by is not None and by in axis.keys}
    if by is not None and not kept:
        raise ModelError(f"by={by!r} is no covariate of this component.")
    wanted: dict[str, object] = {}
    free = [axis for axis in found if not set(axis.keys) <= kept]
    if isinstance(reference, Mapping):
        wanted = {str(key): value for key, value in reference.items()}
    elif reference == "median":
        wanted = {key: "median" for axis in free for key in axis.keys}
    else:
        if len(free) != 1 or len(free[0].keys) != 1:
            names = ", ".join(key for axis in free for key in axis.keys)
            raise ModelError(
                f"Give reference= as a mapping of each of {names}, or one value where there is "
                "one covariate."
            )
        wanted = {free[0].keys[0]: reference}
    there = dict(values)
    words = []
    for key, value in wanted.items():
        if key not in values:
            raise ModelError(f"reference= names '{key}', which this component does not have.")
        if value == "median":
            if design.columns[key].kind == "levels":
                value = design.columns[key].levels[int(design.spreads[key].shares.argmax())]
            else:
                quantiles = design.spreads[key].quantiles
                number = float(quantiles[len(quantiles) // 2])
                there[key] = np.full(len(values[key]), number)
                place = next(iter(shown({key: np.array([number])}, design.columns).values()))[0]
                told = f"{number:.4g}" if isinstance(place, float) else str(place)[:16]
                words.append(f"{key} = {told} (the median)")
                continue
        code = values_given(design.columns[key], value)
        if len(code) != 1:
            raise ModelError(f"reference= is one value of {key}; got {value!r}.")
        there[key] = np.full(len(values[key]), code[0])
        words.append(f"{key} = {value}")
    return there, ", ".join(words)


def _against_extreme(
    estimate: Estimate,
    chosen: Sequence[int],
    found: Sequence[Axis],
    which: str,
    level: float,
    seed: int,
) -> tuple[DesignMatrix, Band, str]:
    """Against the lowest or highest point of the curve; bands also hold where it is uncertain.

    In each posterior draw the extreme is sought anew.
    """
    values, n = product(found)
    if n != len(_number(found, "The component").values) or n < 2:
        raise ModelError(
            f"reference={which!r} is of one curve, over several places: hold the other covariates "
            "by at=."
        )
    matrix = estimate.design.of_components(values, n, chosen)
    sign = 1.0 if which == "minimum" else -1.0
    curve = matrix.times(estimate.coefficients)
    best = int((sign * curve).argmin())
    draws = curve + draws_of(estimate, matrix, seed)
    differences = draws - (sign * (sign * draws).min(axis=1))[:, None]
    value = curve - curve[best]
    error = np.sqrt(np.mean((differences - value) ** 2, axis=0))
    error[best] = max(error[best], 0.0)
    half = quantile(estimate, level) * error
    solid = error > 1e-9 * error.max(initial=0.0)
    largest = np.abs((differences - value)[:, solid] / error[solid]).max(axis=1)
    whole = float(np.quantile(largest, level)) * error
    axis = _number(found, "The component")
    key = axis.keys[0]
    places = values[key][(sign * draws).argmin(axis=1)]
    low, high = _interval(places, float(values[key][best]), axis, level)
    point = shown({key: np.array([values[key][best], low, high])}, estimate.design.columns)
    first, low_words, high_words = (
        f"{v:.4g}" if isinstance(v, float) else str(v)[:16] for v in next(iter(point.values()))
    )
    words = f"its {which}, at {key} = {first} ({low_words} to {high_words})"
    there: dict[str, npt.NDArray[Any]] = {k: np.full(n, v[best]) for k, v in values.items()}
    difference = matrix.minus(estimate.design.of_components(there, n, chosen))
    return difference, Band(value, error, half, np.maximum(whole, half)), words


def _interval(places: FloatArray, centre: float, axis: Axis, level: float) -> tuple[float, float]:
    """Quantiles of places along an axis; of a cycle, counted from its estimated place."""
    ends = [0.5 - level / 2, 0.5 + level / 2]
    if not isinstance(axis.space, Cycle):
        low, high = np.quantile(places, ends)
        return float(low), float(high)
    start, turn = float(axis.values.min()), float(np.ptp(axis.values)) or 1.0
    about = np.mod(places - centre + turn / 2, turn) - turn / 2
    low, high = centre + np.quantile(about, ends)
    return float(start + np.mod(low - start, turn)), float(start + np.mod(high - start, turn))


def _covariance(estimate: Estimate, matrix: DesignMatrix) -> FloatArray:
    spread = matrix.against(uncertain(estimate))
    covariance: FloatArray = estimate.posterior.covariance(matrix) + spread @ spread.T
    return covariance


def slope(
    estimate: Estimate, name: str, *, order: int, at: object, level: float, seed: int = DEFAULT_SEED
) -> pd.DataFrame:
    """See `Fit.slope`."""
    if order not in (1, 2):
        raise ModelError(f"order= of a slope is 1 or 2; got {order!r}.")
    chosen = chosen_of(estimate, name)
    found = axes(estimate, chosen, at)
    axis = _number(found, name)
    key = axis.keys[0]
    values, n = product(found)
    quantiles = estimate.design.spreads[key].quantiles
    low, high = float(quantiles[0]), float(quantiles[-1])
    reach = high - low
    if isinstance(axis.space, Cycle):
        period = axis.space.period
        reach = PERIODS[period] if isinstance(period, str) else float(period)
    h = STEP * reach * (1 if order == 1 else 30)
    if not isinstance(axis.space, Cycle):
        # Within the data, so that the ends' slopes are the curve's own and not its continuation's.
        inside = np.clip(values[key], low + h, high - h)
        values = {
            **values,
            key: np.where((values[key] < low) | (values[key] > high), values[key], inside),
        }
    up = _moved(estimate, chosen, values, n, key, h)
    down = _moved(estimate, chosen, values, n, key, -h)
    if order == 1:
        matrix = _scaled(up.minus(down), 1 / (2 * h))
    else:
        middle = _moved(estimate, chosen, values, n, key, 0.0)
        matrix = _scaled(up.minus(middle).minus(middle.minus(down)), 1 / h**2)
    both = band(estimate, matrix, level, seed)
    table = pd.DataFrame({**shown(values, estimate.design.columns), **banded("slope", both)})
    rising = table["lower_whole"] > 0
    falling = table["upper_whole"] < 0
    words = ("rising", "falling") if order == 1 else ("bending up", "bending down")
    table["direction"] = np.select([rising, falling], list(words), "unclear")
    return table


def _scaled(matrix: DesignMatrix, factor: float) -> DesignMatrix:
    return replace(matrix, dense=matrix.dense * factor, wide=matrix.wide * factor)


def turning_points(
    estimate: Estimate, name: str, *, at: object, level: float, seed: int
) -> pd.DataFrame:
    """See `Fit.turning_points`."""
    check_level(level)
    chosen = chosen_of(estimate, name)
    found = axes(estimate, chosen, at)
    axis = _number(found, name)
    sorted_ = replace(axis, values=np.unique(axis.values))
    found = tuple(sorted_ if a is axis else a for a in found)
    axis = sorted_
    values, n = product(found)
    if n < 3:
        raise ModelError("Turning points need at least three places of the covariate.")
    if n != len(axis.values):
        raise ModelError("Turning points are of one curve: hold the other covariates by at=.")
    matrix = estimate.design.of_components(values, n, chosen)
    curve = matrix.times(estimate.coefficients)
    draws = curve + draws_of(estimate, matrix, seed)
    x = values[axis.keys[0]]
    cyclic = isinstance(axis.space, Cycle)
    rows = []
    for kind, sign in (("maximum", 1.0), ("minimum", -1.0)):
        best = (sign * draws).argmax(axis=1)
        inner = np.full(len(best), True) if cyclic else (best > 0) & (best < n - 1)
        place = float(x[int((sign * curve).argmax())])
        low, high = _interval(x[best], place, axis, level)
        rows.append([kind, place, low, high, float(inner.mean())])
    table = pd.DataFrame(rows, columns=["point", "at", "lower", "upper", "inside"])
    for column in ("at", "lower", "upper"):
        converted = shown({axis.keys[0]: table[column].to_numpy()}, estimate.design.columns)
        table[column] = next(iter(converted.values()))
    return table
