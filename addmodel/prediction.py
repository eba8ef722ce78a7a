"""Predictions for new rows: row i answers row i."""

from __future__ import annotations

import warnings
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from types import MappingProxyType
from typing import Literal

import numpy as np
import pandas as pd

from addmodel.columns import MISSING_LEVEL, UNSEEN_LEVEL, column_key
from addmodel.data import NewRows, read_new
from addmodel.errors import Caution, DataError, ModelError, nearest
from addmodel.estimate import Estimate
from addmodel.expression import Expression
from addmodel.formula import find
from addmodel.inference import DEFAULT_SEED, check_level, linear, quantile
from addmodel.spaces.base import FloatArray
from addmodel.spaces.levels import Levels

DRAWS = 4000


def predict(
    estimate: Estimate,
    new: object,
    *,
    scale: Literal["outcome", "link"],
    interval: float | None,
    new_observation: bool,
    only: str | Sequence[str] | None,
    without: str | Sequence[str] | None,
    per: float | None,
    unseen: Literal["error", "base", "average"],
    missing: Literal["keep", "error"],
) -> FloatArray | pd.DataFrame:
    """See `Fit.predict`."""
    _check("scale", scale, ("outcome", "link"))
    _check("unseen", unseen, ("error", "base", "average"))
    if new_observation and interval is None:
        raise ModelError("new_observation=True needs interval=, such as interval=0.95.")
    chosen = _chosen(estimate, only, without)
    if new_observation and len(chosen) < len(estimate.design.components):
        raise ModelError(
            "An interval for a new observation needs the whole model: no only=/without=."
        )
    roles, known = _offsets(estimate, per) if only is None else ({}, 0.0)
    rows = new_rows(estimate, new, unseen=unseen, missing=missing, roles=roles)
    design = estimate.design
    values = {key: column.values for key, column in rows.columns.items()}
    columns = design.matrix(_filled(values), rows.n)
    places = np.concatenate(
        [[0] if only is None else [], *(design.places(j) for j in chosen)]
    ).astype(np.int64)
    result, error = linear(estimate, columns[:, places], places)
    error = np.sqrt(error**2 + _between_levels(estimate, chosen, rows))
    result += rows.offset + known
    absent = rows.missing
    result[absent] = np.nan
    error[absent] = np.nan
    if absent.any():
        warnings.warn(
            f"{int(absent.sum())} of {rows.n} rows lack a covariate: their prediction is missing.",
            Caution,
            stacklevel=3,
        )
    outside = np.zeros(rows.n, dtype=bool)
    for j in chosen:
        outside |= design.components[j].outside(values)
    if estimate.model.outcome.text not in estimate.model.outcome.names:
        warnings.warn(
            f"These are predictions of {estimate.model.outcome.text}, as the formula has it.",
            Caution,
            stacklevel=3,
        )
    mean = estimate.outcome.mean if scale == "outcome" else _same
    if interval is None:
        return mean(result)
    if new_observation and not estimate.outcome.plain:
        spread, lower, upper = observation_interval(estimate, result, error, interval)
    else:
        spread = np.sqrt(error**2 + estimate.scale) if new_observation else error
        half = quantile(estimate, interval) * spread
        lower, upper = mean(result - half), mean(result + half)
        if scale == "outcome" and not estimate.outcome.plain:
            # The delta method; the interval itself is the linear predictor's, taken through.
            spread = error * np.abs(estimate.outcome.mean_slope(result))
    return pd.DataFrame(
        {
            "prediction": mean(result),
            "std_error": spread,
            "lower": np.minimum(lower, upper),
            "upper": np.maximum(lower, upper),
            "outside": outside & ~absent,
        },
        index=rows.index,
    )


def observation_interval(
    estimate: Estimate, eta: FloatArray, error: FloatArray, level: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Standard deviation, lower and upper limit of a new observation, each (n,).

    Quantiles of draws of the outcome about draws of its mean, with a fixed seed.
    """
    check_level(level)
    rng = np.random.default_rng(DEFAULT_SEED)
    limits = np.full((3, len(eta)), np.nan)
    for i in np.flatnonzero(np.isfinite(eta)):
        mean = estimate.outcome.mean(eta[i] + error[i] * rng.standard_normal(DRAWS))
        values = estimate.outcome.draw(mean, estimate.scale, rng)
        limits[0, i] = values.std()
        limits[1:, i] = np.quantile(values, [0.5 - level / 2, 0.5 + level / 2])
    return limits[0], limits[1], limits[2]


def _offsets(estimate: Estimate, per: float | None) -> tuple[dict[str, str], float]:
    """Expressions to be found in the new rows for the offset, and a constant beside them."""
    given = {k: v for k, v in estimate.arguments.items() if k in ("offset", "exposure")}
    known = 0.0
    if per is not None:
        if "exposure" not in given:
            raise ModelError("per= has a meaning only for a fit with exposure=.")
        if isinstance(per, bool) or not isinstance(per, int | float) or not 0 < per < np.inf:
            raise ModelError(f"per= is a positive exposure, such as 1; got {per!r}.")
        known = float(np.log(per))
        del given["exposure"]
    if given.get("exposure", "").startswith("<"):
        raise ModelError(
            "The fit's exposure was given by values, so new rows have none: write per=1 for "
            "predictions per unit of exposure."
        )
    if given.get("offset", "").startswith("<"):
        warnings.warn(
            "The fit's offset was given by values: predictions are at offset 0.",
            Caution,
            stacklevel=4,
        )
        del given["offset"]
    return given, known


def _between_levels(estimate: Estimate, chosen: Sequence[int], rows: NewRows) -> FloatArray:
    """Variance of a level's effect about the average, for rows whose level is not known, (n,)."""
    total = np.zeros(rows.n)
    for j in chosen:
        (space,) = estimate.design.components[j].spaces
        if not isinstance(space, Levels) or space.key not in rows.unseen:
            continue
        codes = np.arange(len(space.labels))
        own = estimate.design.component_matrix(j, {space.key: codes})
        effects = own @ estimate.coefficients[estimate.design.places(j)]
        between = float(estimate.design.spreads[space.key].shares @ effects**2)
        unknown = rows.columns[space.key].values == UNSEEN_LEVEL
        total[unknown] += between
        if unknown.any():
            warnings.warn(
                f"{int(unknown.sum())} rows have a level of {space.key} that the fit has not seen: "
                "they stand at the average of the levels, with intervals as wide as levels differ.",
                Caution,
                stacklevel=4,
            )
    return total


def model_columns(estimate: Estimate, new: object) -> pd.DataFrame:
    """The model's columns at new rows, as written: columns · coefficients = linear predictor."""
    rows = new_rows(estimate, new, unseen="error", missing="error")
    design = estimate.design
    values = {key: column.values for key, column in rows.columns.items()}
    raw = np.linalg.solve(design.reporting().T, design.matrix(values, rows.n).T).T
    return pd.DataFrame(raw, index=rows.index, columns=list(design.names))


def new_rows(
    estimate: Estimate,
    new: object,
    *,
    unseen: str,
    missing: str,
    roles: Mapping[str, str] = MappingProxyType({}),
) -> NewRows:
    """Read new rows against the fitted columns; unseen levels as asked for."""
    if new is None:
        raise DataError("Give the new rows to predict: a table, a mapping or a file.")
    expressions: dict[str, Expression] = {}
    for term in estimate.model.terms:
        for factor in term.factors:
            for expression in factor.arguments:
                expressions[column_key(factor, expression)] = expression
    rows = read_new(new, estimate.design.columns, expressions, roles=roles, missing=missing)
    if rows.unseen and unseen == "error":
        key, found = next(iter(rows.unseen.items()))
        first = found[0]
        raise DataError(
            f"{key} has the level '{first.label}' (row {int(first.rows[0])}, counted from 0), "
            "which the fit has not seen. "
            f"{nearest(first.label, estimate.design.columns[key].levels)} "
            "Or write unseen='base' or unseen='average'."
        )
    if unseen == "base":
        columns = dict(rows.columns)
        for space in (s for c in estimate.design.components for s in c.spaces):
            if isinstance(space, Levels) and space.key in rows.unseen:
                codes = columns[space.key].values
                as_base = np.where(codes == UNSEEN_LEVEL, space.base, codes)
                columns[space.key] = replace(columns[space.key], values=as_base)
        rows = replace(rows, columns=columns)
    return rows


def components_named(estimate: Estimate, names: str | Sequence[str] | None) -> list[int]:
    """Positions of the components of those names."""
    if names is None:
        return []
    known = [c.name for c in estimate.design.components]
    wanted = [names] if isinstance(names, str) or not isinstance(names, Iterable) else list(names)
    for name in wanted:
        if not isinstance(name, str):
            raise ModelError(f"Components are named by text, such as 'curve(x)'; got {name!r}.")
    return [known.index(find(name, known)) for name in wanted]


def _chosen(
    estimate: Estimate, only: str | Sequence[str] | None, without: str | Sequence[str] | None
) -> list[int]:
    if only is not None and without is not None:
        raise ModelError("Give only= or without=, not both.")
    if only is not None:
        return components_named(estimate, only)
    left_out = components_named(estimate, without)
    return [j for j in range(len(estimate.design.components)) if j not in left_out]


def _filled(values: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    """Any number in place of a missing one: those rows are set to missing afterwards."""
    return {
        key: np.where(np.isnan(x), 0.0, x)
        if x.dtype.kind == "f"
        else np.where(x == MISSING_LEVEL, UNSEEN_LEVEL, x)
        for key, x in values.items()
    }


def _same(linear_predictor: FloatArray) -> FloatArray:
    return linear_predictor


def _check(option: str, value: object, allowed: tuple[str, ...]) -> None:
    if value not in allowed:
        listed = ", ".join(f"'{a}'" for a in allowed)
        raise ModelError(f"{option}={value!r} is not known; it is one of {listed}.")
