"""Raw columns -> the values of an expression -> a checked column: numbers, dates or levels.

Every value that leaves here is finite and of a known kind. Messages name rows by their position
in the data as read, counted from 0.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from decimal import Decimal
from typing import Any, Literal, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt
import pandas as pd

from addmodel.errors import DataError
from addmodel.expression import Expression
from addmodel.formula import Factor, Model
from addmodel.frames import (
    BoolArray,
    Index,
    Series,
    missing_cells,
    plain_kind,
    plain_type,
    text_hint,
)

FloatArray: TypeAlias = npt.NDArray[np.float64]
IntArray: TypeAlias = npt.NDArray[np.int64]

LEVELLED = ("levels", "group")
"""Factors that take any column as levels."""
MISSING_LEVEL = -1
UNSEEN_LEVEL = -2


@dataclass(frozen=True, eq=False)
class Column:
    """One covariate, evaluated and checked.

    Attributes
    ----------
    name : str
        The expression's text.
    kind : {"number", "date", "levels"}
        What the values are.
    values : ndarray, shape (n,)
        Numbers as float64; dates as days since 1970-01-01 (wall time, the fraction is the time of
        day), float64; levels as int64 codes that count into `levels`. Read-only.
    levels : tuple of str
        Labels in order, for levels.
    """

    name: str
    kind: Literal["number", "date", "levels"]
    values: npt.NDArray[Any]
    levels: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class Unseen:
    """A level that the fit has not met, and the rows of the new data that hold it."""

    label: str
    rows: IntArray


def column_key(factor: Factor, expression: Expression) -> str:
    """Key of a factor's column: apart for C(x), so that x can be a number and levels at once."""
    return f"C({expression.text})" if factor.kind in LEVELLED else expression.text


def bare_name(key: str) -> str:
    """The expression under a key: x for C(x)."""
    return key.removeprefix("C(").removesuffix(")") if key.startswith("C(") else key


def covariates(model: Model) -> Iterator[tuple[str, Factor, Expression]]:
    """Every use of a covariate, in the order of the formula: column key, factor, expression."""
    for term in model.terms:
        for factor in term.factors:
            for expression in factor.arguments:
                yield column_key(factor, expression), factor, expression


# Values


class Role(NamedTuple):
    """What weights=, offset= and the like are computed from; reads like an expression."""

    text: str
    names: tuple[str, ...]
    evaluate: Callable[[Mapping[str, Series]], Series]


@dataclass(frozen=True, eq=False)
class Raw:
    """The columns in use as they were read, where they are missing, and the caller's index."""

    columns: Mapping[str, Series]
    missing: Mapping[str, BoolArray]
    index: Index

    @classmethod
    def of(cls, columns: Mapping[str, Series], index: Index) -> Raw:
        return cls(columns, {name: missing_cells(c) for name, c in columns.items()}, index)

    def incomplete(self, names: Iterable[str]) -> BoolArray:
        """Rows in which one of the columns is missing."""
        found = np.zeros(len(self.index), dtype=bool)
        for name in names:
            found |= self.missing[name]
        return found

    def values(self, part: Expression | Role, rows: IntArray) -> Series:
        """A part at the given complete rows, of a plain type, every value finite."""
        columns = {name: plain_type(self.columns[name].iloc[rows], name) for name in part.names}
        for name, column in columns.items():
            infinite = _infinite(column)
            if infinite.any():
                where = listed(rows[infinite])
                raise DataError(f"{part.text}: column '{name}' has infinite values in {where}.")
        result = plain_type(part.evaluate(columns), part.text)
        broken = np.flatnonzero(missing_cells(result) | _infinite(result))
        if broken.size:
            shown = (
                f"row {rows[i]} ({', '.join(f'{n} = {c.iloc[i]}' for n, c in columns.items())})"
                for i in broken[:5]
            )
            raise DataError(
                f"{part.text} is not a finite number in {broken.size} of {len(rows)} rows: "
                f"{', '.join(shown)}{', ...' if broken.size > 5 else ''} (rows are counted from 0)."
            )
        return result

    def numbers(self, part: Expression | Role, rows: IntArray) -> FloatArray:
        """Values that have to be numbers."""
        values = self.values(part, rows)
        kind = plain_kind(values)
        if kind != "number":
            raise DataError(f"{part.text} must be numbers, not {kind}.{text_hint(values)}")
        return values.to_numpy(dtype=np.float64)


def _infinite(values: Series) -> BoolArray:
    if plain_kind(values) != "number":
        return np.zeros(len(values), dtype=bool)
    return np.asarray(np.isinf(values.to_numpy(dtype=np.float64)), dtype=bool)


# Columns


def fitted_columns(model: Model, raw: Raw, rows: IntArray) -> dict[str, Column]:
    """The covariates of a model at the given complete rows, by key.

    Raises
    ------
    DataError
        If one is constant, or is of levels where a curve needs numbers.
    """
    columns: dict[str, Column] = {}
    for key, factor, expression in covariates(model):
        if key not in columns:
            values = raw.values(expression, rows)
            columns[key] = _column(expression.text, values, factor.kind in LEVELLED)
        if factor.kind in ("place", "globe") and columns[key].kind == "date":
            raise DataError(f"{factor.name}: {key} is a date, and coordinates are numbers.")
        if factor.kind not in ("plain", *LEVELLED) and columns[key].kind == "levels":
            values = raw.values(expression, rows)
            raise DataError(
                f"{factor.name}: {key} is {plain_kind(values)}; write `{key}` or `C({key})` for "
                f"levels.{text_hint(values)}"
            )
    return columns


def _column(name: str, values: Series, as_levels: bool) -> Column:
    kind = plain_kind(values)
    if not as_levels and (kind == "number" or kind == "date"):
        column = Column(name, kind, frozen(_measured(values)))
    else:
        codes, labels = distinct_levels(name, values)
        column = Column(name, "levels", frozen(codes), labels)
    if column.values.min() == column.values.max():
        raise DataError(
            f"{name} has one distinct value in the {len(values)} rows used, "
            "so that its effect cannot be told from the intercept; remove it from the formula."
        )
    return column


def new_column(
    fitted: Column, expression: Expression, raw: Raw
) -> tuple[Column, tuple[Unseen, ...]]:
    """The column of new rows, coded as the fitted one, and the levels that the fit has not met.

    Raises
    ------
    DataError
        If it is of another kind than the fitted one.
    """
    rows = np.flatnonzero(~raw.incomplete(expression.names))
    full: npt.NDArray[Any] = np.full(len(raw.index), np.nan)
    if fitted.kind == "levels":
        full = np.full(len(raw.index), MISSING_LEVEL, dtype=np.int64)
    unseen: tuple[Unseen, ...] = ()
    if rows.size:
        values = raw.values(expression, rows)
        kind = plain_kind(values)
        if fitted.kind == "levels":
            codes, labels = level_codes(values)
            place = {label: i for i, label in enumerate(fitted.levels)}
            full[rows] = np.array([place.get(label, UNSEEN_LEVEL) for label in labels])[codes]
            new = [(i, label) for i, label in enumerate(labels) if label not in place]
            unseen = tuple(Unseen(label, frozen(rows[codes == i])) for i, label in new)
        elif kind == fitted.kind:
            full[rows] = _measured(values)
        else:
            raise DataError(
                f"{fitted.name} is {kind} in the new data, but was a {fitted.kind} when the model "
                f"was fitted.{text_hint(values)}"
            )
    return replace(fitted, values=frozen(full)), unseen


def _measured(values: Series) -> FloatArray:
    """Numbers as they are, dates as days since 1970-01-01."""
    if plain_kind(values) == "number":
        return values.to_numpy(dtype=np.float64)
    moments = values.to_numpy()
    unit: Any = np.datetime_data(moments.dtype)[0]
    day = int(np.timedelta64(1, "D") / np.timedelta64(1, unit))
    # whole days apart from the rest, so that the division loses none of the time of day
    days, rest = np.divmod(moments.astype(np.int64), day)
    return np.asarray(days + rest / day, dtype=np.float64)


def distinct_levels(name: str, values: Series) -> tuple[IntArray, tuple[str, ...]]:
    """`level_codes`, where every level must have a label of its own.

    Raises
    ------
    DataError
        If two categories, such as 1 and "1", share a label.
    """
    codes, labels = level_codes(values)
    twice = sorted(label for label, count in Counter(labels).items() if count > 1)
    if twice:
        raise DataError(f"{name}: several categories have the label '{twice[0]}'.")
    return codes, labels


def level_codes(values: Series) -> tuple[IntArray, tuple[str, ...]]:
    """Codes (n,) and the labels of the levels that occur, in order."""
    kind = plain_kind(values)
    if kind == "category":
        values = values.cat.remove_unused_categories()
        codes = np.asarray(values.cat.codes, dtype=np.int64)
        return codes, tuple(level_label(level) for level in values.cat.categories)
    codes, distinct = pd.factorize(values)
    # an array keeps the width of its numbers, an index does not: 0.1 as float32 is "0.1"
    labels = [
        level_label(level) for level in (distinct if kind == "date" else np.asarray(distinct))
    ]
    order = _natural_order(labels) if kind == "text" else np.argsort(np.asarray(distinct))
    ranks = np.argsort(order).astype(np.int64)
    return ranks[codes], tuple(labels[i] for i in order)


def level_label(level: Any) -> str:
    """A level's label: 1 and 1.0 are "1", midnight is left away from dates."""
    if isinstance(level, pd.Timestamp):
        return level.tz_localize(None).isoformat(sep=" ").removesuffix(" 00:00:00")
    if isinstance(level, Decimal):
        level = float(level)
    if isinstance(level, float | np.floating) and level.is_integer():
        level = int(level)
    return str(level)


def _natural_order(labels: list[str]) -> IntArray:
    """Positions in natural order: digits compare as numbers, so that 5-9 comes before 10-14."""

    def by_parts(i: int) -> tuple[Any, ...]:
        pieces = re.split("([0-9]+)", labels[i])
        # a longer number is a larger one once its leading zeros are gone; int() has a length limit
        pieces[1::2] = [f"{len(d.lstrip('0')):06d}{d.lstrip('0')}" for d in pieces[1::2]]
        return pieces, labels[i]

    def by_value(i: int) -> tuple[Any, ...]:
        return float(labels[i]), labels[i]

    # among plain numbers a minus sign and decimals count too
    plain = all(re.fullmatch(r"[+-]?[0-9]+(\.[0-9]+)?", label) for label in labels)
    return np.array(sorted(range(len(labels)), key=by_value if plain else by_parts), np.int64)


def column_cautions(model: Model, columns: Mapping[str, Column]) -> Iterator[str]:
    """Labels that differ by blanks alone, and whole numbers that may be codes."""
    bent = {
        expression.text for _, factor, expression in covariates(model) if factor.kind != "plain"
    }
    for key, column in columns.items():
        stripped: dict[str, str] = {}
        for label in column.levels:
            twin = stripped.setdefault(label.strip(), label)
            if twin != label:
                yield f"{column.name}: '{twin}' and '{label}' are different levels."
        if column.kind == "number" and key not in bent:
            distinct = np.unique(column.values)
            if 3 <= len(distinct) <= 12 and np.all(distinct == np.floor(distinct)):
                yield (
                    f"{key} is a whole number with {len(distinct)} distinct values and stands as a "
                    f"straight line; write C({key}) if they are codes or categories."
                )


# Small helpers


def listed(rows: IntArray) -> str:
    """Row numbers for a message, five at most."""
    shown = ", ".join(str(row) for row in rows[:5])
    more = f" and {rows.size - 5} more" if rows.size > 5 else ""
    return f"row{'s' if rows.size > 1 else ''} {shown}{more} (rows are counted from 0)"


def frozen(values: npt.NDArray[Any]) -> npt.NDArray[Any]:
    """The array, read-only, and never a view of the caller's."""
    values = values.copy()
    values.setflags(write=False)
    return values
