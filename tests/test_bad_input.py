"""Bad input at the public door: an error that says what, where and what to do; never a NaN."""

import warnings
from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st

import addmodel as am
from addmodel import Caution, DataError, FormulaError, ModelError


def table(n: int = 90) -> pd.DataFrame:
    rng = np.random.default_rng(404)
    d = pd.DataFrame(
        {
            "dose": rng.uniform(0, 10, n),
            "age": rng.uniform(20, 80, n),
            "hour": rng.integers(0, 24, n).astype(float),
            "site": rng.choice(["north", "south", "west"], n),
            "two": np.arange(n) % 2 * 1.5,
            "three": np.arange(n) % 3 * 1.5,
            "same": np.full(n, 2.0),
            "fraction": np.full(n, 1.5),
            "zero": np.zeros(n),
        }
    )
    d["y"] = np.sin(d.dose) + d.age / 50 + rng.normal(size=n) / 3
    d["below"] = np.where(np.arange(n) == 7, -1.0, 1.0)
    d["endless"] = np.where(np.arange(n) == 4, np.inf, d.age)
    d["both"] = d.dose + d.age
    return d


DATA = table()
GAP = DATA.head(3).assign(dose=[1.0, np.nan, 2.0])
NEW_LEVEL = DATA.head(3).assign(site=["south", "sout", "north"])


@pytest.fixture(scope="module")
def fit() -> am.Fit:
    return am.fit("y ~ curve(dose) + age + C(site, base='south')", DATA)


Kind = type[am.AddmodelError]

FITTING: dict[str, tuple[dict[str, Any], Kind, str]] = {
    "unknown column": (
        {"formula": "y ~ curve(doze) + age"},
        FormulaError,
        r"no column 'doze'\. Did you mean 'dose'.*\n    y ~ curve\(>>doze<<\) \+ age",
    ),
    "unknown outcome column": (
        {"formula": "yy ~ age"},
        FormulaError,
        r"no column 'yy'\. .*\n    >>yy<< ~ age",
    ),
    "unknown weights column": (
        {"weights": "ages"},
        DataError,
        "weights='ages': the data has no column 'ages'. Did you mean 'age'",
    ),
    "curve with 2 values": (
        {"formula": "y ~ curve(two)"},
        FormulaError,
        r"curve\(two\) has 2 distinct values and needs at least 4\. Write `two` for a straight "
        r"line or `C\(two\)` for levels\.\n    y ~ >>curve\(two\)<<",
    ),
    "curve with 3 values": (
        {"formula": "y ~ curve(three)"},
        FormulaError,
        r"curve\(three\) has 3 distinct values and needs at least 4",
    ),
    "cycle with 2 values": (
        {"formula": "y ~ cycle(two, period=24)"},
        FormulaError,
        r"cycle\(two, period=24\) has 2 distinct values within its period and needs at least 3",
    ),
    "cycle with 2 values within its period": (
        {"formula": "y ~ cycle(hour, period=2)"},
        FormulaError,
        r"cycle\(hour, period=2\) has 2 distinct values within its period and needs at least 3",
    ),
    "constant line": (
        {"formula": "y ~ same"},
        DataError,
        "same has one distinct value in the 90 rows used.*remove it from the formula",
    ),
    "constant curve": ({"formula": "y ~ curve(same)"}, DataError, "same has one distinct value"),
    "one level": ({"formula": "y ~ C(same)"}, DataError, "same has one distinct value"),
    "infinite": (
        {"formula": "y ~ curve(endless)"},
        DataError,
        r"column 'endless' has infinite values in row 4 \(rows are counted from 0\)",
    ),
    "text outcome": ({"formula": "site ~ age"}, DataError, "site is text; it must be a number"),
    "constant outcome": (
        {"formula": "same ~ age"},
        ModelError,
        "same has the same value in all rows used: .*nothing.* to explain",
    ),
    "outcome equal to its offset": (
        {"offset": "y"},
        ModelError,
        "y has the same value in all rows used",
    ),
    "negative weight": (
        {"weights": "below"},
        DataError,
        r"weights= \(below\) must not be negative: -1 in row 7",
    ),
    "negative count": ({"counts": "below"}, DataError, "must not be negative: -1 in row 7"),
    "fractional counts": (
        {"counts": "fraction"},
        DataError,
        r"counts= \(fraction\) must be whole numbers: 1\.5",
    ),
    "no weight": ({"weights": "zero"}, DataError, "is zero in every row; there is nothing to fit"),
    "criterion": ({"criterion": "remel"}, ModelError, "'remel' is not known. Did you mean 'reml'"),
    "outcome": ({"outcome": "gausian"}, ModelError, "'gausian' is not known. Did.* 'gaussian'"),
    "missing": ({"missing": "skip"}, DataError, "missing='skip' is not known; .*'drop' or 'error'"),
    "missing values": (
        {"formula": "y ~ dose", "data": GAP, "missing": "error"},
        DataError,
        r"1 of 3 rows have missing values, in dose \(1\): row 1 .*Write missing='drop'",
    ),
    "df too low": (
        {"formula": "y ~ curve(dose, df=1)"},
        FormulaError,
        r"(?s)df= is a number above 1.*>>df=1<<",
    ),
    "df out of reach": (
        {"formula": "y ~ curve(dose, df=90)"},
        FormulaError,
        r"between 1 and 89 effective degrees of freedom on these data, so df=90 is out of reach",
    ),
    "df of a cycle out of reach": (
        {"formula": "y ~ cycle(hour, period=24, df=23.5)"},
        FormulaError,
        r"(?s)df=23\.5 is out of reach.*>>cycle\(hour, period=24, df=23.5\)<<",
    ),
    "base": (
        {"formula": "y ~ C(site, base='sout')"},
        FormulaError,
        r"base='sout' is not a level of site\. Did you mean 'south'",
    ),
    "dependence of lines": (
        {"formula": "y ~ dose + age + both"},
        ModelError,
        "'both' is a linear combination of 'dose', 'age': .*Leave one of them out",
    ),
    "dependence of a curve's straight part": (
        {"formula": "y ~ curve(dose) + age + both"},
        ModelError,
        "is a linear combination of '.*', '.*': the data cannot tell them apart",
    ),
    "more coefficients than rows": (
        {"formula": "y ~ dose + age + hour + two", "data": DATA.head(4)},
        ModelError,
        "5 unpenalised coefficients and the data only 4 rows",
    ),
    "period of a calendar on numbers": (
        {"formula": "y ~ cycle(hour, period='year')"},
        FormulaError,
        r"needs dates for period='year', and hour is a number\. Give the period as a number",
    ),
    "the same curve twice": (
        {"formula": "y ~ curve(dose) + curve(dose, df=4)"},
        FormulaError,
        r"curve\(dose\) and curve\(dose, df=4\) are the same term with different options",
    ),
    "no formula": ({"formula": None}, FormulaError, "text is expected, not NoneType"),
    "no table": ({"data": 3}, DataError, "Give a pandas, polars or arrow table"),
    "no rows": ({"data": DATA.head(0)}, DataError, "there are no rows"),
    "one row": ({"formula": "y ~ 1", "data": DATA.head(1)}, am.AddmodelError, "y has|only 1 row"),
}


@pytest.mark.parametrize("name", FITTING)
def test_fit_refuses(name):
    options, kind, words = FITTING[name]
    with pytest.raises(kind, match=words) as caught:
        am.fit(**{"formula": "y ~ age", "data": DATA, **options})
    assert "nan" not in str(caught.value).lower().split()


ASKING: dict[str, tuple[Callable[[am.Fit], Any], Kind, str]] = {
    "unseen level": (
        lambda f: f.predict(NEW_LEVEL),
        DataError,
        r"the level 'sout' \(row 1, counted from 0\), which the fit has not seen\. "
        r"Did you mean 'south'\? Or write unseen='base' or unseen='average'",
    ),
    "unseen option": (lambda f: f.predict(NEW_LEVEL, unseen="zero"), ModelError, "'average'"),
    "missing covariate": (
        lambda f: f.predict(GAP, missing="error"),
        DataError,
        r"1 of 3 rows have missing values, in dose \(1\): row 1",
    ),
    "missing option": (lambda f: f.predict(GAP, missing="drop"), DataError, "'keep' or 'error'"),
    "missing column": (
        lambda f: f.predict(DATA.rename(columns={"dose": "doses"})),
        DataError,
        r"no column 'dose'\. Did you mean 'doses'\? The model needs: dose, age, site",
    ),
    "text for a number": (
        lambda f: f.predict(DATA.assign(dose="a")),
        DataError,
        "dose is text in the new data, but was a number when the model was fitted",
    ),
    "infinite at prediction": (
        lambda f: f.predict(DATA.assign(age=DATA.endless)),
        DataError,
        "column 'age' has infinite values in row 4",
    ),
    "no new rows": (lambda f: f.predict(None), DataError, "Give the new rows"),
    "scale": (lambda f: f.predict(DATA, scale="log"), ModelError, "one of 'outcome', 'link'"),
    "new observation without interval": (
        lambda f: f.predict(DATA, new_observation=True),
        ModelError,
        r"new_observation=True needs interval=, such as interval=0\.95",
    ),
    "new observation of a part": (
        lambda f: f.predict(DATA, interval=0.9, new_observation=True, only="age"),
        ModelError,
        "needs the whole model: no only=/without=",
    ),
    "unknown component in only": (
        lambda f: f.predict(DATA, only="curve(doze)"),
        FormulaError,
        r"no term 'curve\(doze\)'\. Did you mean 'curve\(dose\)'",
    ),
    "unknown component in without": (
        lambda f: f.predict(DATA, without=["age", "sites"]),
        FormulaError,
        "no term 'sites'",
    ),
    "only and without": (
        lambda f: f.predict(DATA, only="age", without="curve(dose)"),
        ModelError,
        "Give only= or without=, not both",
    ),
    "a number for a component": (
        lambda f: f.predict(DATA, only=3),
        ModelError,
        "Components are named by text.*got 3",
    ),
    "a number among components": (
        lambda f: f.predict(DATA, without=["age", 3]),
        ModelError,
        "Components are named by text.*got 3",
    ),
    "unknown component in effect": (
        lambda f: f.effect("curve(doze)"),
        FormulaError,
        r"no term 'curve\(doze\)'\. Did you mean 'curve\(dose\)'",
    ),
    "several components in effect": (
        lambda f: f.effect(["age", "curve(dose)"]),
        ModelError,
        "Name one component",
    ),
    "level of effect": (lambda f: f.effect("age", level=95), ModelError, "between 0 and 1.*95"),
    "at no level": (
        lambda f: f.effect("site", at=["sout"]),
        ModelError,
        "at='sout' is not a level of site. Did you mean 'south'",
    ),
    "at no number": (lambda f: f.effect("age", at="old"), ModelError, "needs values of age"),
    "at infinity": (lambda f: f.effect("age", at=[1, np.inf]), ModelError, "needs finite values"),
    "at nothing": (lambda f: f.effect("age", at=[]), ModelError, "at least one value of age"),
    "no draws": (lambda f: f.draws(0), ModelError, "number of draws is a whole number.*got 0"),
    "half a draw": (lambda f: f.draws(1.5), ModelError, "number of draws.*got 1.5"),
    "seed": (lambda f: f.draws(2, seed=-1), ModelError, "A seed is a whole number.*got -1"),
    "kind of residuals": (lambda f: f.residuals("raw"), ModelError, "kind='raw' is not known"),
    "columns of an unseen level": (lambda f: f.columns(NEW_LEVEL), DataError, "the level 'sout'"),
    "columns of a gap": (lambda f: f.columns(GAP), DataError, "1 of 3 rows have missing values"),
}


@pytest.mark.parametrize("name", ASKING)
def test_a_fit_refuses(name, fit):
    ask, kind, words = ASKING[name]
    with pytest.raises(kind, match=words):
        ask(fit)


@pytest.mark.parametrize("level", [0, 1, 95, -0.1, np.nan, np.inf, "0.9", True])
def test_levels_of_intervals(level, fit):
    with pytest.raises(ModelError, match=r"A level is a number between 0 and 1, such as 0\.95"):
        fit.predict(DATA, interval=level)


def test_every_error_is_one_of_ours():
    for kind in (DataError, FormulaError, ModelError):
        assert issubclass(kind, am.AddmodelError)
        assert issubclass(kind, ValueError)
    assert issubclass(Caution, UserWarning)


def test_an_unseen_level_as_base_or_average(fit):
    base = fit.predict(NEW_LEVEL, unseen="base")
    assert base[1] == pytest.approx(fit.predict(NEW_LEVEL.assign(site="south"))[1], rel=1e-12)
    with pytest.warns(Caution, match="at the average of the levels, with intervals as wide"):
        average = fit.predict(NEW_LEVEL, unseen="average")
    shares = DATA["site"].value_counts(normalize=True)
    each = [fit.predict(NEW_LEVEL.assign(site=level))[1] for level in shares.index]
    assert average[1] == pytest.approx(float(shares.to_numpy() @ each), rel=1e-12)
    for result in (base, average):
        np.testing.assert_allclose(result[[0, 2]], fit.predict(NEW_LEVEL.iloc[[0, 2]]), rtol=1e-14)


def test_a_missing_covariate_gives_a_missing_prediction(fit):
    with pytest.warns(Caution, match="1 of 3 rows lack a covariate: their prediction is missing"):
        result = fit.predict(GAP)
    assert np.isnan(result).tolist() == [False, True, False]
    with pytest.warns(Caution, match="1 of 2 rows"):
        table = fit.predict(GAP.assign(site=["west", "north", None]).iloc[:2], interval=0.9)
    numbers = table.drop(columns="outside")
    assert numbers.isna().all(axis=1).tolist() == [False, True]
    assert not table["outside"].any()
    whole = fit.predict(GAP.iloc[:1].assign(site="west"), interval=0.9).drop(columns="outside")
    np.testing.assert_allclose(numbers.iloc[0], whole.iloc[0])


def test_a_prediction_outside_the_data_is_flagged(fit):
    low, high = DATA["dose"].min(), DATA["dose"].max()
    ages = [50.0, 50.0, 50.0, 50.0, 81.0]
    new = pd.DataFrame(
        {"dose": [low, high, low - 0.01, high + 1, 5.0], "age": ages, "site": "west"}
    )
    table = fit.predict(new, interval=0.95)
    assert table["outside"].tolist() == [False, False, True, True, True]
    assert np.isfinite(table.drop(columns="outside").to_numpy()).all()
    # Only what is asked for counts.
    part = fit.predict(new, interval=0.95, only="age")
    assert part["outside"].tolist() == [False] * 4 + [True]


# Anything ---------------------------------------------------------------------------------------

COLUMNS = ("a", "b", "c")
TERMS = [
    *("{0}", "C({0})", "curve({0})", "cycle({0}, period=7)", "curve({0}, df=2.5)"),
    *("curve({0}, detail=5)", "curve({0}, smoothing=0.1)", "cycle({0}, period=1.5, df=2)"),
    *('curve({0}, detail="all")', "abs({0})", "curve(abs({0}))", "g", "{{{0} > 0}}"),
]


@st.composite
def columns(draw: st.DrawFn, n: int) -> list[float]:
    """Ties, constants, evenly spread, huge or tiny numbers, with now and then an odd one out."""
    kind = draw(st.sampled_from(["ties", "constant", "even", "spread", "huge", "tiny", "outlier"]))
    scale = {"huge": 1e50, "tiny": 1e-50}.get(kind, 1.0)
    if kind == "constant":
        return [draw(st.sampled_from([0.0, 1.0, -1e9, 1e-9]))] * n
    if kind == "even":
        return [float(i) for i in range(n)]
    few = st.integers(0, 3).map(float)
    many = st.floats(-10, 10, allow_nan=False).map(lambda v: round(v, 6))
    values = [
        v * scale for v in draw(st.lists(few if kind == "ties" else many, min_size=n, max_size=n))
    ]
    if kind == "outlier":
        values[0] = 1e9
    return values


@st.composite
def cases(draw: st.DrawFn) -> tuple[str, dict[str, Any], str]:
    n = draw(st.integers(2, 25))
    data: dict[str, Any] = {name: draw(columns(n)) for name in ("y", *COLUMNS)}
    if draw(st.booleans()):
        data["c"] = list(data["a"])  # a duplicate
    data["g"] = draw(st.lists(st.sampled_from("uvw"), min_size=n, max_size=n))
    count = draw(st.integers(0, 3))
    terms = [
        draw(st.sampled_from(TERMS)).format(draw(st.sampled_from(COLUMNS))) for _ in range(count)
    ]
    return f"y ~ {' + '.join(terms) or '1'}", data, draw(st.sampled_from(["reml", "gcv"]))


def finite(values: Any) -> bool:
    return bool(np.isfinite(np.asarray(values, dtype=np.float64)).all())


@settings(
    max_examples=80,
    deadline=None,
    derandomize=True,
    phases=[Phase.explicit, Phase.generate],  # making a failing example small takes minutes
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large],
)
@given(cases())
def test_a_finite_fit_or_an_error_of_ours(case):
    formula, data, criterion = case
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", Caution)  # a caution is an honest answer
        try:
            fit = am.fit(formula, data, criterion=criterion)
        except am.AddmodelError:
            return
    components = fit.components
    assert finite(fit.coefficients)
    assert finite(components["effective_df"])
    # Blank by definition: the share where the model explains nothing, λ where there is none.
    varying = np.ptp(fit.linear_predictor) > 0
    assert finite(components["share"]) or not varying
    assert not fit.smoothing.isna().any()
    assert (fit.smoothing >= 0).all()
    assert finite(fit.fitted)
    assert finite(fit.residuals())
    for number in ("scale", "deviance", "effective_df", "deviance_reduction"):
        assert finite(getattr(fit, number)), number
    rows = {name: values[:2] for name, values in data.items()}
    assert finite(fit.predict(rows, interval=0.9).drop(columns="outside"))
    assert finite(fit.predict(rows, interval=0.9, new_observation=True).drop(columns="outside"))
    for name in components.index:
        assert finite(fit.effect(name).table.iloc[:, 1:])
    assert finite(fit.draws(2))
    assert "nan" not in str(fit.summary()).lower().split()
