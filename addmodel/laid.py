"""A design laid on rows: its penalised problem, smoothness, scale and dispersion."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import scipy.optimize

from addmodel.component import Design
from addmodel.data import Table
from addmodel.errors import ModelError
from addmodel.outcomes import Outcome
from addmodel.outcomes.likelihood import Likelihood
from addmodel.rows.dense import DenseRows
from addmodel.solve.criteria import Criterion
from addmodel.solve.pirls import Modes
from addmodel.solve.quadratic import Point
from addmodel.solve.smoothness import Smoothness, choose, choose_mode, polish
from addmodel.spaces.base import FloatArray

DIGITS = 1e-5
"""When so little of the starting deviance is left, it is summed again about the solution."""


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
            null=start,
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
