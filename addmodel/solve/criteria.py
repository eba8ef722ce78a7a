"""REML and GCV as functions of ρ = log λ, each with its exact gradient and Hessian.

Both are written as costs, to be made small.
"""

from __future__ import annotations

from abc import ABC, abstractmethod

import numpy as np

from addmodel.solve.quadratic import Point, Solution
from addmodel.spaces.base import FloatArray


class Criterion(ABC):
    """A smoothness criterion; gradient and Hessian are in log λ of the point's active blocks."""

    name: str
    rough_optima = False
    """Whether optima with little smoothing are common, so that no function may be left out."""

    @abstractmethod
    def cost(self, point: Solution) -> float:
        """The value that is made small."""

    @abstractmethod
    def gradient(self, point: Solution) -> FloatArray:
        """(blocks,)."""

    @abstractmethod
    def hessian(self, point: Solution) -> FloatArray:
        """(blocks, blocks)."""

    @abstractmethod
    def scale(self, point: Solution) -> float:
        """The variance σ² that goes with it."""

    @abstractmethod
    def reported(self, point: Solution) -> float:
        """The value as the literature states it."""


class Reml(Criterion):
    """Restricted maximum likelihood (Patterson & Thompson 1971; Wahba 1985), outside the Gaussian
    case Laplace's approximation to it (Tierney & Kadane 1986, J. Am. Stat. Assoc. 81).

    cost = D_p/(2φ) − ℓ_sat(φ) + ½[log|A| − Σ q_j ρ_j − p log 2πφ − log|T'T|], D_p = D + Σλ‖u‖²,
    φ known or profiled: minus the log density of orthonormal contrasts of the rows, all constants
    in. Its gradient is ½[λ_j‖u_j‖²/φ + λ_j tr(A⁻¹)_jj − q_j] and ½ d log|A|/dρ_j through the
    weights, which the Hessian leaves out (it is exact in the Gaussian case).
    """

    name = "reml"

    def scale(self, point: Solution) -> float:
        return point.restricted_scale

    def cost(self, point: Solution) -> float:
        problem, scale = point.problem, self.scale(point)
        if not scale > 0:
            return np.inf
        cost: float = (
            point.penalised_deviance / (2 * scale)
            - problem.likelihood.saturated(scale)
            + 0.5
            * (
                point.log_det
                - point.log_ridge
                - problem.p * np.log(2 * np.pi * scale)
                - problem.log_det_design
            )
        )
        return cost if np.isfinite(cost) else np.inf

    def reported(self, point: Solution) -> float:
        return -self.cost(point)

    def gradient(self, point: Solution) -> FloatArray:
        sizes = np.array([point.problem.sizes[j] for j in point.blocks], dtype=np.float64)
        return 0.5 * (point.roughness / self.scale(point) + point.lost - sizes) + point.drift

    def hessian(self, point: Solution) -> FloatArray:
        scale, rough = self.scale(point), point.roughness
        # φ is in proportion to D_p (exactly so in the Gaussian case), unless it is known.
        known = point.problem.likelihood.fixed is not None
        slope = 0.0 if known else scale / point.penalised_deviance
        return (
            np.diag(0.5 * (rough / scale + point.lost))
            - 0.5 * point.norms
            - point.pull_products / scale
            - 0.5 * slope * np.outer(rough / scale, rough / scale)
        )


class Prediction(Criterion):
    """What GCV and UBRE share: the deviance D and τ = tr(A⁻¹X'WX) with their derivatives.

    No group is set apart here: exchangeable levels are a matter of likelihood.

    With P_j = λ_j on block j, b_j = ∂β/∂ρ_j = −A⁻¹P_jβ and Q = A⁻¹ΛA⁻¹, the weights held:
    ∂D/∂ρ_j = −2 β'Λ b_j,  ∂²D = 2 b_j'(A − Λ)b_k + 2 β'ΛA⁻¹(P_k b_j + P_j b_k) − 2δ_jk β'Λb_j,
    ∂τ/∂ρ_j = −t_j + tr(QP_j) with t_j = λ_j tr(A⁻¹)_jj,
    ∂²τ = −δ_jk t_j + 2 λ_jλ_k‖(A⁻¹)_jk‖² + δ_jk tr(QP_j) − 2 λ_jλ_k⟨(A⁻¹)_jk, Q_jk⟩.
    Outside the Gaussian case the gradient also has the weights' change; the Hessian leaves it out.
    """

    rough_optima = True

    def slopes(self, point: Solution) -> tuple[FloatArray, FloatArray]:
        """∂D and ∂τ, each (blocks,)."""
        assert isinstance(point, Point)
        smoothed = (point.inverse * point.ridge) @ point.inverse
        d_deviance = -2 * (point.ridge * point.u) @ point.coefficient_moves()
        pulled = point.ridge * np.diag(smoothed)
        d_tau = np.array([pulled[s].sum() for s in point.places]) - point.lost
        return d_deviance, d_tau + point.tau_drift

    def curvatures(self, point: Solution) -> tuple[FloatArray, FloatArray]:
        """∂²D and ∂²τ, each (blocks, blocks), the weights held."""
        assert isinstance(point, Point)
        moves = -point.inverse @ point.by_block()
        smoothed = (point.inverse * point.ridge) @ point.inverse
        diagonal = -2 * (point.ridge * point.u) @ moves
        pulled = point.ridge * np.diag(smoothed)
        d_tau = np.array([pulled[s].sum() for s in point.places]) - point.lost
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
            + np.diag(diagonal)
        )
        dd_tau = (
            np.diag(d_tau)
            + 2 * both * point.block_sums(point.inverse, point.inverse)
            - 2 * both * point.block_sums(point.inverse, smoothed)
        )
        return dd_deviance, dd_tau


class Gcv(Prediction):
    """Generalised cross-validation (Craven & Wahba 1979), n D/(n − τ)², as its logarithm."""

    name = "gcv"

    def scale(self, point: Solution) -> float:
        fixed = point.problem.likelihood.fixed
        return point.deviance / (point.problem.n - point.effective_df) if fixed is None else fixed

    def cost(self, point: Solution) -> float:
        n = point.problem.n
        left = n - point.effective_df
        if point.deviance <= 0 or left <= 0:
            return np.inf
        return float(np.log(n * point.deviance) - 2 * np.log(left))

    def reported(self, point: Solution) -> float:
        return float(np.exp(self.cost(point)))

    def gradient(self, point: Solution) -> FloatArray:
        d_deviance, d_tau = self.slopes(point)
        return d_deviance / point.deviance + 2 * d_tau / (point.problem.n - point.effective_df)

    def hessian(self, point: Solution) -> FloatArray:
        d_deviance, d_tau = self.slopes(point)
        dd_deviance, dd_tau = self.curvatures(point)
        d, t = d_deviance / point.deviance, d_tau / (point.problem.n - point.effective_df)
        hessian: FloatArray = (
            dd_deviance / point.deviance
            - np.outer(d, d)
            + 2 * dd_tau / (point.problem.n - point.effective_df)
            + 2 * np.outer(t, t)
        )
        return hessian


class Ubre(Prediction):
    """Unbiased risk estimate for a known scale (Craven & Wahba 1979): (D + 2φτ)/n − φ."""

    name = "ubre"

    def scale(self, point: Solution) -> float:
        fixed = point.problem.likelihood.fixed
        assert fixed is not None
        return fixed

    def cost(self, point: Solution) -> float:
        scale, n = self.scale(point), point.problem.n
        return (point.deviance + 2 * scale * point.effective_df) / n - scale

    def reported(self, point: Solution) -> float:
        return self.cost(point)

    def gradient(self, point: Solution) -> FloatArray:
        d_deviance, d_tau = self.slopes(point)
        return (d_deviance + 2 * self.scale(point) * d_tau) / point.problem.n

    def hessian(self, point: Solution) -> FloatArray:
        dd_deviance, dd_tau = self.curvatures(point)
        return (dd_deviance + 2 * self.scale(point) * dd_tau) / point.problem.n


CRITERIA: dict[str, Criterion] = {c.name: c for c in (Reml(), Gcv(), Ubre())}
