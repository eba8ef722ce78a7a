"""Exposure, offset, trials and yes/no outcomes: what is read, what is refused, in which words."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import polars as pl
import pytest

from addmodel.data import NewRows
from addmodel.errors import DataError
from tests.tables import Frame, again, refusal, table

X = [0.5, 1.5, 2.5, 3.5]


def yes_no(y: Any, **options: Any) -> Any:
    return table("y ~ x", {"y": y, "x": X}, binary=True, **options)


def refused(y: Any, **options: Any) -> str:
    return refusal("y ~ x", {"y": y, "x": X}, **{"binary": True, **options})


# Exposure


def test_exposure_is_a_log_offset() -> None:
    data = {"y": [1, 2, 3, 4], "x": X, "days": [1.0, 2.0, 4.0, 8.0], "o": [1.0, 0.0, -1.0, 0.5]}
    log2 = np.log(2.0) * np.arange(4)
    t = table("y ~ x", data, exposure="days")
    np.testing.assert_allclose(t.offset, log2, rtol=1e-15)
    assert t.trials.tolist() == [1.0] * 4
    assert t.event is None
    for exposure in ("days * 10", np.array(data["days"]) * 10, pl.Series(data["days"]) * 10):
        t = table("y ~ x", data, exposure=exposure, offset="o")
        np.testing.assert_allclose(t.offset, log2 + np.log(10.0) + data["o"], rtol=1e-14)
        assert not t.offset.flags.writeable


def test_exposure_missing_or_of_a_weightless_row() -> None:
    data = {"y": [1, 2, 3, 4], "x": X, "days": [1.0, None, 0.0, 1.0]}
    t = table("y ~ x", data, exposure="days", weights=[1, 1, 0, 1])
    assert t.rows.tolist() == [0, 3]
    assert (t.n_missing, t.n_weightless) == (1, 1)
    message = refusal("y ~ x", data, exposure="days", weights=[1, 1, 0, 1], missing="error")
    assert "in days (1): row 1 (rows are counted from 0)" in message


@pytest.mark.parametrize(
    ("exposure", "words"),
    [
        ([1, 0, -2, 1], "exposure= must be positive: 0, -2 in rows 1, 2 (rows are counted from 0)"),
        ("x - 0.5", "exposure= (x - 0.5) must be positive: 0 in row 0 (rows are counted from 0)"),
        ([1, np.inf, 1, 1], "infinite values in row 1"),
        ([1, 2], "exposure= has 2 values, but the data have 4 rows"),
        ("xx", "exposure='xx': the data has no column 'xx'. Did you mean 'x'?"),
        (["a"] * 4, "exposure= must be numbers, not text"),
    ],
)
def test_exposures_that_cannot_be(exposure: Any, words: str) -> None:
    assert words in refused([1, 2, 3, 4], exposure=exposure, binary=False)


# Trials


def test_events_and_proportions_of_trials() -> None:
    data = {"a": [1, 0, 3, 2], "b": [3, 2, 0, 5], "x": X}
    events = table("a ~ x", data, binary=True, trials="a + b", weights=[1.0, 0.0, 2.0, 0.5])
    assert events.rows.tolist() == [0, 2, 3]
    assert events.trials.tolist() == [4.0, 3.0, 7.0]
    assert events.weights.tolist() == [1.0, 2.0, 0.5]
    np.testing.assert_array_equal(events.outcome, [1 / 4, 3 / 3, 2 / 7])
    assert events.event is None
    assert events.cautions == ()
    assert not events.trials.flags.writeable
    assert not events.outcome.flags.writeable
    for formula in ("{a / (a + b)} ~ x", "p ~ x"):
        # printed shares are not exact; the number of events is
        rounded = {**data, "p": np.round([1 / 4, 0, 1, 2 / 7], 7)}
        shares = table(formula, rounded, binary=True, trials=[4, 2, 3, 7])
        np.testing.assert_array_equal(shares.outcome, [1 / 4, 0.0, 1.0, 2 / 7])


def test_rows_of_no_trials_are_left_out() -> None:
    data = {"y": [1, np.nan, 0, 2], "n": [2, 0, 3, None], "x": X}
    t = table("{y / n} ~ x", data, binary=True, trials="n")
    assert t.rows.tolist() == [0, 2]
    assert (t.n_missing, t.n_weightless) == (1, 1)
    message = refusal("y ~ x", {**data, "x": [None] * 4}, binary=True, trials="n")
    assert message == (
        "no row is left of 4: 3 have missing values, in x (3), n (1); "
        "1 have a weight, count or trials of zero."
    )


def test_zeros_and_ones_of_many_trials_get_a_caution() -> None:
    t = yes_no([0, 1, 1, 0], trials=[1, 4, 2, 1])
    assert t.outcome.tolist() == [0.0, 0.25, 0.5, 0.0]
    (caution,) = t.cautions
    assert caution == (
        "y is 0 or 1 in every row and was read as the number of events in trials= trials. "
        "If it is a proportion, multiply it by the trials."
    )
    assert yes_no([0, 1, 1, 0], trials=[1] * 4).cautions == ()
    assert yes_no([0, 1, 2, 0], trials=[1, 4, 2, 1]).cautions == ()


@pytest.mark.parametrize(
    ("y", "trials", "words"),
    [
        (
            [3, 1, 0, -1],
            [2, 5, 5, 5],
            "y counts events, so it is between 0 and trials=; it is not in rows 0, 3 (rows",
        ),
        (
            [0.5, 0.3, 1, 2],
            [2, 2, 1, 1],
            "y must be events (whole numbers up to trials=) or proportions (times trials= a whole "
            "number); it is neither in rows 1, 3 (rows are counted from 0).",
        ),
        ([0, 1, 1, 0], [1, 1.5, 1, 1], "trials= must be whole numbers: 1.5 in row 1"),
        ([0, 1, 1, 0], [1, -2, 1, 1], "trials= must not be negative: -2 in row 1"),
        ([0, 1, 1, 0], [0] * 4, "trials= is zero in every row"),
        ([0, 1, 1, 0], [1, 1, np.inf, 1], "infinite values in row 2"),
        ([0, 1, 1, 0], 5, "trials= is a int; it must be a 1-D array or list"),
        ([True, False, True, False], [1] * 4, "y must be numbers, not bool"),
    ],
)
def test_trials_that_cannot_be(y: Any, trials: Any, words: str) -> None:
    assert words in refused(y, trials=trials)


def test_trials_and_event_belong_to_yes_no() -> None:
    message = refused([0, 1, 1, 0], trials=[1] * 4, binary=False)
    assert message == "trials= belongs to a yes/no outcome: outcome='binomial'."
    message = refused([0, 1, 1, 0], event=1, binary=False)
    assert message == "event= belongs to a yes/no outcome: outcome='binomial'."
    message = refused([0, 1, 1, 0], event=1, trials=[1] * 4)
    assert "event= names a level of single yes/no rows; it has no use beside trials=" in message


# Yes/no outcomes of single trials

CATEGORIES = pd.Categorical(["yes", "no", "yes", "no"], ["yes", "no", "unused"])
LEVELS = pl.Series(["yes", "no", "yes", "no"], dtype=pl.Enum(["yes", "no", "unused"]))


@pytest.mark.parametrize(
    ("y", "event", "label", "outcome"),
    [
        ([0, 1, 1, 0], None, "1", [0, 1, 1, 0]),
        ([0.0, 1.0, 1.0, 0.0], None, "1", [0, 1, 1, 0]),
        ([0, 1, 1, 0], 0, "0", [1, 0, 0, 1]),
        ([0, 1, 1, 0], np.float64(0.0), "0", [1, 0, 0, 1]),
        ([0, 1, 1, 0], "0", "0", [1, 0, 0, 1]),
        ([0, 1, 1, 0], False, "0", [1, 0, 0, 1]),
        ([True, False, True, False], None, "True", [1, 0, 1, 0]),
        ([True, False, True, False], False, "False", [0, 1, 0, 1]),
        ([True, False, True, False], np.False_, "False", [0, 1, 0, 1]),
        ([True, False, True, False], "False", "False", [0, 1, 0, 1]),
        ([True, False, True, False], 0, "False", [0, 1, 0, 1]),
        (["yes", "no", "yes", "no"], None, "yes", [1, 0, 1, 0]),
        (["yes", "no", "yes", "no"], "no", "no", [0, 1, 0, 1]),
        (["5-9", "10-14", "5-9", "5-9"], None, "10-14", [0, 1, 0, 0]),
        (CATEGORIES, None, "no", [0, 1, 0, 1]),
        (CATEGORIES, "yes", "yes", [1, 0, 1, 0]),
        (LEVELS, None, "no", [0, 1, 0, 1]),
        ([1, 2, 2, 1], 2, "2", [0, 1, 1, 0]),
        ([1, 2, 2, 1], "1", "1", [1, 0, 0, 1]),
        ([1234567, 1234568, 1234567, 1234567], 1234568, "1234568", [0, 1, 0, 0]),
        ([0.1, 0.5, 0.5, 0.1], 0.1, "0.1", [1, 0, 0, 1]),
    ],
)
def test_the_level_that_is_counted(y: Any, event: Any, label: str, outcome: list[int]) -> None:
    t = yes_no(y, event=event)
    assert t.event == label
    assert t.outcome.tolist() == outcome
    assert t.outcome.dtype == np.float64
    assert t.trials.tolist() == [1.0] * 4
    assert not t.outcome.flags.writeable


@pytest.mark.parametrize(
    "data",
    [
        {"y": [True, None, False, True], "x": X},
        pd.DataFrame({"y": pd.array([True, None, False, True], dtype="boolean"), "x": X}),
        pd.DataFrame({"y": pd.array([True, None, False, True], dtype="bool[pyarrow]"), "x": X}),
        pl.DataFrame({"y": [True, None, False, True], "x": X}),
    ],
    ids=["mapping", "pandas", "arrow", "polars"],
)
def test_yes_no_with_missing_values(data: Any) -> None:
    t = table("y ~ x", data, binary=True)
    assert t.rows.tolist() == [0, 2, 3]
    assert t.n_missing == 1
    assert t.outcome.tolist() == [1.0, 0.0, 1.0]
    assert t.event == "True"


@pytest.mark.parametrize(
    ("cells", "event"),
    [
        (["died", "", "alive", "died"], "died"),
        (["TRUE", "", "false", "true"], "True"),
        (["1", "", "0", "1"], "1"),
    ],
)
def test_yes_no_from_a_file(tmp_path: Path, cells: list[str], event: str) -> None:
    lines = ["y,x", *(f"{cell},{x}" for cell, x in zip(cells, X, strict=True))]
    (tmp_path / "d.csv").write_text("\n".join(lines) + "\n")
    t = table("y ~ x", tmp_path / "d.csv", binary=True)
    assert t.outcome.tolist() == [1.0, 0.0, 1.0]
    assert (t.event, t.n_missing) == (event, 1)


@pytest.mark.parametrize(
    ("y", "options", "words"),
    [
        (["a", "b", "c", "a"], {}, "y has 3 different values ('a', 'b', 'c') and a binomial"),
        ([0, 1, 2, 5], {}, "For counts of events give trials="),
        (["a"] * 4, {}, "y is 'a' in every row used: nothing is left to explain"),
        ([1, 1, None, None], {}, "y is '1' in every row used"),
        ([0.5, 1, 0, 0.2], {}, "y has proportions; trials= must say of how many"),
        ([1, 2, 2, 1], {}, "y has the two values 1 and 2. Write event=2 to count that one."),
        (["a", "b", "b", "a"], {"event": "B"}, "event='B' is not a level of y. Did you mean 'b'?"),
        (["a", "b", "b", "a"], {"event": 1}, "event=1 is not a level of y. There are: 'a', 'b'."),
        ([1, 2, 2, 1], {"event": True}, "event=True is not a level of y. There are: '1', '2'."),
        (pd.Categorical([1, "1", 1, "1"]), {}, "y: several categories have the label '1'."),
    ],
)
def test_outcomes_that_are_not_yes_no(y: Any, options: Frame, words: str) -> None:
    assert words in refused(y, **options)


# New rows

DATA: Frame = {"y": [1, 2, 3, 4], "x": X, "site": list("abab")}


def new(rows: Frame, **options: Any) -> NewRows:
    return again("y ~ x + site", DATA, rows, **options)


def test_offset_of_new_rows() -> None:
    rows = {"x": [1.0, 2.0, None], "site": ["a", "b", "a"], "n": [1.0, None, 3.0], "o": [2, 2, 4]}
    found = new(rows, roles={"exposure": "n * 10", "offset": "o"})
    np.testing.assert_allclose(
        found.offset, [2 + np.log(10), np.nan, 4 + np.log(30)], rtol=1e-15, equal_nan=True
    )
    assert found.missing.tolist() == [False, True, True]
    assert not found.offset.flags.writeable
    without = new(rows)
    assert without.offset.tolist() == [0.0, 0.0, 0.0]
    assert without.missing.tolist() == [False, False, True]


def test_offset_of_new_rows_from_a_column_with_blanks_in_its_name() -> None:
    rows = {"x": [1.0], "site": ["a"], "person years": [5.0]}
    roles = {"exposure": "person years"}
    assert new(rows, roles=roles).offset.tolist() == [np.log(5.0)]
    with pytest.raises(DataError, match=r"no column 'person years'.*person years \(exposure=\)"):
        new({"x": [1.0], "site": ["a"]}, roles=roles)


@pytest.mark.parametrize(
    ("n", "roles", "words"),
    [
        ([1.0, 2.0], {"exposure": "m"}, "The model needs: x, site, m (exposure=)."),
        ([1.0, 2.0], {"offset": "log(m)"}, "The model needs: x, site, m (offset=)."),
        ([1.0, 0.0], {"exposure": "n"}, "exposure= (n) must be positive: 0 in row 1 (rows are"),
        ([1.0, 0.0], {"offset": "log(n)"}, "offset= (log(n)) is not a finite number in 1 of 2"),
        ([1.0, np.inf], {"exposure": "n"}, "infinite values in row 1"),
        (["a", "b"], {"exposure": "n"}, "exposure= (n) must be numbers, not text"),
    ],
)
def test_offsets_of_new_rows_that_cannot_be(n: Any, roles: dict[str, str], words: str) -> None:
    with pytest.raises(DataError) as caught:
        new({"x": [1.0, 2.0], "site": ["a", "b"], "n": n}, roles=roles)
    assert words in str(caught.value)


def test_a_missing_exposure_as_an_error() -> None:
    rows = {"x": [1.0, 2.0], "site": ["a", "b"], "n": [1.0, None]}
    with pytest.raises(DataError, match=r"1 of 2 rows have missing values, in n \(1\): row 1"):
        new(rows, roles={"exposure": "n"}, missing="error")
