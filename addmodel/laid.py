"""A design laid on rows: its penalised problem, smoothness, scale and dispersion."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import scipy.optimize

from addmodel.cells import MANY_ROWS
from addmodel.data import Table
from addmodel.design import Design
from addmodel.errors import ModelError
from addmodel.matrix import DesignMatrix, Layout
from addmodel.outcomes import Outcome
from addmodel.outcomes.likelihood import Likelihood
from addmodel.rows.base import Rows
from addmodel.rows.dense import DenseRows
from addmodel.rows.tables import Part, TableRows
from addmodel.solve.criteria import Criterion
from addmodel.solve.pirls import Modes
from addmodel.solve.quadratic import IndexArray, Solution
from addmodel.solve.smoothness import MODALLY, Smoothness, choose, choose_mode, newton, polish
from addmodel.spaces.base import FloatArray

DIGITS = 1e-5
"""When so little of the starting deviance is left, it is summed again about the solution."""
DISPERSIONS = (float(np.log(1e-6)), float(np.log(1e3)))
"""Range of log α of the negative binomial."""


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
        rows = rows_of(design, table)
        start = np.zeros(design.layout.total)
        start[0] = null_predictor(table, outcome)
        modes = Modes(
            rows=rows,
            outcome=outcome,
            p=design.p,
            sizes=design.block_sizes,
            log_det_design=rows.log_det_design(design.p, table.counts),
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
        blocks = self.design.blocks
        fixed = [b.fixed for b in blocks]
        degrees = [
            None if b.df is None else b.df - len(c.own) for b, c in zip(blocks, owners, strict=True)
        ]
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
        point = first.point
        if point.penalised_deviance < DIGITS * problem.sums.deviance:
            gram = problem.sums.gram  # a Gaussian outcome's weights do not change with its mean
            again = self.modes.quadratic(point.coefficients(), fisher=True, gram=gram)
            point = again.at(point.smoothing)
        return polish(first, point, criterion, self.free_blocks)

    @property
    def free_blocks(self) -> IndexArray:
        """The blocks whose smoothing parameter is to be chosen."""
        return np.flatnonzero([b.fixed is None and b.df is None for b in self.design.blocks])


def rows_of(design: Design, table: Table) -> Rows:
    """Dense columns up to MANY_ROWS rows, and where nothing was rounded; tables beyond."""
    values = table.values
    n = len(table.outcome)
    if n <= MANY_ROWS:
        return DenseRows(table.outcome, table.prior, table.offset, design.matrix(values, n))
    coded = {key: np.unique(x, return_inverse=True) for key, x in values.items()}
    if np.mean([len(distinct) for distinct, _ in coded.values()]) > n / 4:
        return DenseRows(table.outcome, table.prior, table.offset, design.matrix(values, n))
    layout = design.layout
    first = Part(np.ones((1, 1)), np.zeros(n, dtype=np.int64), np.zeros(1, dtype=np.int64))
    parts = [first]
    wide = np.empty((n, sum(layout.parts)))
    codes = np.full(n, -1)
    for j, component in enumerate(design.components):
        flat, extent = np.zeros(n, dtype=np.int64), 1
        for key in component.keys:
            distinct, where = coded[key]
            extent *= len(distinct)
            if extent > 2**62:
                raise ModelError(f"{component.name} has too many combinations of values.")
            flat = flat * len(distinct) + where
        _, one, cells = np.unique(flat, return_index=True, return_inverse=True)
        at_cells = {key: values[key][one] for key in component.keys}
        matrix = design.matrix(at_cells, len(one), [j])
        dense, apart = design.masks([j], intercept=False)
        places = np.flatnonzero(dense)
        if len(places):
            parts.append(Part(matrix.dense[:, places], cells, places))
        if apart.any():
            wide[:, apart] = matrix.wide[cells][:, apart]
            codes = matrix.codes[cells]
    return TableRows(table.outcome, table.prior, table.offset, tuple(parts), wide, codes, layout)


def likelihood_of(table: Table, outcome: Outcome, scale: float) -> Likelihood:
    """The outcome with the rows' constants; φ is fixed at `scale` unless it is profiled."""
    fixed = scale if outcome.scale_known or outcome.quasi else None
    return Likelihood(outcome, table.outcome, table.weights, table.counts, table.trials, fixed)


def null_predictor(table: Table, outcome: Outcome) -> float:
    """The constant linear predictor beside the offset, by Fisher scoring in one coefficient."""
    weights = table.prior
    n = len(weights)
    column = DesignMatrix(np.ones((n, 1)), np.empty((n, 0)), np.full(n, -1), Layout(1, 0, ()))
    one = DenseRows(table.outcome, weights, table.offset, column)
    mean = float(np.average(table.outcome, weights=weights))
    typical = outcome.family.starting_mu(np.array([mean, mean]))[:1]
    beta = np.asarray(outcome.family.link(typical), dtype=np.float64) - np.average(table.offset)
    for _ in range(50):
        sums = one.sweep(beta, outcome, fisher=True)
        step = sums.score / sums.gram.dense[0]
        size = 1.0
        while one.deviance(beta + size * step, outcome) > sums.deviance and size > 1e-9:
            size /= 2
        beta = beta + size * step
        if abs(float(step[0])) < 1e-10 * max(1.0, abs(float(beta[0]))):
            break
    return float(beta[0])


def quasi_scale(outcome: Outcome, table: Table, eta: FloatArray, point: Solution) -> float:
    """Pearson's X²/(n − τ) (Wedderburn 1974; McCullagh & Nelder 1989, ch. 9)."""
    pearson = outcome.pearson(table.outcome, outcome.mean(eta), table.prior)
    return max(pearson / max(point.problem.n - point.effective_df, 1.0), 1e-300)


def with_best_dispersion(
    laid: Laid, smoothness: Smoothness, criterion: Criterion
) -> tuple[Outcome, Smoothness]:
    """The negative binomial's dispersion α at the optimum of the criterion, with its smoothness.

    First α alone, the smoothing parameters held; then α is the outer coordinate of the criterion
    profiled over the free smoothing parameters, which start from those of the α before.
    """
    first = laid.modes.outcome
    free = laid.free_blocks
    found = smoothness

    def modes(log_alpha: float) -> Modes:
        return laid.with_outcome(first.with_dispersion(float(np.exp(log_alpha)))).modes

    def held(log_alpha: float) -> float:
        return criterion.cost(modes(log_alpha).at(smoothness.point.smoothing, laid.start))

    def profiled(log_alpha: float) -> float:
        nonlocal found
        mode = found.point.coefficients()
        point = modes(log_alpha).at(found.point.smoothing, mode)
        found = newton(point, criterion, free, MODALLY)
        return criterion.cost(found.point)

    best = _lowest(held, *DISPERSIONS, 0.05)
    for _ in range(4):
        low, high = max(best - 1.0, DISPERSIONS[0]), min(best + 1.0, DISPERSIONS[1])
        best = _lowest(profiled, low, high, 1e-6)
        profiled(best)
        if low + 1e-3 < best < high - 1e-3 or not DISPERSIONS[0] < best < DISPERSIONS[1]:
            break
    alone, found = found, replace(found, steps=smoothness.steps + found.steps)
    again = laid.with_outcome(first.with_dispersion(float(np.exp(best)))).smoothness(criterion)
    if criterion.cost(again.point) < criterion.cost(alone.point) - 1e-6:
        found = again  # another optimum of the smoothing parameters is better at this α
    return first.with_dispersion(float(np.exp(best))), found


def _lowest(cost: Callable[[float], float], low: float, high: float, within: float) -> float:
    found = scipy.optimize.minimize_scalar(
        lambda x: min(cost(x), 1e30),  # its parabolas cannot do with an infinite cost
        bounds=(low, high),
        method="bounded",
        options={"xatol": within},
    )
    return float(found.x)
