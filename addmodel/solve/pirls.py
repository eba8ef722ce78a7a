"""The mode at given smoothing parameters, by penalised iteratively reweighted least squares.

Fisher weights drive the steps to the mode (they are never negative); there the observed weights
stand in A, in the criterion and in leverages. Steps are halved until the penalised deviance falls.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from addmodel.matrix import IntArray as IndexArray
from addmodel.outcomes import Outcome, outcome_for
from addmodel.outcomes.likelihood import Likelihood
from addmodel.posterior import Posterior
from addmodel.rows.base import Gram, Rows
from addmodel.solve.grouped import GroupedProblem
from addmodel.solve.quadratic import Problem, Quadratic, Solution
from addmodel.spaces.base import FloatArray

STEPS = 60
HALVINGS = 30
LAST_STEPS = 12
MOVED = 1e-19
"""Length of a step, δ'X'WXδ beside the deviance, that counts as none."""
UPHILL = 1e-8
CLOSE = 1e-13
"""Relative change of the penalised deviance at which the mode is reached."""


@dataclass(frozen=True)
class Modes:
    """Rows of a model with an outcome: gives the mode at any smoothing parameters."""

    rows: Rows
    outcome: Outcome
    p: int
    sizes: tuple[int, ...]
    log_det_design: float
    likelihood: Likelihood
    expected: bool
    """Whether A has Fisher weights (GCV and UBRE) and not the observed ones (REML)."""
    null: FloatArray
    """(P,) the one constant alone: where to begin if the start given is worse than that."""

    def quadratic(
        self, at: FloatArray, *, fisher: bool, gram: Gram | None = None, strict: bool = False
    ) -> Quadratic:
        """The penalised quadratic about coefficients (P,); `strict`: see `Problem.of`."""
        sums = self.rows.sweep(at, self.outcome, fisher=fisher, gram=gram)
        kind = GroupedProblem if sums.layout.parts else Problem
        return kind.of(
            sums, self.p, self.sizes, self.log_det_design, self.likelihood, strict=strict
        )

    def without(self, columns: IndexArray) -> Modes:
        """The same rows without some of the unpenalised columns."""
        if not len(columns):
            return self
        rows = self.rows.without(columns)
        return replace(
            self,
            rows=rows,
            p=self.p - len(columns),
            log_det_design=rows.log_det_design(self.p - len(columns), self.likelihood.counts),
            null=np.delete(self.null, columns),
        )

    def part(self, chosen: IndexArray) -> Modes:
        """Only those rows."""
        rows, whole = self.rows.part(chosen), self.likelihood
        likelihood = replace(
            whole,
            y=whole.y[chosen],
            weights=whole.weights[chosen],
            counts=whole.counts[chosen],
            trials=whole.trials[chosen],
        )
        log_det = rows.log_det_design(self.p, likelihood.counts)
        return replace(self, rows=rows, likelihood=likelihood, log_det_design=log_det)

    def taken_away(self, part: FloatArray, smoothing: FloatArray) -> float:
        """The part of a vector's (n,) weighted variation that the columns take away at λ."""
        rows, outcome = self.rows.fitted_to(part), outcome_for("gaussian")
        likelihood = replace(self.likelihood, outcome=outcome)
        plain = replace(self, rows=rows, outcome=outcome, likelihood=likelihood)
        nothing = np.zeros(self.p + sum(self.sizes))
        problem = plain.quadratic(nothing, fisher=True)
        total = rows.variation()
        if not total > 0:
            return float("nan")
        return float(np.clip(1 - problem.at(smoothing).deviance / total, 0.0, 1.0))

    def solution(self, smoothing: FloatArray, start: FloatArray) -> Solution:
        """The mode at smoothing parameters λ; where the weights do not change, one solve."""
        if self.outcome.plain:
            return self.quadratic(start, fisher=True).at(smoothing)
        return self.at(smoothing, start)

    def at(self, smoothing: FloatArray, start: FloatArray) -> Solution:
        """The mode at smoothing parameters λ, from a start (P,)."""
        ridge = np.concatenate([np.zeros(self.p), np.repeat(smoothing, self.sizes)])
        held = np.isinf(ridge)
        ridge[held] = 0.0
        beta = np.where(held, 0.0, start)
        value = self.rows.deviance(beta, self.outcome) + float(ridge @ beta**2)
        plain = self.rows.deviance(self.null, self.outcome)
        if not value <= plain:
            beta, value = self.null, plain
        for _ in range(STEPS):
            problem = self.quadratic(beta, fisher=True)
            step = problem.at(smoothing).coefficients() - beta
            size, before = 1.0, value
            for _ in range(HALVINGS):
                trial = beta + size * step
                value = self.rows.deviance(trial, self.outcome) + float(ridge @ trial**2)
                if value <= before + CLOSE * abs(before):
                    break
                size /= 2
            else:
                trial, value = beta, before
            beta = trial
            if before - value <= CLOSE * (abs(value) + 1e-300):
                break
        return self._point(beta, smoothing, ridge)

    def _point(self, beta: FloatArray, smoothing: FloatArray, ridge: FloatArray) -> Solution:
        """Newton's last steps, with the weights that A has; at the mode nothing moves any more.

        A step that leads uphill is not taken: the mode is then as near as the digits allow.
        """
        value = self.rows.deviance(beta, self.outcome) + float(ridge @ beta**2)
        for _ in range(LAST_STEPS):
            try:
                problem = self.quadratic(beta, fisher=self.expected, strict=True)
                point = problem.at(smoothing, strict=True)
            except np.linalg.LinAlgError:
                # Observed weights can be negative far from the mode of a link not canonical.
                point = self.quadratic(beta, fisher=True).at(smoothing)
            sums = point.problem.sums
            trial = point.coefficients()
            step, before = trial - beta, value
            value = self.rows.deviance(trial, self.outcome) + float(ridge @ trial**2)
            if not value <= before + UPHILL * abs(before):
                point = replace(point, penalised_deviance=before)  # not what it would have become
                break
            beta = trial
            length = float(step @ sums.gram.times(step, sums.layout))
            if length <= MOVED * (abs(point.deviance) + 1e-300):
                break
        return replace(point, mode=WeightedMode(self, beta))


@dataclass(frozen=True)
class WeightedMode:
    """The mode, where the weights change with the mean."""

    modes: Modes
    beta: FloatArray  # (P,)

    def elsewhere(self, smoothing: FloatArray) -> Solution:
        """The mode at other smoothing parameters."""
        return self.modes.at(smoothing, self.beta)

    def moves(self, solution: Solution) -> FloatArray:
        """∂β/∂ρ_j = −A⁻¹P_j β, A with the observed weights, all coefficients (P, blocks)."""
        if self.modes.expected and not self.modes.outcome.canonical:
            observed = self.modes.quadratic(self.beta, fisher=False)
            return observed.at(solution.smoothing).own_moves()
        return solution.own_moves()

    def drift(self, solution: Solution) -> FloatArray:
        """½ (Σ_i h_i w_i′ x_i)'∂β/∂ρ_j, h_i = x_i'A⁻¹x_i: one pass over the rows."""
        total = self.modes.rows.leverage_sweep(
            self.beta, self.modes.outcome, solution.posterior(), fisher=self.modes.expected
        )
        return np.asarray(0.5 * total @ solution.full_moves, dtype=np.float64)

    def tau_drift(self, solution: Solution) -> FloatArray:
        """Σ_i (x_i'Qx_i) w_i′ x_i'∂β/∂ρ_j, Q = A⁻¹ΛA⁻¹; no group is set apart here."""
        inverse = solution.posterior().dense
        ridge = np.zeros(len(self.beta))
        finite = np.where(np.isfinite(solution.smoothing), solution.smoothing, 0.0)
        ridge[self.modes.p :] = np.repeat(finite, self.modes.sizes)
        total = self.modes.rows.leverage_sweep(
            self.beta,
            self.modes.outcome,
            Posterior.of_dense((inverse * ridge) @ inverse),
            fisher=True,
        )
        return np.asarray(total @ solution.full_moves, dtype=np.float64)
