"""Uncertainty: linear functions of the coefficients with standard errors, tables, draws.

Bands are Bayesian posterior intervals, β ~ N(β̂, φA⁻¹) (Wahba 1983, J. R. Stat. Soc. B 45;
Silverman 1985, J. R. Stat. Soc. B 47), which cover across the function (Nychka 1988, J. Am. Stat.
Assoc. 83), widened by the uncertainty of the smoothing parameters.
"""

from __future__ import annotations

from numbers import Integral, Real

import numpy as np
import pandas as pd
import scipy.linalg
import scipy.stats

from addmodel.errors import ModelError
from addmodel.estimate import Estimate
from addmodel.matrix import DesignMatrix
from addmodel.spaces.base import FloatArray

DEFAULT_SEED = 20_260_101
MOST_WRITTEN_OUT = 3_000
"""Coefficients up to which a covariance matrix may be written out."""


def quantile(estimate: Estimate, level: float) -> float:
    """Half-width of an interval in standard errors.

    The normal's; where the scale is estimated, Student's t on n − τ degrees of freedom.
    """
    check_level(level)
    left = freedom(estimate)
    if np.isinf(left):
        return float(scipy.stats.norm.ppf(0.5 + level / 2))
    return float(scipy.stats.t.ppf(0.5 + level / 2, left))


def freedom(estimate: Estimate) -> float:
    """Degrees of freedom of the scale: n − τ, or infinite where the scale is known."""
    if estimate.outcome.scale_known:
        return float("inf")
    return max(estimate.n - float(estimate.column_df.sum()), 1.0)


def uncertain(estimate: Estimate) -> FloatArray:
    """The root (P, k) of what uncertain smoothing parameters add to the posterior covariance."""
    if estimate.beyond is None:
        return estimate.smoothing_spread
    return np.concatenate([estimate.smoothing_spread, estimate.beyond], axis=1)


def check_level(level: float) -> None:
    """A confidence level is a number between 0 and 1."""
    if isinstance(level, bool) or not isinstance(level, Real) or not 0 < level < 1:
        raise ModelError(f"A level is a number between 0 and 1, such as 0.95; got {level!r}.")


def linear(estimate: Estimate, matrix: DesignMatrix) -> tuple[FloatArray, FloatArray]:
    """Value and standard error of columns · coefficients, each (n,)."""
    more = (matrix.against(uncertain(estimate)) ** 2).sum(axis=1)
    variance = estimate.posterior.variance(matrix) + more
    return matrix.times(estimate.coefficients), np.sqrt(np.maximum(variance, 0.0))


def corrected_df(estimate: Estimate) -> float:
    """τ + tr((V' + V'')X'WX)/φ: effective degrees of freedom for an AIC that counts the smoothing
    parameters' uncertainty (Wood, Pya & Säfken 2016, J. Am. Stat. Assoc. 111).

    V' = J V_ρ J'. V'' = φ Σ_kl (V_ρ)_kl ∂S/∂ρ_k ∂S/∂ρ_l for a root S of A⁻¹ = SS'. The paper takes
    a Cholesky factor, whose V'' depends on the order of the terms; here it is the symmetric root,
    A⁻¹ = S²: from ∂A⁻¹/∂ρ_k = −λ_k A⁻¹E_kA⁻¹, with E_k the identity on block k, and with
    A⁻¹ = Q diag(s²) Q', Q'(∂S/∂ρ_k)Q has the elements −λ_k s_i² (Q'E_kQ)_ij s_j² / (s_i + s_j). And
    X'WX = A − Λ. With more than MOST_WRITTEN_OUT coefficients (many groups) V'' is left out.
    """
    total = float(estimate.column_df.sum()) + estimate.spread_df
    if len(estimate.coefficients) > MOST_WRITTEN_OUT or not estimate.smoothing_root.size:
        return total
    covariance = estimate.posterior.whole()
    used = np.flatnonzero(np.diag(covariance) > 0)
    values, q = scipy.linalg.eigh(covariance[np.ix_(used, used)] / estimate.scale)
    s = np.sqrt(np.maximum(values, 1e-15 * values[-1]))
    ridge = np.zeros(len(covariance))
    owner = np.full(len(ridge), -1)
    for k, place in enumerate(estimate.design.block_places):
        ridge[place] = estimate.smoothing[k] if np.isfinite(estimate.smoothing[k]) else 0.0
        owner[place] = k
    ridge, owner = ridge[used], owner[used]
    penalty = q.T @ (ridge[:, None] * q)
    for column in estimate.smoothing_root.T:
        push = ridge * np.where(owner >= 0, column[owner], 0.0)
        moved = -(np.outer(s, s) ** 2) * (q.T @ (push[:, None] * q)) / np.add.outer(s, s)
        total += float(((moved / s) ** 2).sum() - np.sum(moved * (moved @ penalty)))
    return total


def coefficients_table(estimate: Estimate, level: float = 0.95) -> pd.DataFrame:
    """Unpenalised coefficients as reported: estimate, std_error, lower, upper, p.

    The p of a curve's straight part tests that part alone, not the curve.
    """
    design = estimate.design
    p = design.p
    change = design.reporting()
    value = change @ estimate.coefficients[:p]
    spread = uncertain(estimate)[:p]
    covariance = change @ (estimate.posterior.dense[:p, :p] + spread @ spread.T) @ change.T
    error = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    half = quantile(estimate, level) * error
    left = freedom(estimate)
    null = scipy.stats.norm() if np.isinf(left) else scipy.stats.t(left)
    with np.errstate(divide="ignore", invalid="ignore"):
        p_value = 2 * null.sf(np.abs(value / error))
    return pd.DataFrame(
        {
            "estimate": value,
            "std_error": error,
            "lower": value - half,
            "upper": value + half,
            "p": p_value,
        },
        index=pd.Index(design.names[:p], name="coefficient"),
    )


COMPONENT_COLUMNS = ["effective_df", "p_none", "p_straight", "share", "overlap", "smoothing"]


def components_table(estimate: Estimate) -> pd.DataFrame:
    """One row a component: effective_df, p_none, p_straight, share, overlap, smoothing.

    `share` is cov(f_j, η)/var(η) over the data in the prior weights, η without offset and intercept
    (Pratt 1987; Gu 1992, J. Am. Stat. Assoc. 87): the shares sum to 1, and one can be negative.
    The others are of `significance`; NaN where they were not asked for.
    """
    design = estimate.design
    rows = []
    for j in range(design.count):
        own = [float(estimate.smoothing[k]) for k in design.blocks_of(j)]
        none, straight, overlap = estimate.answers[j] if estimate.answers else (np.nan,) * 3
        smoothing = own[0] if len(own) == 1 else np.nan
        share = float(estimate.shares[j])
        rows.append([estimate.component_df(j), none, straight, share, overlap, smoothing])
    names = pd.Index([c.name for c in design.components], name="component")
    return pd.DataFrame(rows, index=names, columns=COMPONENT_COLUMNS, dtype=np.float64)


def p_text(p: float) -> str:
    """A p value as it is printed; nothing where there is none."""
    if np.isnan(p):
        return ""
    return "< 0.001" if p < 0.001 else f"{p:.3f}"


def posterior_draws(estimate: Estimate, count: int, seed: int) -> FloatArray:
    """Draws of all coefficients as reported, smoothing's uncertainty in them, (count, P)."""
    draws = coefficient_draws(estimate, count, seed)
    p = estimate.design.p
    draws[:, :p] = draws[:, :p] @ estimate.design.reporting().T
    return draws


def coefficient_draws(estimate: Estimate, count: int, seed: int) -> FloatArray:
    """The same in the solver's coordinates."""
    check_count(count)
    check_seed(seed)
    rng = np.random.default_rng(int(seed))
    draws = estimate.coefficients + estimate.posterior.draws(int(count), rng)
    spread = uncertain(estimate)
    return np.asarray(draws + rng.standard_normal((int(count), spread.shape[1])) @ spread.T)


def check_count(count: object) -> None:
    """A number of draws."""
    if isinstance(count, bool) or not isinstance(count, Integral) or count < 1:
        raise ModelError(f"The number of draws is a whole number of at least 1; got {count!r}.")


def check_seed(seed: object) -> None:
    """A seed."""
    if isinstance(seed, bool) or not isinstance(seed, Integral) or seed < 0:
        raise ModelError(f"A seed is a whole number of at least 0; got {seed!r}.")
