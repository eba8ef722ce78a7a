"""Draws of predictions, and standardised averages with their differences and ratios."""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from typing import Any, Literal

import numpy as np
import pandas as pd

from addmodel.bands import draws_of
from addmodel.errors import ModelError
from addmodel.estimate import Estimate
from addmodel.frames import open_source
from addmodel.prediction import mean_at, new_rows, offsets_of
from addmodel.spaces.base import FloatArray

DRAWS = 2_000


def simulate(
    estimate: Estimate,
    new: object,
    count: int,
    *,
    seed: int,
    what: Literal["mean", "outcome"],
    per: float | None,
) -> FloatArray:
    """See `Fit.simulate`."""
    if what not in ("mean", "outcome"):
        raise ModelError(f"what={what!r} is not known; it is 'mean' or 'outcome'.")
    if isinstance(count, bool) or not isinstance(count, int) or count < 1:
        raise ModelError(f"The number of draws is a whole number of at least 1; got {count!r}.")
    eta = linear_draws(estimate, new, seed, per, count)
    rng = np.random.default_rng(seed + 7)
    mean = np.array([estimate.outcome.mean(row) for row in eta])
    if what == "mean":
        return mean
    return np.array([estimate.outcome.draw(row, estimate.scale, rng) for row in mean])


def linear_draws(
    estimate: Estimate, new: object, seed: int, per: float | None, count: int
) -> FloatArray:
    """Draws of the linear predictor at new rows, offset included, (count, n)."""
    roles, known = offsets_of(estimate, per)
    rows = new_rows(estimate, new, unseen="error", missing="error", roles=roles)
    design = estimate.design
    values = {key: column.values for key, column in rows.columns.items()}
    matrix = design.matrix(values, rows.n)
    middle = matrix.times(estimate.coefficients) + rows.offset + known
    return middle + draws_of(estimate, matrix, seed, count)


def average(
    estimate: Estimate,
    settings: Mapping[str, object],
    over: object,
    *,
    weights: object,
    level: float,
    seed: int,
    per: float | None,
) -> pd.DataFrame:
    """See `Fit.average`."""
    if not isinstance(settings, Mapping) or not settings:
        raise ModelError("settings= is a mapping such as {'arm': ['a', 'b']}.")
    source = open_source(over)
    columns, _ = source.load([str(name) for name in source.names])
    base = pd.DataFrame(dict(columns))
    mass = np.ones(len(base)) if weights is None else np.asarray(weights, dtype=np.float64)
    if mass.shape != (len(base),) or not (mass >= 0).all() or not mass.sum() > 0:
        raise ModelError(f"weights= are {len(base)} numbers of at least 0, one for each row.")
    listed: dict[str, list[Any]] = {}
    for key, value in settings.items():
        several: Any = value if isinstance(value, list | tuple | np.ndarray) else [value]
        listed[str(key)] = list(several)
    for key in listed:
        if key not in base.columns:
            raise ModelError(f"settings= names '{key}', which the rows do not have.")
    combinations = list(itertools.product(*listed.values()))
    averages = []
    for combination in combinations:
        changed = base.assign(**dict(zip(listed, combination, strict=True)))
        eta = linear_draws(estimate, changed, seed, per, DRAWS)
        drawn = [estimate.outcome.mean(row) @ mass for row in eta]
        centre = mean_at(estimate, changed, per) @ mass
        averages.append(np.array([centre, *drawn]) / mass.sum())
    rows = []
    for i, (combination, draws) in enumerate(zip(combinations, averages, strict=True)):
        row: dict[str, object] = dict(zip(listed, combination, strict=True))
        for name, values in (
            ("average", draws),
            ("difference", draws - averages[0]),
            ("ratio", draws / averages[0] if averages[0][0] > 0 else np.full(len(draws), np.nan)),
        ):
            low, high = np.quantile(values[1:], [0.5 - level / 2, 0.5 + level / 2])
            first = i == 0 and name != "average"
            row |= {
                name: values[0],
                f"{name}_lower": values[0] if first else low,
                f"{name}_upper": values[0] if first else high,
            }
        rows.append(row)
    return pd.DataFrame(rows)
