"""What the tests of reading share: read a table, read new rows, catch a refusal; two tables."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest

from addmodel.columns import covariates
from addmodel.data import NewRows, Table, read, read_new
from addmodel.errors import DataError
from addmodel.formula import parse

Frame = dict[str, Any]


def table(formula: str, data: object, **options: Any) -> Table:
    return read(data, parse(formula), **options)


def again(formula: str, data: object, new: object, **options: Any) -> NewRows:
    """Fit on data, read new rows for the same formula."""
    model = parse(formula)
    expressions = {key: expression for key, _, expression in covariates(model)}
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
