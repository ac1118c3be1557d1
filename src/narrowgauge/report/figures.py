"""Drawings of charts, made by matplotlib without its global state: the same chart gives the same bytes.

Sizes are in pixels of the page. Places of axes and labels do not hang on how wide a font is, and text stays text, in
the page's own font; so no two machines draw differently. Needs the `report` extra.
"""

from __future__ import annotations

import io
import math
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any

import matplotlib
from matplotlib.figure import Figure

from narrowgauge.report.charts import Dot, GainChart, LineChart, Series, extent, power
from narrowgauge.report.palette import LIGHT
from narrowgauge.report.svg import page_svg
from narrowgauge.report.wording import shown_edge

__all__ = ["NARROW", "WIDE", "Layout", "drawing_of", "gains", "lines", "plain_axes"]

_DPI = 72  # at which a point is a pixel
_ROLES = {value: role for role, value in LIGHT.items() if role in ("ink", "muted", "rule", "paper") or role[0] == "s"}
_WIDEST = 3.0  # half an interval, in powers of two


@dataclass(frozen=True, slots=True, kw_only=True)
class Layout:
    """Width and height of a drawing, the margins around its axes, and the size of its text, all in pixels."""

    name: str
    width: int
    height: int
    left: int
    right: int
    top: int
    bottom: int
    text: float
    ticks: int  # labels that fit across


WIDE = Layout(name="wide", width=760, height=420, left=58, right=92, top=40, bottom=62, text=13.0, ticks=14)
NARROW = Layout(name="narrow", width=340, height=380, left=44, right=72, top=38, bottom=60, text=12.0, ticks=6)


def lines(chart: LineChart, layout: Layout, prefix: str) -> str:
    """Return a chart of lines as SVG for a page, with ids that begin with `prefix`."""
    names = [series.label for series in chart.series]
    roomy = replace(layout, right=max(layout.right, 26 + math.ceil(0.65 * layout.text * max(map(len, names)))))
    return drawing_of(prefix, roomy, lambda drawing: _lines(drawing, chart, roomy))


def gains(chart: GainChart, layout: Layout, prefix: str) -> str:
    """Return a chart of gains, one row a level, as SVG for a page; its height follows the number of rows."""
    row = 30 if layout.name == "wide" else 44
    right = 190 if layout.name == "wide" else 16
    tall = replace(layout, height=layout.top + layout.bottom + row * len(chart.rows), right=right)
    return drawing_of(prefix, tall, lambda drawing: _gains(drawing, chart, tall))


def drawing_of(prefix: str, layout: Layout, draw: Callable[[Figure], None]) -> str:
    """Return what a function draws on a figure of this size as SVG for a page, with ids that begin with `prefix`."""
    with _settings(prefix):
        drawing = Figure(figsize=(layout.width / _DPI, layout.height / _DPI), dpi=_DPI)
        drawing.patch.set_visible(False)
        draw(drawing)
        text = io.StringIO()
        drawing.savefig(text, format="svg", metadata={"Date": None, "Creator": None})
    return page_svg(text.getvalue(), _ROLES, prefix)


@contextmanager
def _settings(prefix: str) -> Iterator[None]:
    """Draw with matplotlib's defaults, whatever a user's own settings are, and put those back."""
    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update({"svg.fonttype": "none", "svg.hashsalt": prefix, "text.parse_math": False})
        yield


def plain_axes(drawing: Figure, layout: Layout) -> Any:
    """Return axes inside the margins, with one line below them and labels without ticks."""
    box = (
        layout.left / layout.width,
        layout.bottom / layout.height,
        1.0 - (layout.left + layout.right) / layout.width,
        1.0 - (layout.top + layout.bottom) / layout.height,
    )
    axes = drawing.add_axes(box)
    axes.patch.set_visible(False)
    for side, spine in axes.spines.items():
        spine.set_visible(side == "bottom")
        spine.set_edgecolor(LIGHT["muted"])
    axes.tick_params(length=0, colors=LIGHT["muted"], labelsize=layout.text)
    return axes


def _lines(drawing: Figure, chart: LineChart, layout: Layout) -> None:
    axes = plain_axes(drawing, layout)
    heights = list(_heights(chart))
    low, high = extent(heights, 2.0)
    margin = 0.04 * (high - low)
    axes.set_ylim(low - margin, high + margin)
    first, last = chart.ticks[0].x, chart.ticks[-1].x
    side = 0.03 * max(1.0, last - first)
    axes.set_xlim(first - side, last + side)
    _across(axes, chart, layout)
    _up(axes, low, high, layout)
    axes.text(0, layout.height - 16, chart.up, transform=None, fontsize=layout.text, color=LIGHT["muted"])
    if chart.measured_to is not None:
        axes.axvline(chart.measured_to, color=LIGHT["muted"], linewidth=1.0, zorder=1)
        place = (chart.measured_to, 1.0)
        axes.annotate(
            "extrapolated \u2192",
            place,
            (5, -2),
            xycoords=axes.get_xaxis_transform(),
            textcoords="offset pixels",
            fontsize=layout.text - 1.0,
            color=LIGHT["muted"],
            va="top",
        )
    if chart.guide is not None:
        axes.plot(*zip(*chart.guide[0], strict=True), color=LIGHT["muted"], linewidth=1.0, dashes=(2.0, 3.0))
    for series in chart.series:
        _series(axes, series)
    for x, y in chart.rings:
        ink = LIGHT["ink"]
        axes.plot([x], [y], marker="o", color=ink, markersize=17.0, markerfacecolor="none", markeredgecolor=ink)
    _labels(axes, chart, layout)


def _heights(chart: LineChart) -> Iterator[float]:
    for series in chart.series:
        for dot in series.dots:
            # An interval wider than that runs out of the drawing; it would press all else together.
            yield from (max(dot.low, dot.y - _WIDEST), min(dot.high, dot.y + _WIDEST))
        yield from (y for _, y in (*series.solid, *series.dashed))
    if chart.guide is not None:
        yield from (y for _, y in chart.guide[0])


def _across(axes: Any, chart: LineChart, layout: Layout) -> None:
    """Label the ticks across in two rows, each as often as its labels fit."""
    kept = chart.ticks[:: max(math.ceil(len(chart.ticks) / layout.ticks), _every(chart, layout, "label"))]
    axes.set_xticks([tick.x for tick in kept], [tick.label for tick in kept])
    base, size = layout.bottom - 38, layout.text
    for tick in chart.ticks[:: _every(chart, layout, "below")]:
        axes.annotate(
            tick.below,
            (tick.x, 0.0),
            (0, base - layout.bottom),
            xycoords=axes.get_xaxis_transform(),
            textcoords="offset pixels",
            ha="center",
            fontsize=size - 1.0,
            color=LIGHT["muted"],
        )
    x = layout.width - layout.right + 14
    axes.text(x, layout.bottom - 16, chart.across, transform=None, fontsize=size, color=LIGHT["muted"])
    if chart.below:
        axes.text(x, base, chart.below, transform=None, fontsize=size - 1.0, color=LIGHT["muted"])


def _every(chart: LineChart, layout: Layout, row: str) -> int:
    """Return at every which tick a row of labels has room for its longest one."""
    longest = max(len(getattr(tick, row)) for tick in chart.ticks)
    needed = 0.62 * layout.text * (longest + 1)
    return max(1, math.ceil(needed * len(chart.ticks) / (layout.width - layout.left - layout.right)))


def _up(axes: Any, low: float, high: float, layout: Layout) -> None:
    step = max(1, math.ceil((high - low) / 8))
    step += step % 2 if step > 1 else 0
    ticks = [step * number for number in range(math.ceil(low / step), math.floor(high / step) + 1)]
    axes.set_yticks(ticks, [power(tick) for tick in ticks])
    axes.grid(axis="y", color=LIGHT["rule"], linewidth=0.8)
    axes.set_axisbelow(True)


def _series(axes: Any, series: Series) -> None:
    colour, width = LIGHT[series.look.role], 2.4 if series.thick else 1.6
    if series.solid:
        axes.plot(*zip(*series.solid, strict=True), color=colour, linewidth=width)
    elif len(series.dots) > 1:  # no law: the points are joined by a hair
        axes.plot([dot.x for dot in series.dots], [dot.y for dot in series.dots], color=colour, linewidth=0.7)
    if series.dashed:
        axes.plot(*zip(*series.dashed, strict=True), color=colour, linewidth=width, dashes=series.look.dash)
    for dot in series.dots:
        _dot(axes, dot, series.look.marker, colour)


def _dot(axes: Any, dot: Dot, marker: str, colour: str) -> None:
    if dot.high > dot.low:
        axes.plot([dot.x, dot.x], [dot.low, dot.high], color=colour, linewidth=1.4, solid_capstyle="butt")
    face = colour if dot.filled else LIGHT["paper"]
    axes.plot(
        [dot.x],
        [dot.y],
        marker=marker,
        color=colour,
        markerfacecolor=face,
        markeredgecolor=colour,
        markersize=7.0,
        markeredgewidth=1.5,
        clip_on=False,
    )


def _labels(axes: Any, chart: LineChart, layout: Layout) -> None:
    """Write each name where its line ends, moved apart where lines end together."""
    named = [(series.label, series.look.role, _end(series)) for series in chart.series]
    if chart.guide is not None:
        named.append((chart.guide[1], "muted", chart.guide[0][1][1]))
    places = [float(axes.transData.transform((0.0, y))[1]) for _, _, y in named]
    apart = _apart(places, layout.text + 3.0, layout.bottom + 4.0, layout.height - layout.top - 4.0)
    x = layout.width - layout.right + 14
    for (words, role, _), y in zip(named, apart, strict=True):
        bold = "normal" if role == "muted" else "bold"
        size, height = layout.text - (role == "muted"), y - layout.text * 0.35
        axes.text(x, height, words, transform=None, fontsize=size, color=LIGHT[role], weight=bold)


def _end(series: Series) -> float:
    drawn = series.dashed or series.solid or tuple((dot.x, dot.y) for dot in series.dots)
    return drawn[-1][1]


def _apart(places: Sequence[float], gap: float, low: float, high: float) -> list[float]:
    """Return places moved so far that no two are closer than a gap, in the same order and within bounds if they fit."""
    order = sorted(range(len(places)), key=places.__getitem__)
    moved = [min(max(places[one], low), high) for one in order]
    for below, above in pairwise(range(len(moved))):
        moved[above] = max(moved[above], moved[below] + gap)
    if moved and moved[-1] > high:
        moved[-1] = high
        for above, below in pairwise(reversed(range(len(moved)))):
            moved[below] = min(moved[below], moved[above] - gap)
    return [place for _, place in sorted(zip(order, moved, strict=True))]


def _gains(drawing: Figure, chart: GainChart, layout: Layout) -> None:
    axes = plain_axes(drawing, layout)
    bounds = [v for row in chart.rows for v in (row.gain, row.low, row.high) if v is not None and v > 0.0]
    low, high = extent([math.log2(v) for v in (*bounds, 1.0)], 1.0)
    side = 0.05 * (high - low)
    axes.set_xlim(low - side, high + side)
    axes.set_ylim(len(chart.rows) - 0.5, -0.5)
    ticks = _ratios(low - side, high + side, 3.0 if layout.name == "wide" else 1.6, 8 if layout.name == "wide" else 4)
    axes.set_xticks(ticks, [_times(tick) for tick in ticks])
    axes.set_yticks(range(len(chart.rows)), [str(row.level) for row in chart.rows])
    axes.grid(axis="x", color=LIGHT["rule"], linewidth=0.8)
    axes.set_axisbelow(True)
    axes.axvline(0.0, color=LIGHT["ink"], linewidth=1.4)
    axes.text(0, layout.height - 16, "level", transform=None, fontsize=layout.text, color=LIGHT["muted"])
    axes.annotate(
        f"{chart.today} alone",
        (0.0, 1.0),
        (0, 6),
        xycoords=axes.get_xaxis_transform(),
        textcoords="offset pixels",
        ha="left",
        fontsize=layout.text,
        color=LIGHT["ink"],
    )
    text = "gain: cost today over cost under the scheme"
    axes.text(layout.left, 16, text, transform=None, fontsize=layout.text - 1.0, color=LIGHT["muted"])
    for place, row in enumerate(chart.rows):
        colour = LIGHT[row.look.role]
        if row.low is not None and row.high is not None:
            axes.plot([math.log2(row.low), math.log2(row.high)], [place, place], color=colour, linewidth=3.0)
        face = LIGHT["paper"] if row.split else colour
        axes.plot(
            [math.log2(row.gain)],
            [place],
            marker=row.look.marker,
            color=colour,
            markerfacecolor=face,
            markeredgecolor=colour,
            markersize=8.0,
            markeredgewidth=1.8,
            clip_on=False,
        )
        # Beside the drawing where there is room, else above the row, clear of the line of 1 where that is far left.
        wide, after_one = layout.name == "wide", axes.transData.transform((0.0, 0.0))[0] - layout.left + 6.0
        x = layout.width - layout.left - layout.right + 14 if wide else after_one if after_one < 60.0 else 0.0
        axes.annotate(
            row.scheme if wide else f"{row.scheme}, {shown_edge(row.gain)}\u00d7",
            (x, place if wide else place - 0.36),
            xycoords=("axes pixels", "data"),
            fontsize=layout.text,
            color=colour,
            va="center",
            annotation_clip=False,
        )


def _ratios(low: float, high: float, near: float, most: int) -> list[float]:
    """Return ticks of a ratio as exponents of two: halves of the way between powers where the ends are near."""
    step = max(1, math.ceil((high - low) / most))
    powers = [float(step * number) for number in range(math.ceil(low / step), math.floor(high / step) + 1)]
    if high - low > near:
        return powers
    between = (number + math.log2(1.5) for number in range(math.floor(low) - 1, math.ceil(high)))
    return sorted({*powers, *(tick for tick in between if low <= tick <= high)})


def _times(exponent: float) -> str:
    """Return a ratio as a tick names it: 1.5 times, or a power of two where its digits would be many."""
    return f"{2.0**exponent:g}\u00d7" if -3.0 <= exponent <= 10.0 else f"{power(exponent)}\u00d7"
