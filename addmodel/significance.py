"""Which components matter, and which are more than a straight line.

Two questions of a component. `p_straight`: is its penalised part zero? Asked in the model that has
its unpenalised part and none of its penalised blocks, the other smoothing parameters estimated
there. `p_none`: is all of it zero? Asked in the model without it: there the test of its unpenalised
part (chi-square or F) and that of its penalised part, given the other, are independent, and the
smaller p counts: 1 − (1 − p_min)², exact below about a third. Several blocks are stacked, each over
the root of its trace, with one common variance.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from itertools import pairwise
from typing import NamedTuple

import numpy as np
import scipy.linalg
import scipy.stats

from addmodel.errors import ModelError
from addmodel.estimate import Estimate, one_thread
from addmodel.laid import Laid
from addmodel.matrix import IntArray
from addmodel.solve.criteria import CRITERIA
from addmodel.solve.quadratic import Solution, factored
from addmodel.solve.restricted_ratio import Contrasts, p_value
from addmodel.solve.smoothness import ridges_for, settled_from
from addmodel.spaces.base import FloatArray
from addmodel.straight import beyond

PRECISELY = 1e-7
"""Largest gradient of the null fit, as a part of the cost."""
SUPPLE = 8.0
MOST_LEVELS = 1_500
"""Beyond so many coefficients of groups the null law is that of many groups, ½χ²₀ + ½χ²₁."""


class Answer(NamedTuple):
    """p values of a component, or of several together; NaN where there is no such part."""

    none: float
    straight: float


@dataclass(frozen=True)
class NullFit:
    """The model without a part: its mode, and where the part's columns are."""

    solution: Solution
    beta: FloatArray  # (P,) with zeros in place of what is left out
    smoothing: FloatArray
    dropped: IntArray  # unpenalised columns left out
    held: tuple[int, ...]  # blocks left out


@dataclass(frozen=True)
class Questions:
    """A fitted model to ask."""

    estimate: Estimate

    @cached_property
    def laid(self) -> Laid:
        """The design on the rows of the fit."""
        estimate = self.estimate
        if estimate.table is None:
            raise ModelError("A saved fit has no rows to test on: ask before it is saved.")
        criterion = CRITERIA[estimate.criterion]
        return Laid.on(estimate.design, estimate.table, estimate.outcome, criterion, estimate.scale)

    def of(self, components: Sequence[int]) -> Answer:
        """Test components together."""
        design = self.estimate.design
        blocks = tuple(k for k, owner in enumerate(design.block_owners) if owner in components)
        spanned = self.laid.modes.quadratic(self.estimate.coefficients, fisher=True).spanned
        blocks = tuple(k for k in blocks if not spanned[k])
        places = [design.unpenalised_places[j] for j in components]
        own = [np.arange(place.start, place.stop) for place in places]
        columns = np.concatenate([np.empty(0, dtype=np.int64), *own])
        with one_thread():
            straight = np.nan
            if blocks and len(columns):
                straight = self._penalised(self._null(columns[:0], blocks))
            none = self._none(columns, blocks)
        return Answer(none, straight)

    def overlap(self, component: int) -> float:
        """How much of a component the others could do, 0 to 1.

        The part of f_j's weighted sum of squares that the other components take away when they are
        fitted to it, each at least as free as SUPPLE degrees of freedom make it (one that came out
        flat could have done it all the same; groups as they came out); NaN where f_j is nothing.
        """
        design, estimate, modes = self.estimate.design, self.estimate, self.laid.modes
        place = design.unpenalised_places[component]
        columns = np.arange(place.start, place.stop)
        alone = np.zeros_like(estimate.coefficients)
        own = design.places(component)
        alone[own] = estimate.coefficients[own]
        rows = modes.rows
        part = rows.linear_predictor(alone) - rows.linear_predictor(np.zeros_like(alone))
        smoothing = estimate.smoothing.copy()
        problem = modes.quadratic(estimate.coefficients, fisher=True)
        for k, block in enumerate(design.blocks):
            if not block.grouped and not problem.spanned[k]:
                supple = float(ridges_for(problem, k, [min(SUPPLE, 0.5 * block.size)])[0])
                smoothing[k] = min(smoothing[k], supple)
        smoothing[design.blocks_of(component)] = np.inf
        with one_thread():
            return modes.without(columns).taken_away(part, smoothing)

    def beyond(self) -> FloatArray:
        """What smoothing parameters at infinity add to the uncertainty, (P, r)."""
        estimate = self.estimate
        if not np.isinf(estimate.smoothing).any():
            return np.zeros((len(estimate.coefficients), 0))
        with one_thread():
            solution = self.laid.modes.solution(estimate.smoothing, estimate.coefficients)
            return beyond(self.laid, solution, CRITERIA[estimate.criterion])

    def answered(self) -> Estimate:
        """The estimate with all that its rows are needed for."""
        estimate = self.estimate
        answers = [(*self.of([j]), self.overlap(j)) for j in range(estimate.design.count)]
        return replace(estimate, answers=tuple(answers), beyond=self.beyond())

    def _null(self, columns: IntArray, blocks: tuple[int, ...]) -> NullFit:
        """Fit without these unpenalised columns and blocks, from the full fit's λ and β."""
        estimate, laid = self.estimate, self.laid
        criterion = CRITERIA[estimate.criterion]
        modes = laid.modes.without(columns)
        smoothing = estimate.smoothing.copy()
        smoothing[list(blocks)] = np.inf
        free = np.setdiff1d(laid.free_blocks, blocks)
        start = estimate.coefficients.copy()
        for k in blocks:
            start[estimate.design.block_places[k]] = 0.0
        point = modes.solution(smoothing, np.delete(start, columns))
        found = settled_from(point, criterion, free, PRECISELY)
        kept = np.setdiff1d(np.arange(len(start)), columns)
        beta = np.zeros(len(start))
        beta[kept] = found.point.coefficients()
        return NullFit(found.point, beta, found.point.smoothing, columns, blocks)

    def _none(self, columns: IntArray, blocks: tuple[int, ...]) -> float:
        if not len(columns) and not blocks:
            return float("nan")  # all of it is in other components
        null = self._null(columns, blocks)
        if not len(columns):
            return self._penalised(null)
        parts = self._parts(null)
        k = len(columns)
        first, cross = parts.information[:k, :k], parts.information[:k, k:]
        factor = factored(first)
        solved = scipy.linalg.cho_solve(factor, parts.pull[:k])
        taken = float(parts.pull[:k] @ solved)
        left, freedom, scale = self._noise(null)
        if scale is None:
            rest = max(freedom - k, 1.0)
            ratio = (taken / k) / max((left - taken) / rest, np.finfo(float).tiny)
            p_first = float(scipy.stats.f.sf(ratio, k, rest))
        else:
            p_first = float(scipy.stats.chi2.sf(taken / scale, k))
        if not blocks or parts.many:
            return p_first if not blocks else _combined(p_first, self._many(null))
        pull = parts.pull[k:] - cross.T @ solved
        information = parts.information[k:, k:] - cross.T @ scipy.linalg.cho_solve(factor, cross)
        second = Contrasts.of(
            *_stacked(pull, information, parts.sizes), left - taken, freedom - k, scale
        )
        return _combined(p_first, p_value(second))

    def _penalised(self, null: NullFit) -> float:
        parts = self._parts(null)
        if parts.many:
            return self._many(null)
        left, freedom, scale = self._noise(null)
        pull, information = _stacked(parts.pull, parts.information, parts.sizes)
        return p_value(Contrasts.of(pull, information, left, freedom, scale))

    def _many(self, null: NullFit) -> float:
        """Twice the gain in restricted likelihood against ½χ²₀ + ½χ²₁ (Stram & Lee 1994)."""
        criterion = CRITERIA[self.estimate.criterion]
        full = -self.estimate.criterion_value
        gain = 2 * (criterion.cost(null.solution) - full)
        return 1.0 if gain <= 1e-9 else 0.5 * float(scipy.stats.chi2.sf(gain, 1))

    def _noise(self, null: NullFit) -> tuple[float, float, float | None]:
        """S₀ and its degrees of freedom, or the scale where it is known."""
        outcome, solution = self.estimate.outcome, null.solution
        freedom = solution.problem.n - solution.problem.p
        if outcome.scale_known:
            return 0.0, freedom, 1.0
        if outcome.plain:
            return solution.penalised_deviance, freedom, None
        table, rows = self.estimate.table, self.laid.modes.rows
        assert table is not None
        eta = rows.linear_predictor(null.beta)
        curvature = outcome.curvature(table.outcome, eta, table.prior)
        working = float((curvature.slope**2 / np.maximum(curvature.fisher, 1e-300)).sum())
        return working + float(solution.roughness.sum()), freedom, None

    def _parts(self, null: NullFit) -> Parts:
        """u and M of the columns left out, unpenalised ones first, about the null fit's mode."""
        design, layout = self.estimate.design, self.estimate.design.layout
        sums = self.laid.modes.quadratic(null.beta, fisher=True).sums
        gram, score = sums.gram, sums.score
        blocks = design.blocks
        # Columns of the group set apart: those asked about, and those in the null model.
        lam = np.repeat(
            null.smoothing[[k for k, b in enumerate(blocks) if b.apart]].astype(float),
            layout.parts,
        )
        asked = np.concatenate(
            [
                np.zeros(0, dtype=bool),
                *(np.full(b.size, k in null.held) for k, b in enumerate(blocks) if b.apart),
            ]
        )
        kept = np.isfinite(lam) & ~asked
        inverse = np.linalg.inv(gram.own[:, kept][:, :, kept] + np.diag(lam[kept]))
        bridge = inverse @ gram.across[:, kept]
        flat = gram.across[:, kept].reshape(-1, layout.dense)
        dense = gram.dense - flat.T @ bridge.reshape(-1, layout.dense)
        turned = gram.own[:, asked][:, :, kept] @ inverse
        across = gram.across[:, asked] - turned @ gram.across[:, kept]
        own = gram.own[:, asked][:, :, asked] - turned @ gram.own[:, kept][:, :, asked]
        # Dense columns: those in the null model, and those asked about.
        places = design.block_places
        ridge = np.zeros(layout.dense)
        inside = [np.setdiff1d(np.arange(design.p), null.dropped)]
        outside, sizes = [null.dropped], []
        for k, block in enumerate(blocks):
            if block.apart:
                continue
            at = np.arange(places[k].start, places[k].stop)
            if k in null.held:
                outside.append(at)
                sizes.append(len(at))
            elif np.isfinite(null.smoothing[k]):
                inside.append(at)
                ridge[at] = null.smoothing[k]
        base, out = np.concatenate(inside), np.concatenate(outside).astype(np.int64)
        inner = dense[np.ix_(base, base)] + np.diag(ridge[base])
        many = own.shape[0] * own.shape[1] > MOST_LEVELS
        wide = np.empty((len(base), 0))
        theirs = np.empty((0, 0))
        pull = score[out]
        cross_out = np.empty((len(out), 0))
        if asked.any() and not many:
            levels, b = own.shape[:2]
            rows = across.transpose(1, 0, 2).reshape(levels * b, layout.dense)
            wide, cross_out = rows[:, base].T, rows[:, out].T
            theirs = np.zeros((levels * b, levels * b))
            for i in range(b):
                for j in range(b):
                    at_i, at_j = np.arange(levels) + i * levels, np.arange(levels) + j * levels
                    theirs[at_i, at_j] = own[:, i, j]
            pulled = layout.by_level(score)[:, asked]
            pull = np.concatenate([pull, pulled.T.ravel()])
            sizes += [b.size * levels for k, b in enumerate(blocks) if b.apart and k in null.held]
        columns = np.concatenate([dense[np.ix_(base, out)], wide], axis=1)
        square = np.block([[dense[np.ix_(out, out)], cross_out], [cross_out.T, theirs]])
        solved = scipy.linalg.cho_solve(factored(inner), columns)
        return Parts(pull, square - columns.T @ solved, tuple(sizes), many)


class Parts(NamedTuple):
    """What is asked about, in the null model."""

    pull: FloatArray  # u
    information: FloatArray  # M
    sizes: tuple[int, ...]  # of the blocks, after the unpenalised columns
    many: bool
    """Groups of too many levels are asked about: they are not among the columns."""


def _stacked(
    pull: FloatArray, information: FloatArray, sizes: Sequence[int]
) -> tuple[FloatArray, FloatArray]:
    """Each block over the root of its trace."""
    if len(sizes) < 2:
        return pull, information
    ends = np.cumsum([0, *sizes])
    scale = np.ones(len(pull))
    for start, stop in pairwise(ends):
        trace = float(np.trace(information[start:stop, start:stop]))
        scale[start:stop] = 1 / np.sqrt(max(trace, np.finfo(float).tiny))
    return pull * scale, information * np.outer(scale, scale)


def _combined(first: float, second: float) -> float:
    """The smaller of two independent p values, for what it is worth."""
    return float(-np.expm1(2 * np.log1p(-min(first, second)))) if min(first, second) < 1 else 1.0
