"""What the reader should know before using the numbers, found from the fit and its rows."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from addmodel.component import Design
from addmodel.data import Table
from addmodel.outcomes import Outcome
from addmodel.solve.detail import CEILING
from addmodel.solve.smoothness import Smoothness
from addmodel.spaces.base import FloatArray, Penalised
from addmodel.spaces.cycle import GAP, Cycle
from addmodel.spaces.levels import Levels

FAR = 1.2
"""Pearson's dispersion above this is said."""
EXTREME = 1e-6
"""A fitted probability closer than this to 0 or 1 is said."""


def of_smoothness(design: Design, smoothness: Smoothness) -> Iterator[str]:
    """How the choice of smoothness went, block by block."""
    names = [design.components[j].name for j in design.block_owners]
    if not smoothness.settled:
        worst = f" for {names[int(np.abs(smoothness.gradient).argmax())]}" if names else ""
        yield (
            f"The choice of smoothness did not settle, most of all{worst}. Treat its curve "
            "and its degrees of freedom as approximate; see if it competes with another component."
        )
    for name, spanned in zip(names, smoothness.point.problem.spanned, strict=True):
        if spanned:
            yield (
                f"The bend of {name} is wholly in the levels of other terms: it adds nothing to "
                "them."
            )
    for j in smoothness.at_zero:
        yield (
            f"The smoothing parameter of {names[j]} ran to zero: it follows the data as closely "
            "as its functions allow. Look for repeated rows or an outcome without noise."
        )
    for component in design.components:
        (space,) = component.spaces
        if isinstance(space, Cycle):
            yield from _of_cycle(design, component.name, space)
        if not isinstance(space, Penalised) or component.everything:
            continue
        if space.size == CEILING < space.most:
            yield (
                f"{component.name} uses {CEILING} functions, the most that are kept unless "
                'detail="all" is given.'
            )


def of_freedom(n: float, effective_df: float, counted: bool) -> Iterator[str]:
    """A model that all but goes through every row."""
    if n - effective_df < max(2.0, 0.05 * n):
        means = " For means of several measurements give weights=, not counts=." if counted else ""
        yield (
            f"The model uses {effective_df:.1f} of {n:,.0f} degrees of freedom: it all but goes "
            "through every row, so its scale, standard errors and intervals mean nothing. Set "
            f"df= or detail=, or look for repeated rows.{means}"
        )


def of_outcome(
    design: Design, table: Table, outcome: Outcome, eta: FloatArray, dispersion: float
) -> Iterator[str]:
    """Where the rows and what is assumed of the outcome do not go together."""
    if outcome.kind in ("Binomial", "Poisson", "NegativeBinomial"):
        yield from _empty_levels(design, table, outcome)
    mean = outcome.mean(eta)
    if outcome.kind == "Binomial":
        ends = (mean < EXTREME) | (mean > 1 - EXTREME)
        if ends.any():
            yield (
                f"{int(ends.sum())} fitted probabilities are 0 or 1 to six digits: some covariates "
                "all but decide the outcome there (separation). Unpenalised coefficients behind "
                "it have no finite best value; read their size and standard errors as 'large'."
            )
    sparse = outcome.kind == "Binomial" and bool((table.trials == 1).all())
    if outcome.scale_known and not sparse and dispersion > FAR:
        remedy = (
            "outcome='negative binomial' or scale='estimated'"
            if outcome.kind == "Poisson"
            else "scale='estimated'"
        )
        yield (
            f"Pearson's dispersion is {dispersion:.2f}: the outcome varies more about its mean "
            f"than a {outcome.name} outcome does, so intervals are too narrow, p-values too small. "
            f"Write {remedy}, or look for a missing covariate."
        )
    if outcome.kind in ("Gamma", "InverseGaussian") and _inverse(outcome):
        yield (
            f"The link of the {outcome.name} outcome is an inverse power: the mean is not kept "
            "positive, and effects are on the scale of 1/mean. The log link is the usual choice: "
            f"outcome='{'gamma' if outcome.kind == 'Gamma' else 'inverse gaussian'}'."
        )


def _of_cycle(design: Design, name: str, space: Cycle) -> Iterator[str]:
    if space.gap[1] > GAP:
        yield (
            f"{name}: {100 * space.gap[1]:.0f} % of the period is without data. The curve there "
            "is a guess; predictions there are flagged as outside."
        )
    if design.columns[space.key].kind == "date" and not isinstance(space.period, str):
        yield (
            f"{name}: {space.key} is a date, so its period is {space.period:g} days. For the time "
            "of the day or year write period='day' or period='year'."
        )


def _inverse(outcome: Outcome) -> bool:
    return float(getattr(outcome.family.link, "power", 1.0) or 1.0) < 0


def _empty_levels(design: Design, table: Table, outcome: Outcome) -> Iterator[str]:
    """Levels without any event (or, yes/no, without any non-event): their coefficient runs off."""
    for component in design.components:
        (space,) = component.spaces
        if not isinstance(space, Levels):
            continue
        codes = np.asarray(table.columns[space.key].values, dtype=np.int64)
        size = table.counts * table.trials
        rows = np.bincount(codes, size, minlength=len(space.labels))
        events = np.bincount(codes, size * table.outcome, minlength=len(space.labels))
        none = [label for label, e in zip(space.labels, events, strict=True) if e == 0]
        every = [
            label
            for label, e, n in zip(space.labels, events, rows, strict=True)
            if outcome.kind == "Binomial" and e == n
        ]
        for labels, what in ((none, "no events"), (every, "nothing but events")):
            if labels:
                listed = ", ".join(f"'{label}'" for label in labels[:5])
                yield (
                    f"In {component.name} the level {listed} has {what}: its coefficient has no "
                    "finite best value (separation), and its standard error means nothing. "
                    "Merge levels, or leave those rows out."
                )
