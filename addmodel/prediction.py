"""Predictions for new rows: row i answers row i."""

from __future__ import annotations

import warnings
from collections.abc import Iterable, Sequence
from dataclasses import replace
from typing import Literal

import numpy as np
import pandas as pd

from addmodel.columns import MISSING_LEVEL, UNSEEN_LEVEL, column_key
from addmodel.data import NewRows, read_new
from addmodel.errors import Caution, DataError, ModelError, nearest
from addmodel.estimate import Estimate
from addmodel.expression import Expression
from addmodel.formula import find
from addmodel.inference import linear, quantile
from addmodel.spaces.base import FloatArray
from addmodel.spaces.levels import Levels


def predict(
    estimate: Estimate,
    new: object,
    *,
    scale: Literal["outcome", "link"],
    interval: float | None,
    new_observation: bool,
    only: str | Sequence[str] | None,
    without: str | Sequence[str] | None,
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
    rows = new_rows(estimate, new, unseen=unseen, missing=missing)
    design = estimate.design
    values = {key: column.values for key, column in rows.columns.items()}
    columns = design.matrix(_filled(values), rows.n)
    places = np.concatenate(
        [[0] if only is None else [], *(design.places(j) for j in chosen)]
    ).astype(np.int64)
    result, error = linear(estimate, columns[:, places], places)
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
    spread = np.sqrt(error**2 + estimate.scale) if new_observation else error
    half = quantile(estimate, interval) * spread
    return pd.DataFrame(
        {
            "prediction": mean(result),
            "std_error": spread,
            "lower": mean(result - half),
            "upper": mean(result + half),
            "outside": outside & ~absent,
        },
        index=rows.index,
    )


def model_columns(estimate: Estimate, new: object) -> pd.DataFrame:
    """The model's columns at new rows, as written: columns · coefficients = linear predictor."""
    rows = new_rows(estimate, new, unseen="error", missing="error")
    design = estimate.design
    values = {key: column.values for key, column in rows.columns.items()}
    raw = np.linalg.solve(design.reporting().T, design.matrix(values, rows.n).T).T
    return pd.DataFrame(raw, index=rows.index, columns=list(design.names))


def new_rows(estimate: Estimate, new: object, *, unseen: str, missing: str) -> NewRows:
    """Read new rows against the fitted columns; unseen levels as asked for."""
    if new is None:
        raise DataError("Give the new rows to predict: a table, a mapping or a file.")
    expressions: dict[str, Expression] = {}
    for term in estimate.model.terms:
        for factor in term.factors:
            for expression in factor.arguments:
                expressions[column_key(factor, expression)] = expression
    rows = read_new(new, estimate.design.columns, expressions, missing=missing)
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
