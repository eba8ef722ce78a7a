"""Maps: the thin-plate spline against scipy's, the sphere against its series, rotation, edges."""

import numpy as np
import pandas as pd
import pytest
from scipy.interpolate import RBFInterpolator
from scipy.spatial.transform import Rotation
from scipy.special import eval_legendre

import addmodel as am
from addmodel.spaces.globe import unit_vectors, wahba
from addmodel.spaces.scattered import well_spread
from tests.models import DATA

FRANKE = pd.read_csv(DATA / "tps_franke80.csv")
"""Franke's surface (1979) with N(0, 0.05²) noise at 80 uniform points, default_rng(7)."""


@pytest.mark.parametrize("lam", [1e-6, 1e-4, 1e-2])
@pytest.mark.parametrize("weighted", [False, True])
def test_place_equals_scipys_thin_plate_spline(lam, weighted):
    """λ∬(f_uu² + 2f_uv² + f_vv²) on coordinates over the larger range is scipy's smoothing =

    8πλ/w: its kernel is r² log r, ours that over 8π.
    """
    x = FRANKE[["x1", "x2"]].to_numpy()
    low, length = x.min(axis=0), np.ptp(x, axis=0).max()
    weights = 1.0 + np.arange(80) % 4 if weighted else np.ones(80)
    fit = am.fit(
        f"y ~ place(x1, x2, detail='all', smoothing={lam})", FRANKE.assign(w=weights), weights="w"
    )
    scipys = RBFInterpolator(
        (x - low) / length,
        FRANKE.y,
        kernel="thin_plate_spline",
        smoothing=8 * np.pi * lam / weights,
    )
    new = np.random.default_rng(0).uniform(-0.2, 1.2, (200, 2))
    predicted = fit.predict(pd.DataFrame(new, columns=["x1", "x2"]))
    limit = 1e-6 * np.ptp(FRANKE.y)
    np.testing.assert_allclose(fit.fitted, scipys((x - low) / length), atol=limit)
    np.testing.assert_allclose(predicted, scipys((new - low) / length), atol=limit)


def test_degrees_of_freedom_of_a_thin_plate_spline():
    """λ on raw coordinates is λ·L² here (dense solution: edf 59.41507709 at λ = 1e-4)."""
    length = np.ptp(FRANKE[["x1", "x2"]].to_numpy(), axis=0).max()
    lam = 1e-4 / length**2
    fit = am.fit(f"y ~ place(x1, x2, detail='all', smoothing={lam})", FRANKE)
    assert fit.effective_df == pytest.approx(59.41507709, abs=1e-5)
    assert float(((FRANKE.y - fit.fitted) ** 2).sum()) == pytest.approx(0.02537291, abs=1e-7)


def test_the_spheres_kernel_equals_its_legendre_series():
    """Σ_{l ≥ 1} P_l(z)/((l+1)(l+2)(l+3))/2π (Wahba 1981).

    |P_l(z)| is below l^{-½} at these z, so that the tail beyond l is below l^{-5/2}/15: 1e-11.
    """
    z = np.array([0.6, 0.0, -0.7])
    l_ = np.arange(1, 10_001)
    for value in z:
        terms = eval_legendre(l_, value) / ((l_ + 1.0) * (l_ + 2) * (l_ + 3))
        assert wahba(np.array([value]))[0] == pytest.approx(terms.sum() / (2 * np.pi), abs=1e-10)
    known = [0.013262911924, -0.001111449265, -0.004833902561]  # 2e5 terms
    np.testing.assert_allclose(wahba(np.array([1.0, 0.0, -1.0])), known, atol=1e-11)


def sphere(n: int, seed: int = 3) -> pd.DataFrame:
    rng = np.random.default_rng(seed)
    lat = np.degrees(np.arcsin(rng.uniform(-1, 1, n)))
    lon = rng.uniform(-180, 180, n)
    u = unit_vectors(np.column_stack([lat, lon]))
    y = u[:, 0] * u[:, 1] + u[:, 2] ** 3 + 0.1 * rng.standard_normal(n)
    return pd.DataFrame({"lat": lat, "lon": lon, "y": y})


def test_a_fit_on_the_globe_turns_with_its_points():
    data = sphere(150)
    fit = am.fit("y ~ globe(lat, lon)", data)
    turn = Rotation.from_euler("xyz", [0.4, 1.1, 2.5])
    u = turn.apply(unit_vectors(data[["lat", "lon"]].to_numpy()))
    turned = data.assign(
        lat=np.degrees(np.arcsin(np.clip(u[:, 2], -1, 1))),
        lon=np.degrees(np.arctan2(u[:, 1], u[:, 0])),
    )
    again = am.fit("y ~ globe(lat, lon)", turned)
    np.testing.assert_allclose(again.fitted, fit.fitted, atol=1e-6)
    assert again.criterion_value == pytest.approx(fit.criterion_value, abs=1e-7)


def test_poles_and_the_date_line_are_places_like_any_other():
    fit = am.fit("y ~ globe(lat, lon)", sphere(200))
    lon = np.array([-180.0, 180.0, 540.0 - 360.0])
    at_line = fit.predict(pd.DataFrame({"lat": 20.0, "lon": lon}))
    np.testing.assert_allclose(at_line, at_line[0], atol=1e-9)
    pole = fit.predict(pd.DataFrame({"lat": 90.0, "lon": np.linspace(-180, 180, 7)}))
    np.testing.assert_allclose(pole, pole[0], atol=1e-9)
    eps = 1e-4
    across = fit.predict(pd.DataFrame({"lat": 20.0, "lon": [180 - eps, -180 + eps]}))
    assert abs(np.diff(across)[0]) < 1e-4


def test_a_place_may_be_turned():
    """Only a common scale: a rotation of the plane leaves λ alone up to the change of L."""
    angle = 0.6
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    x = FRANKE[["x1", "x2"]].to_numpy() @ turn.T
    fit = am.fit("y ~ place(x1, x2)", FRANKE)
    again = am.fit("y ~ place(x1, x2)", FRANKE.assign(x1=x[:, 0], x2=x[:, 1]))
    np.testing.assert_allclose(again.fitted, fit.fitted, atol=1e-6)


def test_knots_are_well_spread_and_nothing_is_random():
    sites = np.random.default_rng(1).uniform(size=(5000, 2))
    knots = well_spread(sites, 200)
    np.testing.assert_array_equal(knots, well_spread(sites, 200))
    gaps = np.sqrt(((knots[:, None] - knots[None]) ** 2).sum(axis=2))
    np.fill_diagonal(gaps, np.inf)
    assert gaps.min() > 0.5 / np.sqrt(200)


def test_a_map_of_many_sites_rests_on_some_of_them_and_says_so():
    rng = np.random.default_rng(4)
    x = rng.uniform(size=(1500, 2))
    y = np.sin(4 * x[:, 0]) * np.cos(3 * x[:, 1]) + 0.3 * rng.standard_normal(1500)
    data = {"u": x[:, 0], "v": x[:, 1], "y": y}
    fit = am.fit("y ~ place(u, v)", data)
    assert any("rests on 300 well-spread sites of 1,500" in c for c in fit.cautions)
    truth = np.sin(4 * x[:, 0]) * np.cos(3 * x[:, 1])
    assert np.sqrt(np.mean((fit.fitted - truth) ** 2)) < 0.06


def test_degrees_given_to_place_are_said():
    fit = am.fit("y ~ place(lat, lon)", sphere(80))
    assert any("looks like degrees" in c for c in fit.cautions)


def test_space_and_time():
    rng = np.random.default_rng(6)
    n = 400
    u, v = rng.uniform(size=(2, n))
    day = rng.uniform(0, 730, n)
    y = u + np.sin(2 * np.pi * day / 365.25) * (1 + v) + 0.2 * rng.standard_normal(n)
    data = {"u": u, "v": v, "day": day, "y": y}
    fit = am.fit("y ~ place(u, v)*cycle(day, period=365.25)", data)
    assert fit.estimate.settled
    assert fit.deviance_reduction > 0.9
    assert "outside" in fit.effect("place(u, v)").table
    far = fit.predict({"u": [0.5, 9.0], "v": [0.5, 9.0], "day": [1.0, 1.0]}, interval=0.9)
    assert far["outside"].tolist() == [False, True]
    fit.plot()
