"""Any table -> checked columns: what is kept, dropped, refused, and in which words."""

from __future__ import annotations

import datetime as dt
from decimal import Decimal
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import polars as pl
import pyarrow as pa
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from addmodel.data import MISSING_LEVEL, UNSEEN_LEVEL, NewRows, Table, column_key, read, read_new
from addmodel.errors import AddmodelError, DataError, FormulaError
from addmodel.formula import parse

Frame = dict[str, Any]


def table(formula: str, data: object, **options: Any) -> Table:
    return read(data, parse(formula), **options)


def again(formula: str, data: object, new: object, **options: Any) -> NewRows:
    """Fit on data, read new rows for the same formula."""
    model = parse(formula)
    expressions = {
        column_key(factor, expression): expression
        for term in model.terms
        for factor in term.factors
        for expression in factor.arguments
    }
    return read_new(new, read(data, model).columns, expressions, **options)


def refusal(formula: str, data: object, kind: type[Exception] = DataError, **options: Any) -> str:
    with pytest.raises(kind) as caught:
        table(formula, data, **options)
    assert type(caught.value) is kind
    return str(caught.value)


def frame() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "y": [1.0, 2.0, 4.0, 3.0, 6.0, 5.0],
            "x": [0.5, 1.5, np.nan, 2.5, 3.5, 4.5],
            "k": [3, 1, 2, 3, 1, 2],
            "site": ["b", "a", "b", None, "c", "a"],
            "w": [1.0, 2.0, 1.0, 1.0, 0.0, 3.0],
            "unused": [object()] * 6,
        },
        index=pd.Index(list("uvwxyz"), name="who"),
    )


def assert_same(a: Table, b: Table, index: bool = True) -> None:
    for name in ("outcome", "weights", "counts", "offset", "rows"):
        np.testing.assert_array_equal(getattr(a, name), getattr(b, name))
    assert (a.n_read, a.n_missing, a.n_weightless) == (b.n_read, b.n_missing, b.n_weightless)
    assert a.cautions == b.cautions
    assert list(a.columns) == list(b.columns)
    for key, column in a.columns.items():
        other = b.columns[key]
        assert (column.name, column.kind, column.levels, column.whole) == (
            other.name,
            other.kind,
            other.levels,
            other.whole,
        )
        np.testing.assert_array_equal(column.values, other.values)
        assert column.values.dtype == other.values.dtype
    if index:
        assert a.index.equals(b.index)


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


def test_same_covariate_as_number_and_as_levels() -> None:
    t = table("y ~ curve(k) + C(k)", frame())
    assert t.columns["k"].kind == "number"
    assert t.columns["k"].whole
    assert t.columns["C(k)"].kind == "levels"
    assert t.columns["C(k)"].name == "k"
    assert t.columns["C(k)"].levels == ("1", "2", "3")
    assert t.columns["C(k)"].values.dtype == np.int64
    assert t.cautions == ()


def test_transforms() -> None:
    t = table("log(y) ~ sqrt(x)", frame())
    np.testing.assert_allclose(t.outcome, np.log([1.0, 2.0, 3.0, 6.0, 5.0]))
    np.testing.assert_allclose(t.columns["sqrt(x)"].values, np.sqrt([0.5, 1.5, 2.5, 3.5, 4.5]))


def rich() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "y": [1.0, 2.0, 4.0, 3.0, 6.0, np.nan],
            "x": pd.array([1, 2, None, 4, 6, 9], dtype="Int64"),
            "site": ["b", "a", "10-14", "5-9", "b", "a"],
            "band": pd.Categorical(
                ["lo", "hi", "lo", "mid", "hi", "lo"], ["lo", "mid", "hi"], ordered=True
            ),
            "flag": [True, False, True, False, True, True],
            "when": pd.to_datetime(["2020-01-01 06:00", "1969-12-31 18:00"] * 3),
            "w": [1, 2, 1, 1, 2, 3],
        }
    )


RICH = "y ~ curve(x) + site + band + flag + curve(when)"


def test_other_tables_give_the_same_as_pandas(tmp_path: Path) -> None:
    data = rich()
    expected = table(RICH, data, weights="w")
    assert expected.n_missing == 2
    assert expected.columns["band"].levels == ("lo", "mid", "hi")
    assert expected.columns["when"].values.tolist() == [18262.25, -0.25, -0.25, 18262.25]
    levels = pl.Enum(["lo", "mid", "hi"])
    polars = pl.from_pandas(data).with_columns(pl.col("band").cast(pl.String).cast(levels))
    data.to_parquet(tmp_path / "t.parquet")
    polars.write_parquet(tmp_path / "p.parquet")
    tables: list[object] = [
        polars,
        pa.Table.from_pandas(data),
        {name: data[name] for name in data},
        {name: data[name].array for name in data},
        data.convert_dtypes(dtype_backend="pyarrow").assign(band=data["band"]),
        data.astype({"flag": object, "site": object, "w": "float32"}),
        tmp_path / "t.parquet",
        str(tmp_path / "p.parquet"),
    ]
    for other in tables:
        assert_same(expected, table(RICH, other, weights="w"))


@pytest.mark.parametrize("ending", [".csv", ".csv.gz", ".tsv", ".TSV.gz"])
def test_text_files_give_the_same_as_pandas(tmp_path: Path, ending: str) -> None:
    data = rich().astype({"band": str})
    path = tmp_path / f"t{ending}"
    data.to_csv(path, index=False, sep="\t" if "tsv" in ending.lower() else ",")
    assert_same(table(RICH, data, weights="w"), table(RICH, path, weights="w"))


def test_parquet_keeps_a_stored_index(tmp_path: Path) -> None:
    frame().drop(columns="unused").to_parquet(tmp_path / "t.parquet")
    t = table("y ~ x + site", tmp_path / "t.parquet")
    assert_same(t, table("y ~ x + site", frame()))
    message = refusal("y ~ who", tmp_path / "t.parquet", FormulaError)
    assert "there is no column 'who'" in message


def test_text_file_reads_none_as_a_level_and_only_needed_columns(tmp_path: Path) -> None:
    path = tmp_path / "t.csv"
    path.write_text("\ufeffy,pain,d,d\n1,None,1,2\n2,Mild,1,2\n3,NA,1,2\n4,Mild,1,2\n", "utf-8")
    t = table("y ~ pain", path)
    assert t.columns["pain"].levels == ("Mild", "None")
    assert t.n_missing == 1
    assert "2 columns are named 'd'" in refusal("y ~ d", path)


def test_text_file_types(tmp_path: Path) -> None:
    path = tmp_path / "t.csv"
    lines = ["y,id,z,t,b", f"1,{2**53 + 1}, 1.5,1,true", f"2,{2**53},+2e0,True,FALSE", "3,,3,x,"]
    path.write_text("\n".join([*lines, f'4,{2**53},"4","a, b",True']))
    columns = table("y ~ C(id) + curve(z) + t + b", path).columns
    assert columns["C(id)"].levels == (str(2**53), str(2**53 + 1))
    assert columns["z"].values.tolist() == [1.5, 2.0, 4.0]
    assert columns["t"].levels == ("1", "True", "a, b")
    assert columns["b"].levels == ("False", "True")


def test_text_file_dates(tmp_path: Path) -> None:
    path = tmp_path / "t.csv"
    path.write_text(
        "y,d,z\n1,1970-01-02,1970-01-01T12:00:00+02:00\n2,1970-01-04,1970-01-02T00:00Z\n"
    )
    t = table("y ~ d + curve(z)", path)
    assert t.columns["d"].kind == "date"
    assert t.columns["d"].values.tolist() == [1.0, 3.0]
    assert t.columns["z"].values.tolist() == [0.5, 1.0]
    path.write_text("y,d\n1,2021-02-30\n2,2021-02-28\n")
    assert table("y ~ d", path).columns["d"].kind == "levels"


def test_polars_categorical_sorts_by_itself() -> None:
    data = pl.DataFrame({"y": [1, 2, 3], "c": pl.Series(["z", "10", "9"], dtype=pl.Categorical)})
    assert table("y ~ c", data).columns["c"].levels == ("9", "10", "z")


def test_unneeded_columns_are_not_converted() -> None:
    t = table("y ~ x", {"y": [1, 2], "x": [3, 5], "z": {"no": "column"}, "short": [1]})
    assert t.columns["x"].values.tolist() == [3.0, 5.0]


def test_mapping_of_series_keeps_their_index_and_refuses_two() -> None:
    data = frame()
    t = table("y ~ x", {"y": data["y"], "x": data["x"].to_numpy()})
    assert t.index.tolist() == list("uvxyz")
    message = refusal("y ~ x", {"y": data["y"], "x": data["x"].iloc[::-1]})
    assert "'y' and 'x' have different indexes" in message


def test_masked_arrays_and_foreign_series() -> None:
    x = np.ma.masked_array([1.0, 2.0, 3.0], [False, True, False])
    t = table("y ~ x", {"y": pl.Series([1, 2, 3]), "x": x}, weights=pa.array([1.0, 2.0, 3.0]))
    assert t.rows.tolist() == [0, 2]
    assert t.weights.tolist() == [1.0, 3.0]


@pytest.mark.parametrize(
    "data",
    [
        np.zeros((3, 2)),
        np.zeros(3, dtype=[("y", float), ("x", float)]),
        [[1, 2], [3, 4]],
        None,
        7,
        pd.Series([1.0, 2.0]),
    ],
)
def test_what_is_no_table_says_what_is_accepted(data: object) -> None:
    message = refusal("y ~ x", data)
    assert type(data).__name__ in message
    assert "Give a pandas, polars or arrow table" in message


def test_lazy_tables_and_files_that_cannot_be_read(tmp_path: Path) -> None:
    assert "collect it first" in refusal("y ~ x", pl.LazyFrame({"y": [1], "x": [2]}))
    assert f"there is no file '{tmp_path / 'no.csv'}'" in refusal("y ~ x", tmp_path / "no.csv")
    assert "is a folder" in refusal("y ~ x", tmp_path)
    (tmp_path / "t.xls").write_text("x")
    assert ".parquet" in refusal("y ~ x", tmp_path / "t.xls")
    for name in ("t.parquet", "t.csv.gz"):
        (tmp_path / name).write_text("no such thing")
        assert "is unreadable" in refusal("y ~ x", tmp_path / name)
    (tmp_path / "empty.csv").write_text("")
    assert "is unreadable" in refusal("y ~ x", tmp_path / "empty.csv")
    (tmp_path / "wide.csv").write_text("y,x\n1,2,3\n4,5,6\n")
    assert "Expected 2 columns, got 3" in refusal("y ~ x", tmp_path / "wide.csv")
    (tmp_path / "ragged.csv").write_text("y,x\n1,2\n4,5,6\n")
    assert "Expected 2 columns, got 3" in refusal("y ~ x", tmp_path / "ragged.csv")
    (tmp_path / "latin.csv").write_bytes("y,x\n1,é\n2,b\n".encode("latin-1"))
    assert "is unreadable" in refusal("y ~ x", tmp_path / "latin.csv")


def test_shapes_that_are_no_columns() -> None:
    assert "y: 2, x: 3" in refusal("y ~ x", {"y": [1, 2], "x": [1, 2, 3]})
    assert "column 'x' is a int" in refusal("y ~ x", {"y": [1, 2], "x": 3})
    assert "column 'x' is a str" in refusal("y ~ x", {"y": [1, 2], "x": "ab"})
    assert "column 'x' is 2-D" in refusal("y ~ x", {"y": [1, 2], "x": np.ones((2, 2))})
    assert "there are no rows" in refusal("y ~ x", frame().iloc[:0])
    assert "there are no rows" in refusal("y ~ x", {"y": [], "x": []})
    twice = pd.DataFrame([[1, 2, 3], [4, 5, 6]], columns=["y", "x", "x"])
    assert "2 columns are named 'x'" in refusal("y ~ x", twice)
    assert table("y ~ z", twice.set_axis(["z", "y", "q"], axis=1)).n_read == 2
    same = pa.table([[1, 2], [3, 4], [5, 6]], names=["y", "x", "x"])
    assert "unique column names, got:\n- 'x' 2 times" in refusal("y ~ x", same)


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


def test_a_comparison_makes_levels() -> None:
    column = table("y ~ {x > 2}", frame()).columns["x > 2"]
    assert (column.levels, column.values.tolist()) == (("False", "True"), [0, 0, 1, 1, 1])


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


# Missing and infinite


@pytest.mark.parametrize(
    "column",
    [
        [1.0, np.nan, 3.0, None, 5.0, 6.0],
        pd.array([1, None, 3, None, 5, 6], dtype="Int64"),
        pd.array([1, None, 3, None, 5, 6], dtype="Float32") / 1,
        pd.arrays.ArrowExtensionArray(pa.array([1.0, float("nan"), 3.0, None, 5.0, 6.0])),
        ["a", None, "b", np.nan, "c", ""],
        np.array(["a", None, "b", pd.NA, "c", ""], dtype=object),
        pd.Categorical(["a", None, "b", None, "c", "a"]),
        [True, None, False, None, True, True],
        pd.to_datetime(["2020-01-01", None, "2020-01-03", None, "2020-01-05", "2020-01-06"]),
        [Decimal(1), None, Decimal(3), Decimal("NaN"), Decimal(5), Decimal(6)],
        [dt.date(2020, 1, 1), None, dt.date(2020, 1, 2), pd.NaT, dt.date(2020, 1, 3), pd.NaT],
    ],
)
def test_every_kind_of_missing(column: Any) -> None:
    t = table("y ~ v", {"y": range(6), "v": column})
    assert t.rows.tolist()[:3] == [0, 2, 4]
    assert t.n_read == len(t.rows) + t.n_missing
    message = refusal("y ~ v", {"y": range(6), "v": column}, missing="error")
    assert (
        f"{t.n_missing} of 6 rows have missing values, in v ({t.n_missing}): rows 1, 3" in message
    )
    assert "rows are counted from 0" in message


def test_nan_hidden_in_a_nullable_column() -> None:
    zero = pd.Series([0.0, 1.0, 2.0, 3.0], dtype="Float64")
    assert table("y ~ v", {"y": range(4), "v": zero / zero * zero}).n_missing == 1


def test_no_row_left() -> None:
    message = refusal("y ~ x", {"y": [1, 2, 3], "x": [None, 1, None]}, weights=[1, 0, 1])
    assert "no row is left of 3: 2 have missing values, in x (2); 1 have a weight" in message
    message = refusal("y ~ x", {"y": [1.0, 2.0], "x": [None, None]})
    assert "2 have missing values, in x (2)" in message


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
    assert result.whole == all(v == int(v) for v in values)


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
    assert f"y is {kind}; it must be a number for a Gaussian outcome." in message


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
        assert (column.kind, column.levels, column.whole) == (
            rows.columns[key].kind,
            rows.columns[key].levels,
            rows.columns[key].whole,
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
