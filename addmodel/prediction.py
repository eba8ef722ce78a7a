"""Predictions for new rows: row i answers row i."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Collection, Iterable, Mapping, Sequence
from dataclasses import replace
from types import MappingProxyType
from typing import Literal

import numpy as np
import pandas as pd

from addmodel.columns import MISSING_LEVEL, UNSEEN_LEVEL, column_key
from addmodel.component import Seen
from addmodel.data import NewRows, read_new
from addmodel.errors import Caution, DataError, ModelError, nearest
from addmodel.estimate import Estimate
from addmodel.expression import Expression
from addmodel.formula import find
from addmodel.inference import DEFAULT_SEED, check_level, linear, quantile
from addmodel.spaces.base import FloatArray
from addmodel.spaces.levels import Levels

DRAWS = 4000
STEP = 1e-5


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
    groups: Literal["own", "zero", "average"],
    missing: Literal["keep", "error"],
) -> FloatArray | pd.DataFrame:
    """See `Fit.predict`."""
    _check("scale", scale, ("outcome", "link"))
    _check("groups", groups, ("own", "zero", "average"))
    _check("unseen", unseen, ("error", "base", "average"))
    if new_observation and interval is None:
        raise ModelError("new_observation=True needs interval=, such as interval=0.95.")
    chosen = _chosen(estimate, only, without)
    if new_observation and len(chosen) < len(estimate.design.components):
        raise ModelError(
            "An interval for a new observation needs the whole model: no only=/without=."
        )
    roles, known = offsets_of(estimate, per) if only is None else ({}, 0.0)
    design = estimate.design
    keys = {key for j in chosen for key in design.components[j].keys}
    rows = new_rows(estimate, new, unseen=unseen, missing=missing, roles=roles, keys=keys)
    values = rows.values
    seen = Seen(_filled(values), rows.n)
    matrix = design.matrix(seen.values, rows.n, chosen)
    dense, wide = design.masks(chosen, intercept=only is None)
    between = np.zeros(rows.n)
    for k, (owner, block) in enumerate(design.owned_blocks):
        if owner not in chosen or not block.grouped:
            continue
        left_out = groups != "own"
        if left_out and block.apart:
            wide[_part(design.layout.parts, k - len(design.blocks))] = False
        elif left_out:
            dense[design.block_places[k]] = False
        unknown = left_out | design.components[owner].unknown_groups(block, seen)
        spread = design.components[owner].group_squares(block, seen)
        between += np.where(unknown, spread * estimate.scale / estimate.smoothing[k], 0.0)
    result, error = linear(estimate, matrix.masked(dense, wide))
    error = np.sqrt(
        error**2
        + (0.0 if groups != "own" else between)
        + _between_levels(estimate, chosen, rows, seen)
    )
    strangers = int(((between > 0) & ~rows.missing).sum())
    if groups == "own" and strangers:
        _say_unknown(strangers)
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
    mean: Callable[[FloatArray], FloatArray]
    mean = estimate.outcome.mean if scale == "outcome" else _same
    if groups == "average" and scale == "outcome":
        mean = _averaged(estimate, between)
    if interval is None:
        return mean(result)
    if new_observation and groups == "average":
        error = np.sqrt(error**2 + between)
    if new_observation and not estimate.outcome.plain:
        spread, lower, upper = observation_interval(estimate, result, error, interval)
    else:
        spread = np.sqrt(error**2 + estimate.scale) if new_observation else error
        half = quantile(estimate, interval) * spread
        lower, upper = mean(result - half), mean(result + half)
        if scale == "outcome" and not estimate.outcome.plain:
            # The delta method; the interval itself is the linear predictor's, taken through.
            spread = error * np.abs(mean(result + STEP) - mean(result - STEP)) / (2 * STEP)
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


def offsets_of(estimate: Estimate, per: float | None) -> tuple[dict[str, str], float]:
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


def _part(parts: Sequence[int], from_end: int) -> slice:
    """Where a block apart, counted from the end, is among the wide columns."""
    ends = np.cumsum([0, *parts])
    k = len(parts) + from_end
    return slice(int(ends[k]), int(ends[k + 1]))


def _averaged(estimate: Estimate, variance: FloatArray) -> Callable[[FloatArray], FloatArray]:
    """The mean over groups whose linear predictors differ with that variance (n,).

    ∫ g⁻¹(η + √v z) dΦ(z) by Gauss–Hermite quadrature: with a log link, exp(v/2) times the mean of
    the group in the middle.
    """
    nodes, shares = np.polynomial.hermite_e.hermegauss(41)
    shares = shares / shares.sum()

    def mean(eta: FloatArray) -> FloatArray:
        at = eta[:, None] + np.sqrt(variance)[:, None] * nodes
        return np.asarray(estimate.outcome.mean(at.ravel()).reshape(at.shape) @ shares)

    return mean


def _say_unknown(rows: int) -> None:
    warnings.warn(
        f"{rows} {'row is of a group' if rows == 1 else 'rows are of groups'} that the fit has not "
        "seen: the middle of the groups stands in, with intervals as wide as groups differ.",
        Caution,
        stacklevel=4,
    )


def _between_levels(
    estimate: Estimate, chosen: Sequence[int], rows: NewRows, seen: Seen
) -> FloatArray:
    """Variance of a level's effect about the average, for rows whose level is not known, (n,)."""
    design = estimate.design
    total = np.zeros(rows.n)
    for key in rows.unseen:
        theirs = [
            j
            for j in chosen
            if any(isinstance(s, Levels) and key in s.keys for s in design.components[j].spaces)
        ]
        at = np.flatnonzero(rows.columns[key].values == UNSEEN_LEVEL)
        if not theirs or not len(at):
            continue
        values = {k: x[at] for k, x in seen.values.items()}
        effects = []
        for code in range(len(design.columns[key].levels)):
            there = {**values, key: np.full(len(at), code)}
            own = design.of_components(there, len(at), theirs)
            effects.append(own.times(estimate.coefficients))
        shares = design.spreads[key].shares[:, None]
        about = np.array(effects) - (shares * effects).sum(axis=0)
        total[at] += (shares * about**2).sum(axis=0)
        warnings.warn(
            f"{len(at)} rows have a level of {key} that the fit has not seen: "
            "they stand at the average of the levels, with intervals as wide as levels differ.",
            Caution,
            stacklevel=4,
        )
    return total


def model_columns(estimate: Estimate, new: object) -> pd.DataFrame:
    """The model's columns at new rows, as written: columns · coefficients = linear predictor."""
    rows = new_rows(estimate, new, unseen="error", missing="error")
    design = estimate.design
    values = rows.values
    matrix = design.matrix(values, rows.n)
    if design.levels_apart and (matrix.codes < 0).any():
        raise DataError(
            f"{int((matrix.codes < 0).sum())} rows are of groups that the fit has not seen, so "
            "they have no columns. Leave them out, or use predict()."
        )
    raw = matrix.whole()
    p = design.p
    raw[:, :p] = np.linalg.solve(design.reporting().T, raw[:, :p].T).T
    return pd.DataFrame(raw, index=rows.index, columns=list(design.names))


def new_rows(
    estimate: Estimate,
    new: object,
    *,
    unseen: str,
    missing: str,
    roles: Mapping[str, str] = MappingProxyType({}),
    keys: Collection[str] | None = None,
) -> NewRows:
    """Read new rows against the fitted columns (those of `keys`); unseen levels as asked for."""
    if new is None:
        raise DataError("Give the new rows to predict: a table, a mapping or a file.")
    expressions: dict[str, Expression] = {}
    for term in estimate.model.terms:
        for factor in term.factors:
            for expression in factor.arguments:
                expressions[column_key(factor, expression)] = expression
    columns = {k: c for k, c in estimate.design.columns.items() if keys is None or k in keys}
    rows = read_new(new, columns, expressions, roles=roles, missing=missing)
    levelled = {
        key
        for component in estimate.design.components
        for space in component.spaces
        if isinstance(space, Levels)
        for key in space.keys
    }
    unknown = [(key, found) for key, found in rows.unseen.items() if key in levelled]
    if unknown and unseen == "error":
        key, found = unknown[0]
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
