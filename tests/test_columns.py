"""Evaluated covariates -> checked columns: types, levels and their order, days, cautions."""

from __future__ import annotations

import datetime as dt
from decimal import Decimal
from typing import Any

import numpy as np
import pandas as pd
import polars as pl
import pyarrow as pa
import pytest

from addmodel.errors import DataError
from tests.tables import frame, refusal, table


def test_same_covariate_as_number_and_as_levels() -> None:
    t = table("y ~ curve(k) + C(k)", frame())
    assert t.columns["k"].kind == "number"
    assert t.columns["C(k)"].kind == "levels"
    assert t.columns["C(k)"].name == "k"
    assert t.columns["C(k)"].levels == ("1", "2", "3")
    assert t.columns["C(k)"].values.dtype == np.int64
    assert t.cautions == ()


def test_transforms() -> None:
    t = table("log(y) ~ sqrt(x)", frame())
    np.testing.assert_allclose(t.outcome, np.log([1.0, 2.0, 3.0, 6.0, 5.0]))
    np.testing.assert_allclose(t.columns["sqrt(x)"].values, np.sqrt([0.5, 1.5, 2.5, 3.5, 4.5]))


def test_a_comparison_makes_levels() -> None:
    column = table("y ~ {x > 2}", frame()).columns["x > 2"]
    assert (column.levels, column.values.tolist()) == (("False", "True"), [0, 0, 1, 1, 1])


def test_infinite_values_and_transforms_that_break() -> None:
    data = {"y": [1, 2, 3, 4], "x": [1, np.inf, 3, -np.inf], "z": [1.0, 0.0, -1.0, np.nan]}
    assert "x: column 'x' has infinite values in rows 1, 3" in refusal("y ~ x", data)
    assert "infinite values in rows 1, 3" in refusal("y ~ C(x)", data)
    message = refusal("y ~ log(z)", data)
    assert "log(z) is not a finite number in 2 of 3 rows" in message
    assert "row 1 (z = 0.0), row 2 (z = -1.0)" in message


# Types


@pytest.mark.parametrize(
    ("column", "values"),
    [
        ([Decimal("1.5"), Decimal(2), Decimal(4)], [1.5, 2.0, 4.0]),
        (np.array([1, 2.5, np.float32(4)], dtype=object), [1.0, 2.5, 4.0]),
        (np.array([1, 2, 200], dtype=np.uint8), [1.0, 2.0, 200.0]),
        (np.array([1, 2, 2.5], dtype=np.float16), [1.0, 2.0, 2.5]),
        (pd.array([0, 0, 4], dtype="Sparse[int64]"), [0.0, 0.0, 4.0]),
        ([10**30, 1, 2], [1e30, 1.0, 2.0]),
        (pd.to_timedelta(["12h", "1D", "-6h"]), [0.5, 1.0, -0.25]),
        ([dt.timedelta(hours=12), dt.timedelta(1), dt.timedelta(2)], [0.5, 1.0, 2.0]),
        ([dt.time(6), dt.time(18, 30), dt.time(0, 0, 36)], [6.0, 18.5, 0.01]),
        (pa.array([dt.time(6), dt.time(18, 30), dt.time(1)]), [6.0, 18.5, 1.0]),
        (pl.Series([dt.timedelta(1), dt.timedelta(2), dt.timedelta(0)]), [1.0, 2.0, 0.0]),
        (pd.Series(pa.array([1, 2, 5]).to_pandas(), dtype="int64[pyarrow]"), [1.0, 2.0, 5.0]),
    ],
)
def test_numbers(column: Any, values: list[float]) -> None:
    result = table("y ~ curve(v)", {"y": [1, 2, 3], "v": column}).columns["v"]
    assert result.kind == "number"
    assert result.values.dtype == np.float64
    np.testing.assert_allclose(result.values, values, rtol=1e-12)


@pytest.mark.parametrize(
    "column",
    [
        [dt.date(1969, 12, 31), dt.datetime(1970, 1, 2, 12), np.datetime64("1970-01-03")],
        np.array(["1969-12-31", "1970-01-02T12", "1970-01-03"], dtype="datetime64[s]"),
        pd.DatetimeIndex(
            ["1969-12-31 00:00", "1970-01-02 12:00", "1970-01-03 00:00"], tz="Asia/Tokyo"
        ),
        pl.Series(
            [dt.datetime(1969, 12, 31), dt.datetime(1970, 1, 2, 12), dt.datetime(1970, 1, 3)]
        ),
    ],
)
def test_dates_are_days_of_wall_time(column: Any) -> None:
    for formula in ("y ~ v", "y ~ curve(v)"):
        result = table(formula, {"y": [1, 2, 3], "v": column}).columns["v"]
        assert result.kind == "date"
        assert result.values.tolist() == [-1.0, 1.5, 2.0]
    levels = table("y ~ C(v)", {"y": [1, 2, 3], "v": column}).columns["C(v)"].levels
    assert levels == ("1969-12-31", "1970-01-02 12:00:00", "1970-01-03")


def test_dates_far_away() -> None:
    values = table("y ~ v", {"y": [1, 2], "v": [dt.date(1, 1, 1), dt.date(9999, 12, 31)]})
    assert values.columns["v"].values.tolist() == [-719162.0, 2932896.0]
    nanoseconds = np.array(["1677-09-22T06", "2262-04-11"], dtype="datetime64[ns]")
    values = table("y ~ v", {"y": [1, 2], "v": nanoseconds})
    assert values.columns["v"].values.tolist() == [-106750.75, 106751.0]


@pytest.mark.parametrize(
    ("column", "levels"),
    [
        (["10-14", "5-9", "0-4"], ("0-4", "5-9", "10-14")),
        (["-5", "-10", "2.5"], ("-10", "-5", "2.5")),
        (["a10b2", "a9", "a10b1"], ("a9", "a10b1", "a10b2")),
        (["01", "1", "9" * 5000], ("01", "1", "9" * 5000)),
        (["b", "", "a"], ("", "a", "b")),
        ([True, False, True], ("False", "True")),
        (pd.array([True, False, True], dtype="boolean"), ("False", "True")),
        (pd.Categorical(["b", "a", "b"], ["z", "b", "a"]), ("b", "a")),
        (pd.Categorical([2.0, 1.0, 2.5], [2.5, 2.0, 1.0]), ("2.5", "2", "1")),
        (pd.Categorical([2.0, 1.0, np.inf]), ("1", "2", "inf")),
        (pd.cut(pd.Series([1, 12, 3]), [0, 5, 15]), ("(0, 5]", "(5, 15]")),
    ],
)
def test_levels_and_their_order(column: Any, levels: tuple[str, ...]) -> None:
    for formula, key in (("y ~ v", "v"), ("y ~ C(v)", "C(v)")):
        result = table(formula, {"y": [1, 2, 3], "v": column}).columns[key]
        assert result.kind == "levels"
        assert result.levels == levels
        assert result.values.dtype == np.int64


def test_numbers_as_levels() -> None:
    def levels(column: Any) -> tuple[str, ...]:
        return table("y ~ C(v)", {"y": [1, 2, 3], "v": column}).columns["C(v)"].levels

    assert levels([10.0, 2.0, -0.0]) == ("0", "2", "10")
    assert levels([10, 2, -1]) == ("-1", "2", "10")
    assert levels(np.array([0.1, 1, 0.1], dtype=np.float32)) == ("0.1", "1")
    long = 2**53
    assert levels([long + 1, long, long + 2]) == tuple(str(long + i) for i in range(3))
    polars = pl.Series([long + 1, long, long + 1])
    data = pl.DataFrame(
        {"y": [1, 2, 3, None], "v": polars.extend(pl.Series([None]).cast(pl.Int64))}
    )
    assert table("y ~ C(v)", data).columns["C(v)"].levels == (str(long), str(long + 1))


@pytest.mark.parametrize(
    ("column", "words"),
    [
        (np.array([1j, 2, 3]), "column 'v' is of type complex128"),
        ([[1], [2], [3]], "column 'v' holds values of type list"),
        ([1, "a", 2.5], "column 'v' holds values of type float, int, str"),
        ([True, 2, 3], "column 'v' holds values of type bool, int"),
        (pd.period_range("2020-01", periods=3, freq="M"), "column 'v' is of type period[M]"),
        (pl.Series([[1], [2], [3]]), "column 'v' holds values of type ndarray"),
        ([10**400, 1, 2], "numbers too large"),
        (pd.Categorical([1, "1", 1]), "several categories have the label '1'"),
    ],
)
def test_types_that_cannot_be(column: Any, words: str) -> None:
    assert words in refusal("y ~ v", {"y": [1, 2, 3], "v": column})


@pytest.mark.parametrize("term", ["curve(v)", "cycle(v, period=24)"])
def test_curves_need_numbers(term: str) -> None:
    def message(column: Any) -> str:
        return refusal(f"y ~ v + {term}", {"y": [1, 2, 3], "v": column})

    words = f"{term}: v is text; write `v` or `C(v)` for levels."
    assert message(["a", "b", "c"]) == words
    assert "looks like numbers ('12', '13'): convert it with pd.to_numeric" in message(
        ["12", "13", "4"]
    )
    assert "looks like numbers ('12', '13') but for '?'" in message(["12", "13", "?"])
    assert "pd.to_datetime" in message(["2020-01-01", "2020-01-02", "2020-01-03"])
    assert "v is bool; write `v`" in message([True, False, True])
    assert "v is category" in message(pd.Categorical(["a", "b", "c"]))


@pytest.mark.parametrize(
    ("column", "kind"),
    [
        ([True, False, True], "bool"),
        (["a", "b", "c"], "text"),
        (pd.Categorical(["a", "b", "c"]), "category"),
        (pd.to_datetime(["2020", "2021", "2022"]), "date"),
    ],
)
def test_outcome_must_be_a_number(column: Any, kind: str) -> None:
    message = refusal("y ~ x", {"y": column, "x": [1, 2, 4]})
    rule = "it must be a number for this outcome (yes/no: outcome='binomial')."
    assert f"y is {kind}; {rule}" in message


def test_a_transform_of_text() -> None:
    message = refusal("y ~ log(site)", frame(), DataError)
    assert "site is text" in message


def test_constant_covariates() -> None:
    data = {"y": [1, 2, 3], "x": [2, 2, None], "s": ["a", "a", None], "k": [1, 2, 3]}
    assert "x has one distinct value in the 2 rows used" in refusal("y ~ k + x", data)
    assert "remove it from the formula" in refusal("y ~ curve(x)", data)
    assert "s has one distinct value" in refusal("y ~ s", data)
    assert table("y ~ k", {**data, "y": [5, 5, 5]}).outcome.tolist() == [5.0, 5.0, 5.0]


# Cautions


def test_codes_standing_as_a_line() -> None:
    words = (
        "k is a whole number with 3 distinct values and stands as a straight line; "
        "write C(k) if they are codes or categories."
    )
    assert table("y ~ k", frame()).cautions == (words,)
    for formula in ("y ~ C(k)", "y ~ curve(k)", "y ~ k + curve(k)"):
        assert table(formula, frame()).cautions == ()
    for count, expected in ((2, 0), (3, 1), (12, 1), (13, 0)):
        data = {"y": range(count), "k": range(count)}
        assert len(table("y ~ k", data).cautions) == expected
    assert table("y ~ k", {"y": range(3), "k": [1, 2, 3.5]}).cautions == ()


def test_levels_that_differ_by_blanks() -> None:
    t = table("y ~ s", {"y": range(3), "s": ["a ", "a", "b"]})
    assert t.cautions == ("s: 'a' and 'a ' are different levels.",)
