"""The penalised least-squares problem at given smoothing parameters, and its derivatives.

With the sums of `rows` the penalised deviance about β is a quadratic; the unpenalised coefficients
are eliminated once (Schur complement S of X'WX), so that every smoothing parameter costs one
Cholesky factor of S + Λ, Λ = diag(λ_j), and its inverse R = (S + Λ)^{-1}. Because the penalties are
disjoint ridges, criterion, gradient and Hessian need R only block by block.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from itertools import pairwise

import numpy as np
import scipy.linalg
from scipy.linalg.lapack import dpotrf, dpotri, dpotrs

from addmodel.outcomes.likelihood import Likelihood
from addmodel.rows.base import Sums
from addmodel.spaces.base import FloatArray

IndexArray = np.ndarray[tuple[int], np.dtype[np.int64]]


SPANNED = 1e-10
"""What is left of a column's square, beside the unpenalised ones, when it counts as spanned."""


@dataclass(frozen=True)
class Problem:
    """A penalised quadratic, reduced to its penalised coefficients.

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
        factor = factored(sums.gram[:p, :p], strict=strict)
        cross = scipy.linalg.cho_solve(factor, sums.gram[:p, p:])
        schur = sums.gram[p:, p:] - sums.gram[p:, :p] @ cross
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

    @property
    def n(self) -> float:
        """Rows, counts counted."""
        return self.likelihood.n

    @property
    def spanned(self) -> list[bool]:
        """For each block, whether the unpenalised columns leave nothing of it."""
        whole = np.diag(self.sums.gram)[self.p :]
        left = np.diag(self.schur) > SPANNED * whole
        return [not left[s].any() for s in self.slices]

    @cached_property
    def slices(self) -> list[slice]:
        """Each block's place among the penalised coefficients."""
        ends = np.cumsum([0, *self.sizes])
        return [slice(int(a), int(b)) for a, b in pairwise(ends)]

    def active(self, smoothing: FloatArray) -> tuple[list[int], IndexArray]:
        """Blocks with a finite smoothing parameter, and the indices of their coefficients."""
        blocks = [j for j, value in enumerate(smoothing) if np.isfinite(value)]
        index = [np.arange(self.slices[j].start, self.slices[j].stop) for j in blocks]
        return blocks, np.concatenate(index) if index else np.empty(0, dtype=np.int64)

    def leading(self, counts: Sequence[int]) -> Problem:
        """The problem with only the first functions of each block, for a quick look.

        Costs and smoothing parameters are the smaller model's; its coefficients are not used.
        """
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
        """Solve at smoothing parameters λ (one a block; infinite: the block is held at zero).

        Where S + Λ is not positive definite (rounding; observed weights far from the mode) its
        diagonal is lifted until it is, or, if strict, numpy.linalg.LinAlgError is raised.
        """
        blocks, index = self.active(smoothing)
        sizes = [self.sizes[j] for j in blocks]
        ridge = np.repeat(smoothing[blocks], sizes)
        start, pull, base = self.started(index)
        # About the sweep's own coefficients, so that near them the deviance keeps its digits.
        base += float(ridge @ start**2)
        pull = pull - ridge * start
        if len(index) == 0:
            return Point(self, smoothing, blocks, ridge, index, np.empty((0, 0)), pull, base)
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
        return Point(self, smoothing, blocks, ridge, index, factor, start + step, low)

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
class Point:
    """The solution at one value of the smoothing parameters; one factorisation serves it all."""

    problem: Problem
    smoothing: FloatArray  # (blocks,) λ, all blocks
    blocks: list[int]  # those with finite λ
    ridge: FloatArray  # (k,) λ of each active coefficient
    index: IndexArray
    factor: FloatArray  # (k, k) lower Cholesky factor of S + Λ
    u: FloatArray  # (k,)
    penalised_deviance: float  # D(β̂) + Σ λ ‖u‖², the minimum

    def elsewhere(self, smoothing: FloatArray) -> Point:
        """The solution at other smoothing parameters."""
        return self.problem.at(smoothing)

    @property
    def drift(self) -> FloatArray:
        """½ d log|A|/dρ_j through the weights: nothing where they do not change with the mean."""
        return np.zeros(len(self.blocks))

    @property
    def tau_drift(self) -> FloatArray:
        """dτ/dρ_j through the weights."""
        return np.zeros(len(self.blocks))

    def full_moves(self) -> FloatArray:
        """∂β/∂ρ_j of all coefficients, (P, blocks)."""
        pushes = np.zeros((len(self.problem.sums.at), len(self.blocks)))
        pushes[self.problem.p + self.index] = self.by_block()
        moves: FloatArray = -self.covariance() @ pushes
        return moves

    def coefficient_moves(self) -> FloatArray:
        """∂u/∂ρ_j = −A⁻¹P_j β of the active coefficients, (k, blocks)."""
        moves: FloatArray = -self.inverse @ self.by_block()
        return moves

    @cached_property
    def restricted_scale(self) -> float:
        """φ as the restricted likelihood has it: known, or profiled."""
        return self.problem.likelihood.scale(self.penalised_deviance, self.problem.p)

    @property
    def log_det_schur(self) -> float:
        """log|S + Λ|."""
        return 2 * float(np.log(np.diag(self.factor)).sum())

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
        """λ_j ‖u_j‖² of each active block."""
        squares = self.ridge * self.u**2
        return np.array([squares[s].sum() for s in self.places])

    @property
    def deviance(self) -> float:
        """D(β̂)."""
        return self.penalised_deviance - float(self.roughness.sum())

    @property
    def shrinkage(self) -> FloatArray:
        """λ (A⁻¹)_kk of each active coefficient: 0 is free, 1 is gone."""
        return self.ridge * np.diag(self.inverse)

    @property
    def lost(self) -> FloatArray:
        """λ_j tr(A⁻¹)_jj of each active block: its functions less its effective ones."""
        return np.array([self.shrinkage[s].sum() for s in self.places])

    @property
    def effective_df(self) -> float:
        """τ = tr(A⁻¹X'WX), of the whole model."""
        return self.problem.p + len(self.u) - float(self.lost.sum())

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
        """All coefficients (P,); those of blocks held at zero are zero."""
        problem, p = self.problem, self.problem.p
        target = np.zeros_like(problem.sums.at)
        target[p + self.index] = self.u
        target[:p] = problem.sums.at[:p]
        moved = problem.sums.moved(target)
        factor = factored(problem.sums.gram[:p, :p])
        target[:p] += scipy.linalg.cho_solve(factor, moved.score[:p], check_finite=False)
        return target

    def covariance(self) -> FloatArray:
        """A⁻¹ (P, P), rows and columns of blocks held at zero being zero."""
        problem, p = self.problem, self.problem.p
        gram = problem.sums.gram
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
