"""Pictures of two covariates: a surface with its standard error, curves level by level.

Each takes the full width of a sheet and draws two fields side by side.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from addmodel.looks import (
    CALENDAR,
    DASHES,
    DEEP,
    FAINT,
    FAMILY,
    HAIR,
    INK,
    LABEL,
    NOTE,
    SIZE,
    SMALL,
    STEPS,
    FloatArray,
    wrapped,
)

if TYPE_CHECKING:
    from matplotlib.axes import Axes

MANY = 7
"""More curves than this are drawn alike."""


@dataclass(frozen=True)
class Scale:
    """One direction of a picture: its label, and how its ticks are."""

    label: str
    dates: bool = False
    period: float | str | None = None


@dataclass(frozen=True)
class Surface:
    """An effect over two numbers; NaN where there are no data."""

    across: Scale
    upward: Scale
    quantity: str
    x: FloatArray  # (g,)
    y: FloatArray  # (h,)
    effect: FloatArray  # (g, h)
    std_error: FloatArray  # (g, h)
    map: bool = False
    """Whether both directions have one scale."""
    caption: str = ""


@dataclass(frozen=True)
class Family:
    """Curves along one number, one for each level (or held value); with their deviations."""

    across: Scale
    quantity: str
    x: FloatArray  # (g,)
    labels: tuple[str, ...]
    effect: FloatArray  # (curves, g)
    lower: FloatArray
    upper: FloatArray
    deviation: FloatArray  # (curves, g) from the levels' average
    deviation_lower: FloatArray  # NaN where not known
    deviation_upper: FloatArray
    level: float
    caption: str = ""


Picture = Surface | Family


def height(panel: Picture, width: float) -> float:
    """Millimetres that a picture wants in a sheet `width` mm wide."""
    if isinstance(panel, Surface) and panel.map:
        span = np.ptp(panel.y) / max(float(np.ptp(panel.x)), 1e-300)
        return float(np.clip(0.36 * width * span + 18.0, 45.0, 110.0))
    return 66.0


def paint(panel: Picture, left: Axes, right: Axes, width: float) -> None:
    """Draw both fields."""
    if isinstance(panel, Surface):
        _paint_surface(panel, left, right, width)
    else:
        _paint_family(panel, left, right, width)


def _paint_surface(panel: Surface, left: Axes, right: Axes, width: float) -> None:
    from matplotlib import colors, ticker

    masked = np.ma.masked_invalid(panel.effect.T)
    largest = (float(np.abs(masked).max()) if masked.count() else 0.0) or 1.0
    steps = ticker.MaxNLocator(14, symmetric=True).tick_values(-largest, largest)
    # Two sides of zero, light in the middle: the darker, the farther from it.
    two = colors.LinearSegmentedColormap.from_list("two", ["#7A3E00", "#F7F4EE", "#0B4A50"])
    filled = left.contourf(panel.x, panel.y, masked, steps, cmap=two)
    lines = left.contour(
        panel.x, panel.y, masked, steps[::2], colors=INK, linewidths=0.35, linestyles="solid"
    )
    left.clabel(lines, fontsize=SMALL - 1, fmt=_number)
    one = colors.LinearSegmentedColormap.from_list("one", ["#FBFAF7", "#5A5A5A"])
    errors = np.ma.masked_invalid(np.where(np.isnan(panel.effect), np.nan, panel.std_error).T)
    top = (float(errors.max()) if errors.count() else 0.0) or 1.0
    shades = ticker.MaxNLocator(8).tick_values(0.0, top)
    grey = right.contourf(panel.x, panel.y, errors, shades, cmap=one)
    for ax, drawn, title in ((left, filled, panel.quantity), (right, grey, "Its standard error")):
        bar = ax.figure.colorbar(drawn, ax=ax, shrink=0.85, aspect=18, pad=0.02)
        bar.outline.set_visible(False)
        bar.ax.tick_params(labelsize=SMALL, length=2, width=0.5, color=FAINT, labelcolor=INK)
        ax.set_title("\n".join(wrapped(title, 0.4 * width, SIZE)), loc="left", **_TITLE)
        _dress(ax, panel.across, panel.upward, width)
        ax.set_facecolor("#FFFFFF")
        if panel.map:
            ax.set_aspect("equal")


_TITLE: dict[str, Any] = {"fontsize": SIZE, "color": INK, "parse_math": False}


def _number(value: float) -> str:
    return f"{value:g}"


def _paint_family(panel: Family, left: Axes, right: Axes, width: float) -> None:
    fields = (
        (left, panel.effect, panel.lower, panel.upper, panel.quantity),
        (
            right,
            panel.deviation,
            panel.deviation_lower,
            panel.deviation_upper,
            "Deviation from their average",
        ),
    )
    many = len(panel.labels) > MANY
    for ax, curves, lower, upper, title in fields:
        ax.axhline(0.0, color=FAINT, linewidth=0.6, zorder=1.0)
        for i, curve in enumerate(curves):
            if many:
                ax.plot(panel.x, curve, color=DEEP, alpha=0.35, linewidth=0.7)
                continue
            colour = FAMILY[i]
            ax.fill_between(panel.x, lower[i], upper[i], color=colour, alpha=0.13, linewidth=0)
            style: Any = DASHES[i]
            label = panel.labels[i]
            ax.plot(panel.x, curve, color=colour, linewidth=1.4, linestyle=style, label=label)
        values = np.concatenate([curves.ravel(), *([] if many else [lower.ravel(), upper.ravel()])])
        values = values[np.isfinite(values)]
        low, high = (
            np.quantile(values, [0, 1] if many else [0.005, 0.995]) if len(values) else (-1.0, 1.0)
        )
        room = 0.08 * max(high - low, 1e-12)
        ax.set_ylim(min(low, 0.0) - room, max(high, 0.0) + room)
        ax.set_xlim(panel.x[0], panel.x[-1])
        ax.set_title("\n".join(wrapped(title, 0.42 * width, SIZE)), loc="left", **_TITLE)
        ax.grid(axis="y", color=HAIR, linewidth=0.5)
        ax.set_axisbelow(True)
        _dress(ax, panel.across, None, width)
    if many:
        left.annotate(
            f"{len(panel.labels)} levels", (0.02, 0.97), xycoords="axes fraction", va="top", **NOTE
        )
    else:
        legend = right.legend(
            fontsize=SMALL,
            frameon=False,
            loc="upper left",
            bbox_to_anchor=(1.0, 1.0),
            handlelength=2.6,
            labelcolor=INK,
        )
        for text in legend.get_texts():
            text.set_parse_math(False)


def _dress(ax: Axes, across: Scale, upward: Scale | None, width: float) -> None:
    ax.spines[:].set_visible(False)
    ax.tick_params(which="both", length=2.5, width=0.6, color=FAINT, pad=2.5)
    ax.tick_params(labelsize=SIZE - 0.5, labelcolor=INK)
    ax.set_xlabel("\n".join(wrapped(across.label, 0.36 * width, SIZE)), loc="left", **LABEL)
    if upward is not None:
        ax.set_ylabel(upward.label, **LABEL)
    for axis, scale in ((ax.xaxis, across), (ax.yaxis, upward)):
        if scale is not None:
            ticks(axis, scale, 0.3 * width)


def ticks(axis: Any, scale: Scale, width: float) -> None:
    """Ticks by the habits of dates and periods."""
    from matplotlib import ticker

    if isinstance(scale.period, str):
        places, names = CALENDAR[scale.period][0], CALENDAR[scale.period][1].split()
        step = next((s for s in (1, 2) if 7.0 * len(names) / s <= width), 3)
        axis.set_ticks(places[::step], names[::step])
    elif scale.period in STEPS:
        axis.set_ticks(np.arange(0.0, 1.001 * scale.period, STEPS[scale.period]))
    elif not scale.dates:
        axis.set_major_locator(ticker.MaxNLocator(5, steps=[1, 2, 2.5, 5, 10]))
    else:
        import importlib

        dates: Any = importlib.import_module("matplotlib.dates")  # its functions have no types
        locator = dates.AutoDateLocator(minticks=3, maxticks=5)
        axis.set_major_locator(locator)
        axis.set_major_formatter(dates.ConciseDateFormatter(locator))
