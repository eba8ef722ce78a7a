"""A yes/no outcome as it was read -> proportions of events: 0/1, two levels, events of trials."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from addmodel.columns import FloatArray, IntArray, Raw, Role, level_codes, listed
from addmodel.errors import DataError, nearest
from addmodel.expression import Expression
from addmodel.frames import plain_kind


class Response(NamedTuple):
    """A yes/no outcome."""

    proportion: FloatArray  # (n,) events/trials
    trials: FloatArray  # (n,)
    event: str | None
    """The level that is counted, where the rows are single trials."""
    cautions: tuple[str, ...] = ()


def yes_no(
    outcome: Expression, trials: Role | None, event: object, raw: Raw, rows: IntArray
) -> Response:
    """The outcome of these complete rows.

    Raises
    ------
    DataError
        If its values are not those of a yes/no outcome; the message says which rows.
    """
    if trials is None:
        return _single(outcome, event, raw, rows)
    if event is not None:
        raise DataError("event= names a level of single yes/no rows; it has no use beside trials=.")
    number = raw.numbers(trials, rows)
    broken = (number < 1) | (number != np.floor(number))
    if broken.any():
        raise DataError(
            f"{trials.text} must be whole numbers of at least 1: "
            f"{number[broken][0]:g} in {listed(rows[broken])}."
        )
    return _of_trials(outcome, raw.numbers(outcome, rows), number, rows)


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
    codes, labels = level_codes(values)
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
        shown = ", ".join(f"'{label}'" for label in labels[:5])
        raise DataError(
            f"{outcome.text} has {len(labels)} different values ({shown}, ...) and a binomial "
            "outcome has two. For counts of events give trials=."
        )
    if event is None:
        counted = 1
    else:
        wanted = f"{event:g}" if type(event) in (int, float) else str(event)
        if wanted not in labels:
            raise DataError(
                f"event={event!r} is not a level of {outcome.text}. {nearest(wanted, labels)}"
            )
        counted = labels.index(wanted)
    return Response((codes == counted).astype(np.float64), ones, labels[counted])
