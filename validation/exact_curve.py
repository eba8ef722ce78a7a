"""One curve with all functions, at given λ, against a solution in extended precision.

The truth is Reinsch's banded system in 60 digits (tests/exact.py; Reinsch 1967, Numer. Math. 10).
2,000 points each: random, exponentially spaced, and pairs 1e-9 apart.
"""

import numpy as np

import addmodel as am
from tests.exact import exact_spline, spacings
from validation.results import section


def main() -> None:
    rows: list[list[object]] = [["points", "λ", "effective df", "largest error / range of y"]]
    for name, x in spacings(2000).items():
        y = np.sin(9 * x) + 0.3 * np.random.default_rng(6).standard_normal(len(x))
        for lam in (1e-6, 1e-3):
            fit = am.fit(f'y ~ curve(x, detail="all", smoothing={lam})', {"x": x, "y": y})
            truth = exact_spline(x, y, lam * np.ptp(x) ** 3)
            error = np.abs(fit.fitted - truth).max() / np.ptp(y)
            rows.append([name, f"{lam:g}", f"{fit.effective_df:.2f}", f"{error:.1e}"])
    section(
        "exact_curve",
        "One curve in extended precision",
        (__doc__ or "").split("\n\n", 1)[1].strip(),
        rows,
    )


if __name__ == "__main__":
    main()
