"""The mode at given smoothing parameters, by penalised iteratively reweighted least squares.

Fisher weights drive the steps to the mode (they are never negative); there the observed weights
stand in A, in the criterion and in leverages. Steps are halved until the penalised deviance falls.
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from functools import cached_property

import numpy as np

from addmodel.outcomes import Outcome
from addmodel.outcomes.likelihood import Likelihood
from addmodel.rows.base import Rows
from addmodel.solve.quadratic import Point, Problem
from addmodel.spaces.base import FloatArray

STEPS = 60
HALVINGS = 30
LAST_STEPS = 12
MOVED = 1e-19
"""Length of a step, δ'X'WXδ beside the deviance, that counts as none."""
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
        self, at: FloatArray, *, fisher: bool, gram: FloatArray | None = None, strict: bool = False
    ) -> Problem:
        """The penalised quadratic about coefficients (P,); `strict`: see `Problem.of`."""
        sums = self.rows.sweep(at, self.outcome, fisher=fisher, gram=gram)
        return Problem.of(
            sums, self.p, self.sizes, self.log_det_design, self.likelihood, strict=strict
        )

    def at(self, smoothing: FloatArray, start: FloatArray) -> ModePoint:
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
        return self._point(beta, smoothing)

    def _point(self, beta: FloatArray, smoothing: FloatArray) -> ModePoint:
        """Newton's last steps, with the weights that A has; at the mode nothing moves any more."""
        for _ in range(LAST_STEPS):
            try:
                problem = self.quadratic(beta, fisher=self.expected, strict=True)
                point = problem.at(smoothing, strict=True)
            except np.linalg.LinAlgError:
                # Observed weights can be negative far from the mode of a link not canonical.
                point = self.quadratic(beta, fisher=True).at(smoothing)
            before, beta = beta, point.coefficients()
            step = beta - before
            if float(step @ point.problem.sums.gram @ step) <= MOVED * (
                abs(point.deviance) + 1e-300
            ):
                break
        parts = {f.name: getattr(point, f.name) for f in fields(Point)}
        return ModePoint(**parts, modes=self, mode=beta)


@dataclass(frozen=True)
class ModePoint(Point):
    """The solution where the weights change with the mean."""

    modes: Modes
    mode: FloatArray  # (P,)

    def elsewhere(self, smoothing: FloatArray) -> Point:
        return self.modes.at(smoothing, self.mode)

    @cached_property
    def moves(self) -> FloatArray:
        """∂β/∂ρ_j = −A⁻¹P_j β, A with the observed weights, all coefficients (P, blocks)."""
        if self.modes.expected and not self.modes.outcome.canonical:
            return self.modes.quadratic(self.mode, fisher=False).at(self.smoothing).full_moves()
        return super().full_moves()

    def full_moves(self) -> FloatArray:
        return self.moves

    def coefficient_moves(self) -> FloatArray:
        return self.moves[self.problem.p + self.index]

    @cached_property
    def drift(self) -> FloatArray:
        """½ (Σ_i h_i w_i′ x_i)'∂β/∂ρ_j, h_i = x_i'A⁻¹x_i: one pass over the rows."""
        total = self.modes.rows.leverage_sweep(
            self.mode, self.modes.outcome, self.covariance(), fisher=self.modes.expected
        )
        return np.asarray(0.5 * total @ self.moves, dtype=np.float64)

    @cached_property
    def tau_drift(self) -> FloatArray:
        """Σ_i (x_i'Qx_i) w_i′ x_i'∂β/∂ρ_j, Q = A⁻¹ΛA⁻¹."""
        inverse = self.covariance()
        ridge = np.zeros(len(self.mode))
        ridge[self.problem.p + self.index] = self.ridge
        total = self.modes.rows.leverage_sweep(
            self.mode, self.modes.outcome, (inverse * ridge) @ inverse, fisher=True
        )
        return np.asarray(total @ self.moves, dtype=np.float64)
