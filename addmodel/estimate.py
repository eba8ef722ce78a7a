"""From checked data to what was estimated: design, rows, smoothness, detail, tied together.

`estimate` is the loop that the user never sees: lay the design, sum the rows, choose the smoothing
parameters, ask whether the detail was enough, and go again with more where it was not.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cache

import numpy as np
import scipy.optimize
from threadpoolctl import ThreadpoolController

from addmodel import cautions
from addmodel.component import Design
from addmodel.data import Table
from addmodel.errors import ModelError
from addmodel.formula import Model
from addmodel.outcomes import Outcome
from addmodel.outcomes.likelihood import Likelihood
from addmodel.rows.dense import DenseRows
from addmodel.solve.criteria import Criterion
from addmodel.solve.detail import CEILING, SHRUNK, wanted
from addmodel.solve.pirls import Modes
from addmodel.solve.quadratic import Point
from addmodel.solve.smoothness import Smoothness, choose, choose_mode, polish
from addmodel.solve.uncertainty import smoothing_spread
from addmodel.spaces.base import FloatArray, Penalised

ROUNDS = 16
DIGITS = 1e-5
"""When so little of the starting deviance is left, it is summed again about the solution."""
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
    covariance: FloatArray  # (P, P) posterior: σ² A⁻¹ (Wahba 1983, J. R. Stat. Soc. B 45)
    column_df: FloatArray  # (P,) diag(A⁻¹X'WX) with Fisher weights
    smoothing_spread: FloatArray  # (P, k) times its transpose: what uncertain smoothing adds to it
    corrected_df: float
    """Effective degrees of freedom with the smoothing parameters' uncertainty, for the AIC."""
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

    Raises
    ------
    FormulaError, ModelError
        Where the model has no meaning on these data.
    """
    # At a few hundred columns two BLAS threads are slower than one, most of all on a busy machine.
    with _threads().limit(limits=1, user_api="blas"):
        return _estimate(model, table, outcome, criterion, arguments, progress)


@cache
def _threads() -> ThreadpoolController:
    return ThreadpoolController()


def _estimate(
    model: Model,
    table: Table,
    outcome: Outcome,
    criterion: Criterion,
    arguments: dict[str, str],
    progress: Progress,
) -> Estimate:
    weights = row_weights(table)
    _check_outcome(table)
    outcome.check(table)
    scale = 1.0
    progress("laying the components on the data")
    design = Design.lay(model, table)
    confirmed = [False] * len(design.components)
    steps = 0
    for turn in range(ROUNDS):
        progress(f"choosing smoothness ({sum(design.block_sizes)} functions)")
        laid = Laid.on(design, table, outcome, criterion, scale)
        smoothness = laid.smoothness(criterion)
        if outcome.dispersion_free:
            outcome, smoothness = with_best_dispersion(laid, smoothness, criterion)
        steps += smoothness.steps
        point = smoothness.point
        beta = point.coefficients()
        eta = laid.modes.rows.linear_predictor(beta)
        if outcome.quasi:
            before, scale = scale, quasi_scale(outcome, table, eta, point)
        curvature = outcome.curvature(table.outcome, eta, weights)
        working = np.maximum(curvature.fisher, 1e-300)
        residuals = curvature.slope / working
        sizes, confirmed = _sizes(
            design, smoothness, table, residuals, working, criterion.scale(point)
        )
        if outcome.quasi and turn < ROUNDS - 1 and abs(np.log(scale / before)) > 1e-4:
            continue
        if turn == ROUNDS - 1 or sizes == _present(design):
            break
        design = design.resized(sizes, table)
    scale = criterion.scale(point)
    likelihood = point.problem.likelihood
    deviance = laid.modes.rows.deviance(beta, outcome)
    if outcome.plain:
        deviance = point.deviance
    fisher = laid.modes.quadratic(beta, fisher=True, gram=None)
    flat = fisher.at(point.smoothing)
    pearson = outcome.pearson(table.outcome, outcome.mean(eta), weights)
    dispersion = pearson / max(likelihood.n - flat.effective_df, 1.0)
    free = [j for j, owner in enumerate(design.block_owners) if _chosen(design, owner)]
    spread = smoothing_spread(point, criterion, free)
    return Estimate(
        model=model,
        design=design,
        outcome=outcome,
        criterion=criterion.name,
        coefficients=beta,
        covariance=scale * point.covariance(),
        column_df=np.einsum("ij,ji->i", flat.covariance(), fisher.sums.gram),
        smoothing_spread=spread,
        corrected_df=flat.effective_df
        + float(np.sum(spread * (fisher.sums.gram @ spread))) / scale,
        shares=_shares(laid, beta, row_weights(table)),
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
        steps=steps,
        settled=smoothness.settled,
        gradient=smoothness.gradient,
        detail_confirmed=tuple(confirmed),
        cautions=(
            *table.cautions,
            *design.notes,
            *cautions.of_smoothness(design, smoothness),
            *cautions.of_freedom(likelihood.n, flat.effective_df, "counts" in arguments),
            *cautions.of_outcome(design, table, outcome, eta, dispersion),
        ),
        arguments=arguments,
        table=table,
        linear_predictor=eta,
    )


def quasi_scale(outcome: Outcome, table: Table, eta: FloatArray, point: Point) -> float:
    """Pearson's X²/(n − τ) (Wedderburn 1974; McCullagh & Nelder 1989, ch. 9)."""
    pearson = outcome.pearson(table.outcome, outcome.mean(eta), row_weights(table))
    return max(pearson / max(point.problem.n - point.effective_df, 1.0), 1e-300)


def with_best_dispersion(
    laid: Laid, smoothness: Smoothness, criterion: Criterion
) -> tuple[Outcome, Smoothness]:
    """The negative binomial's dispersion α at the optimum of the criterion, with its smoothness.

    At given smoothing parameters α minimises the criterion in one variable; α and the smoothing
    parameters are improved in turn until α stays.
    """
    first = laid.modes.outcome

    def at(alpha: float) -> Laid:
        return laid.with_outcome(first.with_dispersion(alpha))

    found, alpha = smoothness, float(first.family.alpha)
    for _ in range(12):
        best = scipy.optimize.minimize_scalar(
            lambda t, here, mode: criterion.cost(at(float(np.exp(t))).modes.at(here, mode)),
            args=(found.point.smoothing, found.point.coefficients()),
            bounds=(np.log(1e-6), np.log(1e3)),
            method="bounded",
            options={"xatol": 1e-7},
        )
        before, alpha = alpha, float(np.exp(best.x))
        found = at(alpha).smoothness(criterion)
        if abs(np.log(alpha / before)) < 1e-6:
            break
    return first.with_dispersion(alpha), found


@dataclass(frozen=True)
class Laid:
    """A design laid on rows: gives the penalised problem about any coefficients."""

    design: Design
    modes: Modes
    start: FloatArray  # (P,)

    @classmethod
    def on(
        cls, design: Design, table: Table, outcome: Outcome, criterion: Criterion, scale: float
    ) -> Laid:
        """The design's columns at the rows of the table; `scale` is φ where it is known."""
        weights = row_weights(table)
        values = {key: column.values for key, column in table.columns.items()}
        columns = design.matrix(values, len(weights))
        plain = columns[:, : design.p] * np.sqrt(table.counts)[:, None]
        diagonal = np.diag(np.linalg.qr(plain)[1])
        start = np.zeros(columns.shape[1])
        start[0] = null_predictor(table, outcome)
        modes = Modes(
            rows=DenseRows(columns, table.outcome, weights, table.offset),
            outcome=outcome,
            p=design.p,
            sizes=design.block_sizes,
            log_det_design=2 * float(np.log(np.abs(diagonal)).sum()),
            likelihood=likelihood_of(table, outcome, scale),
            expected=criterion.name != "reml",
        )
        return cls(design, modes, start)

    def with_outcome(self, outcome: Outcome) -> Laid:
        """The same rows and columns under another outcome."""
        likelihood = replace(self.modes.likelihood, outcome=outcome)
        return replace(self, modes=replace(self.modes, outcome=outcome, likelihood=likelihood))

    def smoothness(self, criterion: Criterion) -> Smoothness:
        """Choose smoothness; from sums taken anew about the solution where digits were lost."""
        owners = [self.design.components[j] for j in self.design.block_owners]
        fixed = [c.smoothing for c in owners]
        degrees = [None if c.df is None else c.df - len(c.own) for c in owners]
        problem = self.modes.quadratic(self.start, fisher=True)
        for j, spanned in enumerate(problem.spanned):
            if spanned and (fixed[j] is not None or degrees[j] is not None):
                raise ModelError(
                    f"The bend of {owners[j].name} is wholly in the levels of other terms, so "
                    "df= and smoothing= have no meaning for it. Leave out one of the terms."
                )
            if spanned:
                fixed[j] = np.inf
        if not self.modes.outcome.plain:
            return choose_mode(self.modes, criterion, fixed, degrees, self.start)
        first = choose(problem, criterion, fixed, degrees)
        free = np.flatnonzero(
            [f is None and d is None for f, d in zip(fixed, degrees, strict=True)]
        )
        point = first.point
        if point.penalised_deviance < DIGITS * problem.sums.deviance:
            gram = problem.sums.gram  # a Gaussian outcome's weights do not change with its mean
            again = self.modes.quadratic(point.coefficients(), fisher=True, gram=gram)
            point = again.at(point.smoothing)
        return polish(first, point, criterion, free)


def row_weights(table: Table) -> FloatArray:
    """Prior weight times count times trials, (n,)."""
    weights: FloatArray = table.weights * table.counts * table.trials
    return weights


def likelihood_of(table: Table, outcome: Outcome, scale: float) -> Likelihood:
    """The outcome with the rows' constants; φ is fixed at `scale` unless it is profiled."""
    fixed = scale if outcome.scale_known or outcome.quasi else None
    return Likelihood(outcome, table.outcome, table.weights, table.counts, table.trials, fixed)


def null_predictor(table: Table, outcome: Outcome) -> float:
    """The constant linear predictor beside the offset, by Fisher scoring in one coefficient."""
    weights = row_weights(table)
    one = DenseRows(np.ones((len(weights), 1)), table.outcome, weights, table.offset)
    mean = float(np.average(table.outcome, weights=weights))
    typical = outcome.family.starting_mu(np.array([mean, mean]))[:1]
    beta = np.asarray(outcome.family.link(typical), dtype=np.float64) - np.average(table.offset)
    for _ in range(50):
        sums = one.sweep(beta, outcome, fisher=True)
        step = sums.score / sums.gram[0]
        size = 1.0
        while one.deviance(beta + size * step, outcome) > sums.deviance and size > 1e-9:
            size /= 2
        beta = beta + size * step
        if abs(float(step[0])) < 1e-10 * max(1.0, abs(float(beta[0]))):
            break
    return float(beta[0])


def _sizes(
    design: Design,
    smoothness: Smoothness,
    table: Table,
    residuals: FloatArray,
    weights: FloatArray,
    scale: float,
) -> tuple[list[int], list[bool]]:
    """The detail each component should have, and whether what it has was confirmed."""
    point = smoothness.point
    shrinkage = np.ones(sum(design.block_sizes))
    shrinkage[point.index] = point.shrinkage
    places = iter(point.problem.slices)
    sizes, confirmed = [], []
    for component in design.components:
        (space,) = component.spaces
        if not isinstance(space, Penalised):
            sizes.append(0)
            confirmed.append(True)
            continue
        place = next(places)
        size = space.size
        if not component.everything and scale > 0:
            x = table.columns[space.key].values
            size = wanted(space, shrinkage[place], x, residuals, weights, scale)
        sizes.append(size)
        everything = space.size == space.distinct - 1 - len(space.unpenalised_names)
        tail = shrinkage[place][-max(1, space.size // 10) :]
        enough = size == space.size < CEILING and bool(tail.min() >= SHRUNK)
        confirmed.append(everything or enough)
    return sizes, confirmed


def _present(design: Design) -> list[int]:
    return [c.spaces[0].size for c in design.components]


def _check_outcome(table: Table) -> None:
    if np.ptp(table.outcome - table.offset) == 0:
        raise ModelError(
            f"{table.outcome_name} has the same value in all rows used: nothing is left to explain."
        )


def _null_deviance(table: Table, outcome: Outcome) -> float:
    """Deviance of the model with the offset and one constant."""
    mean = outcome.mean(table.offset + null_predictor(table, outcome))
    return outcome.deviance(table.outcome, mean, row_weights(table))


def _log_likelihood(likelihood: Likelihood, deviance: float, scale: float) -> float:
    """ℓ at the fitted mean; for a Gaussian outcome at its own variance, deviance/n."""
    if likelihood.outcome.kind == "Gaussian":
        scale = deviance / likelihood.n
    return likelihood.log_likelihood(deviance, scale) if scale > 0 else np.inf


def _chosen(design: Design, owner: int) -> bool:
    component = design.components[owner]
    return component.smoothing is None and component.df is None


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
