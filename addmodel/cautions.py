"""What the reader should know before using the numbers, found from the fit and its rows."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from addmodel.data import Table
from addmodel.design import Design
from addmodel.outcomes import Outcome
from addmodel.solve.detail import CEILING
from addmodel.solve.smoothness import Smoothness
from addmodel.spaces.base import FloatArray, Space
from addmodel.spaces.cycle import GAP, Cycle
from addmodel.spaces.group import Group
from addmodel.spaces.levels import Levels
from addmodel.spaces.place import Place
from addmodel.spaces.scattered import Scattered

FAR = 1.2
"""Pearson's dispersion above this is said."""
FEW_ROWS = 5
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
    for owner, block in design.owned_blocks:
        component = design.components[owner]
        if not block.everything and len(block.functions) == CEILING:
            yield (
                f"{component.name} uses {CEILING} functions, the most that are kept unless "
                'detail="all" is given.'
            )
    named: dict[str, Space] = {}
    for component in design.components:
        for space in component.spaces:
            named.setdefault(space.key, space)
    for space in named.values():
        if isinstance(space, Cycle):
            yield from _of_cycle(design, space)
        if isinstance(space, Scattered) and not space.everywhere:
            yield (
                f"The map of {space.key} rests on {len(space.knots)} well-spread sites of "
                f"{space.distinct:,}: finer detail than they allow is not in it."
            )
        if isinstance(space, Place) and _looks_like_degrees(space):
            yield (
                f"place({space.key}) looks like degrees, whose east and north are not of one "
                f"length. Write globe({space.key}) with the latitude first, or project them."
            )


def _looks_like_degrees(space: Place) -> bool:
    names = " ".join(space.keys).lower()
    inside = bool((np.abs(space.low) <= 180).all() and space.length <= 360)
    return inside and "lat" in names and "lon" in names


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
    if sparse:
        yield from _small_groups(design, table)
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


def _of_cycle(design: Design, space: Cycle) -> Iterator[str]:
    if space.gap[1] > GAP:
        yield (
            f"cycle({space.key}): {100 * space.gap[1]:.0f} % of the period is without data. The "
            "curve there is a guess; predictions there are flagged as outside."
        )
    if design.columns[space.key].kind == "date" and not isinstance(space.period, str):
        yield (
            f"cycle({space.key}): {space.key} is a date, so its period is {space.period:g} days. "
            "For the time of the day or year write period='day' or period='year'."
        )


def _small_groups(design: Design, table: Table) -> Iterator[str]:
    """Groups of few yes/no rows: Laplace's approximation takes their variance for too small."""
    values = table.values
    groups = {s.key: s for c in design.components for s in c.spaces if isinstance(s, Group)}
    for space in groups.values():
        rows = np.bincount(space.codes(space.seen(values)), table.counts, minlength=space.size)
        if np.median(rows) < FEW_ROWS:
            yield (
                f"Half of the groups of {space.key} have fewer than {FEW_ROWS} yes/no rows: "
                "Laplace's approximation then takes the variation between groups for too small, "
                "and so their effects and their share of the intervals."
            )


def _inverse(outcome: Outcome) -> bool:
    return float(getattr(outcome.family.link, "power", 1.0) or 1.0) < 0


def _empty_levels(design: Design, table: Table, outcome: Outcome) -> Iterator[str]:
    """Levels without any event (or, yes/no, without any non-event): their coefficient runs off."""
    values = table.values
    for component in design.components:
        space = component.single
        if not isinstance(space, Levels):
            continue
        codes = space.codes(space.seen(values))
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
