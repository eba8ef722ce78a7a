"""Many rows as tables of cells: the same sums as dense rows, and little lost by rounding."""

import numpy as np
import pandas as pd
import pytest

import addmodel as am
from addmodel import cells, laid
from addmodel.data import read
from addmodel.formula import parse
from addmodel.outcomes import outcome_for
from addmodel.rows.dense import DenseRows
from addmodel.rows.tables import TableRows
from tests.models import laid_for

RNG = np.random.default_rng(7)
N = 900
FRAME = pd.DataFrame(
    {
        "x": RNG.integers(0, 40, N).astype(float),
        "z": RNG.integers(0, 30, N) / 7,
        "site": RNG.choice(list("abc"), N),
        "g": RNG.integers(0, 25, N),
    }
)
FRAME["y"] = np.sin(FRAME.x / 6) + FRAME.z + RNG.standard_normal(N)
FRAME["count"] = RNG.poisson(np.exp(0.5 * np.sin(FRAME.x / 6)))
FORMULAS = ["curve(x) + curve(z) + site", "curve(x)*curve(z)", "site*curve(x) + group(g)"]


@pytest.mark.parametrize("formula", FORMULAS)
def test_tables_and_dense_rows_have_the_same_sums(formula, monkeypatch):
    outcome = outcome_for("poisson")
    dense = laid_for(f"count ~ {formula}", FRAME, "poisson")
    monkeypatch.setattr(laid, "MANY_ROWS", 10)
    tables = laid_for(f"count ~ {formula}", FRAME, "poisson")
    a, b = dense.modes.rows, tables.modes.rows
    assert isinstance(a, DenseRows)
    assert isinstance(b, TableRows)
    beta = 0.02 * np.random.default_rng(1).standard_normal(len(dense.start))
    one, two = a.sweep(beta, outcome), b.sweep(beta, outcome)
    scale = np.abs(one.gram.dense).max()
    np.testing.assert_allclose(two.gram.dense, one.gram.dense, atol=1e-12 * scale)
    np.testing.assert_allclose(two.gram.across, one.gram.across, atol=1e-12 * scale)
    np.testing.assert_allclose(two.gram.own, one.gram.own, atol=1e-12 * scale)
    np.testing.assert_allclose(two.score, one.score, atol=1e-10)
    assert two.deviance == pytest.approx(one.deviance, rel=1e-12)
    assert b.log_det_design(3, np.ones(N)) == pytest.approx(a.log_det_design(3, np.ones(N)))
    lam = np.full(len(dense.modes.sizes), 0.3)
    point = dense.modes.at(lam, dense.start)
    # Leverages by look-up are the hat matrix' diagonal.
    np.testing.assert_allclose(
        b.variances(point.posterior()), a.variances(point.posterior()), atol=1e-10
    )
    kept = a.without(np.array([1])).sweep(np.delete(beta, 1), outcome)
    also = b.without(np.array([1])).sweep(np.delete(beta, 1), outcome)
    np.testing.assert_allclose(also.gram.dense, kept.gram.dense, atol=1e-12 * scale)


@pytest.mark.parametrize("formula", FORMULAS)
def test_tables_and_dense_rows_give_one_fit(formula, monkeypatch):
    dense = am.fit(f"count ~ {formula}", FRAME, outcome="poisson")
    monkeypatch.setattr(laid, "MANY_ROWS", 10)
    tables = am.fit(f"count ~ {formula}", FRAME, outcome="poisson")
    assert tables.criterion_value == pytest.approx(dense.criterion_value, abs=1e-7)
    np.testing.assert_allclose(tables.linear_predictor, dense.linear_predictor, atol=1e-5)


def test_rounding_loses_little_whatever_the_spread(monkeypatch):
    """Uniform, normal, lognormal, and a glitch of 1e6: below 5 % of a standard error."""
    monkeypatch.setattr(cells, "MANY_ROWS", 1000)
    monkeypatch.setattr(laid, "MANY_ROWS", 1000)
    rng = np.random.default_rng(3)
    n = 6000
    data = pd.DataFrame(
        {
            "a": rng.uniform(size=n),
            "b": rng.normal(size=n),
            "c": np.exp(rng.normal(size=n)),
            "d": np.append(rng.normal(size=n - 1), 1e6),
        }
    )
    eta = np.sin(6 * data.a) + np.sin(3 * data.b) + np.tanh(np.log(data.c))
    data["y"] = eta + rng.standard_normal(n)
    formula = "y ~ curve(a) + curve(b) + curve(c) + curve(d)"
    near, exact = am.fit(formula, data), am.fit(formula, data, exact=True)
    assert "Numbers were rounded to at most 1,0" in near.summary().how
    assert not exact.estimate.cells
    both = exact.predict(data, interval=0.95)
    apart = np.abs(near.predict(data) - both["prediction"]) / both["std_error"]
    assert np.quantile(apart, 0.999) < 0.05
    assert near.effective_df == pytest.approx(exact.effective_df, abs=0.1)


def test_cells_are_narrow_where_the_data_are_dense():
    rng = np.random.default_rng(1)
    table = read(
        {"x": np.append(np.exp(2 * rng.normal(size=29_999)), 1e9), "y": rng.normal(size=30_000)},
        parse("y ~ curve(x)"),
    )
    near = cells.rounded(table, exact=False)
    assert near.cells["x"] > 600
    x, to = table.columns["x"].values, near.table.columns["x"].values
    assert to.max() == x.max()
    assert to.min() == x.min()
    np.testing.assert_allclose(np.average(to), np.average(x))
    middle = (x > 0.2) & (x < 5)
    assert np.abs(to - x)[middle].max() < 0.05  # of a range of 1e9
    assert cells.rounded(table, exact=True).table is table
