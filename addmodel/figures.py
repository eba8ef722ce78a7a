"""Figures of components: one panel, a sheet of all of them, and their files.

A panel is plain numbers. The effect is a deep line over a band in two tints: the darker one holds
at each point, the paler one as a whole (where only the former is given, the paler tint stands at
the sparse ends, outside the central 98 % of the data). A strip at the foot shows the density of the
data; levels are rows with their share of the data in the margin. Nothing needs a display.
"""

from __future__ import annotations

import importlib
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal, cast

import numpy as np

from addmodel import joints
from addmodel.files import replacing
from addmodel.looks import (
    CALENDAR,
    DEEP,
    EARTH,
    FAINT,
    HAIR,
    INK,
    LABEL,
    LINE,
    MM,
    NOTE,
    PALE,
    ROW,
    SAND,
    SIZE,
    SMALL,
    STEPS,
    STRIP,
    TINT,
    FloatArray,
    Limits,
    blank,
    look,
    wrapped,
)

if TYPE_CHECKING:  # matplotlib is slow to import, and needed for drawing alone
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure


@dataclass(frozen=True)
class Panel:
    """Everything one picture of one component needs; ValueError if lengths differ.

    `x` (g,) ascends: days since 1970-01-01 for dates, codes 0..L-1 for levels, for a cycle the
    position within the period, 0..period (0..1 if the period is "year", "month", "week" or "day").
    """

    kind: Literal["curve", "cycle", "line", "levels", "ranked"]
    covariate: str  # label of its axis, with the unit
    quantity: str  # label of the effect's axis
    x: FloatArray
    effect: FloatArray  # (g,)
    lower: FloatArray  # (g,) of the pointwise band
    upper: FloatArray  # (g,)
    level: float  # coverage of the band, as 0.95
    labels: tuple[str, ...] = ()  # one for each level
    quantiles: FloatArray = field(default_factory=lambda: np.empty(0))  # (201,) weighted, as x
    shares: FloatArray = field(default_factory=lambda: np.empty(0))  # (g,) of the data, if levels
    dates: bool = False
    period: float | str | None = None
    caption: str = ""  # a sentence printed under the panel in a sheet
    lower_whole: FloatArray = field(default_factory=lambda: np.empty(0))  # (g,) simultaneous
    upper_whole: FloatArray = field(default_factory=lambda: np.empty(0))
    points: FloatArray = field(default_factory=lambda: np.empty((0, 2)))  # partial residuals
    alone: bool = False  # whether it has a scale of its own in a sheet

    def __post_init__(self) -> None:
        shapes = {v.shape for v in (self.x, self.effect, self.lower, self.upper)}
        shapes |= {self.shares.shape} if len(self.shares) else set()
        if len(shapes) > 1 or (self.kind == "levels" and len(self.labels) != len(self.x)):
            raise ValueError(f"{self.covariate}: the panel's arrays are not of one length.")


AnyPanel = Panel | joints.Surface | joints.Family


def draw(panel: AnyPanel, ax: Axes | None = None, ylim: Limits | None = None) -> Axes:
    """Draw a panel on `ax`, or on the axes of a new figure 90 mm wide.

    `ylim` limits the effect's axis; the default shows the effect, and the band where the data are.
    Pictures of two covariates have two fields and take a new figure of their own, 180 mm wide.
    """
    if not isinstance(panel, Panel):
        if ax is not None:
            raise ValueError("a picture of two covariates has two fields: leave ax= out.")
        return sheet([panel]).axes[0]
    with look():
        if ax is None:
            ax = blank(90.0, _height(panel, 90.0)).add_subplot()
        box = ax.get_window_extent()  # three quarters or so of the room with the labels
        scale = 25.4 / float(ax.figure.dpi) / 0.75
        _paint(panel, ax, ylim or _limits([panel]), box.width * scale, box.height * scale)
    return ax


def single(panel: AnyPanel, width: float | None = None) -> Figure:
    """One panel; 90 mm wide and without its caption, with two covariates 180 mm, unless told."""
    if isinstance(panel, Panel):
        return sheet([replace(panel, caption="")], width or 90.0)
    return sheet([panel], width or 180.0)


def sheet(every: Sequence[AnyPanel], width: float = 180.0) -> Figure:
    """All panels on one figure, `width` millimetres wide.

    Panels of the same quantity have the same scale. Numbers stand in a raster; below it pictures of
    two covariates, each with two fields, then levels, whose heights differ, in columns.
    `figure.axes` are in that order, numbers and levels as given, then the fields. ValueError if
    there are no panels.
    """
    if not every:
        raise ValueError("a sheet needs at least one panel.")
    panels = [panel for panel in every if isinstance(panel, Panel)]
    double = [panel for panel in every if not isinstance(panel, Panel)]
    levels = [i for i, panel in enumerate(panels) if panel.kind == "levels"]
    numbers = [i for i, panel in enumerate(panels) if panel.kind != "levels"]
    narrowest = 85.0 if len(numbers) in (1, 2, 4) else 58.0 if len(numbers) <= 18 else 44.0
    across = max(1, min(len(numbers), int(width // narrowest)))
    stacks: list[list[int]] = [[] for _ in range(max(1, min(len(levels), int(width // 85.0))))]
    cells = [width / (len(stacks) if p.kind == "levels" else across) for p in panels]
    captions = [wrapped(p.caption, 0.7 * c, SMALL) for p, c in zip(panels, cells, strict=True)]
    below = LINE * max(map(len, captions), default=0)
    heights = [_height(p, c) + below for p, c in zip(panels, cells, strict=True)]
    for i in levels:
        min(stacks, key=lambda stack: sum(heights[j] for j in stack)).append(i)
    blocks = [(each, wide) for each, wide in (([numbers], across), (stacks, 1)) if each[0]]
    totals = [max(sum(heights[i] for i in s[::wide]) for s in each) for each, wide in blocks]
    notes = [wrapped(panel.caption, 0.9 * width, SMALL) for panel in double]
    tall = [joints.height(p, width) + LINE * len(n) for p, n in zip(double, notes, strict=True)]
    key = wrapped(_key(panels, double), 0.97 * width, SMALL)
    with look():
        figure = blank(width, sum(totals) + sum(tall) + LINE * len(key) + 2.0)
        places = {}
        ratios = [*totals[: len(blocks)], *tall]
        every_room: Any = np.ravel(
            cast(Any, figure.subfigures(len(ratios), 1, height_ratios=ratios))
        )
        rooms = every_room[: len(blocks)]
        for room, total, (each, wide) in zip(rooms, totals, blocks, strict=True):
            for host, stack in zip(np.ravel(room.subfigures(1, len(each))), each, strict=True):
                rows = [heights[i] for i in stack[::wide]]
                rows += [total - sum(rows)] if total - sum(rows) > 1.0 else []
                grid = host.add_gridspec(len(rows), wide, height_ratios=rows)
                places.update({i: (host, grid[k // wide, k % wide]) for k, i in enumerate(stack)})
        for i, panel in enumerate(panels):
            host, place = places[i]
            like = [p for p in panels if p.quantity == panel.quantity and not p.alone]
            limits = _limits([panel] if panel.alone else like)
            _paint(panel, host.add_subplot(place), limits, cells[i], heights[i] - below)
            label: Any = ("axes fraction", figure.axes[-1].xaxis.label)
            note = ("\n".join(captions[i]), (0, 0), (0, -3), label, "offset points", None, False)
            figure.axes[-1].annotate(*note, va="top", **NOTE)
        for k, i in enumerate(numbers):  # the quantity is said once in a row
            if k % across and panels[i].quantity == panels[numbers[k - 1]].quantity:
                figure.axes[i].yaxis.label.set_visible(False)
        for pair, lines, room in zip(double, notes, every_room[len(blocks) :], strict=True):
            left, right = room.subplots(1, 2)
            joints.paint(pair, left, right, width)
            if lines:
                room.supxlabel("\n".join(lines), x=0.02, ha="left", **NOTE)
        figure.supxlabel("\n".join(key), x=2 / width, ha="left", **NOTE)
    return figure


def save(figure: Figure, stem: Path) -> list[Path]:
    """Write `stem`.png and `stem`.pdf, whole or not at all; equal figures give equal bytes."""
    written = []
    for ending, metadata in (("png", {}), ("pdf", {"CreationDate": None})):
        path = stem.with_name(f"{stem.name}.{ending}")  # a stem may contain dots
        with replacing(path) as temporary, look():
            figure.savefig(temporary, format=ending, dpi=200, metadata=metadata)
        written.append(path)
    return written


def density(panel: Panel, low: float, high: float, bins: int = 256) -> FloatArray:
    """Darkness of the strip between low and high, (bins,), each in [0, 1).

    The mass between quantiles is spread evenly and smoothed a little; darkness is d / (d + d₀) with
    d₀ a typical density, so that neither ties nor a value far away take contrast from the rest.
    """
    q = panel.quantiles
    spread = q[:-1, None] + np.diff(q)[:, None] * (np.arange(40) + 0.5) / 40
    mass = np.histogram(spread, bins, (low, high))[0] / spread.size
    kernel = np.exp(-0.5 * (np.arange(-12, 13) / 4.0) ** 2)
    padded = np.pad(mass, 12, mode="wrap" if panel.kind == "cycle" else "symmetric")
    smooth = np.convolve(padded, kernel / kernel.sum(), mode="valid")
    order = np.sort(smooth)
    weight = np.cumsum(np.sqrt(order))
    typical = order[np.searchsorted(weight, 0.5 * weight[-1])] or 1.0
    return np.asarray(smooth / (smooth + typical), dtype=np.float64)


def _paint(panel: Panel, ax: Axes, limits: Limits, width: float, height: float) -> None:
    """Draw a panel that has width by height millimetres for itself and its labels."""
    ax.spines[:].set_visible(False)
    ax.tick_params(which="both", length=2.5, width=0.6, color=FAINT, pad=2.5)
    ax.tick_params(labelsize=SIZE, labelcolor=INK, labelfontfamily=ax.xaxis.label.get_fontfamily())
    ax.tick_params(axis="y", length=0)
    levels = panel.kind == "levels"
    if panel.kind == "ranked":
        _paint_ranked(panel, ax, limits)
    else:
        (_paint_levels if levels else _paint_number)(panel, ax, limits, width)
    across, upward = (panel.covariate, panel.quantity)[:: -1 if levels else 1]
    room = (
        0.5 if panel.dates else 0.62 if levels else 0.75
    ) * width  # the line of dates has a year
    ax.set_xlabel("\n".join(wrapped(across, room, SIZE)), loc="left", **LABEL)
    ax.set_ylabel("\n".join(wrapped(upward, 0.75 * height, SIZE)), **LABEL)


def _paint_number(panel: Panel, ax: Axes, limits: Limits, width: float) -> None:
    from matplotlib.patches import Rectangle

    x, effect, lower, upper = panel.x, panel.effect, panel.lower, panel.upper
    shift = _ticks(panel, ax, 0.75 * width)
    if panel.kind == "cycle":
        turn = 1.0 if isinstance(panel.period, str) else float(panel.period or x[-1])
        at = np.concatenate([[0.0], x[(x > 0.0) & (x < turn)], [turn]])
        effect, lower, upper = (np.interp(at, x, v, period=turn) for v in (effect, lower, upper))
        x = at
    low, high = (x[0], x[-1]) if x[-1] > x[0] else (x[0] - 0.5, x[0] + 0.5)
    ends = (low + shift, high + shift)
    ax.set(xlim=ends, ylim=limits, axisbelow=True)
    ax.grid(axis="y", color=HAIR, linewidth=0.5)
    foot = STRIP if len(panel.quantiles) else 0.0
    start, stop = _core(panel) or (low, high)
    inner = np.concatenate([[start], x[(x > start) & (x < stop)], [stop]])
    both = len(panel.lower_whole) > 0
    wide_lower, wide_upper = (
        (panel.lower_whole, panel.upper_whole) if both else (panel.lower, panel.upper)
    )
    for at, tint, low_edge, high_edge in (
        (x, PALE, *_around(panel, x, wide_lower, wide_upper)),
        (x if both else inner, TINT, lower, upper),
    ):
        edges = (np.interp(at, x, low_edge), np.interp(at, x, high_edge))
        band = ax.fill_between(at + shift, *edges, color=tint, linewidth=0, zorder=1.0)
        band.set_clip_path(Rectangle((0, foot), 1, 1 - foot, transform=ax.transAxes))
    if foot:
        shades = 1.0 - density(panel, low, high)[None, :, None] * (1.0 - np.array(EARTH))
        strip = ax.imshow(shades, aspect="auto", interpolation="bilinear", zorder=1.5)
        strip.set(transform=ax.get_xaxis_transform(), extent=(*ends, 0.0, STRIP))
    ax.axhline(0.0, color=FAINT, linewidth=0.6, zorder=2.0)
    if len(panel.points):
        at, value = panel.points.T
        ax.plot(at + shift, value, ".", color=FAINT, markersize=1.6, alpha=0.5, zorder=1.8)
    ax.plot(x + shift, effect, color=DEEP, linewidth=1.6, solid_capstyle="butt", zorder=3.0)


def _around(
    panel: Panel, x: FloatArray, lower: FloatArray, upper: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """A band at the places x that are drawn; of a cycle they begin and end at its seam."""
    if panel.kind != "cycle":
        return lower, upper
    turn = 1.0 if isinstance(panel.period, str) else float(panel.period or x[-1])
    around = (np.interp(x, panel.x, v, period=turn) for v in (lower, upper))
    return next(around), next(around)


def _paint_ranked(panel: Panel, ax: Axes, limits: Limits) -> None:
    """Many groups, lowest effect first, each with its interval."""
    ax.set(xlim=(-1, len(panel.x)), ylim=limits, axisbelow=True)
    ax.grid(axis="y", color=HAIR, linewidth=0.5)
    ax.axhline(0.0, color=FAINT, linewidth=0.6, zorder=2.0)
    # Of very many groups evenly chosen ranks: bars side by side would be one grey.
    some = np.unique(np.linspace(0, len(panel.x) - 1, min(len(panel.x), 300)).astype(int))
    ax.vlines(panel.x[some], panel.lower[some], panel.upper[some], color=TINT, linewidth=0.8)
    ax.plot(panel.x, panel.effect, color=DEEP, linewidth=1.2, zorder=3.0)
    ax.set_xticks([0, len(panel.x) - 1], ["lowest", f"highest of {len(panel.x):,}"])


def _ticks(panel: Panel, ax: Axes, width: float) -> float:
    """Ticks by the habits of dates and periods; returns where the covariate's 0 is on the axis."""
    if isinstance(panel.period, str):
        places, names = CALENDAR[panel.period][0], CALENDAR[panel.period][1].split()
        step = next((s for s in (1, 2) if 7.0 * len(names) / s <= width), 3)
        ax.set_xticks(places[::step], names[::step])
        ax.set_xticks(places, minor=True)
    elif panel.period in STEPS:
        ax.set_xticks(np.arange(0.0, 1.001 * panel.period, STEPS[panel.period]))
    elif not panel.dates:
        ax.ticklabel_format(axis="x", useOffset=False)
    else:
        dates: Any = importlib.import_module("matplotlib.dates")  # its functions have no types
        locator = dates.AutoDateLocator(minticks=3, maxticks=6)
        ax.xaxis.set_major_locator(locator)
        ax.xaxis.set_major_formatter(dates.ConciseDateFormatter(locator))
        return float(dates.date2num(np.datetime64("1970-01-01")))
    return 0.0


def _paint_levels(panel: Panel, ax: Axes, limits: Limits, width: float) -> None:
    from matplotlib.transforms import ScaledTranslation, blended_transform_factory

    labels = _level_labels(panel, width)
    lines = np.array([label.count("\n") + 1.0 for label in labels])
    rows = np.cumsum(lines) - lines / 2
    ax.set(xlim=limits, ylim=(lines.sum() + 0.15, -0.15), axisbelow=True)
    ax.ticklabel_format(axis="x", useOffset=False)
    ax.set_yticks(rows, labels, parse_math=False, linespacing=1.15)
    ax.tick_params(axis="y", labelsize=ROW)
    ax.grid(axis="both", color=HAIR, linewidth=0.5)
    ax.axvline(0.0, color=FAINT, linewidth=0.6, zorder=1.0)
    thick = 4.0 if len(rows) <= 12 else 3.0
    ax.hlines(rows, panel.lower, panel.upper, color=TINT, linewidth=thick, capstyle="butt")
    ax.plot(panel.effect, rows, "o", color=DEEP, markersize=thick, markeredgewidth=0, zorder=3.0)
    for edge, sign, end in ((limits[0], -1, panel.lower), (limits[1], 1, panel.upper)):
        here = rows[sign * end > sign * edge]  # the bar goes on beyond the edge
        ax.plot(np.full(len(here), edge), here, color=DEEP, marker=4 + (sign > 0), ls="", ms=4)
    if len(panel.shares):  # in the margin: across in inches from the edge, upward as the rows
        across = ax.figure.dpi_scale_trans + ScaledTranslation(1, 0, cast(Any, ax.transAxes))
        margin: dict[str, Any] = {"transform": blended_transform_factory(across, ax.transData)}
        ends = 0.06 + 0.32 * panel.shares / max(panel.shares.max(), 1e-300)
        ax.hlines(rows, 0.06, ends, color=SAND, linewidth=4.5, clip_on=False, **margin)
        for row, end, share in zip(rows, ends, panel.shares, strict=True):
            number = f"{100 * share:.0f} %" if share >= 0.005 else "<1 %"
            ax.text(end + 0.03, row, number, va="center_baseline", **margin, **NOTE)


def _level_labels(panel: Panel, width: float) -> list[str]:
    """Labels in lines that fit a panel `width` mm wide; very long ones lose their middle."""
    lines = [wrapped(label, 0.36 * width, ROW) for label in panel.labels]
    return ["\n".join(w if len(w) <= 3 else [*w[:2], "… " + w[-1]]) for w in lines]


def _height(panel: Panel, width: float) -> float:
    """Millimetres that a panel `width` wide wants for itself and its labels."""
    if panel.kind != "levels":
        return min(max(0.72 * width, 36.0), 62.0)
    lines = sum(label.count("\n") + 1 for label in _level_labels(panel, width))
    return 15.0 + lines * (1.3 if len(panel.x) > 12 else 1.6) * ROW / MM


def _core(panel: Panel) -> Limits | None:
    """Where the central 98 % of the data are; None where there are no sparse ends to tell apart."""
    if panel.kind in ("cycle", "ranked") or not len(panel.quantiles):
        return None
    ends = np.clip(np.quantile(panel.quantiles, [0.01, 0.99]), panel.x[0], panel.x[-1])
    return (float(ends[0]), float(ends[1])) if ends[0] < ends[1] else None


def _limits(panels: Sequence[Panel]) -> Limits:
    """Limits of the effect's axis for these panels, with room for the strip at the foot.

    They hold the effect, and the band where it rests on data: neither that of the rarest levels
    (2 % of the data) nor that of sparse ends, whose effect may at most triple the height.
    """
    lows, highs = [], []
    for panel in panels:
        effect, lower, upper = panel.effect, panel.lower, panel.upper
        if panel.kind not in ("levels", "ranked"):
            start, stop = _core(panel) or (panel.x[0], panel.x[-1])
            at = np.linspace(start, stop, 200)
            effect, lower, upper = (np.interp(at, panel.x, v) for v in (effect, lower, upper))
        elif len(panel.shares):
            order = np.argsort(panel.shares, kind="stable")
            solid = order[np.cumsum(panel.shares[order]) > 0.02 * panel.shares.sum()]
            lower, upper = lower[solid], upper[solid]
        values = np.concatenate([effect, lower, upper])
        low, high = np.nanmin(values), np.nanmax(values)
        lows.append(min(low, max(panel.effect.min(), 2 * low - high)))
        highs.append(max(high, min(panel.effect.max(), 2 * high - low)))
    bottom, top = float(min(lows)), float(max(highs))
    span = top - bottom if top - bottom > 1e-12 * abs(top) else abs(top) or 1.0
    return bottom - 0.11 * span, top + 0.05 * span


def _key(panels: Sequence[Panel], double: Sequence[joints.Picture]) -> str:
    """What the tints, strips and bars are, for the kinds of panel there are."""
    families = [p for p in double if isinstance(p, joints.Family)]
    levels = sorted({p.level for p in panels} | {p.level for p in families})
    level = " or ".join(f"{100 * each:g} %" for each in levels)
    both = any(len(p.lower_whole) for p in panels)
    pale = ", paler outside the central 98 % of the data" if any(map(_core, panels)) else ""
    pale = f", paler: {level} as a whole" if both else pale
    parts = [
        any(p.kind not in ("levels", "ranked") for p in panels)
        * f"Band: {level} at each point{pale}; it may run past the edge. Zero: the data's average.",
        any(len(p.points) for p in panels) * "Points: partial residuals.",
        any(len(p.quantiles) for p in panels) * "Strip: the darker, the more data.",
        any(p.kind == "levels" for p in panels) * f"Bars of levels: {level} interval.",
        any(len(p.shares) for p in panels) * "Margin: share of the data.",
        any(p.kind == "ranked" for p in panels)
        * f"Groups: lines are {level} intervals, of at most 300 of them.",
        bool(families) * f"Curves by level: {level} bands at each point.",
        any(isinstance(p, joints.Surface) for p in double)
        * "Surfaces: left white where no data are near.",
    ]
    return " ".join(filter(None, parts))
