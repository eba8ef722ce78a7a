"""Relativities: a multiplicative model as tables whose product is the prediction."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pandas as pd

from addmodel.bands import band
from addmodel.effects import banded
from addmodel.errors import ModelError
from addmodel.estimate import Estimate
from addmodel.files import replacing
from addmodel.grids import Axis, axes, product, shown
from addmodel.spaces.base import FloatArray
from addmodel.spaces.cycle import Cycle
from addmodel.spaces.levels import Levels

POINTS = 401
BANDS = 10
DIGITS = 5


def relativities(estimate: Estimate, folder: str | Path) -> list[Path]:
    """See `Fit.relativities`."""
    if type(estimate.outcome.family.link).__name__ != "Log":
        raise ModelError("Relativities are of a log link: only there do effects multiply.")
    design = estimate.design
    if any(len(c.keys) > 1 for c in design.components):
        raise ModelError(
            "Relativities are of components of one covariate each: take products and maps out of "
            "the formula, or use predict()."
        )
    target = Path(folder)
    target.mkdir(parents=True, exist_ok=True)
    base = float(estimate.coefficients[0])
    written = []
    for j, component in enumerate(design.components):
        (axis,) = axes(estimate, [j], None)
        table, reference = _table(estimate, j, axis)
        base += reference
        name = re.sub(r"\W+", "-", component.name).strip("-")
        written.append(target / f"relativities-{name}.csv")
        with replacing(written[-1]) as temporary:
            table.to_csv(temporary, index=False, float_format=f"%.{DIGITS}f")
    written.append(target / "relativities-base.csv")
    with replacing(written[-1]) as temporary:
        frame = pd.DataFrame({"base": [np.exp(base)]})
        frame.to_csv(temporary, index=False, float_format=f"%.{DIGITS + 3}g")
    return written


def _table(estimate: Estimate, j: int, axis: Axis) -> tuple[pd.DataFrame, float]:
    """A component's table, and the log of its value at the reference."""
    design = estimate.design
    key = axis.keys[0]
    cyclic = isinstance(axis.space, Cycle)
    if axis.kind == "number" and not cyclic:
        low, high = float(axis.values.min()), float(axis.values.max())
        quantiles = design.spreads[key].quantiles
        middle = float(quantiles[len(quantiles) // 2])
        points = np.unique(np.append(np.linspace(low, high, POINTS), middle))
        axis = Axis(axis.keys, axis.space, axis.kind, points)
        place = int(np.searchsorted(points, middle))
    else:
        place = axis.space.base if isinstance(axis.space, Levels) else 0  # a cycle's start
    values, n = product([axis])
    own = design.of_components(values, n, [j])
    there = design.of_components({key: np.full(n, values[key][place])}, n, [j])
    both = band(estimate, own.minus(there), 0.95)
    columns = banded("relativity", both)
    table = pd.DataFrame(
        {
            **shown(values, design.columns),
            **{k: np.exp(columns[k]) for k in ("relativity", "lower", "upper")},
        }
    )
    reference = float(there.times(estimate.coefficients)[0])
    exposure, ratio = _experience(estimate, key, axis)
    return table.assign(exposure=exposure, actual_expected=ratio), reference


def _experience(estimate: Estimate, key: str, axis: Axis) -> tuple[FloatArray, FloatArray]:
    """Exposure and actual over expected at each level; of a number, of the tenth it lies in."""
    table, eta = estimate.table, estimate.linear_predictor
    if table is None or eta is None:
        raise ModelError("A saved fit has no rows: write relativities before it is saved.")
    x, prior = table.columns[key].values, table.prior
    if axis.kind == "number":
        at = axis.values
        if isinstance(axis.space, Cycle):
            x, at = axis.space.scaled(x) % 1.0, axis.space.scaled(at) % 1.0
        edges = np.quantile(x, np.linspace(0, 1, BANDS + 1)[1:-1])
        rows, cells = np.searchsorted(edges, x), np.searchsorted(edges, at)
    else:
        codes = {value: i for i, value in enumerate(axis.values.tolist())}
        rows = np.array([codes[v] for v in x.tolist()])
        cells = np.arange(len(axis.values))
    size = int(max(rows.max(), cells.max())) + 1
    exposure = np.bincount(rows, prior * np.exp(table.offset), minlength=size)
    actual = np.bincount(rows, prior * table.outcome, minlength=size)
    expected = np.bincount(rows, prior * estimate.outcome.mean(eta), minlength=size)
    ratio = np.divide(actual, expected, out=np.full(size, np.nan), where=expected > 0)
    return np.asarray(exposure[cells], dtype=np.float64), np.asarray(ratio[cells])
