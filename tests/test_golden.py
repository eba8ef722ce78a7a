"""The printed summary of a good, a flat and a failed fit, word for word (tests/golden).

To look at a change and accept it: python -m tests.test_golden
"""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import addmodel as am

GOLDEN = Path(__file__).with_name("golden")


def good() -> am.Fit:
    rng = np.random.default_rng(1)
    x, hour = rng.uniform(0, 10, 200), rng.uniform(0, 24, 200)
    site = rng.choice(["east", "west"], 200)
    y = np.sin(x) + 0.5 * (site == "west") + np.cos(hour / 24 * 2 * np.pi)
    data = {"x": x, "hour": hour, "site": site, "y": y + 0.3 * rng.standard_normal(200)}
    return am.fit("y ~ curve(x) + cycle(hour, period=24) + site", data)


def flat() -> am.Fit:
    rng = np.random.default_rng(2)
    x, z = rng.uniform(size=(2, 150))
    data = {"x": x, "z": z, "y": 2 * x + rng.standard_normal(150)}
    return am.fit("y ~ curve(x) + curve(z)", data)


def failed() -> am.Fit:
    """As a fit prints that did not settle: the good one, marked so."""
    estimate = replace(
        good().estimate, settled=False, gradient=np.array([0.5, 0.1]), cautions=UNSETTLED
    )
    return am.Fit(estimate)


UNSETTLED = (
    "The choice of smoothness did not settle, most of all for curve(x). Treat its curve and its "
    "degrees of freedom as approximate; see if it competes with another component.",
)
CASES = {"good": good, "flat": flat, "failed": failed}


@pytest.mark.parametrize("name", CASES)
def test_summary_word_for_word(name):
    expected = (GOLDEN / f"{name}.txt").read_text(encoding="utf-8")
    assert str(CASES[name]().summary()) + "\n" == expected


if __name__ == "__main__":
    for name, make in CASES.items():
        (GOLDEN / f"{name}.txt").write_text(str(make().summary()) + "\n", encoding="utf-8")
