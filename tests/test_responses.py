"""Fits of yes/no outcomes, trials, exposure and offset: the same model however they are given."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import polars as pl
import pytest

import addmodel as am


def table(n: int = 120) -> pd.DataFrame:
    rng = np.random.default_rng(21)
    d = pd.DataFrame({"x": rng.uniform(0, 3, n), "n": rng.integers(0, 9, n)})
    chance = 1 / (1 + np.exp(1 - np.sin(2 * d.x) - 0.5 * d.x))
    d["case"] = rng.binomial(1, chance)
    d["killed"] = rng.binomial(d.n, chance)
    d["years"] = rng.uniform(1, 20, n)
    d["known"] = rng.normal(size=n) / 5
    d["deaths"] = rng.poisson(d.years * np.exp(np.sin(2 * d.x) - 2 + d.known))
    return d


DATA = table()


@pytest.fixture(scope="module")
def plain() -> am.Fit:
    return am.fit("case ~ curve(x)", DATA, outcome="binomial")


@pytest.fixture(scope="module")
def rates() -> am.Fit:
    return am.fit("deaths ~ curve(x)", DATA, outcome="poisson", exposure="years")


def same(a: am.Fit, b: am.Fit) -> None:
    np.testing.assert_allclose(a.linear_predictor, b.linear_predictor, rtol=1e-9, atol=1e-9)
    assert a.criterion_value == pytest.approx(b.criterion_value, rel=1e-10)


# Yes/no -----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("values", "event", "label"),
    [
        (DATA.case == 1, None, "True"),
        (DATA.case.map({0: "alive", 1: "died"}), None, "died"),
        (DATA.case.map({0: "well", 1: "ill"}), "ill", "ill"),
        (pd.Categorical(DATA.case.map({0: "no", 1: "a"}), ["no", "a"]), None, "a"),
        (DATA.case + 1, 2, "2"),
        (1 - DATA.case, 0, "0"),
    ],
)
def test_the_same_however_the_event_is_written(values: Any, event: object, label: str, plain):
    fit = am.fit("y ~ curve(x)", DATA.assign(y=values), outcome="binomial", event=event)
    same(fit, plain)
    assert f"(counted: {label})" in " ".join(str(fit.summary()).split())
    assert ((fit.fitted > 0) & (fit.fitted < 1)).all()


def test_the_other_level_turns_the_sign(plain):
    other = am.fit("case ~ curve(x)", DATA, outcome="binomial", event=0)
    np.testing.assert_allclose(other.linear_predictor, -plain.linear_predictor, atol=1e-7)


@pytest.mark.parametrize("kind", ["polars", "csv"])
def test_other_tables_give_the_same(kind, plain, tmp_path: Path):
    words = DATA.assign(case=DATA.case.map({0: "alive", 1: "died"}))
    data: object = pl.DataFrame(words.to_dict("list"))
    if kind == "csv":
        data = tmp_path / "rows.csv"
        words.to_csv(data, index=False)
    same(am.fit("case ~ curve(x)", data, outcome="binomial"), plain)
    trials = am.fit("killed ~ curve(x)", data, outcome="binomial", trials="n")
    same(trials, am.fit("killed ~ curve(x)", DATA, outcome="binomial", trials="n"))
    deaths = am.fit("deaths ~ x", data, outcome="poisson", exposure="years")
    same(deaths, am.fit("deaths ~ x", DATA, outcome="poisson", exposure="years"))


def test_trials_as_column_expression_or_values():
    counted = am.fit("killed ~ curve(x)", DATA, outcome="binomial", trials="n")
    none = DATA.n == 0
    assert none.any()
    np.testing.assert_array_equal(counted.rows, np.flatnonzero(~none))
    assert f"{int(none.sum())} with zero weight left out" in " ".join(str(counted).split())
    more = DATA.assign(alive=DATA.n - DATA.killed, share=DATA.killed / DATA.n.clip(lower=1))
    for formula, trials in (
        ("killed ~ curve(x)", "alive + killed"),
        ("killed ~ curve(x)", DATA.n.to_numpy()),
        ("killed ~ curve(x)", pl.Series(DATA.n.to_numpy())),
        ("share ~ curve(x)", "n"),
        ("{killed / n} ~ curve(x)", "n"),
    ):
        same(am.fit(formula, more, outcome="binomial", trials=trials), counted)
    # Predictions are probabilities, whatever the trials.
    chance = counted.predict(DATA[["x"]], interval=0.95)
    assert ((chance > 0) & (chance < 1)).all().loc[["prediction", "lower", "upper"]].all()
    np.testing.assert_allclose(chance["prediction"][~none], counted.fitted, rtol=1e-10)


WRONG = [
    ("case", {"outcome": "binomial", "event": "died"}, "event='died' is not a level of case"),
    ("{case * 2}", {"outcome": "binomial"}, "event=2"),
    ("n", {"outcome": "binomial"}, "different values"),
    ("{n / 10}", {"outcome": "binomial"}, "trials= must say of how many"),
    ("killed", {"outcome": "binomial", "trials": "n - 1"}, "must not be negative: -1"),
    ("{killed + 9}", {"outcome": "binomial", "trials": "n"}, "between 0 and trials=; it is not in"),
    ("case", {"outcome": "poisson", "trials": "n"}, "belongs to a yes/no outcome"),
    ("case", {"outcome": "binomial", "event": 1, "trials": "n"}, "no use beside trials="),
    ("deaths", {"outcome": "poisson", "exposure": "years - years"}, "must be positive: 0, 0"),
    ("deaths", {"outcome": "poisson", "exposure": "year"}, "Did you mean 'years'?"),
    ("{0 - deaths}", {"outcome": "poisson"}, "rows are counted from 0"),
]


@pytest.mark.parametrize(("response", "options", "words"), WRONG)
@pytest.mark.parametrize("kind", ["pandas", "polars", "csv"])
def test_what_cannot_be_says_why(response, options, words, kind, tmp_path: Path):
    data: object = DATA
    if kind == "polars":
        data = pl.DataFrame(DATA.to_dict("list"))
    if kind == "csv":
        data = tmp_path / "rows.csv"
        DATA.to_csv(data, index=False)
    with pytest.raises(am.AddmodelError) as caught:
        am.fit(f"{response} ~ curve(x)", data, **options)
    assert words in str(caught.value)


def test_rows_of_wrong_values_are_named():
    wrong = DATA.assign(years=np.where(DATA.index == 7, -1.0, DATA.years), bad=DATA.killed)
    with pytest.raises(am.DataError, match="must be positive: -1 in row 7"):
        am.fit("deaths ~ x", wrong, outcome="poisson", exposure="years")
    wrong.loc[[3, 5], "bad"] = 99
    with pytest.raises(am.DataError, match="it is not in rows 3, 5"):
        am.fit("bad ~ x", wrong[wrong.n > -1], outcome="binomial", trials="n")


# Exposure and offset ----------------------------------------------------------------------------


def test_missing_exposures_are_left_out(rates):
    gaps = DATA.assign(years=DATA.years.where(DATA.index != 4))
    fit = am.fit("deaths ~ curve(x)", gaps, outcome="poisson", exposure="years")
    assert 4 not in fit.rows
    assert "1 with missing values left out" in " ".join(str(fit).split())
    new = DATA.assign(years=DATA.years.where(DATA.index != 9))
    with pytest.warns(am.Caution, match="1 of 120 rows lack"):
        found = rates.predict(new)
    np.testing.assert_array_equal(np.flatnonzero(np.isnan(found)), [9])


def test_predictions_with_exposure(rates):
    np.testing.assert_allclose(rates.predict(DATA), rates.fitted, rtol=1e-10)
    doubled = rates.predict(DATA.assign(years=2 * DATA.years))
    np.testing.assert_allclose(doubled, 2 * rates.fitted, rtol=1e-10)
    bare = DATA[["x"]]
    rate = rates.predict(bare, per=1)
    np.testing.assert_allclose(rate, rates.fitted / DATA.years, rtol=1e-10)
    np.testing.assert_allclose(rates.predict(DATA, per=1000), 1000 * rate, rtol=1e-10)
    wide = rates.predict(bare, per=10, interval=0.9)
    np.testing.assert_allclose(wide["prediction"], 10 * rate, rtol=1e-10)
    assert (wide["lower"] < wide["upper"]).all()
    with pytest.raises(am.DataError, match=r"no column 'years'.*years \(exposure=\)"):
        rates.predict(bare)
    for wrong in (0, -1, np.inf, True, "1"):
        with pytest.raises(am.ModelError, match="per= is a positive exposure"):
            rates.predict(bare, per=wrong)


def test_exposure_by_values(rates):
    given = am.fit("deaths ~ curve(x)", DATA, outcome="poisson", exposure=DATA.years.to_numpy())
    same(given, rates)
    assert "exposure=<exposure>" in given.summary().recipe
    with pytest.raises(am.ModelError, match="write per=1"):
        given.predict(DATA)
    np.testing.assert_allclose(given.predict(DATA, per=1), rates.predict(DATA, per=1), rtol=1e-8)


def test_per_needs_an_exposure(plain):
    with pytest.raises(am.ModelError, match="only for a fit with exposure="):
        plain.predict(DATA, per=1)


def test_offset_by_column_or_values():
    options = {"outcome": "poisson", "exposure": "years"}
    column = am.fit("deaths ~ curve(x)", DATA, offset="known", **options)
    values = am.fit("deaths ~ curve(x)", DATA, offset=DATA.known.to_numpy(), **options)
    both = am.fit("deaths ~ curve(x)", DATA, offset="known + log(years)", outcome="poisson")
    same(values, column)
    same(both, column)
    np.testing.assert_allclose(column.predict(DATA), column.fitted, rtol=1e-10)
    with pytest.raises(am.DataError, match=r"no column .known.*\(offset=\)"):
        column.predict(DATA[["x", "years"]])
    with pytest.warns(am.Caution, match="predictions are at offset 0"):
        found = values.predict(DATA)
    np.testing.assert_allclose(found, values.fitted / np.exp(DATA.known), rtol=1e-9)
