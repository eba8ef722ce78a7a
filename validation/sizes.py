"""Do the tests of components have their size, and what power?

Size at 5 %: a curve that is nothing (`p_none`) and one that is straight (`p_straight`) beside
sin 2πz, x and z uniform with correlation 0.7 (a Gaussian copula); the interaction of the two,
`curve(x)*curve(z)`, when there is none. 200 rows; Gaussian noise of 1, counts with log mean
1 + eta/2, yes/no with log odds 1.5 eta. Power of `p_straight` against a quadratic 3.2 (x − ½)²
and a sine 0.45 sin 3πx, independent x and z, Gaussian, next to the F test of the parametric
model that knows the shape (the quadratic, or that very sine, added to the straight line; z's curve
known): the best that could be had. Figure: the p values' distribution under the null.
"""

import sys
import warnings
from multiprocessing import Pool
from pathlib import Path

import matplotlib

matplotlib.use("Agg")
import matplotlib.pyplot as plt
import numpy as np
import scipy.stats

import addmodel as am
from addmodel.significance import Questions
from validation.results import section

N = 200


def outcome_of(rng: np.random.Generator, eta: np.ndarray, outcome: str) -> np.ndarray:
    if outcome == "gaussian":
        return eta + rng.standard_normal(len(eta))
    if outcome == "poisson":
        return rng.poisson(np.exp(1 + eta / 2)).astype(float)
    return (rng.uniform(size=len(eta)) < 1 / (1 + np.exp(-1.5 * eta))).astype(float)


def pair(rng: np.random.Generator, correlation: float) -> np.ndarray:
    normal = rng.multivariate_normal([0, 0], [[1, correlation], [correlation, 1]], N)
    return scipy.stats.norm.cdf(normal).T


def null(job: tuple[str, str, int]) -> float:
    warnings.simplefilter("ignore")
    question, outcome, seed = job
    rng = np.random.default_rng(seed)
    x, z = pair(rng, 0.7)
    wave = np.sin(2 * np.pi * z)
    eta = wave if question == "none" else wave + x
    product = question == "interaction" or question == "interaction straight"
    formula = "y ~ curve(x)*curve(z)" if product else "y ~ curve(x) + curve(z)"
    data = {"x": x, "z": z, "y": outcome_of(rng, eta, outcome)}
    fit = am.fit(formula, data, outcome=outcome)
    answer = Questions(fit.estimate).of([2 if product else 0])
    return answer.straight if "straight" in question else answer.none


def powered(job: tuple[str, int]) -> tuple[float, float]:
    warnings.simplefilter("ignore")
    shape, seed = job
    rng = np.random.default_rng(seed)
    x, z = pair(rng, 0.0)
    bend = 3.2 * (x - 0.5) ** 2 if shape == "quadratic" else 0.45 * np.sin(3 * np.pi * x)
    y = bend + x + np.sin(2 * np.pi * z) + rng.standard_normal(N)
    fit = am.fit("y ~ curve(x) + curve(z)", {"x": x, "z": z, "y": y})
    plain = np.column_stack([np.ones(N), x])
    more = np.column_stack([plain, x**2 if shape == "quadratic" else np.sin(3 * np.pi * x)])
    target = y - np.sin(2 * np.pi * z)
    rss = [
        float(((target - m @ np.linalg.lstsq(m, target, rcond=None)[0]) ** 2).sum())
        for m in (plain, more)
    ]
    ratio = (rss[0] - rss[1]) / (rss[1] / (N - 3))
    return Questions(fit.estimate).of([0]).straight, float(scipy.stats.f.sf(ratio, 1, N - 3))


def main() -> None:
    repeats = int(sys.argv[1]) if len(sys.argv) > 1 else 2000
    rows: list[list[object]] = [["what", "outcome", "at 5 %", "at 1 %"]]
    drawn: dict[str, np.ndarray] = {}
    with Pool(2) as pool:
        for question in ("none", "straight", "interaction", "interaction straight"):
            for outcome in ("gaussian", "poisson", "binomial"):
                jobs = [(question, outcome, 50_000 + r) for r in range(repeats)]
                p = np.array(pool.map(null, jobs, chunksize=20))
                words = {
                    "none": "size of p_none of a curve",
                    "straight": "size of p_straight of a curve",
                    "interaction": "size of p_none of an interaction",
                    "interaction straight": "size of p_straight of an interaction",
                }[question]
                rows.append(
                    [words, outcome, *(f"{100 * (p < a).mean():.1f} %" for a in (0.05, 0.01))]
                )
                drawn[f"{words}, {outcome}"] = p
                print(rows[-1], flush=True)
        for shape in ("quadratic", "sine"):
            p = np.array(pool.map(powered, [(shape, 90_000 + r) for r in range(repeats // 4)]))
            for k, name in enumerate(("p_straight", "F test that knows the shape")):
                rows.append(
                    [
                        f"power against a {shape}: {name}",
                        "gaussian",
                        *(f"{100 * (p[:, k] < a).mean():.0f} %" for a in (0.05, 0.01)),
                    ]
                )
                print(rows[-1], flush=True)
    figure, axes = plt.subplots(4, 3, figsize=(7, 7.5), sharex=True, sharey=True)
    for ax, (name, p) in zip(axes.ravel(), drawn.items(), strict=True):
        ax.plot(np.sort(p), (np.arange(len(p)) + 0.5) / len(p), color="#0B4A50", lw=1.2)
        ax.plot([0, 1], [0, 1], color="#707070", lw=0.6)
        ax.set_title(name.replace(", ", "\n"), fontsize=6.5, loc="left")
        ax.tick_params(labelsize=6)
    figure.supxlabel("p", fontsize=8)
    figure.supylabel("share of samples with a p as small", fontsize=8)
    figure.tight_layout()
    figure.savefig(Path(__file__).with_name("figures") / "sizes.png", dpi=150)
    text = (__doc__ or "").split("\n\n", 1)[1].strip()
    text += f"\n\n{repeats} samples each ({repeats // 4} for power); figures/sizes.png."
    section("sizes", "Size and power of the tests", text, rows)


if __name__ == "__main__":
    main()
