"""Tables of every library and files: the same columns from each, and what is refused."""

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

from addmodel.data import Table
from addmodel.errors import FormulaError
from tests.tables import RICH, frame, refusal, rich, table


def assert_same(a: Table, b: Table, index: bool = True) -> None:
    for name in ("outcome", "weights", "counts", "offset", "rows"):
        np.testing.assert_array_equal(getattr(a, name), getattr(b, name))
    assert (a.n_read, a.n_missing, a.n_weightless) == (b.n_read, b.n_missing, b.n_weightless)
    assert a.cautions == b.cautions
    assert list(a.columns) == list(b.columns)
    for key, column in a.columns.items():
        other = b.columns[key]
        assert (column.name, column.kind, column.levels) == (
            other.name,
            other.kind,
            other.levels,
        )
        np.testing.assert_array_equal(column.values, other.values)
        assert column.values.dtype == other.values.dtype
    if index:
        assert a.index.equals(b.index)


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
    data = frame().set_index("k", append=True)[["y", "x"]]
    data.to_parquet(tmp_path / "two.parquet")
    assert table("y ~ x", tmp_path / "two.parquet").index.equals(table("y ~ x", data).index)


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


# Missing


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
