"""The penalised least-squares problem at given smoothing parameters, and its derivatives.

With the sums of `rows` the penalised deviance about β is a quadratic; the unpenalised coefficients
are eliminated once (Schur complement S of X'WX), so that every smoothing parameter costs one
Cholesky factor of S + Λ, Λ = diag(λ_j), and its inverse R = (S + Λ)^{-1}. Because the penalties are
disjoint ridges, criterion, gradient and Hessian need R only block by block.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from itertools import pairwise
from typing import Protocol

import numpy as np
import scipy.linalg
from scipy.linalg.lapack import dpotrf, dpotri, dpotrs

from addmodel.outcomes.likelihood import Likelihood
from addmodel.posterior import Posterior
from addmodel.rows.base import Sums
from addmodel.spaces.base import FloatArray

IndexArray = np.ndarray[tuple[int], np.dtype[np.int64]]


SPANNED = 1e-10
"""What is left of a column's square, beside the unpenalised ones, when it counts as spanned."""


class Mode(Protocol):
    """What the solver must know of a solution about which the weights change with the mean."""

    @property
    def beta(self) -> FloatArray:
        """The coefficients (P,)."""

    def elsewhere(self, smoothing: FloatArray) -> Solution:
        """The mode at other smoothing parameters."""

    def moves(self, solution: Solution) -> FloatArray:
        """∂β/∂ρ_j of all coefficients, (P, blocks), A with the observed weights."""

    def drift(self, solution: Solution) -> FloatArray:
        """½ d log|A|/dρ_j through the weights."""

    def tau_drift(self, solution: Solution) -> FloatArray:
        """dτ/dρ_j through the weights."""


class Quadratic(ABC):
    """A penalised quadratic: what the choice of smoothing parameters asks of it."""

    sums: Sums
    p: int
    sizes: tuple[int, ...]  # of all blocks, those set apart last
    curvature: FloatArray  # (q,) of each penalised coefficient, the unpenalised ones eliminated
    origin: FloatArray  # (q,) the penalised coefficients of the sweep
    pull: FloatArray  # (q,) score of the penalised coefficients there, the others eliminated
    base: float  # deviance there, the others at their best
    log_det_design: float  # log|T'T|, T the unpenalised columns without weights
    likelihood: Likelihood

    @property
    def n(self) -> float:
        """Rows, counts counted."""
        return self.likelihood.n

    @property
    def spanned(self) -> list[bool]:
        """For each block, whether the unpenalised columns leave nothing of it."""
        whole = self.sums.gram.diagonal(self.sums.layout)[self.p :]
        left = self.curvature > SPANNED * whole
        return [not left[s].any() for s in self.slices]

    @cached_property
    def slices(self) -> list[slice]:
        """Each block's place among the penalised coefficients."""
        ends = np.cumsum([0, *self.sizes])
        return [slice(int(a), int(b)) for a, b in pairwise(ends)]

    @abstractmethod
    def at(self, smoothing: FloatArray, *, strict: bool = False) -> Solution:
        """Solve at smoothing parameters λ (one a block; infinite: the block is held at zero).

        Where A is not positive definite (rounding; observed weights far from the mode) its
        diagonal is lifted until it is, or, if strict, numpy.linalg.LinAlgError is raised.
        """

    @abstractmethod
    def leading(self, counts: Sequence[int]) -> Quadratic:
        """The problem with only the first functions of each block, for a quick look.

        Costs and smoothing parameters are the smaller model's; its coefficients are not used.
        """


@dataclass(frozen=True)
class Solution(ABC):
    """The solution at one value of the smoothing parameters."""

    problem: Quadratic
    smoothing: FloatArray  # (blocks,) λ, all blocks
    blocks: list[int]  # those with finite λ
    penalised_deviance: float  # D(β̂) + Σ λ ‖u‖², the minimum
    mode: Mode | None = field(default=None, kw_only=True)
    """Where the weights change with the mean, how."""

    def elsewhere(self, smoothing: FloatArray) -> Solution:
        """The solution at other smoothing parameters."""
        return self.problem.at(smoothing) if self.mode is None else self.mode.elsewhere(smoothing)

    @cached_property
    def drift(self) -> FloatArray:
        """½ d log|A|/dρ_j through the weights: nothing where they do not change with the mean."""
        return np.zeros(len(self.blocks)) if self.mode is None else self.mode.drift(self)

    @cached_property
    def tau_drift(self) -> FloatArray:
        """dτ/dρ_j through the weights."""
        return np.zeros(len(self.blocks)) if self.mode is None else self.mode.tau_drift(self)

    @cached_property
    def full_moves(self) -> FloatArray:
        """∂β/∂ρ_j of all coefficients, (P, blocks)."""
        return self.own_moves() if self.mode is None else self.mode.moves(self)

    @cached_property
    def restricted_scale(self) -> float:
        """φ as the restricted likelihood has it: known, or profiled."""
        return self.problem.likelihood.scale(self.penalised_deviance, self.problem.p)

    @property
    def deviance(self) -> float:
        """D(β̂)."""
        return self.penalised_deviance - float(self.roughness.sum())

    @property
    def effective_df(self) -> float:
        """τ = tr(A⁻¹X'WX), of the whole model."""
        active = sum(self.problem.sizes[j] for j in self.blocks)
        return self.problem.p + active - float(self.lost.sum())

    @property
    @abstractmethod
    def log_det(self) -> float:
        """log|A| of the active coefficients."""

    @property
    def log_ridge(self) -> float:
        """Σ q_j log λ_j of the active blocks."""
        return float(sum(self.problem.sizes[j] * np.log(self.smoothing[j]) for j in self.blocks))

    @property
    @abstractmethod
    def roughness(self) -> FloatArray:
        """λ_j ‖u_j‖² of each active block."""

    @property
    @abstractmethod
    def lost(self) -> FloatArray:
        """λ_j tr(A⁻¹)_jj of each active block: its functions less its effective ones."""

    @property
    @abstractmethod
    def norms(self) -> FloatArray:
        """λ_jλ_k ‖(A⁻¹)_jk‖² of each pair of active blocks."""

    @property
    @abstractmethod
    def pull_products(self) -> FloatArray:
        """λ_jλ_k u_j'(A⁻¹)_jk u_k of each pair of active blocks."""

    @abstractmethod
    def coefficients(self) -> FloatArray:
        """All coefficients (P,); those of blocks held at zero are zero."""

    @abstractmethod
    def posterior(self) -> Posterior:
        """A⁻¹ of all coefficients, rows and columns of blocks held at zero being zero."""

    @abstractmethod
    def own_moves(self) -> FloatArray:
        """−A⁻¹P_jβ of all coefficients, (P, blocks): ∂β/∂ρ_j where A is that of the mode."""

    def shrinkage(self, block: int) -> FloatArray:
        """λ(A⁻¹)_kk of a block's coefficients: 0 is free, 1 is gone (as where it is held)."""
        place = self.problem.slices[block]
        size = self.problem.sizes[block]
        if block not in self.blocks:
            return np.ones(size)
        return np.asarray(self.smoothing[block] * self.variances[place], dtype=np.float64)

    @property
    @abstractmethod
    def variances(self) -> FloatArray:
        """diag(A⁻¹) of the penalised coefficients, (q,); zero where they are held."""


@dataclass(frozen=True)
class Problem(Quadratic):
    """A penalised quadratic, reduced to its penalised coefficients; no group is set apart.

    `sums` are over columns laid out as p unpenalised ones, then the blocks.
    """

    sums: Sums
    p: int
    sizes: tuple[int, ...]
    schur: FloatArray  # (q, q) S = G_uu − G_ut G_tt⁻¹ G_tu
    origin: FloatArray  # (q,) the penalised coefficients of the sweep
    pull: FloatArray  # (q,) score of the penalised coefficients there, the others eliminated
    base: float  # deviance there, the others at their best
    log_det_unpenalised: float  # log|G_tt|
    log_det_design: float  # log|T'T|, T the unpenalised columns without weights
    likelihood: Likelihood

    @classmethod
    def of(
        cls,
        sums: Sums,
        p: int,
        sizes: Sequence[int],
        log_det_design: float,
        likelihood: Likelihood,
        *,
        strict: bool = False,
    ) -> Problem:
        """Reduce the sums of a sweep.

        Where X'WX of the unpenalised columns is not positive definite (rounding, with weights of
        very different size; observed weights far from the mode) its diagonal is lifted until it
        is, or, if strict, numpy.linalg.LinAlgError is raised.
        """
        gram = sums.gram.dense
        factor = factored(gram[:p, :p], strict=strict)
        cross = scipy.linalg.cho_solve(factor, gram[:p, p:])
        schur = gram[p:, p:] - gram[p:, :p] @ cross
        return cls(
            sums=sums,
            p=p,
            sizes=tuple(sizes),
            schur=(schur + schur.T) / 2,
            origin=sums.at[p:],
            pull=sums.score[p:] - cross.T @ sums.score[:p],
            base=sums.deviance
            - float(sums.score[:p] @ scipy.linalg.cho_solve(factor, sums.score[:p])),
            log_det_unpenalised=2 * float(np.log(np.diag(factor[0])).sum()),
            log_det_design=log_det_design,
            likelihood=likelihood,
        )

    @cached_property
    def curvature(self) -> FloatArray:  # type: ignore[override]
        """Diagonal of S."""
        return np.diag(self.schur).copy()

    def active(self, smoothing: FloatArray) -> tuple[list[int], IndexArray]:
        """Blocks with a finite smoothing parameter, and the indices of their coefficients."""
        blocks = [j for j, value in enumerate(smoothing) if np.isfinite(value)]
        index = [np.arange(self.slices[j].start, self.slices[j].stop) for j in blocks]
        return blocks, np.concatenate(index) if index else np.empty(0, dtype=np.int64)

    def leading(self, counts: Sequence[int]) -> Problem:
        index = np.concatenate(
            [np.arange(s.start, s.start + k) for s, k in zip(self.slices, counts, strict=True)]
        )
        return replace(
            self,
            sizes=tuple(counts),
            schur=self.schur[np.ix_(index, index)],
            origin=self.origin[index],
            pull=self.pull[index],
        )

    def at(self, smoothing: FloatArray, *, strict: bool = False) -> Point:
        blocks, index = self.active(smoothing)
        sizes = [self.sizes[j] for j in blocks]
        ridge = np.repeat(smoothing[blocks], sizes)
        start, pull, base = self.started(index)
        # About the sweep's own coefficients, so that near them the deviance keeps its digits.
        base += float(ridge @ start**2)
        pull = pull - ridge * start
        if len(index) == 0:
            return Point(self, smoothing, blocks, base, ridge, index, np.empty((0, 0)), pull)
        every = len(index) == len(self.origin)
        matrix = self.schur.copy() if every else self.schur[np.ix_(index, index)]
        matrix[np.diag_indices_from(matrix)] += ridge
        factor, info = dpotrf(matrix, lower=1, clean=1)
        if info != 0 and strict:
            raise np.linalg.LinAlgError("S + Λ is not positive definite")
        if info != 0:
            factor = lifted(matrix)
        step, _ = dpotrs(factor, pull, lower=1)
        low = base - float(pull @ step)
        return Point(self, smoothing, blocks, low, ridge, index, factor, start + step)

    def started(self, index: IndexArray) -> tuple[FloatArray, FloatArray, float]:
        """Origin, pull and base with the coefficients outside `index` moved to zero."""
        if len(index) == len(self.origin) or not self.origin.any():
            return self.origin[index], self.pull[index], self.base
        step = -self.origin
        step[index] = 0.0
        along = self.schur @ step
        base = self.base - 2 * float(self.pull @ step) + float(step @ along)
        return self.origin[index], (self.pull - along)[index], base


def lifted(matrix: FloatArray) -> FloatArray:
    """Lower Cholesky factor of a symmetric matrix (k, k) with its diagonal lifted above zero."""
    values = np.linalg.eigvalsh(matrix)
    lift = 2 * max(-float(values[0]), 1e-15 * float(np.abs(values).max()))
    raised = matrix + lift * np.eye(len(matrix))
    return np.asarray(np.linalg.cholesky(raised), dtype=np.float64)


def factored(matrix: FloatArray, *, strict: bool = False) -> tuple[FloatArray, bool]:
    """A lower Cholesky factor as scipy's cho_solve takes it, the matrix lifted if need be."""
    try:
        return np.asarray(np.linalg.cholesky(matrix), dtype=np.float64), True
    except np.linalg.LinAlgError:
        if strict:
            raise
        return lifted(matrix), True


@dataclass(frozen=True)
class Point(Solution):
    """The solution at one value of the smoothing parameters; one factorisation serves it all."""

    problem: Problem
    ridge: FloatArray  # (k,) λ of each active coefficient
    index: IndexArray
    factor: FloatArray  # (k, k) lower Cholesky factor of S + Λ
    u: FloatArray  # (k,)

    @property
    def log_det(self) -> float:
        schur = 2 * float(np.log(np.diag(self.factor)).sum())
        return self.problem.log_det_unpenalised + schur

    def coefficient_moves(self) -> FloatArray:
        """∂β/∂ρ_j of the active penalised coefficients, (k, blocks)."""
        return self.full_moves[self.problem.p + self.index]

    @cached_property
    def inverse(self) -> FloatArray:
        """R = (S + Λ)⁻¹ (k, k); a criterion's value alone does not need it."""
        if not len(self.u):
            return np.empty((0, 0))
        half, _ = dpotri(self.factor, lower=1)
        inverse: FloatArray = half + half.T
        inverse[np.diag_indices_from(inverse)] /= 2
        return inverse

    @cached_property
    def places(self) -> list[slice]:
        """Each active block's place in `inverse` and `u`."""
        ends = np.cumsum([0, *(self.problem.sizes[j] for j in self.blocks)])
        return [slice(int(a), int(b)) for a, b in pairwise(ends)]

    @property
    def roughness(self) -> FloatArray:
        squares = self.ridge * self.u**2
        return np.array([squares[s].sum() for s in self.places])

    @property
    def lost(self) -> FloatArray:
        shrunk = self.ridge * np.diag(self.inverse)
        return np.array([shrunk[s].sum() for s in self.places])

    @property
    def norms(self) -> FloatArray:
        lam = self.smoothing[self.blocks]
        return np.outer(lam, lam) * self.block_sums(self.inverse, self.inverse)

    @property
    def pull_products(self) -> FloatArray:
        pushes = self.by_block()
        products: FloatArray = pushes.T @ self.inverse @ pushes
        return products

    def own_moves(self) -> FloatArray:
        pushes = np.zeros((len(self.problem.sums.at), len(self.blocks)))
        pushes[self.problem.p + self.index] = self.by_block()
        moves: FloatArray = -self.covariance() @ pushes
        return moves

    @property
    def variances(self) -> FloatArray:
        variances = np.zeros(len(self.problem.origin))
        variances[self.index] = np.diag(self.inverse)
        return variances

    def posterior(self) -> Posterior:
        return Posterior.of_dense(self.covariance())

    def block_sums(self, left: FloatArray, right: FloatArray) -> FloatArray:
        """Σ of left∘right over each pair of active blocks."""
        if not self.blocks:
            return np.zeros((0, 0))
        product = left * right
        starts = [s.start for s in self.places]
        return np.add.reduceat(np.add.reduceat(product, starts, axis=0), starts, axis=1)

    def by_block(self) -> FloatArray:
        """(k, blocks) matrix with column j = λ_j u_j in block j's place, zero elsewhere."""
        pushes = np.zeros((len(self.u), len(self.blocks)))
        for j, place in enumerate(self.places):
            pushes[place, j] = self.ridge[place] * self.u[place]
        return pushes

    def coefficients(self) -> FloatArray:
        if self.mode is not None:
            return self.mode.beta
        problem, p = self.problem, self.problem.p
        target = np.zeros_like(problem.sums.at)
        target[p + self.index] = self.u
        target[:p] = problem.sums.at[:p]
        moved = problem.sums.moved(target)
        factor = factored(problem.sums.gram.dense[:p, :p])
        target[:p] += scipy.linalg.cho_solve(factor, moved.score[:p], check_finite=False)
        return target

    def covariance(self) -> FloatArray:
        """A⁻¹ (P, P), rows and columns of blocks held at zero being zero."""
        problem, p = self.problem, self.problem.p
        gram = problem.sums.gram.dense
        full = np.zeros_like(gram)
        used = p + self.index
        factor = factored(gram[:p, :p])
        cross = scipy.linalg.cho_solve(factor, gram[np.ix_(np.arange(p), used)])  # (p, k)
        full[np.ix_(used, used)] = self.inverse
        across = -cross @ self.inverse
        full[:p, used] = across
        full[used, :p] = across.T
        full[:p, :p] = scipy.linalg.cho_solve(factor, np.eye(p)) - across @ cross.T
        return full
