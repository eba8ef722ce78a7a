"""Random models of every outcome on awkward data.

500 models of `random_case` in tests/test_outcomes_fuzz.py: 8 to 80 rows, ties, levels of one row,
many zeros, tiny and huge numbers, weights, exposures, trials, outcomes that a covariate decides.
Every number of a fit is looked at. Settled: finite, and nothing to caution. Cautioned: finite,
and something was said by name. Refused: an AddmodelError says why. Broken: anything else (a
number that is none, another error, a numpy warning); each is printed with its seed.
"""

from __future__ import annotations

from collections import Counter

from tests.test_outcomes_fuzz import OUTCOMES, answered, random_case
from validation.results import section

CASES = 500
ANSWERS = ("settled", "cautioned", "refused", "broken")


def main() -> None:
    found: Counter[tuple[str, str]] = Counter()
    for seed in range(CASES):
        case = random_case(seed)
        try:
            answer = answered(case)
        except Exception as error:
            answer = "broken"
            print(f"seed {seed}, {case.outcome}, {case.formula}: {error!r}", flush=True)
        found[case.outcome, answer] += 1
    rows: list[list[object]] = [["outcome", "cases", *ANSWERS]]
    for outcome in OUTCOMES:
        numbers = [found[outcome, answer] for answer in ANSWERS]
        rows.append([outcome, sum(numbers), *numbers])
    totals = [sum(found[o, answer] for o in OUTCOMES) for answer in ANSWERS]
    rows.append(["all", sum(totals), *totals])
    section("fuzz_outcomes", "Awkward outcomes", (__doc__ or "").split("\n\n", 1)[1].strip(), rows)


if __name__ == "__main__":
    main()
