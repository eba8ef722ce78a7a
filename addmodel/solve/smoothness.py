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

from addmodel.errors import ModelError
from addmodel.solve.criteria import Criterion
from addmodel.solve.pirls import Modes
from addmodel.solve.quadratic import IndexArray, Quadratic, Solution
from addmodel.spaces.base import FloatArray

STEPS = 100
EXACTLY = 1e-9
"""Largest gradient at the optimum, as a part of the cost."""
ROUGHLY = 1e-5
"""The same while starts are compared."""
CHEAP = 200
"""So many functions at most make a start cost little."""
COMMON = (3.0, 8.0, 20.0)
"""Effective degrees of freedom of a block at common starts."""
MODALLY = 1e-8
"""The same where the Hessian leaves out the weights' change, so that the last steps are many."""
ROUNDS = 8
PART_OF, PART, SEED = 100_000, 20_000, 20_260_103
"""Of more rows than the first number so many are taken to begin with, by that seed."""
NEAR = 1.5
"""A place closer than this to the present one, in log λ, need not be looked at."""
LONGEST_STEP = 4.0
"""In log λ: a quadratic says little farther off than that."""
GONE = 0.02
"""Below so many effective degrees of freedom a block is tried at infinity."""
RANGE = 1e-9
"""λ is sought from RANGE · (a block's smallest curvature) to its largest / RANGE."""


@dataclass(frozen=True)
class Smoothness:
    """Chosen smoothing parameters, and how the choice went."""

    point: Solution
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
    def of(cls, problem: Quadratic) -> Bounds:
        diagonal = problem.curvature
        small = np.array([diagonal[s].min() for s in problem.slices])
        large = np.array([diagonal[s].max() for s in problem.slices])
        # Below the rounding of S itself, S + Λ need not be positive definite.
        rounding = np.maximum(1e-14 * large, np.finfo(float).tiny)
        lower = np.maximum(RANGE * small, rounding)
        return cls(np.log(lower), np.log(np.maximum(large, rounding) / RANGE))


def choose(
    problem: Quadratic,
    criterion: Criterion,
    fixed: Sequence[float | None],
    degrees: Sequence[float | None],
) -> Smoothness:
    """The smoothing parameters that the criterion prefers, near enough for `polish`.

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
        given[j] = ridges_for(problem, j, [target])[0]
    for _ in range(50):
        # The others at their best for these, then these for the others, until nothing moves.
        found = choose_free(problem, criterion, given)
        found = polish(found, found.point, criterion, np.flatnonzero(np.isnan(given)))
        before = given.copy()
        smoothing = found.point.smoothing.copy()
        for j, target in targets.items():
            given[j] = smoothing[j] = ridge_reaching(problem, smoothing, j, target)
        if max(abs(np.log(given[j]) - np.log(before[j])) for j in targets) < 1e-9:
            break
    return found


def ridge_reaching(problem: Quadratic, smoothing: FloatArray, block: int, target: float) -> float:
    """λ of a block that gives it `target` effective degrees of freedom beside the others."""

    def excess(rho: float) -> float:
        trial = smoothing.copy()
        trial[block] = np.exp(rho)
        point = problem.at(trial)
        return problem.sizes[block] - float(point.lost[point.blocks.index(block)]) - target

    bounds = Bounds.of(problem)
    if excess(bounds.lower[block]) < 0:
        raise ModelError(
            "df= asks for more effective degrees of freedom than the other terms leave to its "
            "component. Ask for fewer, or leave out a term that holds the same covariate."
        )
    return float(
        np.exp(scipy.optimize.brentq(excess, bounds.lower[block], bounds.upper[block], xtol=1e-11))
    )


def choose_mode(
    modes: Modes,
    criterion: Criterion,
    fixed: Sequence[float | None],
    degrees: Sequence[float | None],
    start: FloatArray,
) -> Smoothness:
    """As `choose`, where the weights change with the mean; the optimum of the criterion itself.

    Choosing on the working model, and the mode there, in turn, is only the start: then Newton on
    the criterion at the mode, whose smoothing parameters are looked at over their range as well.
    """
    n = len(modes.likelihood.y)
    free = np.flatnonzero([f is None and d is None for f, d in zip(fixed, degrees, strict=True)])
    if n > PART_OF:
        # Most of the way on a part of the rows, the same for the same rows; few steps are left.
        chosen = np.sort(np.random.default_rng(SEED).choice(n, PART, replace=False))
        try:
            begun = choose_mode(modes.part(chosen), criterion, fixed, degrees, start)
        except (np.linalg.LinAlgError, ModelError):
            begun = None  # the part lacks a level: begin with all rows
        if begun is not None and all(d is None for d in degrees):
            point = modes.at(begun.point.smoothing, begun.point.coefficients())
            best = settled_from(point, criterion, free, MODALLY)
            return replace(best, steps=begun.steps + best.steps)
    beta, steps = start, 0
    smoothing: FloatArray | None = None
    for _ in range(ROUNDS):
        working = choose(modes.quadratic(beta, fisher=True), criterion, fixed, degrees)
        steps += working.steps
        point = modes.at(working.point.smoothing, beta)
        beta = point.coefficients()
        if smoothing is not None and _close(point.smoothing, smoothing):
            break
        smoothing = point.smoothing
    best = settled_from(point, criterion, free, MODALLY)
    return replace(best, steps=steps + best.steps)


def settled_from(
    point: Solution, criterion: Criterion, free: IndexArray, tolerance: float
) -> Smoothness:
    """Newton from `point`, then each smoothing parameter looked at over its whole range."""
    best = newton(point, criterion, free, tolerance)
    steps = best.steps
    for _ in range(len(free) + 1):
        problem = best.point.problem
        better = look_around(problem.at(best.point.smoothing), problem, criterion, free)
        if better is None:
            break
        found = newton(best.point.elsewhere(better), criterion, free, tolerance)
        steps += found.steps
        if not criterion.cost(found.point) < criterion.cost(best.point) - 1e-9:
            break
        best = found
    return replace(best, steps=steps)


def choose_free(problem: Quadratic, criterion: Criterion, given: FloatArray) -> Smoothness:
    """The optimum, nearly (see ROUGHLY); `given` holds NaN where a parameter is to be chosen."""
    free = np.flatnonzero(np.isnan(given))
    if len(free) == 0:
        return newton(problem.at(given), criterion, free)
    quick, begin = quick_look(problem, criterion, free, given)
    best: Smoothness | None = None
    steps = 0
    for start in begin:
        known = None if best is None else best.point.smoothing
        found = newton(quick.at(start), criterion, free, ROUGHLY, known)
        steps += found.steps
        if best is None or criterion.cost(found.point) < criterion.cost(best.point) - 1e-9:
            best = found
    assert best is not None
    best = newton(problem.at(best.point.smoothing), criterion, free, ROUGHLY)
    steps += best.steps - 1
    for _ in range(2 * len(free) + 2):
        better = look_around(best.point, quick, criterion, free)
        if better is None:
            break
        found = newton(problem.at(better), criterion, free, ROUGHLY)
        steps += found.steps
        if criterion.cost(found.point) >= criterion.cost(best.point) - 1e-9:
            break
        best = found
    return replace(best, steps=steps)


def polish(
    found: Smoothness, point: Solution, criterion: Criterion, free: IndexArray
) -> Smoothness:
    """Newton to the end from a solution nearly found, here at `point`."""
    again = newton(point, criterion, free)
    return replace(again, steps=found.steps + again.steps - 1)


def quick_look(
    problem: Quadratic, criterion: Criterion, free: IndexArray, given: FloatArray
) -> tuple[Quadratic, list[FloatArray]]:
    """A smaller problem to compare starts on, and the starts: each block at the best place of its
    own, all with little smoothing, and, where a criterion has many optima, some in between.

    The first takes every block as if it were alone, with its functions uncorrelated: their pulls v
    and curvatures d then give the profiled REML cost over the whole range of λ at once,
    ½[(n − p) log(D₀ − Σ v²/(d + λ)) + Σ log(1 + d/λ)]. The smaller problem leaves out the functions
    that would be shrunk by 99.9 % there; the optimum is then sought with all.
    """
    own, rough = given.copy(), given.copy()
    common = [given.copy() for _ in COMMON]
    counts = list(problem.sizes)
    # More starts where optima are many, or where they cost little.
    many = criterion.rough_optima or len(problem.pull) <= CHEAP
    diagonal = np.maximum(problem.curvature, np.finfo(float).tiny)
    for j in free.tolist():
        place, size = problem.slices[j], problem.sizes[j]
        d, v = diagonal[place], problem.pull[place] + diagonal[place] * problem.origin[place]
        lam = np.geomspace(20 * d.max(), half_shrunk(d, 0.7 * size), 40)
        with np.errstate(over="ignore"):  # and is then bounded below
            left = problem.base - (v**2 / (d + lam[:, None])).sum(axis=1)
        # Functions that are correlated with each other can seem to take away more than there is.
        left = np.maximum(left, max(1e-3 * problem.base, np.finfo(float).tiny))
        cost = (problem.n - problem.p) * np.log(left) + (
            np.log(d + lam[:, None]) - np.log(lam[:, None])
        ).sum(axis=1)
        own[j] = lam[cost.argmin()]
        if many:
            for start, lam_j in zip(common, ridges_for(problem, j, COMMON), strict=True):
                start[j] = lam_j
        if not criterion.rough_optima:
            used = np.flatnonzero(d > 1e-3 * own[j])
            counts[j] = min(size, max(20, int(used.max(initial=0)) + 1))
        rough[j] = half_shrunk(d, 0.6 * counts[j])
    smaller = sum(counts) < 0.7 * sum(problem.sizes)
    begin = [own, rough, *common] if many else [own, rough]
    return (problem.leading(counts) if smaller else problem), begin


def half_shrunk(d: FloatArray, count: float) -> float:
    """λ at which the `count`-th of functions with these curvatures is shrunk by half."""
    return float(max(np.sort(d)[::-1][int(count)], np.finfo(float).tiny))


def ridges_for(problem: Quadratic, block: int, targets: Sequence[float] | FloatArray) -> FloatArray:
    """λ that give a block alone about these effective degrees of freedom: Σ d/(d + λ) = target,

    d the block's own curvatures; by bisection in log λ.
    """
    d = np.maximum(problem.curvature[problem.slices[block]], np.finfo(float).tiny)
    low = np.full(len(targets), np.log(d.min()) - 20)
    high = np.full(len(targets), np.log(d.max()) + 20)
    for _ in range(20):
        middle = (low + high) / 2
        rough = (d / (d + np.exp(middle)[:, None])).sum(axis=1) > targets
        low, high = np.where(rough, middle, low), np.where(rough, high, middle)
    return np.asarray(np.exp((low + high) / 2), dtype=np.float64)


def newton(
    point: Solution,
    criterion: Criterion,
    free: IndexArray,
    tolerance: float = EXACTLY,
    known: FloatArray | None = None,
) -> Smoothness:
    """Newton's method with a positive-definite safeguard and step-halving, from `point`.

    It ends when the gradient is below `tolerance` of the cost, or early when it has come close to a
    `known` optimum: there it would only arrive again.
    """
    problem, cost = point.problem, criterion.cost(point)
    bounds = Bounds.of(problem)
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
        if np.abs(gradient[~pinned]).max(initial=0.0) < tolerance * max(1.0, abs(cost)):
            settled = True
            break
        if known is not None and _close(point.smoothing, known):
            break
        hessian = criterion.hessian(point)[np.ix_(moving, moving)]
        step = np.zeros(len(names))
        step[~pinned] = descent(gradient[~pinned], hessian[np.ix_(~pinned, ~pinned)])
        moved = False
        for _ in range(25):
            trial = point.smoothing.copy()
            trial[names] = np.exp(np.clip(rho + step, bounds.lower[names], bounds.upper[names]))
            candidate = point.elsewhere(trial)
            value = criterion.cost(candidate)
            if value < cost + 1e-13 * max(1.0, abs(cost)):  # within rounding a step may not show
                moved = True
                break
            step /= 2
        if not moved:
            # No lower value along the descent: the cost is flat to rounding, or we are stuck.
            settled = bool(np.abs(gradient[~pinned]).max() < 1e-6 * max(1.0, abs(cost)))
            break
        point, cost = candidate, value
    return _result(point, criterion, free, bounds, steps, settled)


def _close(smoothing: FloatArray, known: FloatArray) -> bool:
    """Whether smoothing parameters are in the near neighbourhood of known ones."""
    if (np.isinf(smoothing) != np.isinf(known)).any():
        return False
    finite = np.isfinite(smoothing)
    apart = np.log(smoothing[finite]) - np.log(known[finite])
    return bool(np.abs(apart).max(initial=0.0) < 0.7)


def descent(gradient: FloatArray, hessian: FloatArray) -> FloatArray:
    """Newton's step with the Hessian's eigenvalues made positive, in no direction of them longer
    than LONGEST_STEP.

    A curvature is small only beside others where a block is all but gone, and there a step has to
    be long.
    """
    values, vectors = np.linalg.eigh(hessian)
    floor = max(1e-9 * np.abs(values).max(), 1e-12)
    along = (vectors.T @ gradient) / np.maximum(np.abs(values), floor)
    return np.asarray(-vectors @ np.clip(along, -LONGEST_STEP, LONGEST_STEP), dtype=np.float64)


def hold_at_infinity(
    point: Solution, cost: float, criterion: Criterion, free: IndexArray
) -> tuple[Solution, float]:
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
            candidate = point.elsewhere(trial)
            value = criterion.cost(candidate)
            if value <= cost:
                point, cost = candidate, value
                break
        else:
            return point, cost


def look_around(
    point: Solution, quick: Quadratic, criterion: Criterion, free: IndexArray
) -> FloatArray | None:
    """Each smoothing parameter alone over its whole range: a better place, or None.

    Compared on the smaller problem, but for little smoothing with all functions of the block.
    """
    full = point.problem
    gain = 1e-7 * max(1.0, abs(criterion.cost(point)))
    now = criterion.cost(quick.at(point.smoothing))
    place: FloatArray | None = None
    for j in free.tolist():
        size, here = quick.sizes[j], point.smoothing[j]
        targets = [2.0, 5.0, 10.0, 20.0, 40.0] if criterion.rough_optima else [1.0, 8.0]
        smooth = ridges_for(quick, j, [t for t in targets if t < 0.5 * size])
        trials = [(quick, now, lam) for lam in (np.inf, *smooth)]
        rough = half_shrunk(full.curvature[full.slices[j]], 0.6 * full.sizes[j])
        wide = full.leading([full.sizes[i] if i == j else k for i, k in enumerate(quick.sizes)])
        trials.append((wide, criterion.cost(wide.at(point.smoothing)), rough))
        for problem, before, lam in trials:
            both = np.isfinite([lam, here])
            if lam == here or (both.all() and abs(np.log(lam) - np.log(here)) < NEAR):
                continue
            trial = point.smoothing.copy()
            trial[j] = lam
            better = before - criterion.cost(problem.at(trial))
            if better > gain:
                gain, place = better, trial
    return place


def _result(
    point: Solution,
    criterion: Criterion,
    free: IndexArray,
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
