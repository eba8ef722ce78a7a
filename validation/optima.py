"""Smoothness against optima by direct dense solutions.

The reference values stand in tests/test_smoothness.py (REML, GCV) and tests/test_laplace.py
(Laplace's criterion for counts and yes/no), with where they come from. For each: the criterion's
value, its relative difference (addmodel's less the reference), and the largest difference of a
component's effective degrees of freedom, with all functions and with automatic detail. GCV has
several minima in additive models: its references are the best scores known, to be undercut if at
all, and their degrees of freedom are compared where one curve makes them unique. For REML and
Laplace's criterion more is better, for GCV less. Automatic detail has fewer functions, so that its
optimum is that of a slightly smaller model.
"""

from __future__ import annotations

import numpy as np

import addmodel as am
from tests import test_laplace as laplace
from tests import test_smoothness as smoothness
from validation.results import section

GCV_DF = {"motorcycle": [11.252838]}  # dense Reinsch algebra over a grid, less 1 for the intercept


def row(
    criterion: str,
    name: str,
    formula: str,
    data: object,
    options: dict,
    value: float,
    df: list[float] | None,
) -> list[object]:
    cells: list[object] = [criterion, name, f"{value:.10g}"]
    for written in (smoothness.every(formula), formula):
        fit = am.fit(written, data, **options)
        cells.append(f"{(fit.criterion_value - value) / abs(value):+.1e}")
        found = fit.components["effective_df"].to_numpy()
        cells.append("—" if df is None else f"{np.abs(found - df).max():.1e}")
    return cells


def main() -> None:
    table: list[list[object]] = [
        [
            "criterion",
            "case",
            "reference value",
            "all functions: value",
            "largest difference of df",
            "automatic: value",
            "largest difference of df",
        ]
    ]
    for name, (value, _, df) in smoothness.REML.items():
        table.append(row("REML", name, *smoothness.case(name), {}, value, df))
    for name, value in smoothness.GCV.items():
        options = {"criterion": "gcv"}
        formula, data = smoothness.case(name)
        table.append(row("GCV", name, formula, data, options, value, GCV_DF.get(name)))
    for name, (_, outcome, value, _, df) in laplace.CASES.items():
        formula, data, options = laplace.case(name)
        table.append(row(f"Laplace, {outcome}", name, formula, data, options, value, df))
    text = (__doc__ or "").split("\n\n", 1)[1].strip()
    section("optima", "Smoothness against reference optima", text, table)


if __name__ == "__main__":
    main()
