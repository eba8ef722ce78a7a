"""Random models of every outcome on awkward data: finite numbers, a named caution, or a refusal."""

from __future__ import annotations

import warnings
from typing import Any, NamedTuple

import numpy as np
import pytest
from statsmodels.genmod import families

import addmodel as am
from addmodel.outcomes import NAMES

LINKS = ("probit", "cloglog")
OUTCOMES = (*NAMES, *LINKS)
YES_NO = ("binomial", *LINKS)
COUNTS = ("poisson", "negative binomial")
CASES = 30


class Case(NamedTuple):
    """One random model: what `am.fit` is given."""

    outcome: str
    formula: str
    data: dict[str, Any]
    options: dict[str, Any]

    def fit(self) -> am.Fit:
        return am.fit(self.formula, self.data, **self.options)


def random_case(seed: int) -> Case:
    """Few rows, ties, lone levels, zeros, tiny and huge numbers, weights, exposure, trials."""
    rng = np.random.default_rng([seed, 31])
    outcome = OUTCOMES[seed % len(OUTCOMES)]
    n = int(rng.integers(8, 81))
    data: dict[str, Any] = {"x": _covariate(rng, n), "z": _covariate(rng, n)}
    data["g"] = np.array(list("uvw"))[rng.integers(0, 3, n)]
    if rng.random() < 0.3:
        data["g"][0] = "alone"
    kinds = ["curve(x)", "curve(z)", "x", "g", "cycle(z, period=3)", "curve(x, df=3)", "{z > 0}"]
    chosen = rng.choice(kinds, size=int(rng.integers(0, 4)), replace=False)
    names = [term for term in chosen if not (term == "x" and "curve(x)" in chosen)]
    if "curve(x, df=3)" in names:
        names = ["curve(x, df=3)"]  # beside other penalised terms it takes minutes at times
    spread = 0.0 if np.ptp(data["x"]) == 0 else np.std(data["x"])
    wave = np.sin(3 * (data["x"] - data["x"].mean()) / (spread or 1.0))
    eta = rng.choice([0.0, 0.5, 2.0, 6.0]) * wave + rng.choice([-4.0, -1.0, 0.0, 2.0])
    options: dict[str, Any] = {"outcome": outcome}
    if outcome in YES_NO:
        _yes_no(rng, outcome, eta, data, options)
    elif outcome in COUNTS:
        _counts(rng, outcome, eta, data, options)
    else:
        _measured(rng, outcome, eta, data)
    if rng.random() < 0.3:
        data["w"] = rng.choice(
            [0.0, 0.5, 1.0, 3.0, 1e-6, 1e6], size=n, p=[0.1, 0.3, 0.3, 0.2, 0.05, 0.05]
        )
        options["weights"] = "w"
    if rng.random() < 0.2:
        options["criterion"] = str(rng.choice(["gcv", "ubre"]))
    return Case(outcome, f"y ~ {' + '.join(names) or '1'}", data, options)


def _covariate(rng: np.random.Generator, n: int) -> np.ndarray:
    kind = rng.integers(0, 5)
    if kind == 0:
        return rng.integers(0, 5, n).astype(float)  # ties
    scale = {1: 1e-8, 2: 1e8}.get(int(kind), 1.0)
    x = scale * rng.normal(size=n)
    if kind == 3:
        x[0] = 1e4  # one far off
    return x


def _yes_no(
    rng: np.random.Generator, outcome: str, eta: Any, data: dict[str, Any], options: dict[str, Any]
) -> None:
    chance = 1 / (1 + np.exp(-eta))
    if rng.random() < 0.2:
        chance = (eta > np.median(eta)).astype(float)  # decided by the covariate
    if rng.random() < 0.3:
        data["n"] = rng.integers(0, 12, len(eta))
        data["y"] = rng.binomial(data["n"], chance).astype(float)
        options["trials"] = "n"
    else:
        data["y"] = rng.binomial(1, chance).astype(float)
    if outcome in LINKS:
        link = {"probit": families.links.Probit, "cloglog": families.links.CLogLog}[outcome]()
        options["outcome"] = families.Binomial(link)
    if rng.random() < 0.2:
        options["scale"] = "estimated"


def _counts(
    rng: np.random.Generator, outcome: str, eta: Any, data: dict[str, Any], options: dict[str, Any]
) -> None:
    exposure = np.ones(len(eta))
    if rng.random() < 0.4:
        data["time"] = exposure = 10.0 ** rng.uniform(-3, 3, len(eta)) * rng.choice(
            [1e-8, 1.0, 1e8]
        )
        options["exposure"] = "time"
    mean = np.minimum(exposure * np.exp(eta), 1e8)
    if outcome == "negative binomial" and rng.random() < 0.7:
        mean = mean * rng.gamma(0.7, 1 / 0.7, len(eta))
    data["y"] = rng.poisson(mean).astype(float)
    if rng.random() < 0.3:
        data["y"][data["g"] == "u"] = 0.0
    if rng.random() < 0.2:
        data["y"] *= 10.0**6
    if outcome == "poisson" and rng.random() < 0.3:
        options["scale"] = "estimated"


def _measured(rng: np.random.Generator, outcome: str, eta: Any, data: dict[str, Any]) -> None:
    mean, scale = np.exp(eta), rng.choice([1e-8, 1.0, 1.0, 1e8])
    if outcome == "gaussian":
        y = eta + rng.choice([0.0, 1e-6, 1.0]) * rng.normal(size=len(eta))
    elif outcome == "gamma":
        y = rng.gamma(rng.choice([0.3, 5.0, 1e6]), mean)
        y = np.maximum(y, 1e-12)
    elif outcome == "inverse gaussian":
        y = rng.wald(mean, rng.choice([0.1, 5.0]))
    else:
        y = np.array([rng.gamma(2.0, 0.5, k).sum() for k in rng.poisson(np.minimum(mean, 50))])
    if rng.random() < 0.15:
        y = np.round(y, 1) + (0.1 if outcome in ("gamma", "inverse gaussian") else 0.0)
    data["y"] = scale * y


def finite(values: Any) -> bool:
    return bool(np.isfinite(np.asarray(values, dtype=np.float64)).all())


def answered(case: Case) -> str:
    """ "settled", "cautioned" or "refused"; an AssertionError where a number is not one."""
    with warnings.catch_warnings(record=True) as said:
        warnings.simplefilter("error")
        warnings.simplefilter("always", am.Caution)
        try:
            fit = case.fit()
        except am.AddmodelError:
            return "refused"
        check(fit, case)
    return "cautioned" if fit.cautions or said else "settled"


def check(fit: am.Fit, case: Case) -> None:
    """Every number of the fit is finite, and what was not settled was said."""
    assert finite(fit.coefficients), fit.coefficients
    assert finite(fit.components["effective_df"])
    assert finite(fit.components["share"]) or not np.ptp(fit.linear_predictor) > 0
    assert not fit.smoothing.isna().any()
    assert (fit.smoothing >= 0).all()
    assert finite(fit.linear_predictor)
    assert finite(fit.fitted)
    for kind in ("scaled", "response", "deviance"):
        assert finite(fit.residuals(kind)), kind
    numbers = ["scale", "dispersion", "deviance", "effective_df", "deviance_reduction"]
    if fit.scale > 1e-12:  # an outcome without noise has no likelihood
        numbers += ["log_likelihood", "aic", "aic_corrected", "criterion_value"]
    for name in numbers:
        assert finite(getattr(fit, name)), name
    rows = {name: values[fit.rows[:3]] for name, values in case.data.items()}
    for more in ({}, {"new_observation": True}):
        table = fit.predict(rows, interval=0.9, **more)
        assert finite(table.drop(columns="outside")), table
    used = {name: values[fit.rows] for name, values in case.data.items()}
    np.testing.assert_allclose(
        fit.predict(used),
        fit.fitted,
        rtol=1e-5,
        atol=1e-9 * np.abs(fit.fitted).max(),
    )
    for name in fit.components.index:
        assert finite(fit.effect(name).table.iloc[:, 1:]), name
    assert finite(fit.draws(2))
    text = str(fit.summary()).lower()
    assert not {"nan", "inf"} & set(text.replace(",", " ").replace(".", " ").split())
    if not fit.estimate.settled:
        assert any("did not settle" in caution for caution in fit.cautions)


@pytest.mark.parametrize("seed", range(CASES))
def test_finite_numbers_a_caution_or_a_refusal(seed):
    answered(random_case(seed))
