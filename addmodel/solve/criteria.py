"""REML and GCV as functions of ρ = log λ, each with its exact gradient and Hessian.

Both are written as costs, to be made small.
"""

from __future__ import annotations

from abc import ABC, abstractmethod

import numpy as np

from addmodel.solve.quadratic import Point
from addmodel.spaces.base import FloatArray


class Criterion(ABC):
    """A smoothness criterion; gradient and Hessian are in log λ of the point's active blocks."""

    name: str
    rough_optima = False
    """Whether optima with little smoothing are common, so that no function may be left out."""

    @abstractmethod
    def cost(self, point: Point) -> float:
        """The value that is made small."""

    @abstractmethod
    def gradient(self, point: Point) -> FloatArray:
        """(blocks,)."""

    @abstractmethod
    def hessian(self, point: Point) -> FloatArray:
        """(blocks, blocks)."""

    @abstractmethod
    def scale(self, point: Point) -> float:
        """The variance σ² that goes with it."""

    @abstractmethod
    def reported(self, point: Point) -> float:
        """The value as the literature states it."""


class Reml(Criterion):
    """Restricted maximum likelihood (Patterson & Thompson 1971; Wahba 1985), σ² profiled.

    cost = ½[(n − p)(log 2πσ̂² + 1) + log|A| − Σ q_j ρ_j − log|T'T| − Σ log w],
    σ̂² = (D + Σλ‖u‖²)/(n − p): minus the log density of orthonormal contrasts of the rows.
    """

    name = "reml"

    def scale(self, point: Point) -> float:
        return point.penalised_deviance / (point.problem.n - point.problem.p)

    def cost(self, point: Point) -> float:
        problem = point.problem
        variance = self.scale(point)
        if variance <= 0:
            return np.inf
        cost: float = 0.5 * (
            (problem.n - problem.p) * (np.log(2 * np.pi * variance) + 1)
            + problem.log_det_unpenalised
            + point.log_det_schur
            - float(np.log(point.ridge).sum())
            - problem.log_det_design
            - problem.log_weights
        )
        return cost

    def reported(self, point: Point) -> float:
        return -self.cost(point)

    def gradient(self, point: Point) -> FloatArray:
        sizes = np.array([point.problem.sizes[j] for j in point.blocks], dtype=np.float64)
        return 0.5 * (point.roughness / self.scale(point) + point.lost - sizes)

    def hessian(self, point: Point) -> FloatArray:
        variance = self.scale(point)
        rough = point.roughness
        lam = point.smoothing[point.blocks]
        both = np.outer(lam, lam)
        pushes = point.by_block()
        return (
            np.diag(0.5 * (rough / variance + point.lost))
            - 0.5 * both * point.block_sums(point.inverse, point.inverse)
            - pushes.T @ point.inverse @ pushes / variance
            - 0.5
            * np.outer(rough / variance, rough / variance)
            / (point.problem.n - point.problem.p)
        )


class Gcv(Criterion):
    """Generalised cross-validation (Craven & Wahba 1979), n D/(n − τ)², as its logarithm.

    With P_j = λ_j on block j, b_j = ∂β/∂ρ_j = −A⁻¹P_jβ and Q = A⁻¹ΛA⁻¹:
    ∂D/∂ρ_j = −2 β'Λ b_j,  ∂²D = 2 b_j'(A − Λ)b_k + 2 β'ΛA⁻¹(P_k b_j + P_j b_k) − 2δ_jk β'Λb_j,
    ∂τ/∂ρ_j = −t_j + tr(QP_j) with t_j = λ_j tr(A⁻¹)_jj,
    ∂²τ = −δ_jk t_j + 2 λ_jλ_k‖(A⁻¹)_jk‖² + δ_jk tr(QP_j) − 2 λ_jλ_k⟨(A⁻¹)_jk, Q_jk⟩.
    """

    name = "gcv"
    rough_optima = True

    def scale(self, point: Point) -> float:
        return point.deviance / (point.problem.n - point.effective_df)

    def cost(self, point: Point) -> float:
        n = point.problem.n
        left = n - point.effective_df
        if point.deviance <= 0 or left <= 0:
            return np.inf
        return float(np.log(n * point.deviance) - 2 * np.log(left))

    def reported(self, point: Point) -> float:
        return float(np.exp(self.cost(point)))

    def _parts(self, point: Point) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """b (k, blocks), Q (k, k), ∂D and ∂τ (blocks,)."""
        moves = -point.inverse @ point.by_block()
        smoothed = (point.inverse * point.ridge) @ point.inverse
        d_deviance = -2 * (point.ridge * point.u) @ moves
        pulled = point.ridge * np.diag(smoothed)
        d_tau = np.array([pulled[s].sum() for s in point.places]) - point.lost
        return moves, smoothed, d_deviance, d_tau

    def gradient(self, point: Point) -> FloatArray:
        _, _, d_deviance, d_tau = self._parts(point)
        left = point.problem.n - point.effective_df
        return d_deviance / point.deviance + 2 * d_tau / left

    def hessian(self, point: Point) -> FloatArray:
        moves, smoothed, d_deviance, d_tau = self._parts(point)
        n, deviance = point.problem.n, point.deviance
        left = n - point.effective_df
        lam = point.smoothing[point.blocks]
        both = np.outer(lam, lam)
        pushes = point.by_block()
        # β'ΛA⁻¹P_k b_j: the pull ΛA⁻¹… of each active coefficient, block by block.
        pulled = point.inverse @ (point.ridge * point.u)
        cross = np.array([(lam[k] * pulled[s]) @ moves[s] for k, s in enumerate(point.places)])
        cross = cross.reshape(len(lam), len(lam))
        dd_deviance = (
            2 * (-pushes.T @ moves - moves.T @ (point.ridge[:, None] * moves))
            + 2 * (cross + cross.T)
            + np.diag(d_deviance)
        )
        dd_tau = (
            np.diag(d_tau)
            + 2 * both * point.block_sums(point.inverse, point.inverse)
            - 2 * both * point.block_sums(point.inverse, smoothed)
        )
        hessian: FloatArray = (
            dd_deviance / deviance
            - np.outer(d_deviance / deviance, d_deviance / deviance)
            + 2 * dd_tau / left
            + 2 * np.outer(d_tau / left, d_tau / left)
        )
        return hessian


CRITERIA: dict[str, Criterion] = {c.name: c for c in (Reml(), Gcv())}
