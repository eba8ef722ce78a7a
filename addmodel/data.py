"""Any table -> checked columns: types, missing rows, outcome, weights, counts, offset.

`read` serves fitting, `read_new` prediction. After `read` every value is finite and of a known
kind, so that nothing later has to ask. Messages name rows by their position, counted from 0.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from decimal import Decimal
from typing import Any, Literal, NoReturn, TypeAlias

import numpy as np
import numpy.typing as npt
import pandas as pd

from addmodel.errors import DataError, FormulaError, nearest
from addmodel.expression import Expression, parse_expression
from addmodel.formula import Factor, Model
from addmodel.frames import (
    BoolArray,
    Source,
    as_series,
    missing_cells,
    open_source,
    plain_kind,
    plain_type,
    text_hint,
)

FloatArray: TypeAlias = npt.NDArray[np.float64]
IntArray: TypeAlias = npt.NDArray[np.int64]
Series: TypeAlias = "pd.Series[Any]"

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
    whole : bool
        A number whose values are all whole.
    """

    name: str
    kind: Literal["number", "date", "levels"]
    values: npt.NDArray[Any]
    levels: tuple[str, ...] = ()
    whole: bool = False


@dataclass(frozen=True, eq=False)
class Table:
    """The rows a model is fitted to. All arrays have shape (n,) and are read-only.

    Attributes
    ----------
    outcome_name : str
        The outcome expression's text.
    outcome, weights, counts, offset : ndarray of float64
        Ones, ones and zeros where the last three are not given.
    columns : mapping of str to Column
        By `column_key`.
    index : pandas.Index
        The caller's index of the kept rows.
    rows : ndarray of int64
        Positions of the kept rows in the data as read.
    n_read, n_missing, n_weightless : int
        Rows read, dropped for missing values, and left out for a weight or count of zero (whatever
        else such a row holds or lacks): n_read = n + n_missing + n_weightless.
    cautions : tuple of str
        What the reader should know about the data.
    """

    outcome_name: str
    outcome: FloatArray
    weights: FloatArray
    counts: FloatArray
    offset: FloatArray
    columns: Mapping[str, Column]
    index: pd.Index[Any]
    rows: IntArray
    n_read: int
    n_missing: int
    n_weightless: int
    cautions: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class Unseen:
    """A level that the fit has not met, and the rows of the new data that hold it."""

    label: str
    rows: IntArray


@dataclass(frozen=True, eq=False)
class NewRows:
    """Covariates of new rows, coded as at the fit.

    Attributes
    ----------
    columns : mapping of str to Column
        Shape (n,) each. Missing numbers and dates are NaN; a missing level has the code
        MISSING_LEVEL, an unseen one UNSEEN_LEVEL.
    index : pandas.Index
        The caller's index.
    n : int
        Number of rows.
    unseen : mapping of str to tuple of Unseen
        By column key, for the columns that have any.
    missing : ndarray of bool, shape (n,)
        Rows in which some covariate is missing.
    """

    columns: Mapping[str, Column]
    index: pd.Index[Any]
    n: int
    unseen: Mapping[str, tuple[Unseen, ...]]
    missing: BoolArray


def column_key(factor: Factor, expression: Expression) -> str:
    """Key of a factor's column: apart for C(x), so that x can be a number and levels at once."""
    return f"C({expression.text})" if factor.kind == "levels" else expression.text


def read(
    data: object,
    model: Model,
    *,
    weights: object = None,
    counts: object = None,
    offset: object = None,
    missing: str = "drop",
) -> Table:
    """Read the columns that a model needs, check them, and keep the complete rows.

    Parameters
    ----------
    data : table, mapping or path
        A pandas, polars or arrow table; a mapping of names to 1-D arrays of equal length; or the
        path of a .csv, .tsv (either also .gz) or .parquet file. It is never changed.
    model : Model
        The parsed formula.
    weights, counts, offset : str or array of shape (n_read,), optional
        A column, an expression in columns, or values by position. Weights are finite and at least
        zero; counts are also whole.
    missing : {"drop", "error"}
        What to do with rows in which a used value is missing.

    Returns
    -------
    Table
        The kept rows.

    Raises
    ------
    FormulaError
        If the formula names a column that is not there, or its outcome as a covariate.
    DataError
        If the data cannot be used; the message says which column and rows, and what to do.
    """
    _check_choice("missing", missing, ("drop", "error"))
    _check_outcome_apart(model)
    source = open_source(data)
    parts = _formula_parts(model, source)
    given = {"weights": weights, "counts": counts, "offset": offset}
    roles = {role: _role_part(role, value, source) for role, value in given.items()}
    used = dict.fromkeys(n for part in [*parts.values(), *roles.values()] for n in part.names)
    raw, index = source.load([name for name in used if name not in _POSITIONAL])
    for role, part in roles.items():
        if part.names == (f"{role}=",):
            raw[part.names[0]] = _by_position(role, given[role], len(index))
    cells = {name: missing_cells(column) for name, column in raw.items()}

    weight, light = _weights(roles["weights"], raw, cells, len(index))
    count, uncounted = _weights(roles["counts"], raw, cells, len(index))
    weightless = light | uncounted
    incomplete = _any(cells, used, len(index)) & ~weightless
    if missing == "error" and incomplete.any():
        _refuse_missing(cells, ~weightless, "Write missing='drop' to leave them out.")
    rows = np.flatnonzero(~weightless & ~incomplete).astype(np.int64)
    if rows.size == 0:
        _refuse_empty(cells, weightless, incomplete)

    outcome = _outcome(parts[_OUTCOME], raw, rows)
    columns = _columns(model, parts, raw, rows)
    offsets = np.zeros(rows.size)
    if roles["offset"].names:
        offsets = _numbers(roles["offset"], raw, rows)
    return Table(
        outcome_name=model.outcome.text,
        outcome=_frozen(outcome),
        weights=_frozen(weight[rows]),
        counts=_frozen(count[rows]),
        offset=_frozen(offsets),
        columns=columns,
        index=index[rows],
        rows=_frozen(rows),
        n_read=len(index),
        n_missing=int(incomplete.sum()),
        n_weightless=int(weightless.sum()),
        cautions=(*_order_cautions(given, index), *_column_cautions(model, columns)),
    )


def read_new(
    data: object,
    columns: Mapping[str, Column],
    expressions: Mapping[str, Expression],
    *,
    missing: str = "keep",
) -> NewRows:
    """Read the covariates of new rows and code them as at the fit.

    Parameters
    ----------
    data : table, mapping or path
        As for `read`; the outcome is not needed.
    columns : mapping of str to Column
        The fitted columns.
    expressions : mapping of str to Expression
        What each of them is computed from, by the same keys.
    missing : {"keep", "error"}
        Whether missing values are kept as missing or refused.

    Returns
    -------
    NewRows
        One row for each row of `data`, in the same order.

    Raises
    ------
    DataError
        If a column is not there, is of another type than at the fit, or has infinite values.
    """
    _check_choice("missing", missing, ("keep", "error"))
    source = open_source(data)
    parts = {key: _Part.of(expressions[key]) for key in columns}
    needed = list(dict.fromkeys(name for part in parts.values() for name in part.names))
    for name in needed:
        if name not in source.names:
            raise DataError(
                f"{source.what}: there is no column '{name}'. {nearest(name, _texts(source))} "
                f"The model needs: {', '.join(needed)}."
            )
    raw, index = source.load(needed)
    cells = {name: missing_cells(column) for name, column in raw.items()}
    if missing == "error" and any(cell.any() for cell in cells.values()):
        _refuse_missing(cells, np.ones(len(index), bool), "Write missing='keep' to allow them.")
    coded: dict[str, Column] = {}
    unseen: dict[str, tuple[Unseen, ...]] = {}
    for key, fitted in columns.items():
        rows = np.flatnonzero(~_any(cells, parts[key].names, len(index)))
        coded[key], strange = _coded_as(fitted, parts[key], raw, rows, len(index))
        if strange:
            unseen[key] = strange
    return NewRows(coded, index, len(index), unseen, _frozen(_any(cells, needed, len(index))))


# What is computed from columns: the outcome, covariates, and the three roles beside the formula.


@dataclass(frozen=True)
class _Part:
    """Something computed from raw columns, row by row; without names it was not given."""

    text: str
    names: tuple[str, ...]
    evaluate: Callable[[Mapping[str, Series]], Series]

    @classmethod
    def of(cls, expression: Expression) -> _Part:
        return cls(expression.text, expression.names, expression.evaluate)

    @classmethod
    def alone(cls, text: str, *names: str) -> _Part:
        return cls(text, names, lambda columns: columns[names[0]])


_OUTCOME = "the outcome"  # no expression has this text
_POSITIONAL = ("weights=", "counts=", "offset=")


def _formula_parts(model: Model, source: Source) -> dict[str, _Part]:
    """The outcome and every covariate, by key; their columns are known to exist."""
    _check_known(model, model.outcome, source)
    parts = {_OUTCOME: _Part.of(model.outcome)}
    for factor, expression in _uses(model):
        _check_known(model, expression, source)
        key = column_key(factor, expression)
        part = parts.setdefault(key, _Part.of(expression))
        if part.names != expression.names:  # a column called "log(x)", beside the logarithm of x
            raise FormulaError(
                f"{key} is both a column and an expression here. Rename the column.",
                model.text,
                factor.span,
            )
    return parts


def _uses(model: Model) -> Iterable[tuple[Factor, Expression]]:
    for term in model.terms:
        for factor in term.factors:
            for expression in factor.arguments:
                yield factor, expression


def _role_part(role: str, given: object, source: Source) -> _Part:
    """What weights=, counts= or offset= is computed from."""
    if given is None:
        return _Part(f"{role}=", (), lambda columns: columns[""])
    if not isinstance(given, str):
        return _Part.alone(f"{role}=", f"{role}=")
    if given in source.names:  # also names that are no expression, as "my weights"
        return _Part.alone(f"{role}= ({given})", given)
    expression = parse_expression(given, role)
    for name in expression.names:
        if name not in source.names:
            raise DataError(
                f"{role}={given!r}: {source.what} has no column '{name}'. "
                f"{nearest(name, _texts(source))}"
            )
    return _Part(f"{role}= ({given})", expression.names, expression.evaluate)


def _by_position(role: str, given: object, n: int) -> Series:
    column = as_series(given, f"{role}=").reset_index(drop=True)
    if len(column) != n:
        raise DataError(f"{role}= has {len(column)} values, but the data have {n} rows.")
    return column


def _values(part: _Part, raw: Mapping[str, Series], rows: IntArray) -> Series:
    """A part at the given complete rows, of a plain type, every value finite."""
    columns = {name: plain_type(raw[name].iloc[rows], name) for name in part.names}
    for name, column in columns.items():
        infinite = _infinite(column)
        if infinite.any():
            where = _listed(rows[infinite])
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


def _numbers(part: _Part, raw: Mapping[str, Series], rows: IntArray) -> FloatArray:
    values = _values(part, raw, rows)
    kind = plain_kind(values)
    if kind != "number":
        raise DataError(f"{part.text} must be numbers, not {kind}.{text_hint(values)}")
    return values.to_numpy(dtype=np.float64)


def _outcome(part: _Part, raw: Mapping[str, Series], rows: IntArray) -> FloatArray:
    values = _values(part, raw, rows)
    kind = plain_kind(values)
    if kind != "number":
        raise DataError(
            f"{part.text} is {kind}; it must be a number for a Gaussian outcome.{text_hint(values)}"
        )
    return values.to_numpy(dtype=np.float64)


def _weights(
    part: _Part, raw: Mapping[str, Series], cells: Mapping[str, BoolArray], n: int
) -> tuple[FloatArray, BoolArray]:
    """Weights or counts of all rows (1 where missing or not given), and where they are zero."""
    full = np.ones(n)
    rows = np.flatnonzero(~_any(cells, part.names, n)) if part.names else np.empty(0, np.int64)
    if rows.size == 0:
        return full, full == 0.0
    full[rows] = values = _numbers(part, raw, rows)
    rules = [(values < 0.0, "must not be negative")]
    if part.text.startswith("counts"):
        rules.append((values != np.floor(values), "must be whole numbers"))
    for broken, rule in rules:
        if broken.any():
            shown = ", ".join(f"{v:g}" for v in values[broken][:5])
            raise DataError(f"{part.text} {rule}: {shown} in {_listed(rows[broken])}.")
    if not values.any():
        raise DataError(f"{part.text} is zero in every row; there is nothing to fit.")
    return full, full == 0.0


# Columns


def _columns(
    model: Model, parts: Mapping[str, _Part], raw: Mapping[str, Series], rows: IntArray
) -> dict[str, Column]:
    columns: dict[str, Column] = {}
    values: dict[str, Series] = {}
    for factor, expression in _uses(model):
        key = column_key(factor, expression)
        if key not in columns:
            values[key] = _values(parts[key], raw, rows)
            columns[key] = _column(expression.text, values[key], factor.kind == "levels")
            _check_varies(columns[key])
        if factor.kind in ("curve", "cycle") and columns[key].kind == "levels":
            kind = plain_kind(values[key])
            raise DataError(
                f"{factor.name}: {key} is {kind}; write `{key}` or `C({key})` for levels."
                f"{text_hint(values[key])}"
            )
    return columns


def _column(name: str, values: Series, as_levels: bool) -> Column:
    kind = plain_kind(values)
    if as_levels or kind not in ("number", "date"):
        codes, labels = _levels(values)
        twice = sorted({label for label in labels if labels.count(label) > 1})
        if twice:
            raise DataError(f"{name}: several categories have the label '{twice[0]}'.")
        return Column(name, "levels", _frozen(codes), labels)
    if kind == "date":
        return Column(name, "date", _frozen(_days(values)))
    return _number_column(name, values.to_numpy(dtype=np.float64))


def _number_column(name: str, values: FloatArray) -> Column:
    present = values[~np.isnan(values)]
    return Column(name, "number", _frozen(values), whole=bool(np.all(present == np.floor(present))))


def _days(values: Series) -> FloatArray:
    """Days since 1970-01-01, split before the division so that no unit can overflow."""
    moments = values.to_numpy()
    days = moments.astype("datetime64[D]")
    fraction = (moments - days) / np.timedelta64(1, "D")
    return np.asarray(days.astype(np.int64) + fraction, dtype=np.float64)


def _levels(values: Series) -> tuple[IntArray, tuple[str, ...]]:
    """Codes (n,) and the labels of the levels that occur, in order."""
    kind = plain_kind(values)
    if kind == "category":
        values = values.cat.remove_unused_categories()
        coded = np.asarray(values.cat.codes, dtype=np.int64)
        return coded, tuple(_label(level) for level in values.cat.categories)
    codes, distinct = pd.factorize(values)
    order = np.argsort(np.asarray(distinct))
    # an array keeps the width of its numbers, an index does not: 0.1 as float32 is "0.1"
    labels = [_label(level) for level in (distinct if kind == "date" else np.asarray(distinct))]
    if kind == "text":
        order = _natural_order(labels)
    ranks: IntArray = np.argsort(order).astype(np.int64)
    return ranks[np.asarray(codes)], tuple(labels[i] for i in order)


def _label(level: Any) -> str:
    """A level's label: 1 and 1.0 are "1", midnight is left away from dates."""
    if isinstance(level, bool | np.bool_):
        return str(bool(level))
    if isinstance(level, pd.Timestamp):
        return level.tz_localize(None).isoformat(sep=" ").removesuffix(" 00:00:00")
    if isinstance(level, Decimal):
        level = float(level)
    if isinstance(level, float | np.floating) and level == np.floor(level):
        return str(int(level))
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


def _coded_as(
    fitted: Column, part: _Part, raw: Mapping[str, Series], rows: IntArray, n: int
) -> tuple[Column, tuple[Unseen, ...]]:
    """A new column coded as the fitted one, and its unseen levels; `rows` are not missing."""
    if fitted.kind == "levels":
        codes = np.full(n, MISSING_LEVEL, dtype=np.int64)
        strange: tuple[Unseen, ...] = ()
        if rows.size:
            codes[rows], strange = _matched(fitted, _values(part, raw, rows), rows)
        return Column(fitted.name, "levels", _frozen(codes), fitted.levels), strange
    full = np.full(n, np.nan)
    if rows.size:
        values = _values(part, raw, rows)
        kind = plain_kind(values)
        if kind != fitted.kind:
            raise DataError(
                f"{fitted.name} is {kind} in the new data, but was a {fitted.kind} when the model "
                f"was fitted.{text_hint(values)}"
            )
        full[rows] = _column(fitted.name, values, as_levels=False).values
    if fitted.kind == "date":
        return Column(fitted.name, "date", _frozen(full)), ()
    return _number_column(fitted.name, full), ()


def _matched(fitted: Column, values: Series, rows: IntArray) -> tuple[IntArray, tuple[Unseen, ...]]:
    codes, labels = _levels(values)
    place = {label: i for i, label in enumerate(fitted.levels)}
    places = np.array([place.get(label, UNSEEN_LEVEL) for label in labels], dtype=np.int64)
    strange = tuple(
        Unseen(label, _frozen(rows[codes == i]))
        for i, label in enumerate(labels)
        if label not in place
    )
    return places[codes], strange


# Checks


def _check_choice(option: str, value: object, allowed: tuple[str, ...]) -> None:
    if value not in allowed:
        listed = " or ".join(f"'{choice}'" for choice in allowed)
        raise DataError(f"{option}={value!r} is not known; it is {listed}.")


def _check_outcome_apart(model: Model) -> None:
    """Refuse y ~ y and y ~ log(y); change - baseline ~ baseline is an honest model."""
    for factor, expression in _uses(model):
        if model.outcome.names and set(model.outcome.names) <= set(expression.names):
            raise FormulaError(
                f"{', '.join(model.outcome.names)} is both outcome and covariate. "
                f"Remove {factor.name}.",
                model.text,
                factor.span,
            )


def _check_known(model: Model, expression: Expression, source: Source) -> None:
    for name in expression.names:
        if name not in source.names:
            raise FormulaError(
                f"{source.what}: there is no column '{name}'. {nearest(name, _texts(source))}",
                model.text,
                expression.span,
            )


def _check_varies(column: Column) -> None:
    if column.values.min() == column.values.max():
        raise DataError(
            f"{column.name} has one distinct value in the {len(column.values)} rows used, "
            "so that its effect cannot be told from the intercept; remove it from the formula."
        )


def _refuse_missing(cells: Mapping[str, BoolArray], among: BoolArray, remedy: str) -> NoReturn:
    numbers = {name: int((cell & among).sum()) for name, cell in cells.items()}
    listed = ", ".join(f"{name} ({number})" for name, number in numbers.items() if number)
    rows = np.flatnonzero(_any(cells, cells, len(among)) & among)
    raise DataError(
        f"{rows.size} of {len(among)} rows have missing values, in {listed}: "
        f"{_listed(rows)}. {remedy}"
    )


def _refuse_empty(
    cells: Mapping[str, BoolArray], weightless: BoolArray, incomplete: BoolArray
) -> NoReturn:
    reasons = []
    if incomplete.any():
        gaps = {name: int((cell & incomplete).sum()) for name, cell in cells.items()}
        listed = ", ".join(f"{name} ({number})" for name, number in gaps.items() if number)
        reasons.append(f"{incomplete.sum()} have missing values, in {listed}")
    if weightless.any():
        reasons.append(f"{weightless.sum()} have a weight or count of zero")
    raise DataError(f"no row is left of {len(weightless)}: {'; '.join(reasons)}.")


def _order_cautions(given: Mapping[str, object], index: pd.Index[Any]) -> Iterable[str]:
    for role, values in given.items():
        if (
            isinstance(values, pd.Series)
            and not values.index.equals(index)
            and len(values.index.symmetric_difference(index, sort=False)) == 0
        ):
            yield (
                f"{role}= has the index of the data in another order; its values were taken by "
                "position, not by label."
            )


def _column_cautions(model: Model, columns: Mapping[str, Column]) -> Iterable[str]:
    bent = {e.text for factor, e in _uses(model) if factor.kind != "plain"}
    for key, column in columns.items():
        if column.kind == "levels":
            yield from _level_cautions(column)
        if column.whole and key not in bent:
            distinct = len(np.unique(column.values))
            if 3 <= distinct <= 12:
                yield (
                    f"{key} is a whole number with {distinct} distinct values and stands as a "
                    f"straight line; write C({key}) if they are codes or categories."
                )


def _level_cautions(column: Column) -> Iterable[str]:
    stripped: dict[str, str] = {}
    for label in column.levels:
        twin = stripped.setdefault(label.strip(), label)
        if twin != label:
            yield f"{column.name}: '{twin}' and '{label}' are different levels."


# Small helpers


def _any(cells: Mapping[str, BoolArray], names: Iterable[str], n: int) -> BoolArray:
    found = np.zeros(n, dtype=bool)
    for name in names:
        found |= cells[name]
    return found


def _infinite(values: Series) -> BoolArray:
    if plain_kind(values) != "number":
        return np.zeros(len(values), dtype=bool)
    return np.asarray(np.isinf(values.to_numpy(dtype=np.float64)), dtype=bool)


def _listed(rows: npt.NDArray[np.intp] | IntArray) -> str:
    """Row numbers for a message, five at most."""
    shown = ", ".join(str(row) for row in rows[:5])
    more = f" and {rows.size - 5} more" if rows.size > 5 else ""
    return f"row{'s' if rows.size > 1 else ''} {shown}{more} (rows are counted from 0)"


def _texts(source: Source) -> list[str]:
    return [str(name) for name in source.names]


def _frozen(values: npt.NDArray[Any]) -> npt.NDArray[Any]:
    """The array, read-only, and never a view of the caller's."""
    values = values.copy()
    values.setflags(write=False)
    return values
