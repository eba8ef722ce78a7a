"""Do intervals cover? Bands across the function, contrasts, slopes and turning points.

95 % bands of components, averaged over the data's points (Nychka 1988, J. Am. Stat. Assoc. 83, says
why that is the right measure); simultaneous: the share of samples whose band holds the whole
component (at the data's points). Truth: the terms of Gu & Wahba (1991, SIAM J. Sci. Stat. Comput.
12; constants from memory) scaled to the outcome, x1 to x4 uniform, noise N(0, 2²) for the Gaussian
outcome, eta = (f1 + f2/2 + f3/3 − 6)/2 for counts (log) and yes/no (logit); and one of our own, a
bump and a wave, 1.5 exp(−60 (x1 − 0.3)²) + sin 4πx2. Weak quadratic: y = c (x − ½)² + N(0, 1),
200 rows, the range of the curve 0.2 to 0.65. Groups: 30 of them, N(0, 0.5²), beside a curve.
Surface: sin 2πu · (2v − 1) over place(u, v). All with fixed seeds.
"""

import sys
import warnings
from collections.abc import Callable
from multiprocessing import Pool

import numpy as np

import addmodel as am
from addmodel.bands import band
from tests.models import gw_terms
from validation.results import section

Sample = tuple[dict[str, np.ndarray], str, str, dict[str, np.ndarray]]
"""Data, formula, outcome, and each component's truth at the rows."""


def outcome_of(rng: np.random.Generator, eta: np.ndarray, outcome: str, noise: float) -> np.ndarray:
    if outcome == "gaussian":
        return eta + noise * rng.standard_normal(len(eta))
    if outcome == "poisson":
        return rng.poisson(np.exp(eta)).astype(float)
    return (rng.uniform(size=len(eta)) < 1 / (1 + np.exp(-eta))).astype(float)


def gu_wahba(rng: np.random.Generator, n: int, outcome: str) -> Sample:
    x = rng.uniform(size=(n, 4))
    terms = gw_terms(x[:, :3])
    if outcome != "gaussian":
        terms = terms * np.array([0.5, 0.25, 1 / 6])
    eta = terms.sum(axis=1) - (3 if outcome != "gaussian" else 0)
    data = {f"x{k + 1}": x[:, k] for k in range(4)}
    data["y"] = outcome_of(rng, eta, outcome, 2.0)
    truth = {f"curve(x{k + 1})": terms[:, k] for k in range(3)} | {"curve(x4)": np.zeros(n)}
    return data, "y ~ " + " + ".join(truth), outcome, truth


def bump(rng: np.random.Generator, n: int, outcome: str) -> Sample:
    x = rng.uniform(size=(n, 2))
    a, b = 1.5 * np.exp(-60 * (x[:, 0] - 0.3) ** 2), np.sin(4 * np.pi * x[:, 1])
    data = {"x1": x[:, 0], "x2": x[:, 1], "y": outcome_of(rng, a + b, outcome, 0.7)}
    return data, "y ~ curve(x1) + curve(x2)", outcome, {"curve(x1)": a, "curve(x2)": b}


def quadratic(rng: np.random.Generator, n: int, outcome: str) -> Sample:
    x = rng.uniform(size=n)
    size = rng.uniform(0.2, 0.65) * 4  # c/4 is the range
    f = size * (x - 0.5) ** 2
    data = {"x": x, "y": outcome_of(rng, f, outcome, 1.0)}
    return data, "y ~ curve(x)", outcome, {"curve(x)": f}


def grouped(rng: np.random.Generator, n: int, outcome: str) -> Sample:
    x, g = rng.uniform(size=n), rng.integers(0, 30, n)
    effect = 0.5 * rng.standard_normal(30)
    f = np.sin(2 * np.pi * x)
    data = {"x": x, "g": g, "y": outcome_of(rng, f + effect[g], outcome, 1.0)}
    truth = {"curve(x)": f, "group(g)": effect[g]}
    return data, "y ~ curve(x) + group(g)", outcome, truth


def surface(rng: np.random.Generator, n: int, outcome: str) -> Sample:
    u, v = rng.uniform(size=(2, n))
    f = np.sin(2 * np.pi * u) * (2 * v - 1)
    data = {"u": u, "v": v, "y": outcome_of(rng, f, outcome, 0.5)}
    return data, "y ~ place(u, v)", outcome, {"place(u, v)": f}


Job = tuple[Callable[[np.random.Generator, int, str], Sample], int, str, int]


def one(job: Job) -> list[tuple[str, float, bool, bool]]:
    """For each component: coverage across the points, of the whole, whether it is straight."""
    warnings.simplefilter("ignore")
    make, n, outcome, seed = job
    data, formula, outcome, truth = make(np.random.default_rng(seed), n, outcome)
    if outcome == "poisson" and not data["y"].any():
        return []
    fit = am.fit(formula, data, outcome=outcome)
    found = []
    for j, (name, f) in enumerate(truth.items()):
        design = fit._sure.design
        values = {k: c.values for k, c in fit.estimate.table.columns.items()}
        both = band(fit._sure, design.of_components(values, n, [j]), 0.95)
        # A group's effects are about zero, a curve's about its average over the data.
        about = f if name.startswith("group") else f - f.mean()
        centre = 0.0 if name.startswith("group") else both.value.mean()
        off = np.abs(both.value - centre - about)
        found.append(
            (
                name,
                float((off <= both.half).mean()),
                bool((off <= both.half_whole).all()),
                fit.estimate.at_infinity(j),
            )
        )
    return found


def study(
    make: Callable[[np.random.Generator, int, str], Sample], n: int, outcome: str, repeats: int
) -> dict[str, float]:
    jobs = [(make, n, outcome, 10_000 + r) for r in range(repeats)]
    with Pool(2) as pool:
        results = [r for rows in pool.map(one, jobs, chunksize=10) for r in rows]
    across = np.array([r[1] for r in results])
    whole = np.array([r[2] for r in results])
    straight = np.array([r[3] for r in results])
    return {
        "across": across.mean(),
        "whole": whole.mean(),
        "straight": straight.mean(),
        "within": across[straight].mean() if straight.any() else np.nan,
    }


def main() -> None:
    repeats = int(sys.argv[1]) if len(sys.argv) > 1 else 500
    rows: list[list[object]] = [
        [
            "truth",
            "outcome",
            "n",
            "across the function",
            "simultaneous",
            "straight fits",
            "in those",
        ]
    ]
    cases = [
        *((gu_wahba, o, n) for o in ("gaussian", "poisson", "binomial") for n in (200, 1000)),
        *((bump, o, n) for o in ("gaussian", "poisson", "binomial") for n in (200, 1000)),
        (quadratic, "gaussian", 200),
        (grouped, "gaussian", 300),
        (grouped, "poisson", 300),
        (surface, "gaussian", 300),
    ]
    for make, outcome, n in cases:
        found = study(make, n, outcome, repeats)
        rows.append(
            [
                make.__name__.replace("_", " "),
                outcome,
                n,
                f"{100 * found['across']:.1f} %",
                f"{100 * found['whole']:.1f} %",
                f"{100 * found['straight']:.0f} %",
                "" if np.isnan(found["within"]) else f"{100 * found['within']:.1f} %",
            ]
        )
        print(rows[-1], flush=True)
    text = (__doc__ or "").split("\n\n", 1)[1].strip() + f"\n\n{repeats} samples each."
    section("coverage", "Coverage", text, rows)


if __name__ == "__main__":
    main()
