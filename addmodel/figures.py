"""Figures of components: one panel, a sheet of all of them, and their files.

A panel is plain numbers. The effect is a deep line over a band in two tints: the darker one holds
the central 98 % of the data, the paler one the sparse ends. The foot of the panel is a strip whose
darkness is the density of the data. Levels are rows, with their share of the data in the margin.
Figures are built without pyplot: they need no display and nothing keeps them alive.
"""

from __future__ import annotations

import io
import math
import os
import textwrap
import unicodedata
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:  # matplotlib is slow to import, and needed for drawing alone
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

FloatArray = npt.NDArray[np.float64]
Limits = tuple[float, float]

DEEP, TINT, PALE = "#0B4A50", "#9ACBC8", "#D9EBE9"
EARTH, SAND = (0.42, 0.24, 0.03), "#B59A73"
"""The data's colours; with the blue-green of the effects they are safe for the colour-blind."""
INK, FAINT, HAIR = "#333333", "#707070", "#E6E6E6"
SIZE, ROW, SMALL = 8.0, 7.5, 6.5
"""Letters in points: labels, names of levels, notes."""
MM = 72 / 25.4
"""A millimetre in points."""
STRIP = 0.04
"""Height of the strip as a fraction of the panel's."""
STEPS = {7.0: 1.0, 12.0: 3.0, 24.0: 6.0, 52.0: 13.0, 60.0: 15.0, 180.0: 45.0, 360.0: 90.0}
"""Distances of ticks for periods with a habit of their own."""
MONTHS = np.cumsum([0, 31, 28, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31]) / 365
CALENDAR = {
    "year": (MONTHS, "Jan Feb Mar Apr May Jun Jul Aug Sep Oct Nov Dec Jan".split()),
    "month": (np.array([0, 7, 14, 21, 28]) / 30.44, "1 8 15 22 29".split()),
    "week": (np.arange(8) / 7, "Mon Tue Wed Thu Fri Sat Sun Mon".split()),
    "day": (np.arange(5) / 4, "0 6 12 18 24".split()),
}
"""Positions and names of the ticks of a calendar period."""


@dataclass(frozen=True)
class Panel:
    """Everything one picture of one component needs.

    Raises
    ------
    ValueError
        If the arrays do not have the same length.
    """

    kind: Literal["curve", "cycle", "line", "levels"]
    covariate: str
    """Label of the covariate's axis, with its unit."""
    quantity: str
    """Label of the effect's axis."""
    x: FloatArray
    """(g,) ascending covariate values: days since 1970-01-01 for dates; codes 0..L-1 for levels; for
    a cycle the position within the period, 0..period (0..1 for a period of the calendar)."""
    effect: FloatArray
    """(g,)"""
    lower: FloatArray
    """(g,) of the pointwise band, as `upper`."""
    upper: FloatArray
    level: float
    """Coverage of the band, as 0.95."""
    labels: tuple[str, ...] = ()
    """One for each level."""
    quantiles: FloatArray = field(default_factory=lambda: np.empty(0))
    """(201,) weighted quantiles of the covariate on the scale of `x`; empty for levels."""
    shares: FloatArray = field(default_factory=lambda: np.empty(0))
    """(g,) share of the data at each level; empty for numbers."""
    dates: bool = False
    period: float | str | None = None
    """A number, or one of "year", "month", "week", "day"."""
    caption: str = ""
    """A sentence printed under the panel in a sheet."""

    def __post_init__(self) -> None:
        shape = (len(self.x),)
        arrays = {"effect": self.effect, "lower": self.lower, "upper": self.upper}
        if len(self.shares):
            arrays["shares"] = self.shares
        for name, values in arrays.items():
            if values.shape != shape:
                raise ValueError(f"{self.covariate}: {name} is {values.shape} and x is {shape}.")
        if self.kind == "levels" and len(self.labels) != len(self.x):
            raise ValueError(f"{self.covariate}: {len(self.labels)} labels, {len(self.x)} levels.")


def draw(panel: Panel, ax: Axes | None = None, ylim: Limits | None = None) -> Axes:
    """Draw a panel on `ax`, or on the axes of a new figure 90 mm wide.

    `ylim` are limits of the effect's axis (for levels, the horizontal one); the default shows the
    effect, and the band where all but the outermost data are.
    """
    with _look():
        if ax is None:
            ax = _blank(90.0, _height(panel, 90.0)).add_subplot()
        # the axes are about three quarters of the room that they and their labels take
        width, height = ax.get_window_extent().size * 25.4 / ax.get_figure(root=True).dpi / 0.75  # type: ignore[union-attr]
        _paint(panel, ax, ylim or _padded([panel]), float(width), float(height))
    return ax


def single(panel: Panel, width: float = 90.0) -> Figure:
    """One panel without its caption, as a figure `width` millimetres wide."""
    return sheet([replace(panel, caption="")], width)


def sheet(panels: Sequence[Panel], width: float = 180.0) -> Figure:
    """All panels on one figure, `width` millimetres wide; `figure.axes` are in the panels' order.

    Panels of the same quantity have the same scale. Numbers stand in a raster; levels, whose
    heights differ, in columns below it (beside it where there are few panels).

    Raises
    ------
    ValueError
        If there are no panels.
    """
    if not panels:
        raise ValueError("a sheet needs at least one panel.")
    levels = [i for i, panel in enumerate(panels) if panel.kind == "levels"]
    numbers = [i for i, panel in enumerate(panels) if panel.kind != "levels"]
    beside = 0 < len(numbers) <= 2 and 0 < len(levels) <= 2 and width >= 150.0
    room = width / 2 if beside else width
    narrowest = 85.0 if len(numbers) <= 4 else 58.0 if len(numbers) <= 18 else 44.0
    across = max(1, min(len(numbers), int(room // narrowest)))
    stacks: list[list[int]] = [[] for _ in range(max(1, min(len(levels), int(room // 85.0))))]
    cells = [room / (len(stacks) if p.kind == "levels" else across) for p in panels]
    captions = [_wrapped(p.caption, 0.7 * c, SMALL) for p, c in zip(panels, cells, strict=True)]
    below = _lines_mm(max(map(len, captions)))
    heights = [_height(p, c) + below for p, c in zip(panels, cells, strict=True)]
    for i in levels:
        min(stacks, key=lambda stack: sum(heights[j] for j in stack)).append(i)
    columns = [[heights[i] for i in stack] for stack in (numbers[::across], *stacks)]
    parts = [sum(columns[0]), max(map(sum, columns[1:]))]
    key = _wrapped(_key(panels), 0.97 * width, SMALL)
    with _look():
        figure = _blank(width, (max(parts) if beside else sum(parts)) + _lines_mm(len(key)) + 2.0)
        if beside:
            parts = [max(parts)] * 2
            places = list(figure.subfigures(1, 2))
        else:
            both = bool(numbers and levels)
            places = list(figure.subfigures(2, 1, height_ratios=parts)) if both else [figure] * 2
        leaves = [(places[0], numbers, across, columns[0], parts[0])]
        if levels:
            subfigures = places[1].subfigures(1, len(stacks), squeeze=False)[0]
            for sub, stack, column in zip(subfigures, stacks, columns[1:], strict=True):
                leaves.append((sub, stack, 1, column, parts[1]))
        where = {}
        for sub, stack, count, column, height in leaves:
            rows = [*column, height - sum(column)] if height - sum(column) > 1.0 else column
            if stack:
                grid = sub.add_gridspec(len(rows), count, height_ratios=rows)
                where.update({i: (sub, grid[k // count, k % count]) for k, i in enumerate(stack)})
        for i, panel in enumerate(panels):
            ax = where[i][0].add_subplot(where[i][1])
            limits = _padded([p for p in panels if p.quantity == panel.quantity])
            _paint(panel, ax, limits, cells[i], heights[i] - below)
            if captions[i]:
                _note(ax, captions[i])
        for left, right in zip(numbers, numbers[1:], strict=False):  # said once in a row
            same = panels[left].quantity == panels[right].quantity
            if same and numbers.index(right) % across:
                figure.axes[right].yaxis.label.set_visible(False)
        style = {"fontsize": SMALL, "color": FAINT, "linespacing": 1.15}
        figure.supxlabel("\n".join(key), x=2 / width, ha="left", **style)
    return figure


def _note(ax: Axes, lines: list[str]) -> None:
    """Small print below the label of the horizontal axis."""
    ax.annotate(
        "\n".join(lines),
        (0, 0),
        xycoords=("axes fraction", ax.xaxis.label),
        xytext=(0, -3),
        textcoords="offset points",
        va="top",
        fontsize=SMALL,
        color=FAINT,
        linespacing=1.15,
        annotation_clip=False,
        parse_math=False,
    )


def _lines_mm(count: int) -> float:
    return count * 1.35 * SMALL / MM


def save(figure: Figure, stem: Path) -> list[Path]:
    """Write `stem`.png (200 dpi) and `stem`.pdf (TrueType fonts embedded) and return their paths.

    Each file appears whole or not at all, and the same figure gives the same bytes.
    """
    written = []
    for ending, metadata in (("png", {}), ("pdf", {"CreationDate": None})):
        buffer = io.BytesIO()
        with _look():
            figure.savefig(buffer, format=ending, dpi=200, metadata=metadata)
        path = stem.with_name(f"{stem.name}.{ending}")  # a stem may contain dots
        part = path.with_name(f".{path.name}.{os.getpid()}.part")
        try:
            part.write_bytes(buffer.getvalue())
            part.replace(path)
        finally:
            part.unlink(missing_ok=True)
        written.append(path)
    return written


def density(panel: Panel, low: float, high: float, bins: int = 256) -> FloatArray:
    """Darkness of the strip between low and high, (bins,), each in [0, 1).

    The mass between neighbouring quantiles is spread evenly (ties give a spike), then smoothed a
    little. Darkness is d / (d + d₀) with d₀ a typical density, so that neither a spike nor a value
    far away takes the contrast from the rest.
    """
    q = panel.quantiles
    steps = (np.arange(40) + 0.5) / 40
    spread = q[:-1, None] + np.diff(q)[:, None] * steps
    mass = np.histogram(spread, bins, (low, high))[0] / spread.size
    kernel = np.exp(-0.5 * (np.arange(-12, 13) / 4.0) ** 2)
    padded = np.pad(mass, 12, mode="wrap" if panel.kind == "cycle" else "symmetric")
    smooth = np.convolve(padded, kernel / kernel.sum(), mode="valid")
    ordered = np.sort(smooth)
    weight = np.cumsum(np.sqrt(ordered))
    if weight[-1] == 0.0:
        return np.zeros(bins)
    typical = ordered[np.searchsorted(weight, 0.5 * weight[-1])]
    return np.asarray(smooth / (smooth + typical), dtype=np.float64)


@contextmanager
def _look() -> Iterator[None]:
    """Our settings, whatever the user's are; the user's font stands in for letters ours lacks."""
    import matplotlib
    from matplotlib import style

    theirs = [*matplotlib.rcParams["font.family"], *matplotlib.rcParams["font.sans-serif"][:1]]
    family = dict.fromkeys(["DejaVu Sans", *(name for name in theirs if name != "sans-serif")])
    settings: dict[str, Any] = {
        "font.family": list(family),
        "font.size": SIZE,
        "text.color": INK,
        "pdf.fonttype": 42,
    }
    with style.context(["default", settings]):
        yield


def _blank(width: float, height: float) -> Figure:
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width / 25.4, height / 25.4), dpi=100, layout="constrained")
    figure.get_layout_engine().set(w_pad=0.05, h_pad=0.04, wspace=0.02, hspace=0.02)  # type: ignore[union-attr,call-arg]
    return figure


def _paint(panel: Panel, ax: Axes, limits: Limits, width: float, height: float) -> None:
    """Draw a panel that has width by height millimetres for itself and its labels."""
    from matplotlib import rcParams

    for spine in ax.spines.values():
        spine.set_visible(False)
    ax.tick_params(
        which="both",
        length=2.5,
        width=0.6,
        color=FAINT,
        labelsize=SIZE,
        labelcolor=INK,
        labelfontfamily=rcParams["font.family"],
        pad=2.5,
    )
    ax.set_axisbelow(True)
    if panel.kind == "levels":
        _paint_levels(panel, ax, limits, width)
        across, upward = panel.quantity, panel.covariate
    else:
        _paint_number(panel, ax, limits, 0.75 * width)
        across, upward = panel.covariate, panel.quantity
    label: dict[str, Any] = {"fontsize": SIZE, "color": INK, "parse_math": False, "labelpad": 3}
    # dates have their year at the right end of the same line
    room = (0.5 if panel.dates else 0.62 if panel.kind == "levels" else 0.75) * width
    left = ax.set_xlabel("\n".join(_wrapped(across, room, SIZE)), loc="left", **label)
    left.set_horizontalalignment("left")
    ax.set_ylabel("\n".join(_wrapped(upward, 0.75 * height, SIZE)), **label)


def _paint_number(panel: Panel, ax: Axes, limits: Limits, width: float) -> None:
    shift = 0.0
    x, effect, lower, upper = panel.x, panel.effect, panel.lower, panel.upper
    if panel.kind == "cycle":
        turn = 1.0 if isinstance(panel.period, str) else float(panel.period or x[-1])
        at = np.concatenate([[0.0], x[(x > 0.0) & (x < turn)], [turn]])
        effect, lower, upper = (np.interp(at, x, v, period=turn) for v in (effect, lower, upper))
        x = at
        _cycle_ticks(panel.period, ax, width)
    elif panel.dates:
        from matplotlib import dates

        shift = float(dates.date2num(np.datetime64("1970-01-01")))
        locator = dates.AutoDateLocator(minticks=3, maxticks=6 if width > 55 else 4)
        ax.xaxis.set_major_locator(locator)
        ax.xaxis.set_major_formatter(dates.ConciseDateFormatter(locator))
        ax.xaxis.get_offset_text().set(fontsize=SIZE, color=INK)
    else:
        ax.ticklabel_format(axis="x", useOffset=False)
    low, high = (x[0], x[-1]) if x[-1] > x[0] else (x[0] - 0.5, x[0] + 0.5)
    ax.set_xlim(low + shift, high + shift)
    ax.set_ylim(*limits)
    ax.grid(axis="y", color=HAIR, linewidth=0.5)
    ax.tick_params(axis="y", length=0)
    core = _core(panel)
    ax.fill_between(x + shift, lower, upper, color=PALE if core else TINT, linewidth=0, zorder=1.0)
    if core:
        at = np.concatenate([[core[0]], x[(x > core[0]) & (x < core[1])], [core[1]]])
        edges = (np.interp(at, x, lower), np.interp(at, x, upper))
        ax.fill_between(at + shift, *edges, color=TINT, linewidth=0, zorder=1.1)
    if len(panel.quantiles):
        darkness = density(panel, low, high)[None, :, None]
        ax.imshow(
            1.0 - darkness * (1.0 - np.array(EARTH)),
            extent=(low + shift, high + shift, -0.005, STRIP),
            transform=ax.get_xaxis_transform(),
            aspect="auto",
            interpolation="bilinear",
            zorder=1.5,
        )
    ax.axhline(0.0, color=FAINT, linewidth=0.6, zorder=2.0)
    ax.plot(x + shift, effect, color=DEEP, linewidth=1.6, solid_capstyle="butt", zorder=3.0)


def _cycle_ticks(period: float | str | None, ax: Axes, width: float) -> None:
    """Ticks by the habits of the period's unit, both ends included."""
    if isinstance(period, str):
        places, names = CALENDAR[period]
        step = next((s for s in (1, 2) if 7.0 * len(names) / s <= width), 3)
        ax.set_xticks(places[::step], names[::step])
        ax.set_xticks(places, minor=True)
    elif period in STEPS:
        ax.set_xticks(np.arange(0.0, 1.001 * period, STEPS[period]))


def _paint_levels(panel: Panel, ax: Axes, limits: Limits, width: float) -> None:
    labels = _level_labels(panel, width)
    lines = np.array([label.count("\n") + 1.0 for label in labels])
    rows = np.cumsum(lines) - lines / 2
    ax.set_xlim(*limits)
    ax.set_ylim(lines.sum() + 0.15, -0.15)
    ax.ticklabel_format(axis="x", useOffset=False)
    ax.set_yticks(rows, labels, parse_math=False, linespacing=1.15)
    ax.tick_params(axis="y", length=0, labelsize=ROW)
    ax.grid(axis="both", color=HAIR, linewidth=0.5)
    ax.axvline(0.0, color=FAINT, linewidth=0.6, zorder=1.0)
    thick = 4.0 if len(rows) <= 12 else 3.0
    bars = ax.hlines(rows, panel.lower, panel.upper, color=TINT, linewidth=thick, zorder=1.5)
    bars.set_capstyle("butt")
    ax.plot(panel.effect, rows, "o", color=DEEP, markersize=thick, markeredgewidth=0, zorder=3.0)
    for edge, beyond, marker in (
        (limits[0], panel.lower < limits[0], 4),  # a caret that points out: the bar goes on
        (limits[1], panel.upper > limits[1], 5),
    ):
        here = rows[beyond]
        ax.plot(np.full(len(here), edge), here, color=DEEP, marker=marker, linestyle="", ms=4)
    if len(panel.shares):
        place = ax.get_yaxis_transform()
        reach = 0.14 * panel.shares / max(panel.shares.max(), 1e-300)
        margin: dict[str, Any] = {"transform": place, "clip_on": False}
        ax.barh(rows, reach, 0.42, 1.03, color=SAND, linewidth=0, zorder=2.0, **margin)
        ax.set_xlim(*limits)
        for row, length, share in zip(rows, reach, panel.shares, strict=True):
            number = f"{100 * share:.0f} %" if share >= 0.005 else "<1 %"
            ax.text(
                1.045 + length,
                row,
                number,
                va="center_baseline",
                fontsize=SMALL - 0.5,
                color=FAINT,
                **margin,
            )


def _level_labels(panel: Panel, width: float) -> list[str]:
    """Labels in lines that fit a panel `width` millimetres wide; very long ones lose their middle."""
    wrapped = [_wrapped(label, 0.36 * width, ROW) for label in panel.labels]
    short = [w if len(w) <= 3 else [*w[:2], "… " + w[-1]] for w in wrapped]
    return ["\n".join(lines) for lines in short]


def _height(panel: Panel, width: float) -> float:
    """Millimetres that a panel `width` wide wants for itself and its labels."""
    if panel.kind != "levels":
        return min(max(0.72 * width, 36.0), 62.0)
    lines = sum(label.count("\n") + 1 for label in _level_labels(panel, width))
    return 15.0 + lines * (1.3 if len(panel.x) > 12 else 1.6) * ROW / MM


def _core(panel: Panel) -> Limits | None:
    """Where the central 98 % of the data are; None where there are no sparse ends to tell apart."""
    if panel.kind == "cycle" or not len(panel.quantiles):
        return None
    low, high = np.interp([0.01, 0.99], np.linspace(0, 1, len(panel.quantiles)), panel.quantiles)
    low, high = max(low, panel.x[0]), min(high, panel.x[-1])
    return (float(low), float(high)) if low < high else None


def _range(panel: Panel) -> Limits:
    """Least and greatest value to show: the effect, and the band where it rests on data.

    Of the effect in the sparse ends, as much as at most triples the height.
    """
    solid = np.ones(len(panel.x), dtype=bool)
    shown = panel.effect
    core = _core(panel)
    if len(panel.shares):  # the rarest levels, 2 % of the data together, do not count
        order = np.argsort(panel.shares, kind="stable")
        solid[order] = np.cumsum(panel.shares[order]) > 0.02 * panel.shares.sum()
    elif core and ((panel.x >= core[0]) & (panel.x <= core[1])).sum() >= 2:
        solid = (panel.x >= core[0]) & (panel.x <= core[1])
        shown = panel.effect[solid]
    values = np.concatenate([shown, panel.lower[solid], panel.upper[solid]])
    values = values[np.isfinite(values)]
    if not len(values):
        return -1.0, 1.0
    low, high = float(values.min()), float(values.max())
    least, greatest = float(np.nanmin(panel.effect)), float(np.nanmax(panel.effect))
    span = high - low
    return min(low, max(least, low - span)), max(high, min(greatest, high + span))


def _padded(panels: Sequence[Panel]) -> Limits:
    """Limits of the effect's axis common to the panels, with room for the strip at the foot."""
    ranges = [_range(panel) for panel in panels]
    low, high = min(r[0] for r in ranges), max(r[1] for r in ranges)
    if high - low <= 1e-12 * max(abs(low), abs(high)):
        half = 0.1 * abs(low) or 1.0
        low, high = low - half, high + half
    return low - 0.11 * (high - low), high + 0.05 * (high - low)


def _key(panels: Sequence[Panel]) -> str:
    """What the tints, strips and bars are, for the kinds of panel there are."""
    level = " or ".join(f"{100 * each:g} %" for each in sorted({p.level for p in panels}))
    parts = []
    if any(p.kind != "levels" for p in panels):
        pale = ", paler outside the central 98 % of the data" if any(map(_core, panels)) else ""
        parts.append(f"Band: {level} at each point{pale}.")
    if any(len(p.quantiles) for p in panels):
        parts.append("Strip: the darker, the more data.")
    if any(p.kind == "levels" for p in panels):
        parts.append(f"Bars of levels: {level} interval.")
    if any(len(p.shares) for p in panels):
        parts.append("Margin: share of the data.")
    return " ".join(parts)


def _wrapped(text: str, width: float, size: float) -> list[str]:
    """Lines no wider than `width` millimetres in letters of `size` points, by their usual widths."""
    if not text:
        return []
    ems = [
        1.0 if unicodedata.east_asian_width(c) in "WF" else 0.7 if c.isupper() else 0.56
        for c in text
    ]
    letters = width * MM / size / (sum(ems) / len(ems))
    return textwrap.wrap(text, max(6, int(letters))) or [""]
