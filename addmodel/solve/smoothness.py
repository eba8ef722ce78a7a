"""Choose the smoothing parameters: Newton on ρ = log λ, from several starts, infinity included.

A criterion can have several optima, and a smoothing parameter that runs to infinity is an exact
solution (the component has become its unpenalised part). So: Newton from common starts, one of them
with little smoothing; a block whose effective degrees of freedom vanish is held at infinity where
that is better; then each smoothing parameter alone is looked at over its whole range, and a better
place found there starts Newton again.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import scipy.optimize

from addmodel.solve.criteria import Criterion
from addmodel.solve.quadratic import Point, Problem
from addmodel.spaces.base import FloatArray

STEPS = 100
LONGEST_STEP = 4.0
"""In log λ: a quadratic says little farther off than that."""
GONE = 0.02
"""Below so many effective degrees of freedom a block is tried at infinity."""
RANGE = 1e-9
"""λ is sought from this part of the block's smallest curvature ..., and up to its largest / RANGE."""


@dataclass(frozen=True)
class Smoothness:
    """Chosen smoothing parameters, and how the choice went."""

    point: Point
    steps: int
    settled: bool
    gradient: FloatArray  # (blocks,) of the cost in log λ; zero for those fixed or at infinity
    at_zero: tuple[int, ...]
    """Blocks whose smoothing parameter ran to zero (its lower bound)."""


@dataclass(frozen=True)
class Bounds:
    """Range of log λ of each block, from the sizes of its curvatures."""

    lower: FloatArray
    upper: FloatArray

    @classmethod
    def of(cls, problem: Problem) -> Bounds:
        diagonal = np.diag(problem.schur)
        tiny = np.finfo(float).tiny
        small = [max(float(diagonal[s].min()), tiny) for s in problem.slices]
        large = [max(float(diagonal[s].max()), tiny) for s in problem.slices]
        return cls(np.log(np.array(small) * RANGE), np.log(np.array(large) / RANGE))


def choose(
    problem: Problem,
    criterion: Criterion,
    fixed: Sequence[float | None],
    degrees: Sequence[float | None],
) -> Smoothness:
    """The smoothing parameters that the criterion prefers.

    Parameters
    ----------
    problem : Problem
        The reduced penalised quadratic.
    criterion : Criterion
        What is made small.
    fixed : sequence of float or None
        A block's smoothing parameter where it is given, None where it is to be chosen.
    degrees : sequence of float or None
        A block's effective degrees of freedom where those are given instead.
    """
    given = np.array([np.nan if f is None else f for f in fixed], dtype=np.float64)
    targets = {j: d for j, d in enumerate(degrees) if d is not None}
    if not targets:
        return choose_free(problem, criterion, given)
    for j, target in targets.items():
        given[j] = ridge_for(np.diag(problem.schur)[problem.slices[j]], target)
    for _ in range(50):
        # The others at their best for these, then these for the others, until nothing moves.
        found = choose_free(problem, criterion, given)
        before = given.copy()
        smoothing = found.point.smoothing.copy()
        for j, target in targets.items():
            given[j] = smoothing[j] = ridge_reaching(problem, smoothing, j, target)
        if np.nanmax(np.abs(np.log(given / before))) < 1e-9:
            break
    return found


def ridge_reaching(problem: Problem, smoothing: FloatArray, block: int, target: float) -> float:
    """λ of a block that gives it `target` effective degrees of freedom beside the others."""

    def excess(rho: float) -> float:
        trial = smoothing.copy()
        trial[block] = np.exp(rho)
        point = problem.at(trial)
        return problem.sizes[block] - float(point.lost[point.blocks.index(block)]) - target

    bounds = Bounds.of(problem)
    return float(
        np.exp(scipy.optimize.brentq(excess, bounds.lower[block], bounds.upper[block], xtol=1e-11))
    )


def choose_free(problem: Problem, criterion: Criterion, given: FloatArray) -> Smoothness:
    """As `choose`; `given` holds NaN where a smoothing parameter is to be chosen."""
    free = np.flatnonzero(np.isnan(given))
    bounds = Bounds.of(problem)
    if len(free) == 0:
        return _result(problem.at(given), criterion, free, bounds, 0, True)
    best: Smoothness | None = None
    steps = 0
    for start in starts(problem, free):
        smoothing = given.copy()
        smoothing[free] = start[free]
        found = newton(problem, criterion, smoothing, free, bounds)
        steps += found.steps
        if best is None or criterion.cost(found.point) < criterion.cost(best.point) - 1e-9:
            best = found
    assert best is not None
    for _ in range(2 * len(free) + 2):
        better = look_around(best.point, criterion, free, bounds)
        if better is None:
            break
        found = newton(problem, criterion, better, free, bounds)
        steps += found.steps
        if criterion.cost(found.point) >= criterion.cost(best.point) - 1e-9:
            break
        best = found
    return Smoothness(best.point, steps, best.settled, best.gradient, best.at_zero)


def newton_from(
    found: Smoothness, problem: Problem, criterion: Criterion, free: Sequence[bool]
) -> Smoothness:
    """Newton once more from a solution already found, on sums taken anew about it."""
    moving = np.flatnonzero(free)
    again = newton(problem, criterion, found.point.smoothing, moving, Bounds.of(problem))
    return replace(again, steps=found.steps + again.steps - 1)


def starts(problem: Problem, free: np.ndarray) -> list[FloatArray]:
    """Common starts: a few effective degrees of freedom a block, and most of them all."""
    diagonal = np.diag(problem.schur)
    result = []
    for few, share in ((3.0, 0.25), (np.inf, 0.6)):
        lam = np.ones(len(problem.sizes))
        for j in free:
            d = diagonal[problem.slices[j]]
            lam[j] = ridge_for(d, min(few, share * len(d)))
        result.append(lam)
    return result


def ridge_for(d: FloatArray, target: float) -> float:
    """λ with Σ d/(d + λ) = target, by bisection in log λ."""
    low, high = np.log(d.min() + 1e-300) - 40, np.log(d.max() + 1e-300) + 40
    for _ in range(60):
        middle = (low + high) / 2
        if np.sum(d / (d + np.exp(middle))) > target:
            low = middle
        else:
            high = middle
    return float(np.exp((low + high) / 2))


def newton(
    problem: Problem, criterion: Criterion, smoothing: FloatArray, free: np.ndarray, bounds: Bounds
) -> Smoothness:
    """Newton's method with a positive-definite safeguard and step-halving, from `smoothing`."""
    point = problem.at(smoothing)
    cost = criterion.cost(point)
    settled = False
    steps = 0
    for steps in range(1, STEPS + 1):  # noqa: B007 - the count is reported
        point, cost = hold_at_infinity(point, cost, criterion, free)
        moving = np.flatnonzero(np.isin(point.blocks, free))
        if len(moving) == 0:
            settled = True
            break
        names = np.array(point.blocks)[moving]
        rho = np.log(point.smoothing[names])
        gradient = criterion.gradient(point)[moving]
        pinned = (rho <= bounds.lower[names] + 1e-9) & (gradient > 0)
        if np.abs(gradient[~pinned]).max(initial=0.0) < 1e-10 * max(1.0, abs(cost)):
            settled = True
            break
        hessian = criterion.hessian(point)[np.ix_(moving, moving)]
        step = np.zeros(len(names))
        step[~pinned] = descent(gradient[~pinned], hessian[np.ix_(~pinned, ~pinned)])
        moved = False
        for _ in range(25):
            trial = point.smoothing.copy()
            trial[names] = np.exp(np.clip(rho + step, bounds.lower[names], bounds.upper[names]))
            candidate = problem.at(trial)
            value = criterion.cost(candidate)
            if value < cost:
                moved = True
                break
            step /= 2
        if not moved:
            # No lower value along the descent: the cost is flat to rounding, or we are stuck.
            settled = bool(np.abs(gradient[~pinned]).max() < 1e-6 * max(1.0, abs(cost)))
            break
        point, cost = candidate, value
    return _result(point, criterion, free, bounds, steps, settled)


def descent(gradient: FloatArray, hessian: FloatArray) -> FloatArray:
    """Newton's step with the Hessian's eigenvalues made positive, no longer than LONGEST_STEP."""
    values, vectors = np.linalg.eigh(hessian)
    floor = max(1e-3 * np.abs(values).max(), 1e-12)
    step = -vectors @ ((vectors.T @ gradient) / np.maximum(np.abs(values), floor))
    longest = np.abs(step).max()
    if longest > LONGEST_STEP:
        step *= LONGEST_STEP / longest
    return np.asarray(step, dtype=np.float64)


def hold_at_infinity(
    point: Point, cost: float, criterion: Criterion, free: np.ndarray
) -> tuple[Point, float]:
    """Move blocks that are all but gone to λ = ∞, where that does not cost anything."""
    while True:
        sizes = np.array([point.problem.sizes[j] for j in point.blocks])
        left = sizes - point.lost
        gone = [
            j
            for j, df in zip(point.blocks, left, strict=True)
            if df < GONE and j in free and np.isfinite(point.smoothing[j])
        ]
        for j in gone:
            trial = point.smoothing.copy()
            trial[j] = np.inf
            candidate = point.problem.at(trial)
            value = criterion.cost(candidate)
            if value <= cost:
                point, cost = candidate, value
                break
        else:
            return point, cost


def look_around(
    point: Point, criterion: Criterion, free: np.ndarray, bounds: Bounds
) -> FloatArray | None:
    """Each smoothing parameter alone over its whole range: a better place, or None."""
    best = criterion.cost(point) - 1e-7 * max(1.0, abs(criterion.cost(point)))
    place: FloatArray | None = None
    for j in free:
        diagonal = np.diag(point.problem.schur)[point.problem.slices[j]]
        size = len(diagonal)
        targets = [t for t in (0.1, 1.0, 4.0, 12.0) if t < 0.5 * size] + [0.6 * size, 0.9 * size]
        trials = [np.inf] + [ridge_for(diagonal, t) for t in targets]
        for lam in trials:
            trial = point.smoothing.copy()
            trial[j] = lam
            value = criterion.cost(point.problem.at(trial))
            if value < best:
                best, place = value, trial
    return place


def _result(
    point: Point,
    criterion: Criterion,
    free: np.ndarray,
    bounds: Bounds,
    steps: int,
    settled: bool,
) -> Smoothness:
    gradient = np.zeros(len(point.problem.sizes))
    if point.blocks:
        gradient[point.blocks] = criterion.gradient(point)
    fixed = np.setdiff1d(np.arange(len(gradient)), free)
    gradient[fixed] = 0.0
    with np.errstate(divide="ignore"):
        rho = np.log(point.smoothing)
    at_zero = tuple(int(j) for j in free if rho[j] <= bounds.lower[j] + 1e-6)
    return Smoothness(point, steps, settled, gradient, at_zero)
