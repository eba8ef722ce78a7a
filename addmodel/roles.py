"""What stands beside the formula: weights, counts, offset, exposure, trials."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from operator import itemgetter

import numpy as np
import pandas as pd

from addmodel.columns import FloatArray, IntArray, Raw, Role, listed
from addmodel.errors import DataError, FormulaError, nearest
from addmodel.expression import parse_expression
from addmodel.frames import BoolArray, Index, Source


def role_at_fit(role: str, given: object, source: Source) -> Role:
    """What weights=, counts=, offset=, exposure= or trials= is computed from.

    Raises
    ------
    DataError, FormulaError
        If it names a column that is not there, or cannot be read as an expression.
    """
    if not isinstance(given, str):
        return Role(f"{role}=", (f"{role}=",), itemgetter(f"{role}="))
    text = f"{role}= ({given})"
    if given in source.names:  # also names that are no expression, as "my weights"
        return Role(text, (given,), itemgetter(given))
    expression = parse_expression(given, role)
    for name in expression.names:
        if name not in source.names:
            raise DataError(
                f"{role}={given!r}: {source.what} has no column '{name}'. "
                f"{nearest(name, map(str, source.names))}"
            )
    return Role(text, expression.names, expression.evaluate)


def role_in_new_rows(given: str, role: str, source: Source) -> Role:
    """What a role was computed from at the fit; whether new rows have its columns is not asked."""
    text = f"{role}= ({given})"
    if given not in source.names:
        try:
            expression = parse_expression(given, role)
        except FormulaError:  # the fit could use it, so it was the name of a column
            pass
        else:
            return Role(text, expression.names, expression.evaluate)
    return Role(text, (given,), itemgetter(given))


def weights_of(part: Role | None, raw: Raw, *, whole: bool) -> FloatArray:
    """Weights, counts or trials of all rows, (n_read,); 1 where missing or not given.

    Raises
    ------
    DataError
        If one is negative, or not whole where it must be, or if all are zero.
    """
    full = np.ones(len(raw.index))
    rows = np.flatnonzero(~raw.incomplete(part.names)) if part else np.empty(0, np.int64)
    if part is None or rows.size == 0:
        return full
    full[rows] = values = raw.numbers(part, rows)
    rules = [(values < 0.0, "must not be negative")]
    if whole:
        rules.append((values != np.floor(values), "must be whole numbers"))
    for broken, rule in rules:
        _refuse(part, values, rows, broken, rule)
    if not values.any():
        raise DataError(f"{part.text} is zero in every row; there is nothing to fit.")
    return full


def offsets(roles: Mapping[str, Role], raw: Raw, rows: IntArray) -> FloatArray:
    """The offset plus the logarithm of the exposure at these complete rows, (n,).

    Raises
    ------
    DataError
        If an exposure is not positive.
    """
    total = np.zeros(rows.size)
    if "offset" in roles:
        total = total + raw.numbers(roles["offset"], rows)
    if "exposure" in roles:
        exposure = raw.numbers(roles["exposure"], rows)
        _refuse(roles["exposure"], exposure, rows, exposure <= 0.0, "must be positive")
        total = total + np.log(exposure)
    return total


def order_cautions(given: Mapping[str, object], index: Index) -> Iterator[str]:
    """Values with the index of the data in another order."""
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


def _refuse(part: Role, values: FloatArray, rows: IntArray, broken: BoolArray, rule: str) -> None:
    if broken.any():
        shown = ", ".join(f"{v:g}" for v in values[broken][:5])
        raise DataError(f"{part.text} {rule}: {shown} in {listed(rows[broken])}.")
