"""Draws of predictions, and standardised averages with their differences and ratios."""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from typing import Any, Literal

import numpy as np
import pandas as pd

from addmodel.component import Seen
from addmodel.errors import DataError, ModelError
from addmodel.estimate import Estimate
from addmodel.frames import open_source
from addmodel.inference import check_level, coefficient_draws
from addmodel.prediction import new_rows, offsets_of
from addmodel.spaces.base import FloatArray

DRAWS = 2_000
FEWER = 300
MANY = 5_000
"""With more coefficients than this (many groups) fewer draws are taken."""


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
    draws = coefficient_draws(estimate, count, seed)
    eta = linear_draws(estimate, new, draws, per)
    mean = np.array([estimate.outcome.mean(row) for row in eta])
    if what == "mean":
        return mean
    rng = np.random.default_rng(int(seed) + 7)
    return np.array([estimate.outcome.draw(row, estimate.scale, rng) for row in mean])


def linear_draws(
    estimate: Estimate, new: object, draws: FloatArray, per: float | None
) -> FloatArray:
    """The linear predictor at new rows for draws of the coefficients, offset included, (count, n).

    Groups that the fit has not seen are refused: they would need draws of their own.
    """
    roles, known = offsets_of(estimate, per)
    rows = new_rows(estimate, new, unseen="error", missing="error", roles=roles)
    design = estimate.design
    values = rows.values
    seen = Seen(values, rows.n)
    for owner, block in design.owned_blocks:
        strange = block.grouped and design.components[owner].unknown_groups(block, seen).any()
        if strange:
            raise DataError(
                f"{design.components[owner].name}: some rows are of groups that the fit has not "
                "seen. Use predict(), which widens their intervals, or leave them out."
            )
    matrix = design.matrix(values, rows.n)
    return np.asarray(matrix.against(draws.T).T + rows.offset + known, dtype=np.float64)


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
    if isinstance(weights, str):
        if weights not in base.columns:
            raise ModelError(f"weights= names '{weights}', which the rows do not have.")
        weights = base[weights].to_numpy()
    try:
        mass = np.ones(len(base)) if weights is None else np.asarray(weights, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise ModelError(f"weights= are numbers, one for each row; got {weights!r}.") from error
    check_level(level)
    if mass.shape != (len(base),) or not (mass >= 0).all() or not mass.sum() > 0:
        raise ModelError(f"weights= are {len(base)} numbers of at least 0, one for each row.")
    listed: dict[str, list[Any]] = {}
    for key, value in settings.items():
        several: Any = (
            value
            if isinstance(value, list | tuple | np.ndarray | pd.Series | pd.Index)
            else [value]
        )
        listed[str(key)] = list(several)
    for key in listed:
        if key not in base.columns:
            raise ModelError(f"settings= names '{key}', which the rows do not have.")
    combinations = list(itertools.product(*listed.values()))
    many = len(estimate.coefficients) > MANY
    drawn_ones = coefficient_draws(estimate, FEWER if many else DRAWS, seed)
    coefficients = np.vstack([estimate.coefficients, drawn_ones])  # the estimate itself comes first
    averages = []
    for combination in combinations:
        changed = base.assign(**dict(zip(listed, combination, strict=True)))
        eta = linear_draws(estimate, changed, coefficients, per)
        drawn = [estimate.outcome.mean(row) @ mass for row in eta]
        averages.append(np.array(drawn) / mass.sum())
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
