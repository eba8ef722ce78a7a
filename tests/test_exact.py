"""One curve against extended precision, and models without curves against certified values."""

import numpy as np
import pytest
from statsmodels.datasets import longley

import addmodel as am
from tests.exact import exact_spline, spacings


@pytest.mark.parametrize("lam", [1e-8, 1e-4])
@pytest.mark.parametrize("name", spacings(20))
def test_curve_in_extended_precision(name, lam):
    x = spacings(300)[name]
    y = np.sin(9 * x) + 0.3 * np.random.default_rng(6).standard_normal(len(x))
    fit = am.fit(f'y ~ curve(x, detail="all", smoothing={lam})', {"x": x, "y": y})
    # λ is for x scaled to [0, 1]: in raw x it is λ · range³.
    truth = exact_spline(x, y, lam * np.ptp(x) ** 3)
    assert np.abs(fit.fitted - truth).max() < 1e-6 * np.ptp(y)


def test_closed_form_of_effective_df():
    """edf = 1 + λ^{-1/4}/(2√2) on an even grid, λ in mean scaling, for small λ.

    (The eigenvalues tend to (kπ)⁴-like beam values; sum of 1/(1 + λβ⁴) by its integral.)
    """
    n = 800
    x = (np.arange(n) + 0.5) / n
    y = np.random.default_rng(0).standard_normal(n)
    for mean_scaled, observed in ((1e-6, 12.180340), (1e-4, 4.535539)):
        lam = mean_scaled * n / (1 - 1 / n) ** 3
        fit = am.fit(f'y ~ curve(x, detail="all", smoothing={lam!r})', {"x": x, "y": y})
        formula = 1 + mean_scaled**-0.25 / (2 * np.sqrt(2))
        assert formula == pytest.approx(observed, abs=1e-4)
        assert fit.effective_df == pytest.approx(formula, abs=5e-3)


def test_longley_certified_values():
    """NIST Statistical Reference Datasets, linear regression, Longley: certified values.

    https://www.itl.nist.gov/div898/strd/lls/data/Longley.shtml; the data ship with statsmodels.
    Two close roads must not lose digits here: the columns are all but collinear.
    """
    data = longley.load_pandas().data
    fit = am.fit("TOTEMP ~ GNPDEFL + GNP + UNEMP + ARMED + POP + YEAR", data)
    certified = {
        "intercept": (-3482258.63459582, 890420.383607373),
        "GNPDEFL": (15.0618722713733, 84.9149257747669),
        "GNP": (-0.358191792925910e-01, 0.334910077722432e-01),
        "UNEMP": (-2.02022980381683, 0.488399681651699),
        "ARMED": (-1.03322686717359, 0.214274163161675),
        "POP": (-0.511041056535807e-01, 0.226073200069370),
        "YEAR": (1829.15146461355, 455.478499142212),
    }
    for name, (value, error) in certified.items():
        assert fit.coefficients.loc[name, "estimate"] == pytest.approx(value, rel=1e-8)
        assert fit.coefficients.loc[name, "std_error"] == pytest.approx(error, rel=1e-8)
    assert np.sqrt(fit.scale) == pytest.approx(304.854073561965, rel=1e-9)
    assert fit.deviance == pytest.approx(836424.055505915, rel=1e-9)
    assert fit.deviance_reduction == pytest.approx(0.995479004577296, rel=1e-10)
    # An intercept of -3.5 million and a span of 16 years: infinite smoothing is the same line.
    bent = am.fit("TOTEMP ~ curve(YEAR)", data)
    if np.isinf(bent.smoothing["curve(YEAR)"]):
        straight = am.fit("TOTEMP ~ YEAR", data)
        np.testing.assert_allclose(bent.fitted, straight.fitted, rtol=1e-12)


def test_infinite_smoothing_is_least_squares():
    rng = np.random.default_rng(12)
    x = rng.uniform(2, 9, 120)
    y = 3 - 2 * x + rng.standard_normal(120)
    fit = am.fit("y ~ curve(x)", {"x": x, "y": y})
    assert np.isinf(fit.smoothing["curve(x)"])  # this seed ends straight
    slope, intercept = np.polyfit(x, y, 1)
    np.testing.assert_allclose(fit.fitted, intercept + slope * x, rtol=1e-12)
    huge = am.fit("y ~ curve(x, smoothing=1e12)", {"x": x, "y": y})
    np.testing.assert_allclose(huge.fitted, fit.fitted, rtol=1e-9)
