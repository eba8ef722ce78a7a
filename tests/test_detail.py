"""Automatic detail: never a wrong number of functions in silence."""

import numpy as np
import pytest
import scipy.special

import addmodel as am
from addmodel.solve.detail import left_over
from addmodel.spaces.curve import Curve
from addmodel.spaces.cycle import Cycle
from tests.exact import spacings


def waves_in_noise(cycles: int, n: int, seed: int) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(seed)
    x = rng.uniform(size=n)
    return {"x": x, "y": np.sin(2 * np.pi * cycles * x) + rng.standard_normal(n)}


@pytest.mark.parametrize(("cycles", "n"), [(6, 1000), (14, 7305), (20, 7305), (40, 7305)])
def test_fast_waves_are_found(cycles, n):
    data = waves_in_noise(cycles, n, seed=cycles)
    fit = am.fit("y ~ curve(x)", data)
    wave = np.sin(2 * np.pi * cycles * data["x"])
    assert np.corrcoef(fit.fitted, wave)[0, 1] > 0.9
    assert fit.estimate.detail_confirmed == (True,)
    assert "detail was confirmed" in fit.summary().words


def random_model(seed: int) -> tuple[list[str], dict[str, np.ndarray]]:
    """One to three curves, from gentle to bumpy, of uneven covariates that are correlated."""
    rng = np.random.default_rng(seed)
    n = int(rng.integers(250, 900))
    data = {}
    y = rng.uniform(0.05, 1) * rng.standard_normal(n)
    common = rng.standard_normal(n)
    names = [f"x{j}" for j in range(1 + seed % 3)]
    for j, name in enumerate(names):
        normal = 0.7 * common + 0.7 * rng.standard_normal(n)
        spread = [scipy.special.ndtr(normal), normal, np.exp(normal)]
        data[name] = x = spread[(seed + j) % 3]
        t = (np.argsort(np.argsort(x)) / n) if (seed + j) % 2 else (x - x.min()) / np.ptp(x)
        for k in range(1, 25):
            y += rng.standard_normal() / k * np.sin(np.pi * k * t + rng.uniform(0, 6))
    return names, {**data, "y": y}


def against_all(seed: int) -> tuple[am.Fit, am.Fit, np.ndarray]:
    """The automatic fit, the one with all functions, and their difference in standard errors."""
    names, data = random_model(seed)
    fit = am.fit("y ~ " + " + ".join(f"curve({x})" for x in names), data)
    full = am.fit("y ~ " + " + ".join(f'curve({x}, detail="all")' for x in names), data)
    error = full.predict(data, interval=0.95)["std_error"].to_numpy()
    return fit, full, np.abs(fit.fitted - full.fitted) / error


@pytest.mark.parametrize("seed", range(3))
def test_automatic_detail_agrees_with_all_functions(seed):
    fit, _, difference = against_all(seed)
    assert difference.max() < 0.05
    assert all(fit.estimate.detail_confirmed)


def test_binding_cap_is_said():
    data = waves_in_noise(6, 1000, seed=3)
    fit = am.fit("y ~ curve(x, detail=8)", data)
    assert fit.estimate.detail_confirmed == (False,)
    assert "The detail of curve(x) is bound" in fit.summary().words
    free = am.fit("y ~ curve(x, detail=200)", data)
    assert free.estimate.detail_confirmed == (True,)


@pytest.mark.parametrize("name", ["random", "exponential", "pairs 1e-9 apart"])
@pytest.mark.parametrize("kind", [Curve, Cycle])
def test_nothing_left_over_in_pure_noise(kind, name):
    """False alarms at the level asked for: 0.001 for all bands together."""
    x = spacings(1000)[name]
    weights = np.random.default_rng(1).uniform(0.5, 2, len(x))
    if kind is Curve:
        space = Curve.lay("x", x, weights, 60, None)
    else:
        space = Cycle.lay("x", x, weights, 60, None, 1.0)
    columns = np.column_stack([np.ones(len(x)), space.unpenalised(x), space.penalised(x, 60)])
    root = np.sqrt(weights)[:, None]
    basis = np.linalg.qr(root * columns)[0]
    rng = np.random.default_rng(4)
    hits = 0
    for _ in range(300):
        noise = rng.standard_normal(len(x))
        residuals = (noise - basis @ (basis.T @ noise)) / root[:, 0]
        hits += left_over(space, 60, x, residuals, weights, 1.0) is not None
    assert hits <= 3  # 0.3 expected


@pytest.mark.parametrize("kind", [Curve, Cycle])
def test_what_is_left_over_is_found_in_its_band(kind):
    n = 3000
    rng = np.random.default_rng(9)
    x = np.sort(rng.uniform(size=n))
    if kind is Curve:
        space = Curve.lay("x", x, np.ones(n), 60, None)
    else:
        space = Cycle.lay("x", x, np.ones(n), 60, None, 1.0)
    residuals = 0.3 * np.sin(2 * np.pi * 55 * x) + rng.standard_normal(n)  # 110 half waves
    assert left_over(space, 60, x, residuals, np.ones(n), 1.0) == 135  # the band from 90 to 135


@pytest.mark.parametrize(("n", "cycles"), [(800, 22), (900, 28)])
def test_waves_where_the_data_are_dense(n, cycles):
    """On uneven points the kept functions cannot make waves that many rows could tell."""
    rng = np.random.default_rng(n)
    x = np.sort(np.exp(rng.standard_normal(n)))
    wave = 2 * np.sin(2 * np.pi * cycles * np.arange(n) / n)
    data = {"x": x, "y": wave + rng.standard_normal(n)}
    fit, full = am.fit("y ~ curve(x)", data), am.fit('y ~ curve(x, detail="all")', data)
    error = full.predict(data, interval=0.95)["std_error"].to_numpy()
    assert (np.abs(fit.fitted - full.fitted) < 0.05 * error).mean() > 0.99
    assert fit.effective_df == pytest.approx(full.effective_df, abs=1)
