"""What an expression computes, and which columns it refuses."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from addmodel.errors import DataError, FormulaError
from addmodel.expression import parse_expression


def value(text: str, **columns: object) -> pd.Series:
    frame = pd.DataFrame(columns)
    return parse_expression(text, "weights").evaluate({name: frame[name] for name in frame})


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("log(x)", np.log([1.0, 2.0, 4.0])),
        ("1/x**2", [1.0, 0.25, 0.0625]),
        ("-x + 2*x % 3 - x//2", [1.0, -2.0, -4.0]),
        ("minimum(x, 3) + maximum(x, 2)", [3.0, 4.0, 7.0]),
        ("sqrt(abs(-x)) + expm1(log1p(x)) + exp(0)", [3.0, 3 + np.sqrt(2), 7.0]),
        ("x + 9**9**9", [np.inf] * 3),
        ("x + 9" + "9" * 400, [np.inf] * 3),
        ("log(-x)", [np.nan] * 3),
        ("x * (x > 1)", [0.0, 2.0, 4.0]),
        ("`body mass` + x", [2.0, 4.0, 8.0]),
    ],
)
def test_arithmetic(text, expected):
    result = value(text, x=[1, 2, 4], **{"body mass": [1, 2, 4]})
    assert result.dtype == np.float64
    np.testing.assert_allclose(result, expected, rtol=1e-14)


def test_the_index_is_kept_and_the_result_is_named():
    x = pd.Series([1.0, 2.0], index=["a", "b"])
    result = parse_expression("log( x )", "offset").evaluate({"x": x})
    assert list(result.index) == ["a", "b"]
    assert result.name == "log(x)"


@pytest.mark.parametrize(
    "column",
    [["a", "b"], pd.to_datetime(["2020-01-01", "2021-01-01"]), [True, False], [1, 2]],
)
def test_a_lone_column_passes_untouched(column):
    column = pd.Series(column)
    assert parse_expression("x", "weights").evaluate({"x": column}) is column


def test_comparisons_are_true_false_or_unknown():
    assert value("0 < x <= 2", x=[0, 1, 2, 3]).tolist() == [False, True, True, False]
    assert value("x != 1", x=[0, 1]).dtype == bool
    unknown = value("x > 1", x=[0.0, np.nan, 2.0])
    assert unknown.dtype == "boolean"
    assert unknown.isna().tolist() == [False, True, False]
    assert bool(unknown[2]) is True


@pytest.mark.parametrize(
    "column",
    [
        pd.array([1, None, 3], dtype="Int64"),
        np.array([1, None, 3], dtype=object),
        np.array([1.0, np.nan, 3.0]),
    ],
)
def test_missing_numbers_stay_missing(column):
    np.testing.assert_array_equal(value("2 * x", x=column), [2.0, np.nan, 6.0])


@pytest.mark.parametrize(
    ("column", "what"),
    [
        (["a", "b"], "x is text"),
        (pd.Categorical(["a", "b"]), "x is of type category"),
        (pd.to_datetime(["2020-01-01", "2021-01-01"]), "x is a date"),
        ([1j, 2j], "x is of type complex"),
    ],
)
def test_arithmetic_on_anything_else_is_an_error_about_the_data(column, what):
    with pytest.raises(DataError) as caught:
        value("log(x)", x=column)
    assert str(caught.value).startswith(f"log(x): {what}")
    assert "arithmetic needs numbers" in str(caught.value)


def test_a_column_that_does_not_exist():
    with pytest.raises(DataError, match=r"no column 'dose'\. Did you mean 'doses'\?"):
        value("log(dose)", doses=[1.0])


def test_an_expression_outside_the_formula_names_its_role_and_marks_its_own_text():
    expression = parse_expression(" 1/se**2 ", "weights")
    assert (expression.text, expression.names, expression.span) == ("1 / se ** 2", ("se",), (1, 8))
    for text in ("curve(se)", "bs(se)", "2", "a) + (b", "se se", "", "x # y"):
        with pytest.raises(FormulaError, match=r"^weights: "):
            parse_expression(text, "weights")
    with pytest.raises(FormulaError) as caught:
        parse_expression("1 / bs(se)", "weights")
    assert str(caught.value).endswith("\n    1 / >>bs(se)<<")
