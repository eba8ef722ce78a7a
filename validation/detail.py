"""Automatic detail against all functions, and fast waves in noise.

Ten random models of one to three curves (tests/test_detail.py): the largest difference between the
fit with automatic detail and the fit with all functions, in pointwise standard errors. Then a sine
whose amplitude is the noise's standard deviation, 20 samples each: found means that the fitted
curve has a correlation above 0.9 with it, by a fit that was given nothing but `y ~ curve(x)`.
"""

import numpy as np

import addmodel as am
from tests.test_detail import against_all, waves_in_noise
from validation.results import section


def main() -> None:
    rows: list[list[object]] = [["case", "n", "functions kept", "effective df", "result"]]
    for seed in range(10):
        fit, full, difference = against_all(seed)
        worst = difference.max()
        components = fit.estimate.design.components
        rows.append(
            [
                f"random model {seed}, curves: {len(components)}",
                len(difference),
                ", ".join(str(len(b.functions)) for c in components for b in c.blocks),
                f"{fit.effective_df:.2f} (all: {full.effective_df:.2f})",
                f"{100 * worst:.2f} % of a standard error",
            ]
        )
    for cycles, n in ((6, 1000), (14, 7305), (20, 7305), (40, 7305)):
        found, kept, df = 0, [], []
        for sample in range(20):
            data = waves_in_noise(cycles, n, seed=1000 * cycles + sample)
            fit = am.fit("y ~ curve(x)", data)
            wave = np.sin(2 * np.pi * cycles * data["x"])
            found += np.corrcoef(fit.fitted, wave)[0, 1] > 0.9
            kept.append(fit.estimate.design.components[0].blocks[0].size)
            df.append(fit.effective_df)
        rows.append(
            [
                f"sine of {cycles} cycles",
                n,
                f"{min(kept)} to {max(kept)}",
                f"{min(df):.1f} to {max(df):.1f}",
                f"found in {found} of 20",
            ]
        )
    section("detail", "Automatic detail", (__doc__ or "").split("\n\n", 1)[1].strip(), rows)


if __name__ == "__main__":
    main()
