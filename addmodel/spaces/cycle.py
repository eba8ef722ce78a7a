"""cycle(x, period=): periodic cubic spline, J(f) = ∫ f''(t)² dt, one period scaled to [0, 1]."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.fft
import scipy.linalg

from addmodel.spaces.base import BoolArray, FloatArray, support
from addmodel.spaces.spline import (
    FEWEST_KNOTS,
    KNOTS,
    Spline,
    choose_knots,
    demmler_reinsch,
    hermite,
)

GAP = 0.2
"""A longer part of the period without data counts as outside the data."""


@dataclass(frozen=True)
class Cycle(Spline):
    """Periodic splines; the null space is the constant alone, so nothing is unpenalised."""

    period: float | str
    """A length in the covariate's units, or for dates one of "year", "month", "week", "day"."""
    gap: tuple[float, float]
    """The longest stretch of the period without data: its start in [0, 1), and its length."""

    @classmethod
    def lay(
        cls,
        key: str,
        x: FloatArray,
        weights: FloatArray,
        size: int,
        cap: int | None,
        period: float | str,
    ) -> Cycle:
        """Lay the space on the data; arguments as for `Curve.lay`."""
        points, omega = support(phase(x, period), weights)
        # Waves come in pairs: keep them together.
        size = max(2, size - size % 2) if cap is not None else size + size % 2
        size = min(size, len(points) - 1)
        turn = np.append(points, points[0] + 1.0)
        knots = choose_knots(turn, np.append(omega, omega[0]), max(FEWEST_KNOTS, int(KNOTS * size)))
        r = len(knots)
        constant = np.repeat([1.0, 0.0], r)[:, None]
        functions, gamma = demmler_reinsch(
            hermite(knots, points), periodic(knots), constant, omega, r - 1
        )
        return cls(
            keys=(key,),
            distinct=len(points),
            gamma=gamma,
            cap=cap,
            low=0.0,
            length=1.0 if isinstance(period, str) else float(period),
            order=2,
            knots=knots,
            functions=functions,
            period=period,
            gap=_longest_gap(points),
        )

    @property
    def unpenalised_names(self) -> tuple[str, ...]:
        return ()

    def unpenalised(self, x: npt.NDArray[Any]) -> FloatArray:
        return np.empty((len(x), 0))

    def null(self, x: npt.NDArray[Any]) -> FloatArray:
        return np.empty((len(x), 0))

    def outside(self, x: npt.NDArray[Any]) -> BoolArray:
        """Inside a gap of more than GAP of the period nothing is known of the curve."""
        start, length = self.gap
        after = np.mod(phase(np.asarray(x, dtype=np.float64), self.period) - start, 1.0)
        beyond: BoolArray = (after > 1e-9) & (after < length - 1e-9)
        return beyond & (length > GAP)

    def scaled(self, x: npt.NDArray[Any]) -> FloatArray:
        t = phase(np.asarray(x, dtype=np.float64), self.period)
        return np.where(t < self.knots[0], t + 1.0, t)

    def waves(self, cells: FloatArray) -> FloatArray:
        transformed = scipy.fft.rfft(cells, norm="ortho")[1:]
        if len(cells) % 2 == 0:
            transformed = transformed[:-1]  # the shortest wave has no sine beside its cosine
        pairs = np.sqrt(2.0) * np.stack([transformed.real, transformed.imag], axis=1)
        return np.asarray(pairs.ravel(), dtype=np.float64)


def _longest_gap(points: FloatArray) -> tuple[float, float]:
    steps = np.diff(points, append=points[0] + 1.0)
    longest = int(steps.argmax())
    return float(points[longest]), float(steps[longest])


def phase(x: FloatArray, period: float | str) -> FloatArray:
    """Position within the period, in [0, 1); for a calendar period x is in days since 1970-01-01.

    A year or month is as long as the calendar makes it, so that its seam is always at its first
    day; a week starts on Monday.
    """
    if not isinstance(period, str):
        t = np.mod(x, period) / period
    elif period == "day":
        t = np.mod(x, 1.0)
    elif period == "week":
        t = np.mod(x + 3.0, 7.0) / 7.0  # 1970-01-01 was a Thursday
    else:
        known = np.isfinite(x)
        days = np.floor(np.where(known, x, 0.0)).astype("datetime64[D]")
        unit = "Y" if period == "year" else "M"
        start = days.astype(f"datetime64[{unit}]")
        first = start.astype("datetime64[D]").astype(np.float64)
        after = (start + 1).astype("datetime64[D]").astype(np.float64)
        t = np.where(known, (x - first) / (after - first), np.nan)
    return np.where(t >= 1.0, 0.0, t)  # a tiny negative x comes out of the modulus as 1


def periodic(knots: FloatArray) -> FloatArray:
    """Values, then slopes, at the knots of periodic B with ∫ (Bz)''² = Σz², shape (2r, r − 2).

    `knots` are τ_0 < … < τ_{r−1} = τ_0 + 1, the last the first come round. f'' = Σ c_j hat_j over
    the r − 1 different knots with ∫ f'' = 0; the slope is f'' integrated, less its mean, and the
    value is the slope integrated.
    """
    h = np.diff(knots)
    r = len(h)
    before = np.roll(h, 1)
    gram = np.diag((before + h) / 3)
    where = np.arange(r)
    np.add.at(gram, (where, (where + 1) % r), h / 6)
    np.add.at(gram, ((where + 1) % r, where), h / 6)
    factor = np.linalg.cholesky(gram)
    second = scipy.linalg.solve_triangular(factor, np.eye(r), lower=True).T
    direction = ((before + h) / 2) @ second
    # A reflection takes the constraint's direction to the first axis; the others satisfy it.
    direction[0] += np.copysign(np.linalg.norm(direction), direction[0])
    along = second @ direction * (2 / (direction @ direction))
    second = second[:, 1:] - np.outer(along, direction[1:])
    second = np.concatenate([second, second[:1]])
    step = h[:, None]
    zero = np.zeros((1, r - 1))
    slope = np.concatenate([zero, np.cumsum(step * (second[:-1] + second[1:]) / 2, axis=0)])
    rise = step * slope[:-1] + step**2 * (2 * second[:-1] + second[1:]) / 6
    slope -= rise.sum(axis=0)
    rise -= step * rise.sum(axis=0)
    return np.concatenate([zero, np.cumsum(rise, axis=0), slope])
