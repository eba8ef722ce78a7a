"""A cubic smoothing spline in extended precision: Reinsch's banded system, 60 digits.

Minimises Σ (y − f)² + lam ∫ f''² over natural cubic splines: (R + lam Q'Q)γ = Q'y,
f = y − lam Qγ (Reinsch 1967, Numer. Math. 10; Green & Silverman 1994, ch. 2). In double precision
this form is itself inaccurate on uneven points; with mpmath it is the truth to compare with.
"""

import numpy as np
from mpmath import mp, mpf


def exact_spline(x: np.ndarray, y: np.ndarray, lam: float) -> np.ndarray:
    """Fitted values at sorted distinct x, shape (n,)."""
    with mp.workdps(60):
        t, v, lam_ = [mpf(float(a)) for a in x], [mpf(float(b)) for b in y], mpf(float(lam))
        n = len(t)
        h = [t[i + 1] - t[i] for i in range(n - 1)]
        # Column j of Q has three entries, for points j, j + 1, j + 2.
        q = [(1 / h[j], -1 / h[j] - 1 / h[j + 1], 1 / h[j + 1]) for j in range(n - 2)]
        m = n - 2
        d0 = [(h[j] + h[j + 1]) / 3 + lam_ * sum(a * a for a in q[j]) for j in range(m)]
        d1 = [
            h[j + 1] / 6 + lam_ * (q[j][1] * q[j + 1][0] + q[j][2] * q[j + 1][1])
            for j in range(m - 1)
        ]
        d2 = [lam_ * q[j][2] * q[j + 2][0] for j in range(m - 2)]
        right = [q[j][0] * v[j] + q[j][1] * v[j + 1] + q[j][2] * v[j + 2] for j in range(m)]
        # LDL' of a matrix with two bands below the diagonal.
        d, l1, l2 = [mpf(0)] * m, [mpf(0)] * m, [mpf(0)] * m
        for j in range(m):
            below1 = d1[j - 1] if j >= 1 else mpf(0)
            if j >= 2:
                l2[j] = d2[j - 2] / d[j - 2]
                below1 -= l2[j] * d[j - 2] * l1[j - 1]
            if j >= 1:
                l1[j] = below1 / d[j - 1]
            d[j] = d0[j]
            if j >= 1:
                d[j] -= l1[j] ** 2 * d[j - 1]
            if j >= 2:
                d[j] -= l2[j] ** 2 * d[j - 2]
        z = list(right)
        for j in range(m):
            if j >= 1:
                z[j] -= l1[j] * z[j - 1]
            if j >= 2:
                z[j] -= l2[j] * z[j - 2]
        z = [z[j] / d[j] for j in range(m)]
        for j in range(m - 1, -1, -1):
            if j + 1 < m:
                z[j] -= l1[j + 1] * z[j + 1]
            if j + 2 < m:
                z[j] -= l2[j + 2] * z[j + 2]
        fitted = list(v)
        for j in range(m):
            for k in range(3):
                fitted[j + k] -= lam_ * q[j][k] * z[j]
        return np.array([float(f) for f in fitted])


def spacings(n: int) -> dict[str, np.ndarray]:
    """Hard point sets, sorted: random, exponentially spaced, pairs 1e-9 apart."""
    rng = np.random.default_rng(77)
    half = np.sort(rng.uniform(size=n // 2))
    return {
        "random": np.sort(rng.uniform(size=n)),
        "exponential": np.concatenate([[0.0], np.geomspace(1e-8, 1, n - 1)]),
        "pairs 1e-9 apart": np.sort(np.concatenate([half, half + 1e-9])),
    }
