"""How long small fits take, as ratios in one run.

n = 1000: one curve by REML with automatic detail, from a DataFrame to a Fit, against
scipy.interpolate.make_smoothing_spline with automatic λ on the same sorted points; and four curves
against one. Medians of 20 runs each, taken in turn in four rounds of five after a warm-up.
"""

import time
from collections.abc import Callable

import numpy as np
import pandas as pd
from scipy.interpolate import make_smoothing_spline

import addmodel as am
from validation.results import section


def main() -> None:
    rng = np.random.default_rng(10)
    n = 1000
    data = pd.DataFrame(rng.uniform(size=(n, 4)), columns=list("abcd"))
    data["y"] = np.sin(6 * data.a) + data.b**2 + np.exp(data.c) + 0.5 * rng.standard_normal(n)
    order = np.argsort(data.a.to_numpy())
    x, y = data.a.to_numpy()[order], data.y.to_numpy()[order]
    work: dict[str, Callable[[], object]] = {
        "scipy, one curve": lambda: make_smoothing_spline(x, y),
        "one curve": lambda: am.fit("y ~ curve(a)", data),
        "four curves": lambda: am.fit("y ~ curve(a) + curve(b) + curve(c) + curve(d)", data),
    }
    times: dict[str, list[float]] = {name: [] for name in work}
    for _ in range(4):
        for name, run in work.items():
            run()  # warm after the others
            for _ in range(5):
                start = time.perf_counter()
                run()
                times[name].append(time.perf_counter() - start)
    median = {name: float(np.median(t)) for name, t in times.items()}
    rows: list[list[object]] = [["what", "median", "ratio"]]
    rows.append(["scipy, one curve", f"{1e3 * median['scipy, one curve']:.0f} ms", ""])
    faster = median["scipy, one curve"] / median["one curve"]
    rows.append(["one curve", f"{1e3 * median['one curve']:.0f} ms", f"{faster:.1f} × faster"])
    slower = median["four curves"] / median["one curve"]
    rows.append(
        ["four curves", f"{1e3 * median['four curves']:.0f} ms", f"{slower:.2f} × one curve"]
    )
    section("bench_small", "Small fits", (__doc__ or "").split("\n\n", 1)[1].strip(), rows)


if __name__ == "__main__":
    main()
