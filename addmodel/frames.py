"""Any table -> pandas columns of a few plain types.

A `Source` knows the names of its columns before it reads any of them, so that only the columns
a model needs are read and converted. Every column it hands over has the index 0, 1, ..., n - 1:
the row numbers that messages speak of. `plain_type` then brings a column without missing values
to one of: whole or decimal numbers, bool, text, category, naive datetime.
"""

from __future__ import annotations

import datetime as dt
import numbers
import os
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from decimal import Decimal, InvalidOperation, localcontext
from pathlib import Path
from typing import Any, Literal, TypeAlias

import narwhals as nw
import numpy as np
import numpy.typing as npt
import pandas as pd

from addmodel.errors import DataError

BoolArray: TypeAlias = npt.NDArray[np.bool_]
Series: TypeAlias = "pd.Series[Any]"
Index: TypeAlias = "pd.Index[Any]"
Read: TypeAlias = Callable[[list[str]], tuple[dict[str, Series], Index]]

ACCEPTED = (
    "Give a pandas, polars or arrow table, a mapping of column names to 1-D arrays, "
    "or the path of a .csv, .csv.gz, .tsv, .tsv.gz or .parquet file."
)

# The usual spellings of a missing value in text files. "None" is not among them: as the first
# of None, Mild, Severe it is a level, and dropping its rows would go unnoticed.
MISSING_IN_TEXT = ["", "NA", "N/A", "n/a", "#N/A", "<NA>", "NaN", "nan", "NULL", "null"]

_ISO_DAY = r"[0-9]{4}-[0-9]{2}-[0-9]{2}"
_ISO_TIME = r"[ T][0-9]{2}:[0-9]{2}(?::[0-9]{2}(?:\.[0-9]+)?)?"
_ISO_DATE = rf"({_ISO_DAY}(?:{_ISO_TIME})?)(?:Z|[+-][0-9]{{2}}:?[0-9]{{2}})?"


@dataclass(frozen=True)
class Source:
    """A table whose column names are known and whose columns are not yet read.

    Attributes
    ----------
    names : tuple
        The names of all columns, as they stand in the data.
    what : str
        How messages call the table: "the data" or the name of a file.
    read : callable
        Takes a list of names and gives the columns by name, and the caller's index.
    """

    names: tuple[object, ...]
    what: str
    read: Read

    def load(self, needed: Sequence[str]) -> tuple[dict[str, Series], Index]:
        """Read the needed columns, each with the row numbers as its index.

        Raises
        ------
        DataError
            If a needed name belongs to several columns, or there are no rows.
        """
        for name in needed:
            if self.names.count(name) > 1:
                raise DataError(
                    f"{self.what}: {self.names.count(name)} columns are named '{name}'. "
                    "Rename all but one."
                )
        columns, index = self.read(list(dict.fromkeys(needed)))
        if len(index) == 0:
            raise DataError(f"{self.what}: there are no rows.")
        return columns, index


def open_source(data: object) -> Source:
    """Find out what kind of table `data` is and which columns it has.

    Raises
    ------
    DataError
        If `data` is no table, is lazy, or is a path that cannot be read.
    """
    if isinstance(data, pd.DataFrame):
        return _from_pandas(data)
    if isinstance(data, str | os.PathLike):
        return _from_file(Path(os.fspath(data)).expanduser())
    if isinstance(data, Mapping):
        return _from_mapping(data)
    return _from_narwhals(data)


def _numbered(column: Series) -> Series:
    """The column with row numbers for an index; shares its values with the caller's."""
    return column.set_axis(pd.RangeIndex(len(column)))


def _from_pandas(data: pd.DataFrame, what: str = "the data") -> Source:
    def read(needed: list[str]) -> tuple[dict[str, Series], Index]:
        return {name: _numbered(data[name]) for name in needed}, data.index

    return Source(tuple(data.columns), what, read)


def _from_narwhals(data: object) -> Source:
    """Polars, arrow and whatever else narwhals knows, by way of arrow, which loses nothing."""
    # a narwhals union over every library it knows says nothing here, hence Any
    kind = f"{type(data).__module__.partition('.')[0]} {type(data).__name__}"
    try:
        table: Any = nw.from_native(data, pass_through=True)
    except nw.exceptions.NarwhalsError as error:
        raise DataError(f"the data cannot be read: {error}") from error
    if isinstance(table, nw.LazyFrame):
        raise DataError(f"the data are a lazy table ({kind}): collect it first.")
    if not isinstance(table, nw.DataFrame):
        raise DataError(f"the data cannot be a {kind}. {ACCEPTED}")
    schema = table.schema

    def read(needed: list[str]) -> tuple[dict[str, Series], Index]:
        part = table.select(needed)
        # polars numbers its categories in the order the process met them, which no analysis
        # should depend on; as text they sort by themselves. Its Enum has a declared order.
        if "polars" in kind:
            loose = [name for name in needed if schema[name] == nw.Categorical]
            part = part.with_columns(nw.col(name).cast(nw.String) for name in loose)
        arrow = part.to_arrow()
        columns = {name: _arrow_column(arrow.column(name)) for name in needed}
        return columns, pd.RangeIndex(len(table))

    return Source(tuple(schema), "the data", read)


def _from_mapping(data: Mapping[Any, Any]) -> Source:
    def read(needed: list[str]) -> tuple[dict[str, Series], Index]:
        names = needed or list(data)[:1]
        columns = {name: as_series(data[name], f"column '{name}'") for name in names}
        lengths = {name: len(column) for name, column in columns.items()}
        if len(set(lengths.values())) > 1:
            listed = ", ".join(f"{name}: {n}" for name, n in lengths.items())
            raise DataError(f"the columns are of unequal length ({listed}).")
        return {name: _numbered(columns[name]) for name in needed}, _shared_index(data, columns)

    return Source(tuple(data), "the data", read)


def _shared_index(data: Mapping[Any, Any], columns: Mapping[str, Series]) -> Index:
    """The one index of all pandas Series of a mapping; arrays and lists go by position."""
    labelled = {name: data[name].index for name in columns if isinstance(data[name], pd.Series)}
    names = list(labelled)
    for name in names[1:]:
        if not labelled[name].equals(labelled[names[0]]):
            raise DataError(
                f"the Series '{names[0]}' and '{name}' have different indexes, so that it is not "
                "clear which of their rows belong together. Put them into one DataFrame."
            )
    length = max((len(column) for column in columns.values()), default=0)
    return labelled[names[0]] if names else pd.RangeIndex(length)


def as_series(values: Any, what: str) -> Series:
    """One column given as an array, list or Series of any library; `what` names it in errors.

    Raises
    ------
    DataError
        If it is a single value, a set or mapping, or not one-dimensional.
    """
    if not pd.api.types.is_list_like(values, allow_sets=False) or isinstance(values, Mapping):
        raise DataError(f"{what} is a {type(values).__name__}; it must be a 1-D array or list.")
    if not isinstance(values, pd.Series) and hasattr(values, "to_pandas"):
        values = values.to_pandas()
    dimensions = getattr(values, "ndim", 1)
    if dimensions != 1:
        raise DataError(f"{what} is {dimensions}-D; it must be a 1-D array or list.")
    if not hasattr(values, "dtype"):
        values = list(values)
    try:
        return pd.Series(values)
    except OverflowError:  # pandas 2 tries to make a float of whole numbers of any length
        return pd.Series(values, dtype=object)


def _from_file(path: Path) -> Source:
    """A file, told by its ending; nothing but its header is read yet."""
    if path.is_dir():
        raise DataError(f"'{path}' is a folder. Give the path of one file.")
    if not path.exists():
        raise DataError(f"there is no file '{path}'.")
    ending = path.name.lower().removesuffix(".gz")
    try:
        if path.suffix.lower() == ".parquet":
            return _from_parquet(path)
        if ending.endswith((".csv", ".tsv")):
            return _from_text(path, "\t" if ending.endswith(".tsv") else ",")
    except _READING as error:
        raise _unreadable(path, error) from error
    raise DataError(f"'{path}': the ending does not tell what kind of file this is. {ACCEPTED}")


_READING = (OSError, ValueError, EOFError, NotImplementedError)  # arrow's errors derive from these


def _unreadable(path: Path, error: Exception) -> DataError:
    return error if isinstance(error, DataError) else DataError(f"'{path}' is unreadable: {error}")


def _from_parquet(path: Path) -> Source:
    from pyarrow import parquet  # slow to import, and needed for files alone

    schema = parquet.read_schema(path)
    # pandas stores its index among the columns; it is no column of the data
    index = (schema.pandas_metadata or {}).get("index_columns", [])
    stored = [name for name in schema.names if name in index]
    names = tuple(name for name in schema.names if name not in stored)

    def read(needed: list[str]) -> tuple[dict[str, Series], Index]:
        try:
            table = parquet.read_table(path, columns=[*needed, *stored])
            index = table.select(stored).to_pandas().index
        except _READING as error:
            raise _unreadable(path, error) from error
        columns = {name: _arrow_column(table.column(name)) for name in needed}
        # without a stored index arrow may not know the length
        return columns, index if len(index) == len(table) else pd.RangeIndex(len(table))

    return Source(names, f"'{path}'", read)


def _from_text(path: Path, separator: str) -> Source:
    """Text with a header line. Arrow's reader refuses rows of another width than the header."""
    from pyarrow import csv, string  # slow to import, and needed for files alone

    parsing = csv.ParseOptions(delimiter=separator, newlines_in_values=True)
    with csv.open_csv(path, parse_options=parsing) as opened:
        names = tuple(opened.schema.names)

    def read(needed: list[str]) -> tuple[dict[str, Series], Index]:
        wanted = needed or [names[0]]
        # as text first: its own guesses of types look at the first rows only
        converting = csv.ConvertOptions(
            include_columns=wanted,
            column_types={name: string() for name in wanted},
            null_values=MISSING_IN_TEXT,
            strings_can_be_null=True,
        )
        try:
            table = csv.read_csv(path, parse_options=parsing, convert_options=converting)
        except _READING as error:
            raise _unreadable(path, error) from error
        return {name: _typed(table.column(name)) for name in needed}, pd.RangeIndex(len(table))

    return Source(names, f"'{path}'", read)


def _typed(text: Any) -> Series:
    """A text column as whole numbers, numbers, yes/no or ISO dates, if every value is one."""
    from pyarrow import ArrowInvalid, array, bool_, compute, float64, int64

    trimmed = compute.utf8_trim_whitespace(text)
    for kind in (int64(), float64()):
        try:
            return _arrow_column(compute.cast(trimmed, kind))
        except ArrowInvalid:
            continue
    truths = compute.is_in(compute.utf8_lower(trimmed), array(["true", "false", None]))
    if compute.all(truths).as_py():
        return _arrow_column(compute.cast(trimmed, bool_()))
    if compute.all(compute.match_substring_regex(text, f"^{_ISO_DATE}$")).as_py():
        # the time zone is left out: wall time
        wall = compute.replace_substring_regex(text, f"^{_ISO_DATE}$", r"\1")
        try:
            return pd.Series(pd.to_datetime(wall.to_pandas(), format="ISO8601"))
        except ValueError:  # no such day, as 2021-02-30: text, and named as such where it matters
            pass
    return _arrow_column(text)


def _arrow_column(array: Any) -> Series:
    return pd.Series(pd.arrays.ArrowExtensionArray(array))


def missing_cells(values: Series) -> BoolArray:
    """Where a column is missing: NaN, None, NaT, NA."""
    with localcontext() as context:
        context.traps[InvalidOperation] = False  # a signalling decimal NaN is missing too
        mask = values.isna().to_numpy(dtype=bool, copy=True)
    dtype = values.dtype
    if not isinstance(dtype, np.dtype) and pd.api.types.is_float_dtype(dtype):
        # nullable and arrow columns can hold NaN beside NA, and isna may see only the latter
        mask |= np.isnan(values.to_numpy(dtype=np.float64, na_value=np.nan))
    return mask


def plain_kind(values: Series) -> Literal["number", "bool", "category", "date", "text"]:
    """number, bool, category, date or text: what a column of a plain type holds."""
    dtype = values.dtype
    if isinstance(dtype, pd.CategoricalDtype):
        return "category"
    if pd.api.types.is_bool_dtype(dtype):
        return "bool"
    if pd.api.types.is_numeric_dtype(dtype):
        return "number"
    return "date" if pd.api.types.is_datetime64_dtype(dtype) else "text"


def text_hint(values: Series) -> str:
    """How to mend a text column that ought to be numbers or dates; empty where it ought not."""
    if plain_kind(values) != "text":
        return ""
    distinct = pd.Series(values.unique())
    if distinct.str.fullmatch(_ISO_DATE).all():
        return " It looks like dates: convert it with pd.to_datetime."
    numeric = pd.to_numeric(distinct, errors="coerce").notna()
    if 2 * numeric.sum() <= len(distinct):
        return ""
    shown = ", ".join(f"'{text}'" for text in distinct[numeric][:2])
    others = ", ".join(f"'{text}'" for text in distinct[~numeric][:2])
    but = f" but for {others}" if others else ""
    return f" It looks like numbers ({shown}){but}: convert it with pd.to_numeric."


def plain_type(values: Series, name: str) -> Series:
    """Bring a column without missing values to a plain type; `name` names it in errors.

    Numbers keep their width, so that whole numbers too long for a float stay distinct as levels.
    Durations become days, times of day become hours, dates lose their time zone (wall time).

    Raises
    ------
    DataError
        If the column holds anything else (complex numbers, lists, a mixture of types).
    """
    if isinstance(values.dtype, pd.ArrowDtype):
        from pyarrow import dictionary, int64, types

        array: Any = values.array
        array = array.__arrow_array__()
        if types.is_dictionary(array.type):  # old arrow hands over no unsigned codes, as polars has
            array = array.cast(dictionary(int64(), array.type.value_type))
        values = array.to_pandas().set_axis(values.index)
    if isinstance(values.dtype, pd.SparseDtype):
        values = pd.Series(np.asarray(values), index=values.index)
    dtype: Any = values.dtype
    if isinstance(dtype, pd.CategoricalDtype | pd.StringDtype):
        return values
    if pd.api.types.is_object_dtype(dtype):
        return _plain_objects(values, name)
    if isinstance(dtype, pd.DatetimeTZDtype):
        return pd.Series(values.dt.tz_localize(None))
    if pd.api.types.is_timedelta64_dtype(dtype):
        return pd.Series(values.dt.total_seconds() / 86400.0)
    if pd.api.types.is_numeric_dtype(dtype) and not pd.api.types.is_complex_dtype(dtype):
        # numpy_dtype is what the nullable types (Int64, boolean, ...) stand for
        return pd.Series(values.astype(getattr(dtype, "numpy_dtype", dtype)))
    if pd.api.types.is_datetime64_dtype(dtype):
        return values
    raise DataError(f"column '{name}' is of type {dtype}; {_USABLE}")


_USABLE = "it must hold numbers, text, bool, categories, dates or times."


def _plain_objects(values: Series, name: str) -> Series:
    """A column of Python objects, all of one usable type."""

    def every(*types: type) -> bool:
        return all(issubclass(found, types) for found in kinds)

    kinds = set(map(type, values))
    if every(str):
        return values
    if every(bool, np.bool_):
        return values.astype(bool)
    if every(numbers.Real, Decimal) and not kinds & {bool, np.bool_}:
        return _plain_numbers(values, name, every(numbers.Integral))
    made: list[Any]
    if every(dt.date, np.datetime64):
        made = [_wall(value) for value in values]
        return pd.Series(np.array(made, dtype="datetime64[us]"), index=values.index)
    if every(dt.timedelta):
        made = [value / dt.timedelta(days=1) for value in values]
    elif every(dt.time):
        made = [v.hour + v.minute / 60 + (v.second + v.microsecond / 1e6) / 3600 for v in values]
    else:
        found = ", ".join(sorted(kind.__name__ for kind in kinds))
        raise DataError(f"column '{name}' holds values of type {found}; {_USABLE[:-1]}, all alike.")
    return pd.Series(made, index=values.index, dtype=np.float64)


def _plain_numbers(values: Series, name: str, whole: bool) -> Series:
    if whole:
        try:
            return values.astype(np.int64)
        except OverflowError:  # longer than 64 bits: as decimal numbers, if they fit there
            pass
    try:
        return pd.Series([float(v) for v in values], index=values.index, dtype=np.float64)
    except OverflowError as error:
        raise DataError(f"column '{name}' holds numbers too large for 64 bits.") from error


def _wall(value: Any) -> np.datetime64:
    """A date or datetime as its wall time."""
    if isinstance(value, dt.datetime):
        value = value.replace(tzinfo=None)
    return np.datetime64(value, "us")
