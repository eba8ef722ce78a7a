"""Any table -> a checked one: what is kept, dropped, refused, and in which words."""

from __future__ import annotations

import datetime as dt
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import polars as pl
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from addmodel.columns import MISSING_LEVEL, UNSEEN_LEVEL
from addmodel.errors import AddmodelError, DataError, FormulaError
from tests.tables import RICH, Frame, again, frame, refusal, rich, table

# Reading


def test_keeps_complete_rows_and_counts_the_others() -> None:
    t = table("y ~ curve(x) + site", frame(), weights="w")
    assert t.outcome_name == "y"
    assert t.rows.tolist() == [0, 1, 5]
    assert t.index.tolist() == ["u", "v", "z"]
    assert t.index.name == "who"
    assert (t.n_read, t.n_missing, t.n_weightless) == (6, 2, 1)
    assert t.outcome.tolist() == [1.0, 2.0, 5.0]
    assert t.weights.tolist() == [1.0, 2.0, 3.0]
    assert t.counts.tolist() == [1.0, 1.0, 1.0]
    assert t.offset.tolist() == [0.0, 0.0, 0.0]
    assert t.columns["x"].kind == "number"
    assert t.columns["site"].levels == ("a", "b")  # c has no weight
    assert t.columns["site"].values.tolist() == [1, 0, 0]
    assert t.cautions == ()


def test_arrays_are_read_only_and_the_data_untouched() -> None:
    data = frame()
    before = data.copy(deep=True)
    t = table("y ~ x + site", data, weights="w")
    for values in (t.outcome, t.weights, t.counts, t.offset, t.rows, t.columns["x"].values):
        assert not values.flags.writeable
    assert not np.shares_memory(t.outcome, data["y"].to_numpy())
    pd.testing.assert_frame_equal(data, before)
    assert data["y"].to_numpy(copy=True).flags.writeable


# Names


def test_unknown_names_are_marked_in_the_formula() -> None:
    message = refusal("y ~ k + curve(sitee)", frame(), FormulaError)
    assert "there is no column 'sitee'. Did you mean 'site'?" in message
    assert "y ~ k + curve(>>sitee<<)" in message
    message = refusal("yy ~ k", frame(), FormulaError)
    assert ">>yy<< ~ k" in message


def test_a_column_called_like_an_expression() -> None:
    data = {"y": [1.0, 2.0, 3.0], "x": [1.0, 2.0, 4.0], "log(x)": [3.0, 1.0, 2.0]}
    assert table("y ~ `log(x)`", data).columns["log(x)"].values.tolist() == [3.0, 1.0, 2.0]
    message = refusal("y ~ log(x) + `log(x)`", data, FormulaError)
    assert "log(x) is both a column and an expression" in message


def test_unknown_names_beside_the_formula() -> None:
    message = refusal("y ~ k", frame(), weights="sitte")
    assert message.startswith(
        "weights='sitte': the data has no column 'sitte'. Did you mean 'site'"
    )


@pytest.mark.parametrize("formula", ["y ~ k + y", "y ~ curve(y)", "y ~ log(y)", "log(y) ~ y"])
def test_outcome_as_covariate(formula: str) -> None:
    message = refusal(formula, frame(), FormulaError)
    assert "y is both outcome and covariate" in message
    assert "<<" in message


# Weights, counts, offset


def test_roles_by_name_expression_and_position() -> None:
    data = frame().fillna({"x": 9.0})
    data["my w"] = data["w"]
    by_name = table("y ~ x", data, weights="w", counts="k", offset="x")
    assert by_name.n_weightless == 1
    assert by_name.offset.tolist() == [0.5, 1.5, 9.0, 2.5, 4.5]
    assert by_name.counts.tolist() == [3.0, 1.0, 2.0, 3.0, 2.0]
    others: list[dict[str, Any]] = [
        {"weights": data["w"].to_numpy(), "counts": list(data["k"]), "offset": data["x"]},
        {"weights": "my w", "counts": pl.Series(data["k"].to_numpy()), "offset": "log(exp(x))"},
    ]
    for options in others:
        t = table("y ~ x", data, **options)
        np.testing.assert_allclose(t.offset, by_name.offset)
        np.testing.assert_array_equal(t.weights, by_name.weights)
        np.testing.assert_array_equal(t.counts, by_name.counts)


def test_a_row_without_weight_is_not_missing() -> None:
    data = frame()
    weights = [1.0, 1.0, 0.0, np.nan, 1.0, 1.0]
    t = table("log(y) ~ x", data.assign(y=[1, 2, 0, 4, 5, 6]), weights=weights)
    assert (t.n_missing, t.n_weightless) == (1, 1)
    message = refusal("y ~ x", data, weights=weights, missing="error")
    assert "1 of 6 rows have missing values, in weights= (1): row 3" in message


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"weights": 2.0}, "weights= is a float; it must be a 1-D array"),
        ({"weights": [1.0] * 5}, "weights= has 5 values, but the data have 6 rows"),
        ({"offset": np.ones((6, 1))}, "offset= is 2-D"),
        ({"weights": [1, -1, 1, 1, -2, 1]}, "weights= must not be negative: -1, -2 in rows 1, 4"),
        ({"weights": [1, np.inf, 1, 1, 1, 1]}, "infinite values in row 1"),
        ({"weights": [0] * 6}, "weights= is zero in every row"),
        ({"counts": [1, 1.5, 1, 1, 1, 1]}, "counts= must be whole numbers: 1.5 in row 1"),
        ({"counts": [1, -1, 1, 1, 1, 1]}, "counts= must not be negative"),
        ({"weights": "site"}, "weights= (site) must be numbers, not text"),
        ({"weights": [True] * 6}, "weights= must be numbers, not bool"),
        ({"offset": "log(w)"}, "row 4 (w = 0.0)"),
        ({"missing": "ignore"}, "missing='ignore' is not known; it is 'drop' or 'error'"),
    ],
)
def test_roles_that_cannot_be(options: dict[str, Any], words: str) -> None:
    message = refusal("y ~ k", frame(), **options)
    assert words in message


def test_more_than_five_rows_are_cut_short() -> None:
    message = refusal("y ~ x", {"y": range(9), "x": range(9)}, weights=[-1.0] * 9)
    assert "rows 0, 1, 2, 3, 4 and 4 more (rows are counted from 0)" in message


def test_a_series_in_another_order_gets_a_caution() -> None:
    data = frame()
    assert table("y ~ x", data, weights=data["w"]).cautions == ()
    (caution,) = table("y ~ x", data, weights=data["w"].iloc[::-1]).cautions
    assert "weights= has the index of the data in another order" in caution


def test_no_row_left() -> None:
    message = refusal("y ~ x", {"y": [1, 2, 3], "x": [None, 1, None]}, weights=[1, 0, 1])
    assert "no row is left of 3: 2 have missing values, in x (2); 1 have a weight" in message
    message = refusal("y ~ x", {"y": [1.0, 2.0], "x": [None, None]})
    assert "2 have missing values, in x (2)" in message


# New rows


def test_new_rows_are_coded_as_at_the_fit() -> None:
    data = frame().assign(when=pd.to_datetime(["2020-01-01", "2020-01-02"] * 3))
    new = pd.DataFrame(
        {
            "x": [1, None, 3],
            "site": pd.Categorical(["c", "new", None], ["new", "c"]),
            "k": ["3", "1", "4"],
            "when": [dt.date(1970, 1, 2), None, dt.date(1970, 1, 4)],
        },
        index=[7, 7, 9],
    )
    rows = again("y ~ curve(x) + site + C(k) + curve(when)", data, new)
    assert rows.n == 3
    assert rows.index.tolist() == [7, 7, 9]
    np.testing.assert_array_equal(rows.columns["x"].values, [1.0, np.nan, 3.0])
    assert rows.columns["site"].levels == ("a", "b", "c")
    assert rows.columns["site"].values.tolist() == [2, UNSEEN_LEVEL, MISSING_LEVEL]
    assert rows.columns["C(k)"].values.tolist() == [2, 0, UNSEEN_LEVEL]
    np.testing.assert_array_equal(rows.columns["when"].values, [1.0, np.nan, 3.0])
    assert list(rows.unseen) == ["site", "C(k)"]
    (strange,) = rows.unseen["site"]
    assert (strange.label, strange.rows.tolist()) == ("new", [1])
    assert rows.missing.tolist() == [False, True, True]
    assert not rows.columns["x"].values.flags.writeable


def test_new_rows_all_missing_or_without_covariates() -> None:
    rows = again("y ~ curve(x) + site", frame(), {"x": [None, None], "site": [None, np.nan]})
    assert np.isnan(rows.columns["x"].values).all()
    assert rows.columns["site"].values.tolist() == [MISSING_LEVEL] * 2
    assert again("y ~ 1", frame(), pd.DataFrame({"z": [1, 2, 3]})).n == 3
    assert again("y ~ 1", frame(), {"z": [1, 2, 3]}).n == 3
    assert again("y ~ 1", frame(), pl.DataFrame({"z": [1, 2, 3]})).n == 3


def test_new_rows_from_files(tmp_path: Path) -> None:
    pd.DataFrame({"z": [1, 2, 3], "x": [1.0, None, 2.0]}).to_csv(tmp_path / "n.csv", index=False)
    pd.DataFrame({"z": [1, 2, 3], "x": [1.0, None, 2.0]}).to_parquet(tmp_path / "n.parquet")
    for name in ("n.csv", "n.parquet"):
        rows = again("y ~ x", frame(), tmp_path / name)
        np.testing.assert_array_equal(rows.columns["x"].values, [1.0, np.nan, 2.0])
        assert again("y ~ 1", frame(), tmp_path / name).n == 3


@pytest.mark.parametrize(
    ("new", "words"),
    [
        ({"xx": [1], "site": ["a"]}, "no column 'x'. Did you mean 'xx'? The model needs: x, site"),
        ({"x": ["1", "2"], "site": ["a", "a"]}, "x is text in the new data, but was a number"),
        ({"x": [True], "site": ["a"]}, "x is bool in the new data, but was a number"),
        ({"x": [dt.date(2020, 1, 1)], "site": ["a"]}, "x is date in the new data"),
        ({"x": [1.0, np.inf], "site": ["a", "a"]}, "infinite values in row 1"),
        ({"x": [], "site": []}, "there are no rows"),
    ],
)
def test_new_rows_that_cannot_be(new: Frame, words: str) -> None:
    with pytest.raises(DataError) as caught:
        again("y ~ curve(x) + site", frame(), new)
    assert words in str(caught.value)


def test_new_rows_missing_as_an_error() -> None:
    new = {"x": [1.0, None, 2.0], "site": ["a", "b", None]}
    with pytest.raises(DataError, match=r"2 of 3 rows have missing values, in x \(1\), site \(1\)"):
        again("y ~ x + site", frame(), new, missing="error")
    with pytest.raises(DataError, match="it is 'keep' or 'error'"):
        again("y ~ x + site", frame(), new, missing="drop")


def test_new_rows_a_transform_breaks() -> None:
    with pytest.raises(DataError, match=r"log\(y\) is not a finite number in 1 of 2 rows: row 1"):
        again("x ~ log(y)", frame(), {"y": [1.0, 0.0]})


def test_fitted_rows_read_again_are_the_same() -> None:
    data = rich().dropna()
    formula = RICH + " + C(x)"
    t, rows = table(formula, data), again(formula, data, data)
    for key, column in t.columns.items():
        np.testing.assert_array_equal(column.values, rows.columns[key].values)
        assert (column.kind, column.levels) == (
            rows.columns[key].kind,
            rows.columns[key].levels,
        )
    assert rows.unseen == {}


# Anything at all

CELLS: list[st.SearchStrategy[Any]] = [
    st.floats(),
    st.integers(-3, 3),
    st.integers(),
    st.booleans(),
    st.text(max_size=3),
    st.sampled_from(["a", "b", "a ", "12", "7"]),
    st.dates(),
    st.datetimes(),
    st.timedeltas(),
    st.times(),
    st.decimals(),
    st.complex_numbers(),
    st.lists(st.integers(), max_size=2),
]


@st.composite
def columns(draw: st.DrawFn, n: int) -> Any:
    cells = draw(st.sampled_from(CELLS))
    if draw(st.integers(0, 9)) == 0:
        cells = st.one_of(cells, draw(st.sampled_from(CELLS)))
    if draw(st.booleans()):
        cells = st.one_of(cells, cells, cells, st.sampled_from([None, np.nan, pd.NaT, pd.NA]))
    values = draw(st.lists(cells, min_size=n, max_size=n))
    made = np.empty(n, dtype=object)
    made[:] = values
    return draw(st.sampled_from([made, values]))


@st.composite
def anything(draw: st.DrawFn) -> tuple[Frame, Any]:
    n = draw(st.integers(0, 8))
    names = ("y", "x", "z", "s")
    numbers = st.lists(st.floats(-5, 5), min_size=n, max_size=n)
    data = {name: draw(st.one_of(numbers, columns(n))) for name in names}
    weights = st.lists(st.sampled_from([0, 1, 2.5, np.nan]), min_size=n, max_size=n)
    return data, draw(st.one_of(st.none(), weights, columns(n)))


@settings(max_examples=100, deadline=None, suppress_health_check=list(HealthCheck))
@given(
    made=anything(),
    formula=st.sampled_from(["y ~ x", "y ~ curve(x) + s + C(z)", "log(y) ~ x + curve(z)"]),
    missing=st.sampled_from(["drop", "error"]),
)
def test_a_table_without_gaps_or_an_error_of_ours(
    made: tuple[Frame, Any], formula: str, missing: str
) -> None:
    data, weights = made
    try:
        t = table(formula, data, weights=weights, missing=missing)
    except AddmodelError:
        return
    arrays = [t.outcome, t.weights, t.counts, t.offset, *(c.values for c in t.columns.values())]
    for values in arrays:
        assert values.shape == t.rows.shape
        assert np.isfinite(values).all()
    for column in t.columns.values():
        if column.kind == "levels":
            assert np.unique(column.values).tolist() == list(range(len(column.levels)))
    assert (t.weights > 0).all()
    assert t.n_read == len(t.rows) + t.n_missing + t.n_weightless


@settings(max_examples=100, deadline=None, suppress_health_check=list(HealthCheck))
@given(made=anything(), missing=st.sampled_from(["keep", "error"]))
def test_new_rows_of_anything_or_an_error_of_ours(made: tuple[Frame, Any], missing: str) -> None:
    data, _ = made
    fitted = {"y": [1, 2, 3], "x": [1.5, 2, 3], "z": ["a", "b", "12"]}
    try:
        rows = again("y ~ curve(x) + z", fitted, data, missing=missing)
    except AddmodelError:
        return
    codes = rows.columns["z"].values
    assert rows.n == len(codes) == len(data["x"])
    assert ((codes >= UNSEEN_LEVEL) & (codes < 3)).all()
    strange = [row for unseen in rows.unseen.get("z", ()) for row in unseen.rows]
    assert sorted(strange) == np.flatnonzero(codes == UNSEEN_LEVEL).tolist()
    gaps = np.isnan(rows.columns["x"].values) | (codes == MISSING_LEVEL)
    np.testing.assert_array_equal(gaps, rows.missing)
    assert missing == "keep" or not gaps.any()
    assert not np.isinf(rows.columns["x"].values).any()
