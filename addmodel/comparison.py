"""Models side by side."""

from __future__ import annotations

import numpy as np
import pandas as pd

from addmodel.errors import ModelError
from addmodel.estimate import Estimate, one_thread
from addmodel.inference import corrected_df
from addmodel.laid import Laid
from addmodel.solve.criteria import CRITERIA
from addmodel.spaces.base import FloatArray


def compare(estimates: dict[str, Estimate]) -> pd.DataFrame:
    """See `addmodel.compare`."""
    if len(estimates) < 2:
        raise ModelError("Give at least two fits to compare.")
    first = next(iter(estimates.values()))
    rows = []
    for name, estimate in estimates.items():
        if estimate.table is None or first.table is None:
            raise ModelError("Saved fits have no rows: compare fits before they are saved.")
        same = all(
            np.array_equal(getattr(estimate.table, part), getattr(first.table, part))
            for part in ("rows", "outcome", "weights", "counts", "trials")
        )
        if not same:
            raise ModelError(
                f"'{name}' is fitted to other rows or another outcome or weights than the first: "
                "fit all to the same rows, without missing values in any model's columns."
            )
        extra = float(not estimate.outcome.scale_known) + float(estimate.outcome.dispersion_free)
        # Deviances of two distributions are not of one scale.
        like = estimate.outcome.kind == first.outcome.kind
        left_out = leave_one_out(estimate) if like else np.full(2, np.nan)
        rows.append(
            {
                "effective_df": float(estimate.column_df.sum()),
                "aic": 2 * (corrected_df(estimate) + extra) - 2 * estimate.log_likelihood,
                estimate.criterion: estimate.criterion_value,
                "left_out_deviance": float(left_out.sum()),
                "left_out_std_error": float(left_out.std(ddof=1) * np.sqrt(len(left_out))),
                "deviance_reduction": 1 - estimate.deviance / estimate.null_deviance,
            }
        )
    table = pd.DataFrame(rows, index=pd.Index(list(estimates), name="model"))
    table.insert(2, "aic_beyond_best", table["aic"] - table["aic"].min())
    return table


def leave_one_out(estimate: Estimate) -> FloatArray:
    """Each row's deviance when it is left out, λ held, (n,): exact for Gaussian rows, else a step.

    η_i without row i is η_i − h_i r_i/(1 − h_i w_i) with r the slope and w the working weight of
    row i, h_i = x_i'A⁻¹x_i (Cook & Weisberg 1982, Residuals and Influence in Regression).
    """
    table, outcome = estimate.table, estimate.outcome
    assert table is not None
    assert estimate.linear_predictor is not None
    with one_thread():
        laid = Laid.on(
            estimate.design, table, outcome, CRITERIA[estimate.criterion], estimate.scale
        )
        leverage = laid.modes.rows.variances(estimate.posterior) / estimate.scale
    eta = estimate.linear_predictor
    curvature = outcome.curvature(table.outcome, eta, table.prior)
    # A row that stands for several loses one of them.
    weight, slope = curvature.observed / table.counts, curvature.slope / table.counts
    room = np.maximum(1 - leverage * weight, 1e-6)
    without = eta - leverage * slope / room
    return np.asarray(
        table.prior * outcome.deviances(table.outcome, outcome.mean(without)), dtype=np.float64
    )
