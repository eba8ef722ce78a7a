"""How our figures look: letters, colours, lengths, and text that is broken into lines."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:  # matplotlib is slow to import, and needed for drawing alone
    from matplotlib.figure import Figure

FloatArray = npt.NDArray[np.float64]
Limits = tuple[float, float]
MM = 72 / 25.4  # a millimetre in points
SIZE, ROW, SMALL = 8.0, 7.5, 6.5  # letters in points: labels, names of levels, notes
LINE = 1.35 * SMALL / MM  # height of a line of a note, in millimetres
DEEP, TINT, PALE = "#0B4A50", "#9ACBC8", "#D9EBE9"
EARTH, SAND = (0.42, 0.24, 0.03), "#B59A73"  # of the data; beside blue-green safe to tell apart
FAMILY = ("#0B4A50", "#C8641B", "#6C4AA0", "#2E8B57", "#B0305C", "#3A78C2", "#8A6D1F")
"""Colours of curves that share a picture; dashes tell them apart in grey."""
DASHES = ("-", "--", "-.", ":", (0, (6, 1.5)), (0, (3, 1, 1, 1, 1, 1)), (0, (1, 2)))
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


@contextmanager
def look() -> Iterator[None]:
    """Our settings, whatever the user's are; the user's font stands in for letters ours lacks."""
    from matplotlib import rcParams, style

    theirs = {*rcParams["font.family"], *rcParams["font.sans-serif"][:1]}
    family = ["DejaVu Sans", *sorted(theirs - {"DejaVu Sans", "sans-serif"})]
    with style.context(["default", {"font.family": family, "pdf.fonttype": 42}]):
        yield


def blank(width: float, height: float) -> Figure:
    from matplotlib.figure import Figure

    return Figure(figsize=(width / 25.4, height / 25.4), layout="constrained")


def wrapped(text: str, width: float, size: float) -> list[str]:
    """Lines no wider than `width` mm in letters of `size` points, by the letters' usual widths."""
    letter = np.mean([1.0 if c > "\u2e7f" else 0.58 + 0.1 * c.isupper() for c in text or " "])
    return textwrap.wrap(text, max(6, int(width * MM / size / letter)))
