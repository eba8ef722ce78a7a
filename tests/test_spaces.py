"""Every space is held to the same laws; then each to what is known of it on paper."""

import numpy as np
import pytest

from addmodel.spaces.base import Penalised, Space, support
from addmodel.spaces.curve import Curve
from addmodel.spaces.cycle import Cycle, phase
from addmodel.spaces.globe import Globe
from addmodel.spaces.group import Group
from addmodel.spaces.levels import Levels
from addmodel.spaces.line import Line
from addmodel.spaces.place import Place
from addmodel.spaces.scattered import Scattered
from addmodel.spaces.spline import Spline, choose_knots, hermite

# Roots of cos β cosh β = 1: vibration of a free-free beam (Blevins 1979, Formulas for Natural
# Frequency and Mode Shape, table of single-span beams).
BEAM = np.array([4.7300407449, 7.8532046241, 10.9956078380, 14.1371654913])


def covariate(name: str, n: int = 300) -> np.ndarray:
    rng = np.random.default_rng(11)
    return {
        "even": np.arange(n) / n,
        "random": rng.uniform(-3, 5, n),
        "ties": rng.integers(0, 40, n).astype(float),
        "lognormal": np.exp(2 * rng.standard_normal(n)),
        "glitch": np.append(rng.standard_normal(n - 1), 1e6),
        "twins": np.concatenate([g := rng.uniform(size=n // 2), g + 1e-9]),
    }[name]


def laid(kind: type[Space], x: np.ndarray, weights: np.ndarray, size: int = 30) -> Space:
    if kind is Curve:
        return Curve.lay("x", x, weights, size, None)
    if kind is Cycle:
        # The period of the bulk of the data: a far glitch comes round into it.
        return Cycle.lay("x", x, weights, size, None, 1.02 * float(np.ptp(np.sort(x)[:-1])))
    if kind is Levels:
        labels, codes = np.unique(np.floor(3 * x / np.ptp(x)), return_inverse=True)
        return Levels.lay("x", codes, weights, tuple(str(v) for v in labels), 0)
    if kind is Group:
        codes = values_for(kind, x)
        return Group.lay(("x",), codes, (tuple(str(v) for v in range(codes.max() + 1)),))
    if kind in (Place, Globe):
        return kind.lay(("x", "z"), values_for(kind, x), weights, None, True)
    return Line.lay("x", x)


KINDS: list[type[Space]] = [Line, Levels, Curve, Cycle, Place, Globe, Group]


def test_no_space_escapes_the_laws():
    def below(kind):
        return {k for sub in kind.__subclasses__() for k in {sub, *below(sub)}}

    assert below(Space) - {Penalised, Spline, Scattered} == set(KINDS)


def values_for(kind: type[Space], x: np.ndarray) -> np.ndarray:
    if kind in (Levels, Group):
        return np.unique(np.floor(3 * x / np.ptp(x)), return_inverse=True)[1]
    if kind in (Place, Globe):  # two coordinates a row, within a globe's degrees
        u = 80 * (x - x.min()) / np.ptp(x)
        return np.column_stack([u, np.random.default_rng(6).uniform(-170, 170, len(x))])
    return x


@pytest.mark.parametrize("name", ["even", "random", "ties", "lognormal", "glitch", "twins"])
@pytest.mark.parametrize("kind", KINDS)
def test_laws(kind, name):
    x = covariate(name)
    weights = np.random.default_rng(5).uniform(0.2, 3, len(x))
    space = laid(kind, x, weights)
    seen = values_for(kind, x)
    straight, bent = space.unpenalised(seen), space.penalised(seen)
    assert straight.shape == (len(x), len(space.unpenalised_names))
    assert bent.shape == (len(x), space.size)
    assert np.isfinite(straight).all()
    assert np.isfinite(bent).all()
    # Row i depends on x[i] only.
    some = np.array([7, 3, 250])
    for columns in (space.unpenalised, space.null, space.penalised):
        every, alone = columns(seen), columns(seen[some])
        # To the rounding of sums that may be taken in another order.
        np.testing.assert_allclose(alone, every[some], atol=1e-12 * np.abs(every).max(initial=1))
    np.testing.assert_allclose(space.penalised(seen, 3), bent[:, :3], atol=1e-12)
    assert not space.outside(seen).any()
    if straight.shape[1]:  # null spans what unpenalised spans beside the constant
        ones = np.ones((len(x), 1))
        for a, b in ((straight, space.null(seen)), (space.null(seen), straight)):
            base = np.linalg.qr(np.concatenate([ones, a], axis=1))[0]
            left = b - base @ (base.T @ b)
            assert np.abs(left).max() < 1e-9 * np.abs(b).max()
    if not isinstance(space, Penalised):
        return
    kept = min(30, space.size)
    bent, gamma = bent[:, :kept], space.gamma[:kept]
    assert (np.diff(gamma) >= -1e-9 * gamma[1:]).all()
    share = weights / weights.sum()
    phi = bent * np.sqrt(gamma)
    np.testing.assert_allclose(phi.T @ (share[:, None] * phi), np.eye(kept), atol=1e-8)
    null = np.column_stack([np.ones(len(x)), straight / np.sqrt(share @ straight**2 + 1e-300)])
    assert np.abs(null.T @ (share[:, None] * phi)).max() < 1e-8


@pytest.mark.parametrize("name", ["random", "ties", "lognormal"])
@pytest.mark.parametrize("kind", [Curve, Cycle])
def test_roughness_is_the_integral(kind, name):
    """J(z_k) = 1 for every column: ∫ f''² from the columns' own second differences."""
    x = covariate(name, 60)
    space = laid(kind, x, np.ones(len(x)), 12)
    knots = space.knots
    h = np.diff(knots)[:, None]
    value, slope = np.split(space.functions, 2)
    rise = np.diff(value, axis=0)
    left, right = slope[:-1], slope[1:]
    # f'' is linear between knots: its ends from the Hermite data.
    start = (6 * rise / h - 4 * left - 2 * right) / h
    stop = (-6 * rise / h + 2 * left + 4 * right) / h
    integral = (h * (start**2 + start * stop + stop**2) / 3).sum(axis=0)
    np.testing.assert_allclose(integral[: space.size], 1, rtol=1e-5)


def test_curve_roughness_tends_to_the_beam():
    n = 2000
    x = (np.arange(1, n + 1) - 0.5) / n
    space = Curve.lay("x", x, np.ones(n), 60, None)
    # J is over x scaled to [0, 1]; here x runs over a length of 1 − 1/n.
    np.testing.assert_allclose(space.gamma[:4] / space.length**3, BEAM**4, rtol=1e-5)
    # The values themselves for the midpoints of n = 2000 cells, by a dense eigenproblem in
    # 12 digits: 500.564289, 3803.542063, 14617.656919, 39943.893121.
    dense = [500.564289, 3803.542063, 14617.656919, 39943.893121]
    np.testing.assert_allclose(space.gamma[:4] / space.length**3, dense, rtol=1e-6)


def test_cycle_on_an_even_grid_shrinks_fourier_frequencies():
    """λ in sum scaling: frequency k keeps 1/(1 + λ ρ_k/n), 1/ρ_k = Σ_j (2π(k + jn))^{-4} exactly,

    which tends to 1/(1 + (λ/n)(2πk)⁴) (Wahba 1990, Spline Models for Observational Data, ch. 2).
    """
    n = 64
    space = Cycle.lay("x", np.arange(n) / n, np.ones(n), n, None, 1.0)
    k = np.array([1, 2, 3, 5, 10])
    u = k / n
    inverse = (
        (2 * np.pi * n) ** -4.0
        * np.pi**4
        * (2 + np.cos(2 * np.pi * u))
        / (3 * np.sin(np.pi * u) ** 4)
    )
    kept = 1 / (1 + 1e-6 / inverse)
    # To the digits printed for n = 64 and λ/n = 1e-6 by the closed form.
    known = [0.9984438800, 0.9756700331, 0.8879095561, 0.5065836204, 0.0603851660]
    np.testing.assert_allclose(kept, known, atol=1e-10)
    for pair in (2 * (k - 1), 2 * (k - 1) + 1):
        np.testing.assert_allclose(1 / (1 + 1e-6 * space.gamma[pair]), kept, atol=1e-10)
    limit = 1 / (1 + 1e-6 * (2 * np.pi * k) ** 4.0)
    fine = Cycle.lay("x", np.arange(720) / 720, np.ones(720), 720, None, 1.0)
    np.testing.assert_allclose(1 / (1 + 1e-6 * fine.gamma[2 * (k - 1)]), limit, atol=1e-8)


def test_cycle_meets_itself():
    x = np.random.default_rng(2).uniform(0, 24, 200)
    space = Cycle.lay("x", x, np.ones(200), 20, None, 24.0)
    eps = 1e-4
    at = space.penalised(np.array([-eps, 0.0, eps, 24 - eps, 24.0, 24 + eps]))
    np.testing.assert_allclose(at[:3], at[3:], atol=1e-12)
    second = (at[0] - 2 * at[1] + at[2]) / eps**2
    later = space.penalised(np.array([eps, 2 * eps, 3 * eps]))
    np.testing.assert_allclose(
        second, (later[0] - 2 * later[1] + later[2]) / eps**2, atol=2e-3 * np.abs(second).max()
    )


def test_calendar_phase():
    days = np.array(["2023-01-01", "2023-07-02T12", "2024-12-31T12", "2021-02-15"], "datetime64[h]")
    x = days.astype(np.float64) / 24
    year = phase(x, "year")
    assert year[0] == 0
    assert year[1] == pytest.approx(182.5 / 365)
    assert year[2] == pytest.approx(365.5 / 366)
    assert phase(x, "month")[3] == pytest.approx(14 / 28)
    assert phase(x, "day")[1] == 0.5
    monday = np.datetime64("2024-01-01").astype(np.float64)
    assert phase(np.array([monday]), "week")[0] == 0
    assert np.isnan(phase(np.array([np.nan]), "year")[0])
    assert phase(np.array([-1e-20]), 24.0)[0] == 0


def test_curve_goes_on_straight_outside_the_data():
    x = np.random.default_rng(3).uniform(10, 20, 100)
    space = Curve.lay("x", x, np.ones(100), 20, None)
    far = space.penalised(np.array([0.0, 2.0, 4.0, 30.0, 32.0, 34.0]))
    np.testing.assert_allclose(far[2] - far[1], far[1] - far[0], rtol=1e-9)
    np.testing.assert_allclose(far[5] - far[4], far[4] - far[3], rtol=1e-9)
    assert space.outside(np.array([9.0, 15.0, 21.0])).tolist() == [True, False, True]


def test_hermite_reproduces_cubics():
    knots = np.array([0.0, 0.1, 0.5, 1.0])
    t = np.linspace(0, 1, 17)
    data = np.concatenate([knots**3 - knots, 3 * knots**2 - 1])
    np.testing.assert_allclose(hermite(knots, t) @ data, t**3 - t, atol=1e-15)


@pytest.mark.parametrize("name", ["even", "random", "glitch", "twins"])
def test_knots_stay_with_the_data(name):
    x = covariate(name, 2000)
    points, weights = support((x - x.min()) / np.ptp(x), np.ones(len(x)))
    knots = choose_knots(points, weights, 120)
    assert 100 <= len(knots) <= 122
    assert knots[0] == points[0]
    assert knots[-1] == points[-1]
    assert np.isin(knots, points).all()
    # No stretch of the data without knots: at most 4 % of the points between neighbours.
    assert np.diff(np.searchsorted(points, knots)).max() < 0.04 * len(points)


def test_levels_average_and_base():
    codes = np.array([0, 1, 1, 2])
    space = Levels.lay("g", codes, np.array([1.0, 1.0, 1.0, 3.0]), ("a", "b", "c"), 1)
    assert space.unpenalised_names == ("g: a", "g: c")
    np.testing.assert_allclose(space.unpenalised(np.array([0, 1, -2]))[2], [1 / 6, 0.5])
