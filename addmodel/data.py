"""Any table -> a checked `Table`: rows kept and dropped, outcome, weights, counts, offset, columns.

`read` serves fitting, `read_new` prediction. After `read` every value is finite and of a known
kind, so that nothing later has to ask. Messages name rows by their position, counted from 0.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any, NoReturn

import numpy as np
import numpy.typing as npt

from addmodel.columns import (
    Column,
    FloatArray,
    IntArray,
    Raw,
    Role,
    Unseen,
    column_cautions,
    covariates,
    fitted_columns,
    frozen,
    listed,
    new_column,
)
from addmodel.errors import DataError, FormulaError, nearest
from addmodel.expression import Expression
from addmodel.formula import Model
from addmodel.frames import BoolArray, Index, Source, as_series, open_source
from addmodel.responses import measured, yes_no
from addmodel.roles import offsets, order_cautions, role_at_fit, role_in_new_rows, weights_of


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
        Rows read, dropped for missing values, and left out for a weight, count or trials of zero
        (whatever else such a row holds or lacks): n_read = n + n_missing + n_weightless.
    cautions : tuple of str
        What the reader should know about the data.
    trials : ndarray of float64
        Trials of each row, for a yes/no outcome (`outcome` is then events/trials); else ones.
    event : str or None
        The level that is counted, for a yes/no outcome of single trials.
    """

    outcome_name: str
    outcome: FloatArray
    weights: FloatArray
    counts: FloatArray
    offset: FloatArray
    columns: Mapping[str, Column]
    index: Index
    rows: IntArray
    n_read: int
    n_missing: int
    n_weightless: int
    cautions: tuple[str, ...]
    trials: FloatArray
    event: str | None

    @property
    def values(self) -> dict[str, npt.NDArray[Any]]:
        """The covariates' values by key, each (n,)."""
        return {key: column.values for key, column in self.columns.items()}

    @property
    def prior(self) -> FloatArray:
        """Prior weight times count times trials, (n,)."""
        weights: FloatArray = self.weights * self.counts * self.trials
        return weights


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
        Rows in which something needed is missing.
    offset : ndarray of float64, shape (n,)
        The offset plus the logarithm of the exposure; NaN where one of these is missing.
    """

    columns: Mapping[str, Column]
    index: Index
    n: int
    unseen: Mapping[str, tuple[Unseen, ...]]
    missing: BoolArray
    offset: FloatArray

    @property
    def values(self) -> dict[str, npt.NDArray[Any]]:
        """The covariates' values by key, each (n,)."""
        return {key: column.values for key, column in self.columns.items()}


def read(
    data: object,
    model: Model,
    *,
    weights: object = None,
    counts: object = None,
    offset: object = None,
    exposure: object = None,
    trials: object = None,
    event: object = None,
    binary: bool = False,
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
    weights, counts, offset, exposure, trials : str or array of shape (n_read,), optional
        A column, an expression in columns, or values by position. Weights are finite and at least
        zero; counts are also whole; an exposure is positive (its logarithm is added to the
        offset); trials are whole, and a row of 0 trials is left out.
    event : optional
        The level of a yes/no outcome that is counted.
    binary : bool
        Whether the outcome is yes/no.
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
    source = open_source(data)
    _check_formula(model, source)
    if not binary and (trials is not None or event is not None):
        what = "trials=" if trials is not None else "event="
        raise DataError(f"{what} belongs to a yes/no outcome: outcome='binomial'.")
    given = {
        "weights": weights,
        "counts": counts,
        "offset": offset,
        "exposure": exposure,
        "trials": trials,
    }
    given = {role: values for role, values in given.items() if values is not None}
    roles = {role: role_at_fit(role, values, source) for role, values in given.items()}
    raw = _load(model, source, given, roles)
    n = len(raw.index)

    weight = weights_of(roles.get("weights"), raw, whole=False)
    count = weights_of(roles.get("counts"), raw, whole=True)
    number = weights_of(roles.get("trials"), raw, whole=True)
    weightless = (weight == 0.0) | (count == 0.0) | (number == 0.0)
    incomplete = raw.incomplete(raw.columns) & ~weightless
    if missing == "error" and incomplete.any():
        _refuse_missing(raw, incomplete, "Write missing='drop' to leave them out.")
    rows = np.flatnonzero(~weightless & ~incomplete)
    if rows.size == 0:
        _refuse_empty(raw, weightless, incomplete)

    if binary:
        trials_of_rows = number[rows] if "trials" in roles else None
        response = yes_no(model.outcome, trials_of_rows, event, raw, rows)
    else:
        response = measured(model.outcome, raw, rows)
    columns = fitted_columns(model, raw, rows)
    return Table(
        outcome_name=model.outcome.text,
        outcome=frozen(response.values),
        weights=frozen(weight[rows]),
        counts=frozen(count[rows]),
        offset=frozen(offsets(roles, raw, rows)),
        columns=columns,
        index=raw.index[rows],
        rows=frozen(rows),
        n_read=n,
        n_missing=int(incomplete.sum()),
        n_weightless=int(weightless.sum()),
        cautions=(
            *order_cautions(given, raw.index),
            *response.cautions,
            *column_cautions(model, columns),
        ),
        trials=frozen(response.trials),
        event=response.event,
    )


def read_new(
    data: object,
    columns: Mapping[str, Column],
    expressions: Mapping[str, Expression],
    *,
    roles: Mapping[str, str] = MappingProxyType({}),
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
    roles : mapping of str to str
        What the offset and the exposure are computed from, where the new rows have to hold them.
    missing : {"keep", "error"}
        Whether missing values are kept as missing or refused.

    Returns
    -------
    NewRows
        One row for each row of `data`, in the same order.

    Raises
    ------
    DataError
        If a column is not there, is of another type than at the fit, or has infinite values; if an
        exposure is not positive.
    """
    _check_choice("missing", missing, ("keep", "error"))
    source = open_source(data)
    parts = {role: role_in_new_rows(text, role, source) for role, text in roles.items()}
    used = [expressions[key].names for key in columns] + [part.names for part in parts.values()]
    needed = list(dict.fromkeys(name for names in used for name in names))
    for name in needed:
        if name not in source.names:
            also = "".join(f" ({role}=)" for role, part in parts.items() if name in part.names)
            raise DataError(f"{_absent(name, source)} The model needs: {', '.join(needed)}{also}.")
    raw = Raw.of(*source.load(needed))
    gaps = raw.incomplete(needed)
    if missing == "error" and gaps.any():
        _refuse_missing(raw, gaps, "Write missing='keep' to allow them.")
    coded: dict[str, Column] = {}
    unseen: dict[str, tuple[Unseen, ...]] = {}
    for key, fitted in columns.items():
        coded[key], found = new_column(fitted, expressions[key], raw)
        if found:
            unseen[key] = found
    offset = np.full(len(raw.index), np.nan)
    known = np.flatnonzero(~raw.incomplete(name for part in parts.values() for name in part.names))
    offset[known] = offsets(parts, raw, known)
    return NewRows(coded, raw.index, len(raw.index), unseen, frozen(gaps), frozen(offset))


def _load(
    model: Model, source: Source, given: Mapping[str, object], roles: Mapping[str, Role]
) -> Raw:
    """The columns that the formula and the roles name, and the values given by position."""
    parts = [model.outcome, *(expression for _, _, expression in covariates(model))]
    names = [name for part in parts for name in part.names]
    names += [n for role, part in roles.items() if isinstance(given[role], str) for n in part.names]
    columns, index = source.load(names)
    for role in [role for role in roles if not isinstance(given[role], str)]:
        values = as_series(given[role], f"{role}=").reset_index(drop=True)
        if len(values) != len(index):
            raise DataError(
                f"{role}= has {len(values)} values, but the data have {len(index)} rows."
            )
        columns[f"{role}="] = values
    return Raw.of(columns, index)


# Checks


def _check_choice(option: str, value: object, allowed: tuple[str, ...]) -> None:
    if value not in allowed:
        listed = " or ".join(f"'{choice}'" for choice in allowed)
        raise DataError(f"{option}={value!r} is not known; it is {listed}.")


def _check_formula(model: Model, source: Source) -> None:
    """Refuse unknown columns, an outcome that is also a covariate, and a key with two meanings."""
    outcome = model.outcome
    meanings: dict[str, tuple[str, ...]] = {}
    for key, factor, expression in covariates(model):
        problem = ""
        # y ~ y and y ~ log(y); change - baseline ~ baseline is an honest model
        if set(outcome.names) <= set(expression.names):
            names = ", ".join(outcome.names)
            problem = f"{names} is both outcome and covariate. Remove {factor.name}."
        # a column called "log(x)", beside the logarithm of x
        elif meanings.setdefault(key, expression.names) != expression.names:
            problem = f"{key} is both a column and an expression here. Rename the column."
        if problem:
            raise FormulaError(problem, model.text, factor.span)
    for expression in (outcome, *(used for _, _, used in covariates(model))):
        for name in expression.names:
            if name not in source.names:
                raise FormulaError(_absent(name, source), model.text, expression.span)


def _absent(name: str, source: Source) -> str:
    known = nearest(name, map(str, source.names))
    return f"{source.what}: there is no column '{name}'. {known}"


def _refuse_missing(raw: Raw, incomplete: BoolArray, remedy: str) -> NoReturn:
    rows = np.flatnonzero(incomplete)
    raise DataError(
        f"{rows.size} of {len(incomplete)} rows have missing values, in {_gaps(raw, incomplete)}: "
        f"{listed(rows)}. {remedy}"
    )


def _refuse_empty(raw: Raw, weightless: BoolArray, incomplete: BoolArray) -> NoReturn:
    reasons = []
    if incomplete.any():
        reasons.append(f"{incomplete.sum()} have missing values, in {_gaps(raw, incomplete)}")
    if weightless.any():
        reasons.append(f"{weightless.sum()} have a weight, count or trials of zero")
    raise DataError(f"no row is left of {len(weightless)}: {'; '.join(reasons)}.")


def _gaps(raw: Raw, incomplete: BoolArray) -> str:
    """The columns with missing values in these rows, and how many each has."""
    numbers = {name: int((missing & incomplete).sum()) for name, missing in raw.missing.items()}
    return ", ".join(f"{name} ({number})" for name, number in numbers.items() if number)
