"""The outcome as it was read -> numbers, or proportions of events (0/1, levels, of trials)."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from addmodel.columns import (
    FloatArray,
    IntArray,
    Raw,
    distinct_levels,
    level_label,
    listed,
)
from addmodel.errors import DataError, nearest
from addmodel.expression import Expression
from addmodel.frames import plain_kind, text_hint


class Response(NamedTuple):
    """An outcome at the rows used."""

    values: FloatArray  # (n,) numbers, or events/trials
    trials: FloatArray  # (n,)
    event: str | None
    """The level that is counted, where the rows are single trials."""
    cautions: tuple[str, ...] = ()


def measured(outcome: Expression, raw: Raw, rows: IntArray) -> Response:
    """An outcome of numbers at these complete rows.

    Raises
    ------
    DataError
        If it is anything else.
    """
    values = raw.values(outcome, rows)
    kind = plain_kind(values)
    if kind != "number":
        raise DataError(
            f"{outcome.text} is {kind}; it must be a number for this outcome (yes/no: "
            f"outcome='binomial').{text_hint(values)}"
        )
    return Response(values.to_numpy(dtype=np.float64), np.ones(rows.size), None)


def yes_no(
    outcome: Expression, trials: FloatArray | None, event: object, raw: Raw, rows: IntArray
) -> Response:
    """A yes/no outcome at these complete rows, each of `trials` (whole, at least 1) or of one.

    Raises
    ------
    DataError
        If its values are not those of a yes/no outcome; the message says which rows.
    """
    if trials is None:
        return _single(outcome, event, raw, rows)
    if event is not None:
        raise DataError("event= names a level of single yes/no rows; it has no use beside trials=.")
    return _of_trials(outcome, raw.numbers(outcome, rows), trials, rows)


def _of_trials(outcome: Expression, y: FloatArray, trials: FloatArray, rows: IntArray) -> Response:
    """Whole numbers are counts of events; once one value is not whole, all are proportions."""
    if (y == np.floor(y)).all():
        broken = (y < 0) | (y > trials)
        if broken.any():
            raise DataError(
                f"{outcome.text} counts events, so it is between 0 and trials=; it is not in "
                f"{listed(rows[broken])}."
            )
        unsure = (y <= 1).all() and (trials > 1).any()
        caution = (
            f"{outcome.text} is 0 or 1 in every row and was read as the number of events in "
            "trials= trials. If it is a proportion, multiply it by the trials."
        )
        return Response(y / trials, trials, None, (caution,) if unsure else ())
    events = y * trials
    broken = (y < 0) | (y > 1) | (np.abs(events - np.round(events)) > 1e-6 * trials)
    if broken.any():
        raise DataError(
            f"{outcome.text} must be events (whole numbers up to trials=) or proportions (times "
            f"trials= a whole number); it is neither in {listed(rows[broken])}."
        )
    return Response(np.round(events) / trials, trials, None)


def _single(outcome: Expression, event: object, raw: Raw, rows: IntArray) -> Response:
    """Rows of one trial each: 0/1, yes/no, or two levels."""
    values = raw.values(outcome, rows)
    codes, labels = distinct_levels(outcome.text, values)
    kind = plain_kind(values)
    ones = np.ones(len(rows))
    if len(labels) == 1:
        raise DataError(
            f"{outcome.text} is '{labels[0]}' in every row used: nothing is left to explain."
        )
    if kind == "number" and event is None and labels != ("0", "1"):
        number = values.to_numpy(dtype=np.float64)
        if ((number >= 0) & (number <= 1)).all():
            raise DataError(
                f"{outcome.text} has proportions; trials= must say of how many, for example "
                "trials='n'."
            )
        if len(labels) == 2:
            raise DataError(
                f"{outcome.text} has the two values {labels[0]} and {labels[1]}. Write "
                f"event={labels[1]} to count that one."
            )
    if len(labels) > 2:
        shown = ", ".join(f"'{label}'" for label in labels[:5]) + (
            ", ..." if len(labels) > 5 else ""
        )
        raise DataError(
            f"{outcome.text} has {len(labels)} different values ({shown}) and a binomial "
            "outcome has two. For counts of events give trials=."
        )
    counted = 1 if event is None else _place(outcome, event, labels)
    return Response((codes == counted).astype(np.float64), ones, labels[counted])


def _place(outcome: Expression, event: object, labels: tuple[str, ...]) -> int:
    """The level that event= names: by its label, and 0/1 stand for False/True and back."""
    wanted = level_label(event)
    if wanted not in labels:
        same = {"0": "False", "1": "True", "False": "0", "True": "1"}.get(wanted)
        if same not in labels or set(labels) not in ({"0", "1"}, {"False", "True"}):
            known = nearest(wanted, labels)
            raise DataError(f"event={event!r} is not a level of {outcome.text}. {known}")
        wanted = same
    return labels.index(wanted)
