"""Figures of components: one panel, a sheet of all of them, and their files.

A panel is plain numbers. The effect is a deep line over a band in two tints: the darker one holds
the central 98 % of the data, the paler one the sparse ends. A strip at the foot shows the density
of the data; levels are rows with their share of the data in the margin. Nothing needs a display.
"""

from __future__ import annotations

import importlib
import textwrap
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal, cast

import numpy as np
import numpy.typing as npt

from addmodel.files import replacing

if TYPE_CHECKING:  # matplotlib is slow to import, and needed for drawing alone
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

FloatArray = npt.NDArray[np.float64]
Limits = tuple[float, float]
MM = 72 / 25.4  # a millimetre in points
SIZE, ROW, SMALL = 8.0, 7.5, 6.5  # letters in points: labels, names of levels, notes
LINE = 1.35 * SMALL / MM  # height of a line of a note, in millimetres
DEEP, TINT, PALE = "#0B4A50", "#9ACBC8", "#D9EBE9"
EARTH, SAND = (0.42, 0.24, 0.03), "#B59A73"  # of the data; beside blue-green safe to tell apart
INK, FAINT, HAIR = "#333333", "#707070", "#E6E6E6"
LABEL: dict[str, Any] = {"fontsize": SIZE, "color": INK, "parse_math": False, "labelpad": 3}
NOTE: dict[str, Any] = {"fontsize": SMALL, "color": FAINT, "linespacing": 1.15, "parse_math": False}
STRIP = 0.04  # height of the strip as a fraction of the panel's
STEPS = {7.0: 1.0, 12.0: 3.0, 24.0: 6.0, 52.0: 13.0, 60.0: 15.0, 180.0: 45.0, 360.0: 90.0}
MONTHS = np.cumsum([0, 31, 28, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31]) / 365
CALENDAR = {  # positions and names of ticks; in STEPS, distances of ticks for some periods
    "year": (MONTHS, "Jan Feb Mar Apr May Jun Jul Aug Sep Oct Nov Dec Jan"),
    "month": (np.array([0, 7, 14, 21, 28]) / 30.44, "1 8 15 22 29"),
    "week": (np.arange(8) / 7, "Mon Tue Wed Thu Fri Sat Sun Mon"),
    "day": (np.arange(5) / 4, "0 6 12 18 24"),
}


@dataclass(frozen=True)
class Panel:
    """Everything one picture of one component needs; ValueError if lengths differ.

    `x` (g,) ascends: days since 1970-01-01 for dates, codes 0..L-1 for levels, for a cycle the
    position within the period, 0..period (0..1 if the period is "year", "month", "week" or "day").
    """

    kind: Literal["curve", "cycle", "line", "levels"]
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

    def __post_init__(self) -> None:
        shapes = {v.shape for v in (self.x, self.effect, self.lower, self.upper)}
        shapes |= {self.shares.shape} if len(self.shares) else set()
        if len(shapes) > 1 or (self.kind == "levels" and len(self.labels) != len(self.x)):
            raise ValueError(f"{self.covariate}: the panel's arrays are not of one length.")


def draw(panel: Panel, ax: Axes | None = None, ylim: Limits | None = None) -> Axes:
    """Draw a panel on `ax`, or on the axes of a new figure 90 mm wide.

    `ylim` limits the effect's axis; the default shows the effect, and the band where the data are.
    """
    with _look():
        if ax is None:
            ax = _blank(90.0, _height(panel, 90.0)).add_subplot()
        box = ax.get_window_extent()  # three quarters or so of the room with the labels
        scale = 25.4 / float(ax.figure.dpi) / 0.75
        _paint(panel, ax, ylim or _limits([panel]), box.width * scale, box.height * scale)
    return ax


def single(panel: Panel, width: float = 90.0) -> Figure:
    """One panel without its caption, as a figure `width` millimetres wide."""
    return sheet([replace(panel, caption="")], width)


def sheet(panels: Sequence[Panel], width: float = 180.0) -> Figure:
    """All panels on one figure, `width` millimetres wide; `figure.axes` are in the panels' order.

    Panels of the same quantity have the same scale. Numbers stand in a raster; levels, whose
    heights differ, in columns below it. ValueError if there are no panels.
    """
    if not panels:
        raise ValueError("a sheet needs at least one panel.")
    levels = [i for i, panel in enumerate(panels) if panel.kind == "levels"]
    numbers = [i for i, panel in enumerate(panels) if panel.kind != "levels"]
    narrowest = 85.0 if len(numbers) in (1, 2, 4) else 58.0 if len(numbers) <= 18 else 44.0
    across = max(1, min(len(numbers), int(width // narrowest)))
    stacks: list[list[int]] = [[] for _ in range(max(1, min(len(levels), int(width // 85.0))))]
    cells = [width / (len(stacks) if p.kind == "levels" else across) for p in panels]
    captions = [_wrapped(p.caption, 0.7 * c, SMALL) for p, c in zip(panels, cells, strict=True)]
    below = LINE * max(map(len, captions))
    heights = [_height(p, c) + below for p, c in zip(panels, cells, strict=True)]
    for i in levels:
        min(stacks, key=lambda stack: sum(heights[j] for j in stack)).append(i)
    blocks = [(each, wide) for each, wide in (([numbers], across), (stacks, 1)) if each[0]]
    totals = [max(sum(heights[i] for i in s[::wide]) for s in each) for each, wide in blocks]
    key = _wrapped(_key(panels), 0.97 * width, SMALL)
    with _look():
        figure = _blank(width, sum(totals) + LINE * len(key) + 2.0)
        places = {}
        rooms: Any = figure.subfigures(len(blocks), 1, height_ratios=totals)
        for room, total, (each, wide) in zip(np.ravel(rooms), totals, blocks, strict=True):
            for host, stack in zip(np.ravel(room.subfigures(1, len(each))), each, strict=True):
                rows = [heights[i] for i in stack[::wide]]
                rows += [total - sum(rows)] if total - sum(rows) > 1.0 else []
                grid = host.add_gridspec(len(rows), wide, height_ratios=rows)
                places.update({i: (host, grid[k // wide, k % wide]) for k, i in enumerate(stack)})
        for i, panel in enumerate(panels):
            host, place = places[i]
            limits = _limits([p for p in panels if p.quantity == panel.quantity])
            _paint(panel, host.add_subplot(place), limits, cells[i], heights[i] - below)
            label: Any = ("axes fraction", figure.axes[-1].xaxis.label)
            note = ("\n".join(captions[i]), (0, 0), (0, -3), label, "offset points", None, False)
            figure.axes[-1].annotate(*note, va="top", **NOTE)
        for k, i in enumerate(numbers):  # the quantity is said once in a row
            if k % across and panels[i].quantity == panels[numbers[k - 1]].quantity:
                figure.axes[i].yaxis.label.set_visible(False)
        figure.supxlabel("\n".join(key), x=2 / width, ha="left", **NOTE)
    return figure


def save(figure: Figure, stem: Path) -> list[Path]:
    """Write `stem`.png and `stem`.pdf, whole or not at all; equal figures give equal bytes."""
    written = []
    for ending, metadata in (("png", {}), ("pdf", {"CreationDate": None})):
        path = stem.with_name(f"{stem.name}.{ending}")  # a stem may contain dots
        with replacing(path) as temporary, _look():
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


@contextmanager
def _look() -> Iterator[None]:
    """Our settings, whatever the user's are; the user's font stands in for letters ours lacks."""
    from matplotlib import rcParams, style

    theirs = {*rcParams["font.family"], *rcParams["font.sans-serif"][:1]}
    family = ["DejaVu Sans", *sorted(theirs - {"DejaVu Sans", "sans-serif"})]
    with style.context(["default", {"font.family": family, "pdf.fonttype": 42}]):
        yield


def _blank(width: float, height: float) -> Figure:
    from matplotlib.figure import Figure

    return Figure(figsize=(width / 25.4, height / 25.4), layout="constrained")


def _paint(panel: Panel, ax: Axes, limits: Limits, width: float, height: float) -> None:
    """Draw a panel that has width by height millimetres for itself and its labels."""
    ax.spines[:].set_visible(False)
    ax.tick_params(which="both", length=2.5, width=0.6, color=FAINT, pad=2.5)
    ax.tick_params(labelsize=SIZE, labelcolor=INK, labelfontfamily=ax.xaxis.label.get_fontfamily())
    ax.tick_params(axis="y", length=0)
    levels = panel.kind == "levels"
    (_paint_levels if levels else _paint_number)(panel, ax, limits, width)
    across, upward = (panel.covariate, panel.quantity)[:: -1 if levels else 1]
    room = (
        0.5 if panel.dates else 0.62 if levels else 0.75
    ) * width  # the line of dates has a year
    ax.set_xlabel("\n".join(_wrapped(across, room, SIZE)), loc="left", **LABEL)
    ax.set_ylabel("\n".join(_wrapped(upward, 0.75 * height, SIZE)), **LABEL)


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
    for at, tint in ((x, PALE), (inner, TINT)):
        edges = (np.interp(at, x, lower), np.interp(at, x, upper))
        band = ax.fill_between(at + shift, *edges, color=tint, linewidth=0, zorder=1.0)
        band.set_clip_path(Rectangle((0, foot), 1, 1 - foot, transform=ax.transAxes))
    if foot:
        shades = 1.0 - density(panel, low, high)[None, :, None] * (1.0 - np.array(EARTH))
        strip = ax.imshow(shades, aspect="auto", interpolation="bilinear", zorder=1.5)
        strip.set(transform=ax.get_xaxis_transform(), extent=(*ends, 0.0, STRIP))
    ax.axhline(0.0, color=FAINT, linewidth=0.6, zorder=2.0)
    ax.plot(x + shift, effect, color=DEEP, linewidth=1.6, solid_capstyle="butt", zorder=3.0)


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
    wrapped = [_wrapped(label, 0.36 * width, ROW) for label in panel.labels]
    return ["\n".join(w if len(w) <= 3 else [*w[:2], "… " + w[-1]]) for w in wrapped]


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
        if panel.kind != "levels":
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


def _key(panels: Sequence[Panel]) -> str:
    """What the tints, strips and bars are, for the kinds of panel there are."""
    level = " or ".join(f"{100 * each:g} %" for each in sorted({p.level for p in panels}))
    pale = ", paler outside the central 98 % of the data" if any(map(_core, panels)) else ""
    parts = [
        any(p.kind != "levels" for p in panels)
        * f"Band: {level} at each point{pale}; it may run past the edge. Zero: the data's average.",
        any(len(p.quantiles) for p in panels) * "Strip: the darker, the more data.",
        any(p.kind == "levels" for p in panels) * f"Bars of levels: {level} interval.",
        any(len(p.shares) for p in panels) * "Margin: share of the data.",
    ]
    return " ".join(filter(None, parts))


def _wrapped(text: str, width: float, size: float) -> list[str]:
    """Lines no wider than `width` mm in letters of `size` points, by the letters' usual widths."""
    letter = np.mean([1.0 if c > "\u2e7f" else 0.58 + 0.1 * c.isupper() for c in text or " "])
    return textwrap.wrap(text, max(6, int(width * MM / size / letter)))
