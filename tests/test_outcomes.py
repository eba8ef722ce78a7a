"""Outcomes: dispersion, scale, separation, weights, textbook numbers, saved fits, words."""

from __future__ import annotations

import warnings
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from scipy.stats import binom
from statsmodels.genmod import families
from typer.testing import CliRunner

import addmodel as am
from addmodel.cli import app
from addmodel.outcomes import NAMES

links = families.links


def table(n: int = 150, seed: int = 3) -> pd.DataFrame:
    """An outcome of each kind with the same curve behind it."""
    rng = np.random.default_rng(seed)
    d = pd.DataFrame({"x": rng.uniform(size=n), "a": rng.normal(size=n)})
    d["g"] = rng.choice(list("uvw"), n)
    eta = np.sin(5 * d.x) + 0.3 * d.a
    mean = np.exp(eta)
    d["gaussian"] = eta + rng.normal(size=n) / 2
    d["binomial"] = rng.binomial(1, 1 / (1 + np.exp(-eta))).astype(float)
    d["poisson"] = rng.poisson(mean).astype(float)
    d["negative binomial"] = rng.poisson(mean * rng.gamma(2, 0.5, n)).astype(float)
    d["gamma"] = rng.gamma(4, mean / 4)
    d["inverse gaussian"] = rng.wald(mean, 4.0)
    d["tweedie"] = [rng.gamma(2.0, 0.5, k).sum() for k in rng.poisson(mean)]
    d["years"] = rng.uniform(1, 9, n)
    d["deaths"] = rng.poisson(d.years * mean)
    return d


DATA = table()


def fit_of(name: str, **options: object) -> am.Fit:
    return am.fit("y ~ curve(x) + a", DATA.assign(y=DATA[name]), outcome=name, **options)


@pytest.fixture(scope="module")
def fits() -> dict[str, am.Fit]:
    return {name: fit_of(name) for name in NAMES}


def said(fit: am.Fit, words: str) -> bool:
    return any(words in caution for caution in fit.cautions)


def flat(fit: am.Fit) -> str:
    return " ".join(str(fit.summary()).split())


# Dispersion and scale ---------------------------------------------------------------------------


def test_the_negative_binomial_finds_its_dispersion():
    rng = np.random.default_rng(8)
    x = rng.uniform(size=800)
    y = rng.poisson(np.exp(1 + np.sin(5 * x)) * rng.gamma(2, 0.5, 800))  # alpha 0.5
    data = {"x": x, "y": y}
    free = am.fit("y ~ curve(x)", data, outcome="negative binomial")
    assert free.estimate.outcome.family.alpha == pytest.approx(0.5, abs=0.1)
    fixed = "y ~ curve(x, smoothing=0.01)"
    best = am.fit(fixed, data, outcome="negative binomial")
    alpha = best.estimate.outcome.family.alpha

    def value(a: float) -> float:
        family = families.NegativeBinomial(links.Log(), alpha=a)
        return am.fit(fixed, data, outcome=family).criterion_value

    here = value(alpha)
    assert best.criterion_value == pytest.approx(here, rel=1e-9)
    assert value(1.1 * alpha) < here
    assert value(alpha / 1.1) < here
    assert (value(1.001 * alpha) - value(alpha / 1.001)) == pytest.approx(0, abs=1e-4)
    assert f"variance μ + {free.estimate.outcome.family.alpha:.3g} μ²" in flat(free)
    assert not said(free, "Pearson")


def doubled() -> dict[str, np.ndarray]:
    """Counts whose variance is twice their mean."""
    rng = np.random.default_rng(12)
    x = rng.uniform(size=600)
    return {"x": x, "y": rng.poisson(rng.gamma(np.exp(1 + np.sin(5 * x)), 1.0))}


def test_an_estimated_scale():
    data, formula = doubled(), "y ~ curve(x, smoothing=0.01)"
    known = am.fit(formula, data, outcome="poisson")
    estimated = am.fit(formula, data, outcome="poisson", scale="estimated")
    assert known.scale == 1
    assert estimated.scale == pytest.approx(2, abs=0.35)
    assert estimated.scale == pytest.approx(estimated.dispersion, rel=1e-3)
    free = am.fit("y ~ curve(x)", data, outcome="poisson", scale="estimated")
    assert free.scale == pytest.approx(2, abs=0.35)
    np.testing.assert_allclose(estimated.fitted, known.fitted, rtol=1e-7)
    ratio = estimated.coefficients["std_error"] / known.coefficients["std_error"]
    np.testing.assert_allclose(ratio, np.sqrt(estimated.scale), rtol=1e-6)
    errors = [f.predict({"x": [0.1, 0.6]}, interval=0.95)["std_error"] for f in (known, estimated)]
    np.testing.assert_allclose(errors[1] / errors[0], np.sqrt(estimated.scale), rtol=1e-6)
    assert said(known, "Pearson's dispersion is")
    assert said(known, "outcome='negative binomial' or scale='estimated'")
    assert not said(estimated, "Pearson")


def test_counts_that_are_poisson_get_no_caution():
    rng = np.random.default_rng(2)
    x = rng.uniform(size=600)
    fit = am.fit("y ~ curve(x)", {"x": x, "y": rng.poisson(3 + x)}, outcome="poisson")
    assert fit.dispersion == pytest.approx(1, abs=0.15)
    assert fit.cautions == ()


# Which outcomes there are -----------------------------------------------------------------------


def test_named_outcomes_of_positive_numbers_have_the_log_link(fits):
    for name in ("gamma", "inverse gaussian", "tweedie"):
        fit = fits[name]
        assert type(fit.estimate.outcome.family.link) is links.Log
        np.testing.assert_allclose(fit.fitted, np.exp(fit.linear_predictor), rtol=1e-14)
        assert not said(fit, "inverse power")
        assert not fit.estimate.outcome.scale_known


def test_an_inverse_link_gets_a_caution():
    data = DATA.assign(y=DATA.gamma)
    fit = am.fit("y ~ a", data, outcome=families.Gamma())
    assert said(fit, "inverse power")
    assert said(fit, "outcome='gamma'")
    np.testing.assert_allclose(fit.fitted, 1 / fit.linear_predictor, rtol=1e-12)
    log = am.fit("y ~ a", data, outcome=families.Gamma(links.Log()))
    assert log.cautions == ()


@pytest.mark.parametrize("link", ["Probit", "CLogLog", "Cauchy", "Logit"])
def test_a_family_with_its_link(link):
    family = families.Binomial(getattr(links, link)())
    fit = am.fit("binomial ~ curve(x) + a", DATA, outcome=family)
    assert fit.estimate.settled
    assert ((fit.fitted > 0) & (fit.fitted < 1)).all()
    np.testing.assert_allclose(family.link(fit.fitted), fit.linear_predictor, rtol=1e-6)
    if link == "Logit":
        named = am.fit("binomial ~ curve(x) + a", DATA, outcome="binomial")
        np.testing.assert_allclose(fit.fitted, named.fitted, rtol=1e-10)


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"scale": "known"}, "The scale of a gaussian outcome is not known"),
        ({"outcome": "gamma", "scale": "known"}, "The scale of a gamma outcome is not known"),
        ({"outcome": "poison"}, "outcome='poison' is not known. Did you mean 'poisson'?"),
        ({"outcome": "Binomial"}, "Did you mean 'binomial'"),
        ({"outcome": 3}, "outcome= is a name such as 'poisson'"),
        ({"outcome": families.Poisson}, "outcome= is a name such as 'poisson'"),
        ({"scale": "free"}, "it is 'known' or 'estimated'"),
        ({"outcome": "gamma", "criterion": "ubre"}, "criterion='ubre' needs a known scale"),
    ],
)
def test_outcomes_that_are_refused(options, words):
    with pytest.raises(am.ModelError) as caught:
        am.fit("gamma ~ a", DATA, **options)
    assert words in str(caught.value)


@pytest.mark.parametrize(
    ("outcome", "value", "words"),
    [
        ("poisson", -1.0, "y must be at least 0 for a"),
        ("negative binomial", -2.0, "y must be at least 0 for a"),
        ("tweedie", -0.5, "y must be at least 0 for a"),
        ("gamma", 0.0, "y must be above 0 for a"),
        ("inverse gaussian", 0.0, "y must be above 0 for a"),
        ("poisson", 1.5, "y must be whole for a"),
        ("negative binomial", 0.2, "y must be whole for a"),
    ],
)
def test_impossible_values_are_named(outcome, value, words):
    y = DATA["poisson"].to_numpy() + 1
    y[[4, 11]] = value
    with pytest.raises(am.DataError) as caught:
        am.fit("y ~ a", DATA.assign(y=y), outcome=outcome)
    assert words in str(caught.value)
    assert "4, 11" in str(caught.value)
    assert "counted from 0" in str(caught.value)


def test_nothing_to_explain():
    for outcome in ("poisson", "negative binomial", "tweedie"):
        with pytest.raises(am.AddmodelError):
            am.fit("y ~ a", DATA.assign(y=0.0), outcome=outcome)
    with pytest.raises(am.AddmodelError, match="nothing is left to explain"):
        am.fit("y ~ a", DATA.assign(y=1.0), outcome="binomial")


# Separation -------------------------------------------------------------------------------------


def bounded(fit: am.Fit) -> None:
    assert np.isfinite(fit.coefficients.to_numpy()).all()
    assert np.isfinite(fit.linear_predictor).all()
    assert np.isfinite([fit.deviance, fit.criterion_value, fit.aic]).all()


@pytest.mark.parametrize("outcome", ["binomial", "poisson", "negative binomial"])
def test_a_level_without_events(outcome):
    y = np.where(DATA.g == "v", 0.0, DATA[outcome])
    free = outcome == "negative binomial"  # beside a curve its dispersion is slow to find
    formula = "y ~ a + g" if free else "y ~ curve(x) + g"
    fit = am.fit(formula, DATA.assign(y=y), outcome=outcome)
    bounded(fit)
    assert said(fit, "In g the level 'v' has no events")


def test_a_level_of_nothing_but_events():
    y = np.where(DATA.g == "v", 1.0, DATA["binomial"])
    fit = am.fit("y ~ curve(x) + g", DATA.assign(y=y), outcome="binomial")
    bounded(fit)
    assert said(fit, "In g the level 'v' has nothing but events")


@pytest.mark.parametrize("link", ["Logit", "Probit", "CLogLog"])
def test_a_number_that_decides(link):
    family = families.Binomial(getattr(links, link)())
    y = (DATA.a > 0.1).astype(float)
    fit = am.fit("y ~ a", DATA.assign(y=y), outcome=family)
    bounded(fit)
    assert said(fit, "fitted probabilities are 0 or 1")
    assert said(fit, "separation")


@pytest.mark.parametrize("outcome", ["binomial", families.Binomial(links.Probit())])
def test_a_curve_that_decides(outcome):
    for y in (DATA.x > 0.5, abs(DATA.x - 0.5) < 0.2):
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", am.Caution)
            fit = am.fit("y ~ curve(x)", DATA.assign(y=y.astype(float)), outcome=outcome)
        bounded(fit)
        right = (fit.fitted > 0.5) == y
        assert right.mean() > 0.97
        assert np.isfinite(fit.effect("curve(x)").table.iloc[:, 1:].to_numpy()).all()


# Weights and trials -----------------------------------------------------------------------------


@pytest.mark.parametrize("outcome", ["binomial", "poisson"])
def test_whole_weights_are_repeated_rows(outcome):
    times = np.random.default_rng(4).integers(0, 4, len(DATA))
    data = DATA.assign(y=DATA[outcome], w=times)
    repeated = data.loc[data.index.repeat(times)]
    for formula in ("y ~ a + g", "y ~ curve(x, smoothing=0.01) + a"):
        weighted = am.fit(formula, data, outcome=outcome, weights="w")
        longer = am.fit(formula, repeated, outcome=outcome)
        at = {"x": [0.1, 0.5, 0.9], "a": [0.0, 1.0, -1.0], "g": list("uvw")}
        for column in ("estimate", "std_error"):
            np.testing.assert_allclose(
                weighted.coefficients[column], longer.coefficients[column], rtol=1e-6, atol=1e-8
            )
        np.testing.assert_allclose(weighted.predict(at), longer.predict(at), rtol=1e-7)
        assert weighted.deviance == pytest.approx(longer.deviance, rel=1e-9)


def test_ten_trials_in_one_row_are_ten_rows():
    rng = np.random.default_rng(6)
    x = np.sort(rng.uniform(size=40))
    killed = rng.binomial(10, 1 / (1 + np.exp(-2 * np.sin(6 * x))))
    one = am.fit("y ~ curve(x)", {"x": x, "y": killed}, outcome="binomial", trials=[10] * 40)
    y = (np.arange(10) < killed[:, None]).astype(float).ravel()
    ten = am.fit("y ~ curve(x)", {"x": np.repeat(x, 10), "y": y}, outcome="binomial")
    np.testing.assert_allclose(one.fitted, ten.fitted[::10], rtol=1e-6)
    assert one.effective_df == pytest.approx(ten.effective_df, rel=1e-6)
    errors = [f.predict({"x": x}, interval=0.9)["std_error"] for f in (one, ten)]
    np.testing.assert_allclose(errors[0], errors[1], rtol=1e-5)


# Textbook numbers -------------------------------------------------------------------------------

STATSMODELS = {
    "gaussian": sm.families.Gaussian(),
    "binomial": sm.families.Binomial(),
    "poisson": sm.families.Poisson(),
    "gamma": sm.families.Gamma(links.Log()),
    "inverse gaussian": sm.families.InverseGaussian(links.Log()),
}


@pytest.mark.parametrize("weights", [None, "w"])
@pytest.mark.parametrize("name", STATSMODELS)
def test_without_curves_it_is_a_glm(name, weights):
    data = DATA.assign(y=DATA[name], w=np.tile([1.0, 2.0, 3.0], 50))
    columns = sm.add_constant(data[["x", "a"]])
    known = {} if weights is None else {"freq_weights": data.w}
    glm = sm.GLM(data.y, columns, family=STATSMODELS[name], **known).fit(tol=1e-13, maxiter=200)
    role = {} if weights is None else {"counts": "w"}
    fit = am.fit("y ~ x + a", data, outcome=name, **role)
    np.testing.assert_allclose(fit.coefficients["estimate"], glm.params, rtol=1e-7)
    assert fit.deviance == pytest.approx(glm.deviance, rel=1e-9)
    assert fit.estimate.null_deviance == pytest.approx(glm.null_deviance, rel=1e-9)
    assert fit.deviance_reduction == pytest.approx(1 - glm.deviance / glm.null_deviance, rel=1e-8)
    assert fit.dispersion == pytest.approx(glm.pearson_chi2 / glm.df_resid, rel=1e-7)
    assert fit.effective_df == pytest.approx(3, abs=1e-9)
    assert fit.aic_corrected == pytest.approx(fit.aic, rel=1e-12)
    if name in ("binomial", "poisson"):
        assert fit.log_likelihood == pytest.approx(glm.llf, rel=1e-9)
        assert fit.aic == pytest.approx(glm.aic, rel=1e-9)
    elif weights is None:
        # The log-likelihood at the fit's own scale, and that scale counts as a parameter.
        scale = fit.deviance / fit.estimate.n if name == "gaussian" else fit.scale
        family = STATSMODELS[name]
        ours = family.loglike(data.y.to_numpy(), fit.fitted, scale=scale)
        assert fit.log_likelihood == pytest.approx(ours, rel=1e-8)
        assert fit.aic == pytest.approx(2 * 4 - 2 * fit.log_likelihood, rel=1e-12)


def test_uncertain_smoothing_costs_degrees_of_freedom(fits):
    for name, fit in fits.items():
        assert fit.aic_corrected >= fit.aic - 1e-9, name
    assert fits["poisson"].aic_corrected > fits["poisson"].aic + 0.01


CRITERIA = [
    *((name, "gcv") for name in NAMES if name != "negative binomial"),
    *((name, "ubre") for name in ("poisson", "binomial")),
]


@pytest.mark.parametrize(("name", "criterion"), CRITERIA)
def test_other_criteria_settle(name, criterion):
    fit = fit_of(name, criterion=criterion)
    assert fit.estimate.settled
    tolerance = 1e-6 * max(1.0, abs(fit.criterion_value))
    assert np.abs(fit.estimate.gradient).max() < tolerance
    assert 3 < fit.effective_df < 25


@pytest.mark.parametrize("name", NAMES)
def test_reml_settles(name, fits):
    fit = fits[name]
    assert fit.estimate.settled
    assert np.abs(fit.estimate.gradient).max() < 1e-6 * abs(fit.criterion_value)
    assert 0.2 < fit.deviance_reduction < 0.95 or name in ("binomial", "negative binomial")


# New observations -------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["poisson", "gamma", "negative binomial"])
def test_intervals_for_new_observations_cover(name, fits):
    new = table(1000, seed=77)
    rows = new.assign(y=new[name])
    found = fits[name].predict(rows.iloc[:300], interval=0.95, new_observation=True)
    y = rows.y.iloc[:300]
    inside = int(((y >= found["lower"]) & (y <= found["upper"])).sum())
    # Intervals of counts cover at least their level; the curve is estimated, so loosely.
    assert inside > binom(300, 0.92).ppf(0.001)
    assert inside <= 299
    mean = fits[name].predict(rows.iloc[:300], interval=0.95)
    assert (found["std_error"] > mean["std_error"]).all()


# Saved fits, words, command ---------------------------------------------------------------------


@pytest.mark.parametrize("name", [*NAMES, "probit", "quasi"])
def test_a_loaded_fit_answers_bit_for_bit(name, fits, tmp_path: Path):
    if name == "probit":
        family = families.Binomial(links.Probit())
        fit = am.fit("binomial ~ curve(x) + a", DATA, outcome=family)
    elif name == "quasi":
        fit = fit_of("poisson", scale="estimated")
    else:
        fit = fits[name]
    fit.save(tmp_path / "f.addmodel")
    again = am.load(tmp_path / "f.addmodel")
    assert str(again.summary()) == str(fit.summary())
    new = DATA.head(20)
    np.testing.assert_array_equal(again.predict(new), fit.predict(new))
    for more in ({}, {"new_observation": True}, {"scale": "link"}):
        pd.testing.assert_frame_equal(
            again.predict(new, interval=0.9, **more),
            fit.predict(new, interval=0.9, **more),
            check_exact=True,
        )
    assert again.aic == fit.aic


@pytest.mark.parametrize(
    ("name", "predictor"),
    [
        ("binomial", "The log odds is an intercept plus"),
        ("poisson", "The log of the mean is an intercept plus"),
        ("gamma", "The log of the mean is an intercept plus"),
        ("tweedie", "The log of the mean is an intercept plus"),
    ],
)
def test_the_summary_names_outcome_link_and_dispersion(name, predictor, fits):
    text = flat(fits[name])
    assert f"is taken as {name}" in text.lower().replace("taken as  ", "taken as ")
    assert predictor in text
    assert f"Pearson's dispersion is {fits[name].dispersion:.2f}" in text
    assert "of the null deviance" in text
    assert f'outcome="{name}"' in text
    words = flat(am.fit("binomial ~ a", DATA, outcome=families.Binomial(links.CLogLog())))
    assert "The complementary log-log of the mean" in words


def test_command(tmp_path: Path):
    data, out = tmp_path / "rows.csv", tmp_path / "out"
    DATA[["x", "a", "years", "deaths"]].to_csv(data, index=False)

    def run(*arguments: object):
        found = CliRunner().invoke(app, [str(a) for a in arguments], env={"COLUMNS": "200"})
        return found

    options = ["--outcome", "poisson", "--exposure", "years"]
    fitted = run("fit", data, "deaths ~ curve(x) + a", "--out", out, *options)
    assert fitted.exit_code == 0, fitted.output
    assert "oisson about its mean" in " ".join(fitted.output.split())
    (saved,) = out.glob("*.addmodel")
    bare = tmp_path / "new.csv"
    DATA[["x", "a"]].head(5).to_csv(bare, index=False)
    target = tmp_path / "found.csv"
    found = run("predict", saved, bare, "--per", "1000", "--out", target)
    assert found.exit_code == 0, found.output
    here = am.fit("deaths ~ curve(x) + a", data, outcome="poisson", exposure="years")
    expected = here.predict(bare, per=1000, interval=0.95)
    np.testing.assert_allclose(pd.read_csv(target)["prediction"], expected["prediction"], rtol=1e-9)
    refused = run("predict", saved, bare, "--out", target)
    assert refused.exit_code != 0
    assert "years (exposure=)" in " ".join(refused.output.split())
