"""Figures: what is drawn, where, on which scale; and the files."""

from __future__ import annotations

import itertools
import re
import subprocess
import sys
import zlib
from dataclasses import replace
from pathlib import Path
from typing import Any

import matplotlib
import matplotlib.dates
import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from addmodel import figures, joints
from addmodel.figures import Panel, density, draw, save, sheet, single

QUANTITY = "Effect on pm (difference)"
TINT, PALE = (154, 203, 200), (217, 235, 233)
PROBABILITIES = np.linspace(0.0, 1.0, 201)


def curve(data: np.ndarray | None = None, size: float = 1.0, **options: Any) -> Panel:
    """A curve whose band is some hundred times wider at the ends than in the middle."""
    data = np.random.default_rng(3).normal(10.0, 3.0, 4000) if data is None else data
    x = np.linspace(data.min(), data.max(), 300)
    middle, spread = np.median(data), np.ptp(np.quantile(data, [0.25, 0.75]))
    effect = size * np.tanh((x - middle) / max(spread, 1e-9))
    half = size * (0.1 + 0.3 * np.abs((x - middle) / max(spread, 1e-9) / 1.7) ** 12)
    given: dict[str, Any] = {
        "kind": "curve",
        "covariate": "Temperature (°C)",
        "quantity": QUANTITY,
        "x": x,
        "effect": effect,
        "lower": effect - half,
        "upper": effect + half,
        "level": 0.95,
        "quantiles": np.quantile(data, PROBABILITIES),
    }
    return Panel(**{**given, **options})


def cycle(period: float | str = 24.0, **options: Any) -> Panel:
    """A cycle whose grid stops short of both ends of the period."""
    turn = 1.0 if isinstance(period, str) else period
    x = turn * np.linspace(0.01, 0.98, 120)
    effect = np.sin(2.0 * np.pi * x / turn + 0.7)
    return Panel(
        **{
            "kind": "cycle",
            "covariate": "Hour",
            "quantity": QUANTITY,
            "x": x,
            "effect": effect,
            "lower": effect - 0.2,
            "upper": effect + 0.2,
            "level": 0.95,
            "quantiles": turn * PROBABILITIES**2,
            "period": period,
            **options,
        }
    )


def stations(count: int, labels: tuple[str, ...] = (), **options: Any) -> Panel:
    generator = np.random.default_rng(count)
    effect = generator.normal(size=count)
    half = generator.uniform(0.2, 1.0, count)
    return Panel(
        **{
            "kind": "levels",
            "covariate": "Station",
            "quantity": QUANTITY,
            "x": np.arange(float(count)),
            "effect": effect,
            "lower": effect - half,
            "upper": effect + half,
            "level": 0.95,
            "labels": labels or tuple(f"station {i}" for i in range(count)),
            "shares": generator.dirichlet(np.full(count, 3.0)),
            **options,
        }
    )


def line_of(ax: Axes) -> np.ndarray:
    """(g, 2) of the effect's line: the only thick one."""
    found = [line for line in ax.lines if line.get_linewidth() > 1.0 and len(line.get_xdata()) > 2]
    assert len(found) == 1
    return np.asarray(found[0].get_xydata())


def bands_of(ax: Axes) -> dict[tuple[int, ...], np.ndarray]:
    """Vertices of the filled bands, by their colour."""
    return {
        tuple(int(v) for v in np.round(255 * band.get_facecolor()[0, :3])): np.asarray(
            band.get_paths()[0].vertices
        )
        for band in ax.collections
    }


def drawn(figure: Figure) -> list[Any]:
    """Extents in pixels of everything that takes room, panel by panel."""
    figure.draw_without_rendering()
    return [ax.get_tightbbox() for ax in figure.axes]


def test_importing_the_module_leaves_matplotlib_alone() -> None:
    alone = (
        "import importlib.util as u, sys;"
        "s = u.spec_from_file_location('figures', 'addmodel/figures.py');"
        "m = u.module_from_spec(s); sys.modules['figures'] = m; s.loader.exec_module(m);"
        "print('matplotlib' in sys.modules)"
    )
    root = Path(__file__).parents[1]
    result = subprocess.run(
        [sys.executable, "-c", alone], cwd=root, capture_output=True, text=True, check=True
    )
    assert result.stdout.strip() == "False"


def test_axes_say_the_quantities_and_nothing_stands_in_the_frame() -> None:
    ax = draw(curve())
    assert ax.get_xlabel() == "Temperature (°C)"
    assert ax.get_ylabel() == QUANTITY
    assert ax.get_title() == ""
    assert not ax.texts
    ax = draw(stations(4))
    assert ax.get_ylabel() == "Station"
    assert ax.get_xlabel() == QUANTITY


def test_line_and_band_are_the_panel_s_numbers() -> None:
    panel = curve()
    ax = draw(panel)
    np.testing.assert_array_equal(line_of(ax), np.column_stack([panel.x, panel.effect]))
    bands = bands_of(ax)
    assert set(bands) == {TINT, PALE}
    whole = bands[PALE]
    for x, y in zip(panel.x, panel.lower, strict=True):
        assert np.any(np.all(np.isclose(whole, [x, y]), axis=1))
    for x, y in zip(panel.x, panel.upper, strict=True):
        assert np.any(np.all(np.isclose(whole, [x, y]), axis=1))
    inner = bands[TINT]
    assert inner[:, 0].min() == pytest.approx(panel.quantiles[2])
    assert inner[:, 0].max() == pytest.approx(panel.quantiles[198])


def test_an_axes_of_the_user_is_drawn_on_and_given_back() -> None:
    figure = Figure(figsize=(6, 3))
    left, right = figure.subplots(1, 2)
    assert draw(curve(), right, ylim=(-7.0, 9.0)) is right
    assert right.get_ylim() == (-7.0, 9.0)
    assert not left.lines
    assert draw(stations(3), left, ylim=(-4.0, 5.0)).get_xlim() == (-4.0, 5.0)


def test_sparse_ends_do_not_set_the_scale() -> None:
    panel = curve()
    low, high = draw(panel).get_ylim()
    inside = (panel.x >= panel.quantiles[2]) & (panel.x <= panel.quantiles[198])
    assert panel.upper.max() > 15.0  # so wide that all of it would flatten the curve
    assert high < 5.0
    assert low > -5.0
    assert low <= panel.lower[inside].min()
    assert high >= panel.upper[inside].max()
    assert low <= panel.effect.min() < panel.effect.max() <= high


def test_without_quantiles_all_of_the_band_shows() -> None:
    panel = replace(curve(), quantiles=np.empty(0))
    ax = draw(panel)
    low, high = ax.get_ylim()
    assert low <= panel.lower.min()
    assert high >= panel.upper.max()
    assert not ax.images


def test_a_panel_without_any_spread_has_limits() -> None:
    zero = np.zeros(300)
    low, high = draw(curve(effect=zero, lower=zero, upper=zero)).get_ylim()
    assert low < 0.0 < high
    one = np.ones(1)
    ax = draw(curve(x=one, effect=one, lower=one, upper=one, quantiles=np.ones(201)))
    assert ax.get_xlim()[0] < 1.0 < ax.get_xlim()[1]


def test_strip_is_darker_where_there_are_more_data() -> None:
    data = np.concatenate([np.linspace(0, 50, 200), np.linspace(50, 100, 1800)])
    panel = curve(data)
    ax = draw(panel)
    (strip,) = ax.images
    light = np.asarray(strip.get_array())[0].mean(axis=1)
    n = len(light)
    assert light[n // 10 : 4 * n // 10].mean() > light[6 * n // 10 : 9 * n // 10].mean() + 0.15
    left, right, bottom, top = strip.get_extent()
    assert (left, right) == ax.get_xlim()
    assert (bottom, top) == (0.0, 0.04)


def test_strip_stays_readable_with_a_glitch_far_away() -> None:
    """Over the range of the curve the strip is the same whether or not one value is a glitch."""
    data = np.random.default_rng(1).normal(10.0, 3.0, 5000)
    clean = curve(data)
    spoilt = replace(clean, quantiles=np.quantile(np.append(data, 1e6), PROBABILITIES))
    np.testing.assert_allclose(
        density(spoilt, 0.0, 20.0), density(clean, 0.0, 20.0), atol=0.05, rtol=0.0
    )
    whole = density(spoilt, 0.0, 1e6)
    assert whole[0] > 0.4
    assert whole[20:].max() < 0.02


def test_strip_keeps_contrast_beside_ties() -> None:
    """Seven of ten values are 0, the others uniform: the others must still be seen."""
    quantiles = np.where(PROBABILITIES < 0.7, 0.0, (PROBABILITIES - 0.7) / 0.3)
    dark = density(curve(quantiles=quantiles), 0.0, 1.0)
    assert dark[0] > 0.9
    assert 0.3 < dark[60:230].min() <= dark[60:230].max() < 0.8
    np.testing.assert_array_equal(density(curve(quantiles=np.full(201, 5.0)), 0.0, 1.0), 0.0)


def test_strip_of_a_cycle_goes_round() -> None:
    quantiles = np.linspace(0.0, 2.0, 201)  # all in the first two hours
    dark = density(cycle(quantiles=quantiles), 0.0, 24.0)
    assert dark[-1] == pytest.approx(dark[0], abs=0.1)
    assert density(curve(quantiles=quantiles), 0.0, 24.0)[-1] == 0.0


@pytest.mark.parametrize("period", [24.0, "year"])
def test_cycle_closes(period: float | str) -> None:
    ax = draw(cycle(period))
    turn = 24.0 if period == 24.0 else 1.0
    effect = line_of(ax)
    assert effect[0, 0] == 0.0
    assert effect[-1, 0] == turn
    assert effect[0, 1] == effect[-1, 1]
    assert effect[0, 1] == pytest.approx(np.sin(0.7), abs=0.02)
    assert ax.get_xlim() == (0.0, turn)
    band = bands_of(ax)[TINT]
    ends = [np.sort(np.unique(band[band[:, 0] == x, 1])) for x in (0.0, turn)]
    np.testing.assert_allclose(ends[0], ends[1])


@pytest.mark.parametrize(
    ("period", "ticks"),
    [
        (24.0, ["0", "6", "12", "18", "24"]),
        ("day", ["0", "6", "12", "18", "24"]),
        ("week", ["Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun", "Mon"]),
        ("year", ["Jan", "Mar", "May", "Jul", "Sep", "Nov", "Jan"]),
        ("month", ["1", "8", "15", "22", "29"]),
    ],
)
def test_ticks_of_a_cycle(period: float | str, ticks: list[str]) -> None:
    ax = draw(cycle(period))
    ax.figure.draw_without_rendering()  # type: ignore[union-attr]
    assert [tick.get_text() for tick in ax.get_xticklabels()] == ticks
    if period == "year":
        assert ax.get_xticks()[1] == pytest.approx(59.0 / 365.0)  # 1 March
    if period == 24.0:
        np.testing.assert_allclose(ax.get_xticks(), [0.0, 6.0, 12.0, 18.0, 24.0])


def test_dates_have_dates_at_their_ticks() -> None:
    first = float(np.datetime64("2021-03-10", "D").astype(int))
    data = first + np.random.default_rng(2).uniform(0, 700, 3000)
    ax = draw(curve(data, dates=True))
    ax.figure.draw_without_rendering()  # type: ignore[union-attr]
    texts = [label.get_text() for label in ax.get_xticklabels()]
    assert "2022" in texts
    assert len(texts) <= 7
    start = matplotlib.dates.num2date(ax.get_xlim()[0])
    assert (start.year, start.month) == (2021, 3)


def test_levels_are_rows_in_the_given_order() -> None:
    panel = stations(5, labels=("north", "a_b", "$5$-$10$", "zeta", "alpha"))
    ax = draw(panel)
    ax.figure.draw_without_rendering()  # type: ignore[union-attr]
    assert [label.get_text() for label in ax.get_yticklabels()] == list(panel.labels)
    assert not any(label.get_parse_math() for label in ax.get_yticklabels())
    assert ax.yaxis_inverted()
    points = next(line for line in ax.lines if line.get_marker() == "o")
    np.testing.assert_array_equal(points.get_xdata(), panel.effect)
    assert np.all(np.diff(points.get_ydata()) > 0)
    np.testing.assert_array_equal(points.get_ydata(), ax.get_yticks())
    bars = np.array([path.vertices[:, 0] for path in ax.collections[0].get_paths()])
    np.testing.assert_array_equal(bars, np.column_stack([panel.lower, panel.upper]))
    margin = [np.ptp(path.vertices[:, 0]) for path in ax.collections[1].get_paths()]
    np.testing.assert_allclose(margin / margin[0], panel.shares / panel.shares[0])
    assert ax.texts[0].get_text() == f"{100 * panel.shares[0]:.0f} %"


def test_a_rare_level_does_not_set_the_scale_and_its_bar_is_seen_to_go_on() -> None:
    panel = stations(4)
    shares = np.array([0.5, 0.3, 0.195, 0.005])
    lower = np.append(panel.lower[:3], -500.0)
    ax = draw(replace(panel, shares=shares, lower=lower))
    assert ax.get_xlim()[0] > -10.0
    carets = [line for line in ax.lines if line.get_marker() == 4 and len(line.get_ydata())]
    assert len(carets) == 1
    np.testing.assert_array_equal(carets[0].get_xdata(), ax.get_xlim()[:1])
    assert carets[0].get_ydata()[0] == ax.get_yticks()[3]


@pytest.mark.parametrize("count", [2, 25, 60])
def test_names_of_levels_do_not_overlap(count: int) -> None:
    long = "Municipal Waste Treatment and Energy Recovery Works, Eastern Approach Road, Gate"
    labels = tuple(f"{long} {i}" if i % 5 == 1 else f"station {i}" for i in range(count))
    figure = single(stations(count, labels))
    figure.draw_without_rendering()
    (ax,) = figure.axes
    boxes = [label.get_window_extent() for label in ax.get_yticklabels()]
    assert len(boxes) == count
    for above, under in itertools.pairwise(boxes):
        assert under.y1 <= above.y0 + 1.0
    assert min(box.x0 for box in boxes) >= 0.0
    assert ax.get_window_extent().width > 0.3 * figure.bbox.width
    assert max(box.x1 for box in [text.get_window_extent() for text in ax.texts]) <= figure.bbox.x1


def test_sheet_has_one_scale_for_one_quantity() -> None:
    panels = [curve(), cycle(), stations(4), curve(size=6.0), curve(quantity="Effect on rate")]
    figure = sheet(panels)
    assert len(figure.axes) == 5
    limits = [ax.get_ylim() for ax in figure.axes]
    assert limits[0] == limits[1] == limits[3] == figure.axes[2].get_xlim()
    assert limits[4] != limits[0]
    assert limits[0][0] < -6.0 + 0.5
    assert [ax.get_xlabel() for ax in figure.axes] == [
        "Temperature (°C)",
        "Hour",
        QUANTITY,
        "Temperature (°C)",
        "Temperature (°C)",
    ]


@pytest.mark.parametrize(("numbers", "levels"), [(1, 0), (2, 1), (3, 2), (0, 1), (0, 3), (7, 1)])
def test_sheet_has_no_overlaps(numbers: int, levels: int) -> None:
    caption = "The effect bends (p < 0.001) and is largest, 2.1 above the average, at 24 °C."
    panels = [curve(caption=caption if i % 2 else "") for i in range(numbers)]
    panels += [stations(4 + 9 * i, caption=caption) for i in range(levels)]
    figure = sheet(panels)
    boxes = drawn(figure)
    assert len(boxes) == numbers + levels
    for i, a in enumerate(boxes):
        assert a.x0 >= -1.0
        assert a.y0 >= -1.0
        assert a.x1 <= figure.bbox.x1 + 1.0
        assert a.y1 <= figure.bbox.y1 + 1.0
        for b in boxes[:i]:
            across = min(a.x1, b.x1) - max(a.x0, b.x0)
            along = min(a.y1, b.y1) - max(a.y0, b.y0)
            assert across <= 1.0 or along <= 1.0


def test_sheet_takes_columns_by_the_room_there_is() -> None:
    def columns(count: int, width: float) -> int:
        figure = sheet([curve()] * count, width)
        figure.draw_without_rendering()
        return len({round(ax.get_position().x0, 3) for ax in figure.axes})

    assert columns(1, 180.0) == 1
    assert columns(4, 180.0) == 2
    assert columns(6, 180.0) == 3
    assert columns(4, 90.0) == 1
    assert sheet([curve()] * 4, 180.0).get_figwidth() == pytest.approx(180.0 / 25.4)


def test_thirty_panels_on_one_sheet() -> None:
    figure = sheet([curve()] * 30)
    figure.draw_without_rendering()
    sizes = [ax.get_window_extent() for ax in figure.axes]
    assert len(sizes) == 30
    assert min(box.width / figure.dpi * 25.4 for box in sizes) > 25.0
    assert min(box.height / figure.dpi * 25.4 for box in sizes) > 18.0


def test_quantity_is_said_once_in_a_row() -> None:
    figure = sheet([curve(), cycle(), curve(), cycle(quantity="Effect on rate")])
    assert [ax.yaxis.label.get_visible() for ax in figure.axes] == [True, False, True, True]


def test_caption_and_key_of_a_sheet() -> None:
    figure = sheet([curve(caption="It bends (p = 0.01)."), stations(4)])
    assert figure.axes[0].texts[-1].get_text() == "It bends (p = 0.01)."
    key = figure.get_supxlabel().replace("\n", " ")
    assert "95 %" in key
    assert "share of the data" in key
    assert "share" not in sheet([curve()]).get_supxlabel()
    alone = single(curve(caption="It bends (p = 0.01)."))
    assert not any(text.get_text() for text in alone.axes[0].texts)


def test_settings_of_the_user_neither_leak_in_nor_change() -> None:
    before = dict(matplotlib.rcParams)
    plain = single(curve())
    assert dict(matplotlib.rcParams) == before
    with matplotlib.rc_context({"figure.facecolor": "black", "lines.linewidth": 9.0}):
        other = single(curve())
    assert other.get_facecolor() == plain.get_facecolor() == (1.0, 1.0, 1.0, 1.0)


def test_files(tmp_path: Path) -> None:
    paths = save(single(curve()), tmp_path / "curve(pm2.5)")
    assert [path.name for path in paths] == ["curve(pm2.5).png", "curve(pm2.5).pdf"]
    assert sorted(path.name for path in tmp_path.iterdir()) == sorted(p.name for p in paths)
    png, pdf = (path.read_bytes() for path in paths)
    assert png.startswith(b"\x89PNG")
    width = int.from_bytes(png[16:20], "big")
    assert width == pytest.approx(90.0 / 25.4 * 200.0, abs=1.5)
    assert pdf.startswith(b"%PDF")
    assert b"/FontFile2" in pdf
    assert b"/Type3" not in pdf
    assert b"CreationDate" not in pdf
    texts = [zlib.decompress(part) for part in re.findall(rb"stream\r?\n(.*?)endstream", pdf, re.S)]
    assert any(b"Tj" in text or b"TJ" in text for text in texts)


def test_same_figure_same_bytes(tmp_path: Path) -> None:
    panels = [curve(caption="It bends."), cycle(), stations(6)]
    figure = sheet(panels)
    first = [path.read_bytes() for path in save(figure, tmp_path / "a")]
    again = [path.read_bytes() for path in save(figure, tmp_path / "a")]
    rebuilt = [path.read_bytes() for path in save(sheet(panels), tmp_path / "b")]
    assert first == again
    assert first == rebuilt


def test_a_failed_write_leaves_what_was_there(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    paths = save(single(curve()), tmp_path / "a")
    old = [path.read_bytes() for path in paths]

    def fail(*_: object, **__: object) -> None:
        raise OSError("disk full")

    figure = single(cycle())
    monkeypatch.setattr(Path, "replace", fail)
    with pytest.raises(OSError, match="disk full"):
        save(figure, tmp_path / "a")
    assert [path.read_bytes() for path in paths] == old
    assert sorted(tmp_path.iterdir()) == sorted(paths)


def test_wrong_lengths_are_refused() -> None:
    with pytest.raises(ValueError, match=r"Temperature \(°C\): the panel's arrays"):
        curve(lower=np.zeros(4))
    with pytest.raises(ValueError, match="Station"):
        stations(4, labels=("a", "b"))
    with pytest.raises(ValueError, match="at least one panel"):
        sheet([])


def surface(map_: bool = False) -> joints.Surface:
    x, y = np.linspace(0, 12, 25), np.linspace(0, 6, 21)
    effect = np.sin(x / 2)[:, None] * np.cos(y / 2)[None, :]
    effect[:4, :4] = np.nan
    scale = joints.Scale("east, km"), joints.Scale("north, km")
    return joints.Surface(*scale, "Effect on y", x, y, effect, 0.1 + 0 * effect, map_)


def family(curves: int) -> joints.Family:
    x = np.linspace(0, 24, 49)
    effect = np.array([np.sin(2 * np.pi * x / 24 + k / 3) for k in range(curves)])
    about = effect - effect.mean(axis=0)
    labels = tuple(f"level {k}" for k in range(curves))
    bands = (effect - 0.2, effect + 0.2, about, about - 0.2, about + 0.2)
    across = joints.Scale("hour", period=24.0)
    return joints.Family(across, "Effect on y", x, labels, effect, *bands, 0.95)


def test_a_map_has_one_scale_and_leaves_white_what_it_does_not_know():
    figure = figures.single(surface(map_=True))
    fields = figure.axes[:2]
    for field in fields:
        assert field.get_aspect() == 1.0
        assert field.get_xlabel() == "east, km"
        assert field.get_ylabel() == "north, km"
    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    corner = fields[0].transData.transform((0.5, 0.4)).astype(int)
    image = np.asarray(canvas.buffer_rgba())
    assert (image[-corner[1], corner[0], :3] > 250).all()


@pytest.mark.parametrize("curves", [3, 12])
def test_curves_by_level_and_their_deviations(curves):
    figure = figures.single(family(curves))
    left, right = figure.axes[:2]
    drawn = [line for line in left.get_lines() if len(line.get_xdata()) == 49]
    assert len(drawn) == curves
    deviations = [line for line in right.get_lines() if len(line.get_xdata()) == 49]
    total = sum(line.get_ydata() for line in deviations)
    np.testing.assert_allclose(total, 0, atol=1e-12)
    if curves <= joints.MANY:
        texts = [text.get_text() for text in right.get_legend().get_texts()]
        assert texts == [f"level {k}" for k in range(curves)]


def test_a_sheet_of_all_kinds(tmp_path):
    figure = figures.sheet([surface(), family(3), surface(map_=True)])
    figures.save(figure, tmp_path / "all")
    assert (tmp_path / "all.pdf").stat().st_size > 10_000
    with pytest.raises(ValueError, match="two fields"):
        figures.draw(family(2), figure.axes[0])
