"""From checked data to what was estimated: design, rows, smoothness, detail, tied together.

`estimate` is the loop that the user never sees: lay the design, sum the rows, choose the smoothing
parameters, ask whether the detail was enough, and go again with more where it was not.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from contextlib import AbstractContextManager
from dataclasses import dataclass, replace
from functools import cache
from typing import Any

import numpy as np
import numpy.typing as npt
from threadpoolctl import ThreadpoolController

from addmodel import cautions
from addmodel.assembly import ALL_PAIRS, assemble, resized
from addmodel.cells import rounded
from addmodel.component import Block, Component, Seen, cross, gammas_of, most_functions
from addmodel.data import Table
from addmodel.design import Design
from addmodel.errors import ModelError
from addmodel.formula import Model
from addmodel.laid import Laid, null_predictor, quasi_scale, with_best_dispersion
from addmodel.outcomes import Outcome
from addmodel.outcomes.likelihood import Likelihood
from addmodel.posterior import Posterior
from addmodel.solve.criteria import Criterion
from addmodel.solve.detail import CEILING, GROWTH, enough, left_over, left_over_functions
from addmodel.solve.quadratic import Solution
from addmodel.solve.smoothness import Smoothness
from addmodel.solve.uncertainty import smoothing_spread
from addmodel.spaces.base import FloatArray, Penalised
from addmodel.spaces.spline import Spline

ROUNDS = 16
MOST_ROWS = 20_000
"""So many rows are enough to look for what is left over of a surface."""
WIDEST = 400
"""So many columns at most are looked at for it."""
Progress = Callable[[str], None]


@dataclass(frozen=True)
class Reading:
    """What became of the rows as read."""

    read: int
    missing: int
    weightless: int
    used: int
    event: str | None
    """The level counted, for a yes/no outcome."""


@dataclass(frozen=True)
class Estimate:
    """What was estimated, and nothing derived.

    Coefficients and their posterior covariance are in the solver's coordinates (see
    `Design.reporting`).
    """

    model: Model
    design: Design
    outcome: Outcome
    criterion: str
    coefficients: FloatArray  # (P,)
    posterior: Posterior  # φA⁻¹ (Wahba 1983, J. R. Stat. Soc. B 45)
    column_df: FloatArray  # (P,) diag(A⁻¹X'WX) with Fisher weights
    smoothing_spread: FloatArray  # (P, k) times its transpose: what uncertain smoothing adds to it
    spread_df: float
    """What that adds to the effective degrees of freedom."""
    beyond: FloatArray | None  # (P, r) the same for blocks at infinity; None: not worked out yet
    answers: tuple[tuple[float, float, float], ...] | None
    """For each component p_none, p_straight and overlap; None: not asked yet."""
    smoothing_root: FloatArray  # (blocks, k) times its transpose: the covariance of log λ
    shares: FloatArray  # (components,) cov(f_j, η)/var(η) in the prior weights
    smoothing: FloatArray  # (blocks,) λ, may be infinite
    scale: float
    dispersion: float
    """Pearson's X²/(n − τ), whatever the scale is taken to be."""
    deviance: float
    null_deviance: float
    log_likelihood: float
    criterion_value: float
    n: float
    """Rows of positive weight, counts counted."""
    reading: Reading
    steps: int
    settled: bool
    gradient: FloatArray  # (blocks,)
    detail_confirmed: tuple[bool, ...]
    """For each component: whether its detail was seen to be enough."""
    cautions: tuple[str, ...]
    arguments: dict[str, str]
    """How weights, counts and offset were given, in words: for the summary's recipe."""
    cells: dict[str, int]
    """Of many rows, the number of cells that each covariate is rounded to."""
    rounding: dict[str, float]
    """The largest rounding of each, as a part of its standard deviation."""
    table: Table | None
    linear_predictor: FloatArray | None  # (n,)

    def component_df(self, component: int) -> float:
        """Effective degrees of freedom of a component."""
        return float(self.column_df[self.design.places(component)].sum())

    def at_infinity(self, component: int) -> bool:
        """Whether all of a component's penalised part has vanished."""
        own = [j for j, owner in enumerate(self.design.block_owners) if owner == component]
        return bool(own) and bool(np.isinf(self.smoothing[own]).all())


def estimate(
    model: Model,
    table: Table,
    outcome: Outcome,
    criterion: Criterion,
    arguments: dict[str, str],
    progress: Progress,
    exact: bool = False,
) -> Estimate:
    """Fit the model.

    Parameters
    ----------
    model : Model
        The parsed formula.
    table : Table
        The checked data.
    outcome : Outcome
        What is assumed of the outcome.
    criterion : Criterion
        How smoothness is chosen.
    arguments : dict
        How weights, counts and offset were given, in words.
    progress : callable
        Told in words what is going on.
    exact : bool
        Whether numbers of many rows are left as they are (see `cells`).

    Raises
    ------
    FormulaError, ModelError
        Where the model has no meaning on these data.
    """
    _check_outcome(table, outcome)
    outcome.check(table)
    near = rounded(table, exact)
    with one_thread():
        found = _search(model, near.table, outcome, criterion, progress)
        estimated = _estimate(model, near.table, criterion, arguments, found)
    return replace(estimated, cells=dict(near.cells), rounding=dict(near.largest))


@cache
def _threads() -> ThreadpoolController:
    return ThreadpoolController()


def one_thread() -> AbstractContextManager[object]:
    """BLAS on one thread: at a few hundred columns two are slower, most of all when busy."""
    return _threads().limit(limits=1, user_api="blas")  # type: ignore[no-any-return]


@dataclass(frozen=True)
class Found:
    """Where the search ended."""

    laid: Laid
    outcome: Outcome
    smoothness: Smoothness
    coefficients: FloatArray  # (P,)
    linear_predictor: FloatArray  # (n,)
    confirmed: tuple[bool, ...]
    steps: int


def _search(
    model: Model, table: Table, outcome: Outcome, criterion: Criterion, progress: Progress
) -> Found:
    """Lay, choose smoothness, and go again while scale or detail are not what they should be."""
    weights = table.prior
    progress("laying the components on the data")
    design = assemble(model, table)
    _check_groups(design, table, outcome)
    scale, steps = 1.0, 0
    for _ in range(ROUNDS):
        progress(f"choosing smoothness ({sum(design.block_sizes)} functions)")
        laid = Laid.on(design, table, outcome, criterion, scale)
        smoothness = laid.smoothness(criterion)
        if outcome.dispersion_free:
            outcome, smoothness = with_best_dispersion(laid, smoothness, criterion)
        steps += smoothness.steps
        beta = smoothness.point.coefficients()
        eta = laid.modes.rows.linear_predictor(beta)
        curvature = outcome.curvature(table.outcome, eta, weights)
        working = np.maximum(curvature.fisher, 1e-300)
        residuals = curvature.slope / working
        # An outcome that varies more than it is assumed to must not look like waves left over.
        noise = max(
            criterion.scale(smoothness.point),
            quasi_scale(outcome, table, eta, smoothness.point),
        )
        sizes, confirmed = _sizes(design, smoothness, table, residuals, working, noise)
        found = Found(laid, outcome, smoothness, beta, eta, tuple(confirmed), steps)
        if outcome.quasi:
            before, scale = scale, quasi_scale(outcome, table, eta, smoothness.point)
            if abs(np.log(scale / before)) > 1e-4:
                continue
        before_sizes = [len(b.functions) for b in design.blocks]
        if sizes == before_sizes:
            break
        design = resized(design, sizes, model, table)
        if [len(b.functions) for b in design.blocks] == before_sizes:
            break
    return found


def _estimate(
    model: Model, table: Table, criterion: Criterion, arguments: dict[str, str], found: Found
) -> Estimate:
    """What was found, with what the rows alone can tell of it."""
    laid, outcome, point = found.laid, found.outcome, found.smoothness.point
    design, rows = laid.design, laid.modes.rows
    beta, eta, weights = found.coefficients, found.linear_predictor, table.prior
    scale, likelihood = criterion.scale(point), point.problem.likelihood
    deviance = point.deviance if outcome.plain else rows.deviance(beta, outcome)
    fisher = laid.modes.quadratic(beta, fisher=True).at(point.smoothing)
    pearson = outcome.pearson(table.outcome, outcome.mean(eta), weights)
    dispersion = pearson / max(likelihood.n - fisher.effective_df, 1.0)
    spread, root = smoothing_spread(point, criterion, laid.free_blocks.tolist())
    return Estimate(
        model=model,
        design=design,
        outcome=outcome,
        criterion=criterion.name,
        coefficients=beta,
        posterior=point.posterior().scaled(scale),
        column_df=np.concatenate(
            [np.ones(design.p), *(1 - fisher.shrinkage(k) for k in range(len(design.blocks)))]
        ),
        smoothing_spread=spread,
        spread_df=_spread_df(fisher, spread, scale),
        beyond=None,
        answers=None,
        smoothing_root=root,
        shares=_shares(laid, beta, weights),
        smoothing=point.smoothing,
        scale=scale,
        dispersion=dispersion,
        deviance=deviance,
        null_deviance=_null_deviance(table, outcome),
        log_likelihood=_log_likelihood(likelihood, deviance, scale),
        criterion_value=criterion.reported(point),
        n=likelihood.n,
        reading=Reading(
            table.n_read, table.n_missing, table.n_weightless, len(table.rows), table.event
        ),
        steps=found.steps,
        settled=found.smoothness.settled,
        gradient=found.smoothness.gradient,
        detail_confirmed=found.confirmed,
        cautions=(
            *table.cautions,
            *design.notes,
            *cautions.of_smoothness(design, found.smoothness),
            *cautions.of_freedom(likelihood.n, fisher.effective_df, "counts" in arguments),
            *cautions.of_outcome(design, table, outcome, eta, dispersion),
        ),
        arguments=arguments,
        cells={},
        rounding={},
        table=table,
        linear_predictor=eta,
    )


def _spread_df(fisher: Solution, spread: FloatArray, scale: float) -> float:
    """tr(V'X'WX)/φ, V' = spread · spread'."""
    sums = fisher.problem.sums
    return sum(float(s @ sums.gram.times(s, sums.layout)) for s in spread.T) / scale


def _sizes(
    design: Design,
    smoothness: Smoothness,
    table: Table,
    residuals: FloatArray,
    weights: FloatArray,
    scale: float,
) -> tuple[list[int], list[bool]]:
    """The functions each block should have, and for each component whether its detail is enough."""
    values = table.values
    sizes = []
    confirmed = [True] * design.count
    for k, (owner, block) in enumerate(design.owned_blocks):
        component, size = design.components[owner], len(block.functions)
        if not block.bends:
            sizes.append(size)
            continue
        ceiling = ALL_PAIRS if block.everything else CEILING
        possible = most_functions(block, component.spaces)
        most = size if block.everything else min(possible, max(ceiling, size))
        new: int | None = None
        if size < most and scale > 0:
            shrunk = smoothness.point.shrinkage(k)
            levels = design.levels_apart if block.apart else 1
            by_function = shrunk.reshape(levels, size, block.width).min(axis=(0, 2))
            growth = min(_growth(component, factor) for factor in block.bends)
            new = enough(by_function, growth)
            if new is None:
                new = _left_over(component, block, values, residuals, weights, scale)
        sizes.append(size if new is None else min(most, new))
        unbound = all(_uncapped(component, factor) for factor in block.bends)
        confirmed[owner] &= (size >= possible and unbound) or (size < most and new is None)
    return sizes, confirmed


def _growth(component: Component, factor: int) -> float:
    space = component.spaces[factor]
    return space.growth if isinstance(space, Penalised) else 4.0


def _uncapped(component: Component, factor: int) -> bool:
    """Whether nothing but the distinct points bounds it: no `detail=`, no lack of knots."""
    space = component.spaces[factor]
    return not isinstance(space, Penalised) or (
        space.most == space.distinct - 1 - len(space.unpenalised_names)
    )


def _left_over(
    component: Component,
    block: Block,
    values: Mapping[str, npt.NDArray[Any]],
    residuals: FloatArray,
    weights: FloatArray,
    scale: float,
) -> int | None:
    """A larger number of functions, where the residuals hold what those left out could take."""
    size = len(block.functions)
    space = component.single
    if isinstance(space, Spline):
        return left_over(space, size, values[space.key], residuals, weights, scale)
    if block.apart:
        return None
    more = cross(gammas_of(block, component.spaces), min(int(GROWTH**2 * size) + 1, 2 * CEILING))
    room = max(WIDEST // block.width, 1)
    more = more[size : size + room]
    if not len(more):
        return None
    some = slice(None, None, -(-len(residuals) // MOST_ROWS))
    seen = Seen({key: x[some] for key, x in values.items()}, len(residuals[some]))
    kept = component.columns(block, seen)
    omitted = replace(block, functions=more, means=np.zeros(1))
    hit = left_over_functions(
        kept, component.columns(omitted, seen), residuals[some], weights[some], scale, 2
    )
    return int(np.ceil(GROWTH * size)) if hit else None


def _check_outcome(table: Table, outcome: Outcome) -> None:
    """Something must be there to explain."""
    plain = np.ptp(table.outcome - table.offset) == 0 and outcome.plain
    if plain or (np.ptp(table.outcome) == 0 and np.ptp(table.offset) == 0):
        raise ModelError(
            f"{table.outcome_name} has the same value in all rows used: nothing is left to explain."
        )
    if outcome.kind in ("Poisson", "NegativeBinomial", "Tweedie") and not table.outcome.any():
        raise ModelError(f"{table.outcome_name} is zero in all rows used: there are no events.")


def _check_groups(design: Design, table: Table, outcome: Outcome) -> None:
    """Groups of one row each cannot be told from the noise, unless its size is known."""
    values = table.values
    for owner, block in design.owned_blocks:
        if not block.grouped or outcome.scale_known or len(block.views) > 1:
            continue
        component = design.components[owner]
        space = component.spaces[block.views[0].factor]
        rows = np.bincount(component.group_codes(space, values), table.counts)
        if rows.max() <= 1:
            raise ModelError(
                f"The groups of {component.name} have one row each, so what is theirs cannot be "
                "told from the noise. Leave the term out."
            )


def _null_deviance(table: Table, outcome: Outcome) -> float:
    """Deviance of the model with the offset and one constant."""
    mean = outcome.mean(table.offset + null_predictor(table, outcome))
    return outcome.deviance(table.outcome, mean, table.prior)


def _log_likelihood(likelihood: Likelihood, deviance: float, scale: float) -> float:
    """ℓ at the fitted mean; for a Gaussian outcome at its own variance, deviance/n."""
    if likelihood.outcome.kind == "Gaussian":
        scale = deviance / likelihood.n
    return likelihood.log_likelihood(deviance, scale) if scale > 0 else np.inf


def _shares(laid: Laid, beta: FloatArray, weights: FloatArray) -> FloatArray:
    """cov(f_j, η)/var(η) over the rows, η without offset and intercept (Pratt 1987; Gu 1992)."""
    design, rows = laid.design, laid.modes.rows
    offset = rows.linear_predictor(np.zeros_like(beta))
    parts = np.zeros((design.count, len(weights)))
    for j in range(design.count):
        alone = np.zeros_like(beta)
        alone[design.places(j)] = beta[design.places(j)]
        parts[j] = rows.linear_predictor(alone) - offset
    parts = parts - np.average(parts, axis=1, weights=weights)[:, None]
    whole = parts.sum(axis=0)
    total = float(weights @ whole**2)
    if design.count == 0 or total <= 0:
        return np.full(design.count, np.nan)
    return np.asarray(parts @ (weights * whole) / total, dtype=np.float64)
