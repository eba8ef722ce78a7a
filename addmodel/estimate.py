"""From checked data to what was estimated: design, rows, smoothness, detail, tied together.

`estimate` is the loop that the user never sees: lay the design, sum the rows, choose the smoothing
parameters, ask whether the detail was enough, and go again with more where it was not.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

import numpy as np
from threadpoolctl import ThreadpoolController

from addmodel.component import Design
from addmodel.data import Table
from addmodel.errors import ModelError
from addmodel.formula import Model
from addmodel.outcomes import Outcome
from addmodel.rows.dense import DenseRows
from addmodel.solve.criteria import Criterion
from addmodel.solve.detail import CEILING, wanted
from addmodel.solve.quadratic import Problem
from addmodel.solve.smoothness import Smoothness, choose, polish
from addmodel.spaces.base import FloatArray, Penalised

ROUNDS = 16
DIGITS = 1e-5
"""When so little of the starting deviance is left, it is summed again about the solution."""
Progress = Callable[[str], None]


@dataclass(frozen=True)
class Reading:
    """What became of the rows as read."""

    read: int
    missing: int
    weightless: int
    used: int


@dataclass(frozen=True)
class Estimate:
    """What was estimated, and nothing derived.

    Coefficients and their posterior covariance are in the solver's coordinates (see
    `Design.reporting`).
    """

    model: Model
    design: Design
    outcome: Outcome
    criterion: str
    coefficients: FloatArray  # (P,)
    covariance: FloatArray  # (P, P) posterior: σ² A⁻¹ (Wahba 1983, J. R. Stat. Soc. B 45)
    gram: FloatArray  # (P, P) X'WX
    smoothing: FloatArray  # (blocks,) λ, may be infinite
    scale: float
    deviance: float
    null_deviance: float
    log_likelihood: float
    criterion_value: float
    n: float
    """Rows of positive weight, counts counted."""
    reading: Reading
    steps: int
    settled: bool
    gradient: FloatArray  # (blocks,)
    detail_confirmed: tuple[bool, ...]
    """For each component: whether its detail was seen to be enough."""
    cautions: tuple[str, ...]
    arguments: dict[str, str]
    """How weights, counts and offset were given, in words: for the summary's recipe."""
    table: Table | None
    linear_predictor: FloatArray | None  # (n,)

    @property
    def column_df(self) -> FloatArray:
        """diag(A⁻¹X'WX): each column's effective degrees of freedom, (P,)."""
        return np.asarray(
            np.einsum("ij,ji->i", self.covariance, self.gram) / self.scale, dtype=np.float64
        )

    def component_df(self, component: int) -> float:
        """Effective degrees of freedom of a component."""
        return float(self.column_df[self.design.places(component)].sum())

    def at_infinity(self, component: int) -> bool:
        """Whether all of a component's penalised part has vanished."""
        own = [j for j, owner in enumerate(self.design.block_owners) if owner == component]
        return bool(own) and bool(np.isinf(self.smoothing[own]).all())


def estimate(
    model: Model,
    table: Table,
    outcome: Outcome,
    criterion: Criterion,
    arguments: dict[str, str],
    progress: Progress,
) -> Estimate:
    """Fit the model.

    Parameters
    ----------
    model : Model
        The parsed formula.
    table : Table
        The checked data.
    outcome : Outcome
        What is assumed of the outcome.
    criterion : Criterion
        How smoothness is chosen.
    arguments : dict
        How weights, counts and offset were given, in words.
    progress : callable
        Told in words what is going on.

    Raises
    ------
    FormulaError, ModelError
        Where the model has no meaning on these data.
    """
    # At a few hundred columns two BLAS threads are slower than one, most of all on a busy machine.
    with _threads().limit(limits=1, user_api="blas"):
        return _estimate(model, table, outcome, criterion, arguments, progress)


@cache
def _threads() -> ThreadpoolController:
    return ThreadpoolController()


def _estimate(
    model: Model,
    table: Table,
    outcome: Outcome,
    criterion: Criterion,
    arguments: dict[str, str],
    progress: Progress,
) -> Estimate:
    weights = table.weights * table.counts
    _check_outcome(table)
    progress("laying the components on the data")
    design = Design.lay(model, table)
    confirmed = [False] * len(design.components)
    steps = 0
    for turn in range(ROUNDS):
        progress(f"choosing smoothness ({sum(design.block_sizes)} functions)")
        laid = Laid.on(design, table, outcome)
        smoothness = laid.smoothness(criterion)
        steps += smoothness.steps
        point = smoothness.point
        eta = laid.rows.linear_predictor(point.coefficients())
        sizes, confirmed = _sizes(
            design, smoothness, table, table.outcome - eta, weights, criterion.scale(point)
        )
        if turn == ROUNDS - 1 or sizes == _present(design):
            break
        design = design.resized(sizes, table)
    problem = point.problem
    scale = criterion.scale(point)
    return Estimate(
        model=model,
        design=design,
        outcome=outcome,
        criterion=criterion.name,
        coefficients=point.coefficients(),
        covariance=scale * point.covariance(),
        gram=problem.sums.gram,
        smoothing=point.smoothing,
        scale=scale,
        deviance=point.deviance,
        null_deviance=_null_deviance(table, weights),
        log_likelihood=_log_likelihood(point.deviance, problem.n, problem.log_weights),
        criterion_value=criterion.reported(point),
        n=problem.n,
        reading=Reading(table.n_read, table.n_missing, table.n_weightless, len(table.rows)),
        steps=steps,
        settled=smoothness.settled,
        gradient=smoothness.gradient,
        detail_confirmed=tuple(confirmed),
        cautions=(*table.cautions, *design.notes, *_cautions(design, smoothness)),
        arguments=arguments,
        table=table,
        linear_predictor=eta,
    )


@dataclass(frozen=True)
class Laid:
    """A design laid on rows: gives the penalised problem about any coefficients."""

    design: Design
    rows: DenseRows
    outcome: Outcome
    start: FloatArray  # (P,)
    log_det_design: float
    log_weights: float
    n: float

    @classmethod
    def on(cls, design: Design, table: Table, outcome: Outcome) -> Laid:
        """The design's columns at the rows of the table."""
        weights = table.weights * table.counts
        values = {key: column.values for key, column in table.columns.items()}
        columns = design.matrix(values, len(weights))
        plain = columns[:, : design.p] * np.sqrt(table.counts)[:, None]
        diagonal = np.diag(np.linalg.qr(plain)[1])
        # Starting at the mean keeps the digits of a large constant out of the sums of squares.
        start = np.zeros(columns.shape[1])
        start[0] = np.average(table.outcome - table.offset, weights=weights)
        return cls(
            design=design,
            rows=DenseRows(columns, table.outcome, weights, table.offset),
            outcome=outcome,
            start=start,
            log_det_design=2 * float(np.log(np.abs(diagonal)).sum()),
            log_weights=float(table.counts @ np.log(table.weights)),
            n=float(table.counts.sum()),
        )

    def problem(self, coefficients: FloatArray, gram: FloatArray | None = None) -> Problem:
        """The penalised quadratic about the coefficients (P,)."""
        return Problem.of(
            self.rows.sweep(coefficients, self.outcome, gram),
            self.design.p,
            self.design.block_sizes,
            log_det_design=self.log_det_design,
            log_weights=self.log_weights,
            n=self.n,
        )

    def smoothness(self, criterion: Criterion) -> Smoothness:
        """Choose smoothness; from sums taken anew about the solution where digits were lost."""
        owners = [self.design.components[j] for j in self.design.block_owners]
        fixed = [c.smoothing for c in owners]
        degrees = [None if c.df is None else c.df - len(c.own) for c in owners]
        problem = self.problem(self.start)
        for j, spanned in enumerate(problem.spanned):
            if spanned and (fixed[j] is not None or degrees[j] is not None):
                raise ModelError(
                    f"The bend of {owners[j].name} is wholly in the levels of other terms, so "
                    "df= and smoothing= have no meaning for it. Leave out one of the terms."
                )
            if spanned:
                fixed[j] = np.inf
        first = choose(problem, criterion, fixed, degrees)
        free = np.flatnonzero(
            [f is None and d is None for f, d in zip(fixed, degrees, strict=True)]
        )
        point = first.point
        if point.penalised_deviance < DIGITS * problem.sums.deviance:
            # A Gaussian outcome's weights do not change with its mean, so X'WX stays.
            again = self.problem(point.coefficients(), problem.sums.gram)
            point = again.at(point.smoothing)
        return polish(first, point, criterion, free)


def _sizes(
    design: Design,
    smoothness: Smoothness,
    table: Table,
    residuals: FloatArray,
    weights: FloatArray,
    scale: float,
) -> tuple[list[int], list[bool]]:
    """The detail each component should have, and whether what it has was confirmed."""
    point = smoothness.point
    shrinkage = np.ones(sum(design.block_sizes))
    shrinkage[point.index] = point.shrinkage
    places = iter(point.problem.slices)
    sizes, confirmed = [], []
    for component in design.components:
        (space,) = component.spaces
        if not isinstance(space, Penalised):
            sizes.append(0)
            confirmed.append(True)
            continue
        place = next(places)
        size = space.size
        if not component.everything and scale > 0:
            x = table.columns[space.key].values
            size = wanted(space, shrinkage[place], x, residuals, weights, scale)
        sizes.append(size)
        everything = space.size == space.distinct - 1 - len(space.unpenalised_names)
        tail = shrinkage[place][-max(1, space.size // 10) :]
        confirmed.append(everything or (size == space.size and bool(tail.min() >= 0.99)))
    return sizes, confirmed


def _present(design: Design) -> list[int]:
    return [c.spaces[0].size for c in design.components]


def _check_outcome(table: Table) -> None:
    if np.ptp(table.outcome - table.offset) == 0:
        raise ModelError(
            f"{table.outcome_name} has the same value in all rows used: nothing is left to explain."
        )


def _null_deviance(table: Table, weights: FloatArray) -> float:
    left = table.outcome - table.offset
    centred = left - np.average(left, weights=weights)
    return float(weights @ centred**2)


def _log_likelihood(deviance: float, n: float, log_weights: float) -> float:
    """Gaussian log-likelihood at its own variance, deviance/n."""
    if deviance <= 0:
        return np.inf
    return float(-0.5 * n * (np.log(2 * np.pi * deviance / n) + 1) + 0.5 * log_weights)


def _cautions(design: Design, smoothness: Smoothness) -> list[str]:
    found = []
    if not smoothness.settled:
        names = [design.components[j].name for j in design.block_owners]
        worst = names[int(np.abs(smoothness.gradient).argmax())]
        found.append(
            f"The choice of smoothness did not settle, most of all for {worst}. Treat its curve "
            "and its degrees of freedom as approximate; see if it competes with another component."
        )
    for j, spanned in enumerate(smoothness.point.problem.spanned):
        if spanned:
            found.append(
                f"The bend of {design.components[design.block_owners[j]].name} is wholly in the "
                "levels of other terms: it adds nothing to them."
            )
    for j in smoothness.at_zero:
        name = design.components[design.block_owners[j]].name
        found.append(
            f"The smoothing parameter of {name} ran to zero: it follows the data as closely "
            "as its functions allow. Look for repeated rows or an outcome without noise."
        )
    for component in design.components:
        (space,) = component.spaces
        if not isinstance(space, Penalised) or component.everything:
            continue
        if space.size == CEILING < space.most:
            found.append(
                f"{component.name} uses {CEILING} functions, the most that are kept unless "
                'detail="all" is given.'
            )
    return found
