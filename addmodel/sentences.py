"""One plain sentence for each component, made from its numbers."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from addmodel.contrasts import slope
from addmodel.effects import effect
from addmodel.errors import ModelError
from addmodel.estimate import Estimate
from addmodel.inference import p_text
from addmodel.spaces.curve import Curve
from addmodel.spaces.cycle import Cycle
from addmodel.spaces.globe import Globe
from addmodel.spaces.group import Group
from addmodel.spaces.levels import Levels
from addmodel.spaces.line import Line
from addmodel.spaces.place import Place

CLEAR = 0.05
STANDS_IN = 0.8
"""Overlap from which one component can stand in for others."""
MOST_STRETCHES = 5
LEVEL = 0.12
STEADY = 0.02
"""A stretch shorter than these parts of the grid is not told: a turning point is not level."""


def sentence(estimate: Estimate, component: int) -> str:
    """What a component does, and how sure that is."""
    design = estimate.design
    c = design.components[component]
    assert estimate.answers is not None
    none, straight, _ = estimate.answers[component]
    if np.isnan(none):
        return f"{c.name}: all of it is in other components."
    if none > CLEAR:
        return f"{c.name}: no effect can be seen ({p_words(none)})."
    course = _course(estimate, component)
    more = ""
    if np.isfinite(straight):
        flat = "its unpenalised part"
        if isinstance(c.single, Curve):
            flat = "a straight line" if c.single.order == 2 else "a parabola"
        more = (
            f"; more than {flat}, {p_words(straight)}"
            if straight <= CLEAR
            else f"; no more than {flat} can be seen, {p_words(straight)}"
        )
    if not np.isfinite(straight):
        more = f" ({p_words(none)})"
    return f"{c.name}: {course}{more}."


def overlap_cautions(estimate: Estimate) -> list[str]:
    """Where a map, a season or a trend can stand in for what is asked about."""
    assert estimate.answers is not None
    design = estimate.design
    wide = [
        c.name
        for c in design.components
        if isinstance(c.single, Place | Globe | Cycle | Group)
        or (c.single is not None and design.columns[c.single.keys[0]].kind == "date")
    ]
    found = []
    for c, (_, _, overlap) in zip(design.components, estimate.answers, strict=True):
        others = [name for name in wide if name != c.name]
        if np.isfinite(overlap) and overlap >= STANDS_IN and c.name not in wide:
            by = f" ({', '.join(others)} most likely)" if others else ""
            found.append(
                f"{100 * overlap:.0f} % of the variation of {c.name} could be done by the other "
                f"components{by}: which of them it belongs to the data hardly tell. Fit without "
                "each in turn before you read much into either."
            )
    return found


def p_words(p: float) -> str:
    """A p value as it is printed."""
    text = p_text(p)
    return f"p {text}" if text.startswith("<") else f"p = {text}"


def _course(estimate: Estimate, component: int) -> str:
    design = estimate.design
    c = design.components[component]
    space = c.single
    if isinstance(space, Group):
        k = design.blocks_of(component)[0]
        spread = np.sqrt(estimate.scale / estimate.smoothing[k])
        return f"groups differ, with standard deviation {spread:.3g}"
    if space is None:
        return f"{' and '.join(s.key for s in c.spaces)} act together, not each by itself"
    table: Any = effect(estimate, c.name, at=None, level=0.95).table
    assert estimate.answers is not None
    straight = estimate.answers[component][1]
    bent = isinstance(space, Curve) and (space.order != 2 or not straight > CLEAR)
    if isinstance(space, Line) or (isinstance(space, Curve) and not bent):
        return _line(table, space.key)
    if isinstance(space, Curve) and space.order == 1:
        return "a course without a slope at every point"
    if isinstance(space, Levels):
        name = table.columns[0]
        high = table.loc[table["effect"].idxmax(), name]
        low = table.loc[table["effect"].idxmin(), name]
        return f"highest for {high}, lowest for {low}"
    if isinstance(space, Cycle | Place | Globe):
        inside = table[~table["outside"]] if "outside" in table else table
        names = list(table.columns[: len(space.keys)])
        period = space.period if isinstance(space, Cycle) else None
        at = [
            ", ".join(_place(inside.loc[i, n], period) for n in names)
            for i in (inside["effect"].idxmax(), inside["effect"].idxmin())
        ]
        return f"highest near {at[0]}, lowest near {at[1]}"
    try:
        return _stretches(slope(estimate, c.name, order=1, at=None, level=0.95))
    except ModelError:
        return "an effect"


def _line(table: pd.DataFrame, key: str) -> str:
    column = table.iloc[:, 0]
    dates = pd.api.types.is_datetime64_any_dtype(column)
    days = (column - column.iloc[0]) / pd.Timedelta(days=1) if dates else column
    x = days.to_numpy(dtype=np.float64)
    unit = f"each day of {key}" if dates else f"each unit of {key}"
    rise = (table["effect"].iloc[-1] - table["effect"].iloc[0]) / (x[-1] - x[0])
    return f"{'rises' if rise > 0 else 'falls'} by {abs(rise):.3g} for {unit}"


def _stretches(table: pd.DataFrame) -> str:
    """Rising, falling and neither, along the covariate."""
    name = table.columns[0]
    rising, falling = table["lower"] > 0, table["upper"] < 0  # point by point
    direction = np.select([rising, falling], ["rising", "falling"], "unclear")
    starts = np.flatnonzero(np.append(True, direction[1:] != direction[:-1]))
    stops = np.append(starts[1:], len(direction))
    runs = [
        (direction[a], a, b)
        for a, b in zip(starts, stops, strict=True)
        if b - a > (LEVEL if direction[a] == "unclear" else STEADY) * len(direction)
    ]
    words = {"rising": "rises", "falling": "falls", "unclear": "level"}
    told: list[str] = []
    for k, (kind, _, stop) in enumerate(runs):
        if told and words[kind] == told[-1].split(" ")[0]:
            continue
        last = k == len(runs) - 1
        turn = stop if last else (stop + runs[k + 1][1]) // 2  # half-way to the next stretch
        until = "" if last else f" to about {_place(table[name].iloc[turn])}"
        told.append(words[kind] + until)
    if all(t.startswith("level") for t in told):
        return "an effect whose direction is unclear"
    if len(told) > MOST_STRETCHES:
        turns = sum(not t.startswith("level") for t in told)
        return f"rises and falls, {turns} stretches of it clearly"
    return ", then ".join(told)


WITHIN = {"day": "%H:%M", "week": "%A", "month": "day %d", "year": "%d %B"}


def _place(value: object, period: object = None) -> str:
    if isinstance(value, float | np.floating):
        return f"{value:.3g}"
    if isinstance(value, pd.Timestamp):
        return value.strftime(WITHIN.get(str(period), "%Y-%m-%d"))
    return str(value)
