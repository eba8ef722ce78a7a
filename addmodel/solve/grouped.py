"""The penalised least-squares problem where a group of many levels is set apart.

Its coefficients are a block-diagonal part H of the system A = [[D, C'], [C, H]] (one small block a
level), eliminated by its Schur complement D − C'H⁻¹C for each λ, so that the cost grows with the
number of levels and not with its cube. What is left is a `Problem` in the dense coefficients. With
B = H⁻¹C and R the inverse of the Schur complement the blocks of A⁻¹ are R, −BR and H⁻¹ + BRB'.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise

import numpy as np
import scipy.linalg

from addmodel.matrix import Layout
from addmodel.outcomes.likelihood import Likelihood
from addmodel.posterior import Posterior
from addmodel.rows.base import Gram, Sums
from addmodel.solve.quadratic import Point, Problem, Quadratic, Solution, factored
from addmodel.spaces.base import FloatArray


@dataclass(frozen=True)
class GroupedProblem(Quadratic):
    """A penalised quadratic with a group set apart."""

    sums: Sums
    p: int
    sizes: tuple[int, ...]
    curvature: FloatArray
    origin: FloatArray
    pull: FloatArray
    base: float
    log_det_design: float
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
    ) -> GroupedProblem:
        """As `Problem.of`."""
        gram, layout = sums.gram, sums.layout
        factor = factored(gram.dense[:p, :p], strict=strict)
        # Columns G_tt^{-½} G_tu, whose squares are what the unpenalised columns take away.
        cross = scipy.linalg.solve_triangular(factor[0], gram.dense[:p, p:], lower=True)
        score = scipy.linalg.cho_solve(factor, sums.score[:p])
        across = gram.across[:, :, :p]
        taken = scipy.linalg.solve_triangular(factor[0], across.reshape(-1, p).T, lower=True)
        own = np.diagonal(gram.own, axis1=1, axis2=2) - (taken**2).sum(axis=0).reshape(
            across.shape[:2]
        )
        pull_apart = layout.by_level(sums.score) - across @ score
        return cls(
            sums=sums,
            p=p,
            sizes=tuple(sizes),
            curvature=np.concatenate(
                [np.diag(gram.dense)[p:] - (cross**2).sum(axis=0), layout.flat(own)]
            ),
            origin=sums.at[p:],
            pull=np.concatenate(
                [
                    sums.score[p : layout.dense] - gram.dense[p:, :p] @ score,
                    layout.flat(pull_apart),
                ]
            ),
            base=sums.deviance - float(sums.score[:p] @ score),
            log_det_design=log_det_design,
            likelihood=likelihood,
        )

    @property
    def dense_blocks(self) -> int:
        """Number of blocks that are not set apart."""
        return len(self.sizes) - len(self.sums.layout.parts)

    def leading(self, counts: Sequence[int]) -> GroupedProblem:
        """The problem itself: its cost is mostly that of the levels."""
        return self

    def at(self, smoothing: FloatArray, *, strict: bool = False) -> GroupedPoint:
        layout, first = self.sums.layout, self.dense_blocks
        lam = np.repeat(smoothing[first:], layout.parts)  # (b,)
        free = np.isfinite(lam)
        held = np.concatenate(
            [
                np.zeros(layout.dense, dtype=bool),
                np.repeat(
                    ~np.isfinite(smoothing[first:]), [layout.levels * part for part in layout.parts]
                ),
            ]
        )
        sums = self.sums
        if (sums.at[held] != 0).any():
            sums = sums.moved(np.where(held, 0.0, sums.at))
        lam = lam[free]
        start = layout.by_level(sums.at)[:, free]
        pull = layout.by_level(sums.score)[:, free] - lam * start
        across = sums.gram.across[:, free]
        own = sums.gram.own[:, free][:, :, free] + np.diag(lam)
        roots = _roots(own, strict)
        inverse = np.asarray(np.linalg.inv(own) if len(lam) > 1 else 1 / own, dtype=np.float64)
        bridge = inverse @ across
        step = np.einsum("lbc,lc->lb", inverse, pull)
        flat = across.reshape(-1, layout.dense)
        dense = sums.gram.dense - flat.T @ bridge.reshape(-1, layout.dense)
        reduced = Sums(
            at=sums.at[: layout.dense],
            gram=Gram(
                (dense + dense.T) / 2,
                np.zeros((0, 0, layout.dense)),
                np.zeros((0, 0, 0)),
            ),
            score=sums.score[: layout.dense] - flat.T @ step.ravel(),
            deviance=sums.deviance
            + float(lam @ (start**2).sum(axis=0))
            - float((pull * step).sum()),
            layout=Layout(layout.dense, 0, ()),
        )
        inner = Problem.of(
            reduced,
            self.p,
            self.sizes[:first],
            self.log_det_design,
            self.likelihood,
            strict=strict,
        ).at(smoothing[:first], strict=strict)
        blocks = [j for j, value in enumerate(smoothing) if np.isfinite(value)]
        return GroupedPoint(
            self,
            smoothing,
            blocks,
            inner.penalised_deviance,
            inner=inner,
            bridge=bridge,
            own=inverse,
            log_det_own=2 * float(np.log(np.diagonal(roots, axis1=1, axis2=2)).sum()),
            apart=start + step - bridge @ (inner.coefficients() - reduced.at),
            free=free,
        )


def _roots(own: FloatArray, strict: bool) -> FloatArray:
    try:
        return np.asarray(np.linalg.cholesky(own), dtype=np.float64)
    except np.linalg.LinAlgError:
        if strict:
            raise
        values = np.linalg.eigvalsh(own)
        lift = np.maximum(-2 * values[:, 0], 1e-14 * np.abs(values).max())
        return np.asarray(
            np.linalg.cholesky(own + lift[:, None, None] * np.eye(own.shape[1])), dtype=np.float64
        )


def _squared(columns: FloatArray) -> FloatArray:
    """Σ over levels and columns of the outer squares, (D, D)."""
    flat = columns.reshape(-1, columns.shape[2])
    squared: FloatArray = flat.T @ flat
    return squared


@dataclass(frozen=True)
class GroupedPoint(Solution):
    """The solution at one value of the smoothing parameters."""

    problem: GroupedProblem
    inner: Point  # in the dense coefficients
    bridge: FloatArray  # (levels, b, D) B, b the columns with a finite λ
    own: FloatArray  # (levels, b, b) H⁻¹
    log_det_own: float  # log|H|
    apart: FloatArray  # (levels, b) the group's coefficients
    free: np.ndarray[tuple[int], np.dtype[np.bool_]]  # which of all b columns have a finite λ

    @cached_property
    def _dense(self) -> FloatArray:
        return self.inner.covariance()

    @cached_property
    def _parts(self) -> list[slice]:
        """Where each active block apart is among the b free columns."""
        parts = self.problem.sums.layout.parts
        first = self.problem.dense_blocks
        kept = [part for k, part in enumerate(parts) if first + k in self.blocks]
        ends = np.cumsum([0, *kept])
        return [slice(int(a), int(b)) for a, b in pairwise(ends)]

    @cached_property
    def _lam(self) -> FloatArray:
        """λ of the active blocks apart."""
        first = self.problem.dense_blocks
        return np.array([self.smoothing[j] for j in self.blocks if j >= first])

    @cached_property
    def _crossed(self) -> FloatArray:
        """B R, (levels, b, D)."""
        crossed: FloatArray = self.bridge @ self._dense
        return crossed

    @property
    def log_det(self) -> float:
        return self.inner.log_det + self.log_det_own

    @property
    def roughness(self) -> FloatArray:
        theirs = [
            lam * (self.apart[:, s] ** 2).sum()
            for lam, s in zip(self._lam, self._parts, strict=True)
        ]
        return np.array([*self.inner.roughness, *theirs])

    @cached_property
    def _variances_apart(self) -> FloatArray:
        own = np.diagonal(self.own, axis1=1, axis2=2)
        return np.asarray(own + (self._crossed * self.bridge).sum(axis=2), dtype=np.float64)

    @property
    def lost(self) -> FloatArray:
        theirs = [
            lam * self._variances_apart[:, s].sum()
            for lam, s in zip(self._lam, self._parts, strict=True)
        ]
        return np.array([*self.inner.lost, *theirs])

    @property
    def norms(self) -> FloatArray:
        """From ‖(A⁻¹)_ej‖² = ‖BR‖² over block j, and with M_e = B_e'B_e for two blocks apart

        ‖(A⁻¹)_ef‖² = Σ_l ‖H⁻¹‖² + 2 Σ_l ⟨H⁻¹, BRB'⟩ + tr(R M_e R M_f).
        """
        first, count = len(self.inner.blocks), len(self.blocks)
        norms = np.zeros((count, count))
        norms[:first, :first] = self.inner.norms
        lam = np.array([*self.smoothing[self.inner.blocks], *self._lam])
        p = self.problem.p
        places = [self.inner.problem.slices[j] for j in self.inner.blocks]
        spread = [_squared(self.bridge[:, s]) for s in self._parts]
        for e, s in enumerate(self._parts):
            squares = (self._crossed[:, s] ** 2).sum(axis=(0, 1))
            for j, place in enumerate(places):
                value = lam[first + e] * lam[j] * squares[p + place.start : p + place.stop].sum()
                norms[first + e, j] = norms[j, first + e] = value
            for f in range(e + 1):
                t = self._parts[f]
                own = self.own[:, s, t]
                both = self._crossed[:, s] @ self.bridge[:, t].transpose(0, 2, 1)
                value = (own**2).sum() + 2 * (own * both).sum()
                value += ((self._dense @ spread[e]) * (self._dense @ spread[f]).T).sum()
                norms[first + e, first + f] = norms[first + f, first + e] = (
                    lam[first + e] * lam[first + f] * value
                )
        return norms

    @cached_property
    def _pushes(self) -> FloatArray:
        """λ_j u_j in block j's place, (P, blocks)."""
        beta = self._solved
        pushes = np.zeros((len(beta), len(self.blocks)))
        for i, j in enumerate(self.blocks):
            place = self.problem.slices[j]
            at = slice(self.problem.p + place.start, self.problem.p + place.stop)
            pushes[at, i] = self.smoothing[j] * beta[at]
        return pushes

    @property
    def pull_products(self) -> FloatArray:
        products: FloatArray = self._pushes.T @ self.posterior().times(self._pushes)
        return products

    def own_moves(self) -> FloatArray:
        return -self.posterior().times(self._pushes)

    @property
    def variances(self) -> FloatArray:
        return self.posterior().diagonal()[self.problem.p :]

    @cached_property
    def _solved(self) -> FloatArray:
        layout = self.problem.sums.layout
        apart = np.zeros((layout.levels, len(self.free)))
        apart[:, self.free] = self.apart
        return np.concatenate([self.inner.coefficients(), layout.flat(apart)])

    def coefficients(self) -> FloatArray:
        return self._solved if self.mode is None else self.mode.beta

    def posterior(self) -> Posterior:
        layout = self.problem.sums.layout
        bridge = np.zeros((layout.levels, len(self.free), layout.dense))
        bridge[:, self.free] = self.bridge
        own = np.zeros((layout.levels, len(self.free), len(self.free)))
        own[np.ix_(np.arange(layout.levels), self.free, self.free)] = self.own
        return Posterior(self._dense, bridge, own, layout)
