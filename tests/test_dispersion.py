"""Counts that vary more than Poisson's, separation, and information criteria."""

import numpy as np
import pytest
from scipy.linalg import sqrtm

import addmodel as am

RNG = np.random.default_rng(3)
N = 800
X = RNG.uniform(size=N)
MEAN = np.exp(1 + np.sin(6 * X))
WIDE = RNG.negative_binomial(2, 2 / (2 + MEAN)).astype(float)  # variance μ + μ²/2
NARROW = RNG.poisson(MEAN).astype(float)


def test_negative_binomial_finds_its_dispersion():
    data = {"x": X, "y": WIDE}
    fit = am.fit("y ~ curve(x)", data, outcome="negative binomial")
    alpha = float(fit.estimate.outcome.family.alpha)
    assert alpha == pytest.approx(0.5, abs=0.1)
    # The criterion falls off on both sides of it, smoothing chosen anew.
    from statsmodels.genmod.families import NegativeBinomial

    for factor in (0.9, 1.1):
        near = am.fit("y ~ curve(x)", data, outcome=NegativeBinomial(alpha=alpha * factor))
        assert near.criterion_value < fit.criterion_value
    assert 0.85 < fit.dispersion < 1.15


def test_poisson_says_that_counts_vary_more():
    wide = am.fit("y ~ curve(x)", {"x": X, "y": WIDE}, outcome="poisson")
    narrow = am.fit("y ~ curve(x)", {"x": X, "y": NARROW}, outcome="poisson")
    assert wide.dispersion > 2
    assert any("outcome='negative binomial' or scale='estimated'" in c for c in wide.cautions)
    assert narrow.dispersion == pytest.approx(1, abs=0.15)
    assert not narrow.cautions


def test_quasi_likelihood_widens_by_the_scale():
    data = {"x": X, "y": WIDE}
    known = am.fit("y ~ x", data, outcome="poisson")
    quasi = am.fit("y ~ x", data, outcome="poisson", scale="estimated")
    np.testing.assert_allclose(
        quasi.coefficients["estimate"], known.coefficients["estimate"], rtol=1e-9
    )
    np.testing.assert_allclose(
        quasi.coefficients["std_error"],
        known.coefficients["std_error"] * np.sqrt(quasi.scale),
        rtol=1e-8,
    )
    assert quasi.scale == pytest.approx(quasi.dispersion, rel=1e-3)
    with pytest.raises(am.ModelError, match="scale of a gaussian outcome is not known"):
        am.fit("y ~ x", data, scale="known")


@pytest.mark.filterwarnings("ignore::addmodel.Caution")
def test_separation_is_named_and_finite():
    rng = np.random.default_rng(1)
    data = {"x": np.linspace(0, 1, 60), "g": np.repeat(["a", "b", "c"], 20)}
    data["y"] = np.concatenate([np.zeros(20), rng.integers(0, 2, 40)])
    fit = am.fit("y ~ g + curve(x)", data, outcome="binomial")
    assert np.isfinite(fit.coefficients["estimate"]).all()
    assert any("In g the level 'a' has no events" in c for c in fit.cautions)
    split = am.fit("y ~ curve(x)", {"x": data["x"], "y": data["x"] > 0.5}, outcome="binomial")
    assert np.isfinite(split.fitted).all()
    assert any("fitted probabilities are 0 or 1" in c for c in split.cautions)
    counts = {"g": data["g"], "y": np.concatenate([np.zeros(20), rng.poisson(3, 40)])}
    none = am.fit("y ~ g", counts, outcome="poisson")
    assert np.isfinite(none.coefficients["estimate"]).all()
    assert any("In g the level 'a' has no events" in c for c in none.cautions)


def test_information_criteria():
    data = {"x": X, "y": NARROW}
    bent = am.fit("y ~ curve(x)", data, outcome="poisson")
    straight = am.fit("y ~ x", data, outcome="poisson")
    assert bent.aic == pytest.approx(2 * bent.effective_df - 2 * bent.log_likelihood)
    assert bent.aic_corrected > bent.aic
    assert straight.aic_corrected == pytest.approx(straight.aic)
    assert bent.aic < straight.aic
    reduction = 1 - bent.deviance / bent.estimate.null_deviance
    assert bent.deviance_reduction == pytest.approx(reduction)


@pytest.mark.parametrize("criterion", ["gcv", "ubre"])
def test_other_criteria_settle(criterion):
    fit = am.fit("y ~ curve(x)", {"x": X, "y": NARROW}, outcome="poisson", criterion=criterion)
    assert fit.estimate.settled
    assert 4 < fit.effective_df < 25


def test_new_counts_are_covered():
    data = {"x": X, "y": NARROW}
    fit = am.fit("y ~ curve(x)", data, outcome="poisson")
    fresh = np.random.default_rng(8).poisson(MEAN[:200])
    table = fit.predict({"x": X[:200]}, interval=0.9, new_observation=True)
    inside = ((fresh >= table["lower"]) & (fresh <= table["upper"])).mean()
    assert 0.86 < inside < 0.99  # whole numbers cover a little more than 90 %


def test_corrected_degrees_of_freedom_against_differences_of_roots():
    """τ + tr((V' + V'')X'WX)/φ with ∂β/∂ρ and ∂S/∂ρ from refits (Wood, Pya & Säfken 2016)."""
    rng = np.random.default_rng(4)
    data = {"x": rng.uniform(size=200), "z": rng.uniform(size=200)}
    data["y"] = np.sin(6 * data["x"]) + np.cos(5 * data["z"]) + 0.4 * rng.normal(size=200)
    fit = am.fit("y ~ curve(x, detail=20) + curve(z, detail=20)", data)
    estimate = fit.estimate

    def at(smoothing):
        a, b = (float(lam) for lam in smoothing)
        near = am.fit(
            f"y ~ curve(x, detail=20, smoothing={a}) + curve(z, detail=20, smoothing={b})", data
        ).estimate
        return np.real(sqrtm(near.posterior.dense / near.scale)), near.coefficients

    h, roots, moves = 1e-4, [], []
    for k in range(2):
        up, down = estimate.smoothing.copy(), estimate.smoothing.copy()
        up[k] *= np.exp(h)
        down[k] *= np.exp(-h)
        (root_up, beta_up), (root_down, beta_down) = at(up), at(down)
        roots.append((root_up - root_down) / (2 * h))
        moves.append((beta_up - beta_down) / (2 * h))
    spread = estimate.smoothing_root @ estimate.smoothing_root.T
    information = np.linalg.inv(estimate.posterior.dense / estimate.scale)
    for place, lam in zip(estimate.design.block_places, estimate.smoothing, strict=True):
        information[place, place] -= lam * np.eye(place.stop - place.start)
    gain = sum(
        spread[k, m]
        * (
            np.trace(roots[k].T @ information @ roots[m])
            + moves[k] @ information @ moves[m] / estimate.scale
        )
        for k in range(2)
        for m in range(2)
    )
    df = (fit.aic_corrected + 2 * fit.log_likelihood) / 2 - 1
    assert df == pytest.approx(fit.effective_df + gain, abs=1e-5)
    assert gain > 0.1


@pytest.mark.parametrize("criterion", ["gcv", "ubre"])
def test_a_dispersion_is_estimated_by_likelihood(criterion):
    with pytest.raises(am.ModelError, match="estimated by likelihood"):
        am.fit("y ~ x", {"x": X, "y": WIDE}, outcome="negative binomial", criterion=criterion)
