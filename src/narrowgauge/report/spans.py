"""The drawing of magnitudes: what each format can hold, and below it what each line computes, in powers of two."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import replace
from typing import Any

from matplotlib.figure import Figure
from rich.cells import cell_len

from narrowgauge.report.charts import SpanChart, SpanRow, power
from narrowgauge.report.figures import Layout, drawing_of, plain_axes
from narrowgauge.report.palette import LIGHT

__all__ = ["spans"]

_BESIDE = 3.0  # powers of two on either side of what must be seen


def spans(chart: SpanChart, layout: Layout, prefix: str) -> str:
    """Return magnitudes as SVG for a page, with ids that begin with `prefix`; its height follows the number of rows."""
    rows = (*chart.formats, *chart.lines)
    wide = layout.name == "wide"
    per_row = 24 if wide else 38
    widths = [max(cell_len(text) for text in texts) for texts in ([r.label for r in rows], [r.words for r in rows])]
    left, right = (math.ceil(0.6 * layout.text * width) + 14 for width in widths) if wide else (10, 10)
    top = 10 if wide else 20
    tall = replace(layout, left=left, right=right, top=top, height=top + layout.bottom + per_row * len(rows))
    return drawing_of(prefix, tall, lambda drawing: _spans(drawing, chart, tall))


def _seen(chart: SpanChart) -> tuple[float, float]:
    """Return the ends of the axis: all lines, and the format with the smallest range."""
    narrowest = min(chart.formats, key=lambda row: row.high - row.low)
    shown = (narrowest, *chart.lines)
    low = min(row.low if row.faint is None else row.faint for row in shown)
    return low - _BESIDE, max(row.high for row in shown) + _BESIDE


def _spans(drawing: Figure, chart: SpanChart, layout: Layout) -> None:
    axes, (low, high) = plain_axes(drawing, layout), _seen(chart)
    wide = layout.name == "wide"
    rows = (*chart.formats, *chart.lines)
    axes.set_xlim(low, high)
    axes.set_ylim(len(rows) - (0.5 if wide else 0.3), -0.5)
    ticks = list(_ticks(low, high, 8 if wide else 5))
    axes.set_xticks(ticks, [power(tick) for tick in ticks])
    axes.set_yticks([])
    axes.grid(axis="x", color=LIGHT["rule"], linewidth=0.8)
    axes.set_axisbelow(True)
    # On a phone labels stand between the bars, and so the ends of formats are shown at the bars alone.
    pieces = [(-0.5, len(rows) - 0.5)] if wide else [(p - 0.14, p + 0.14) for p in range(len(rows))]
    for row in chart.formats:
        for end in (row.low, row.high):
            if low < end < high:
                for piece in pieces:
                    dash = {"dashes": row.look.dash} if wide else {}
                    axes.plot([end, end], piece, color=LIGHT[row.look.role], linewidth=1.4, **dash)
    for place, row in enumerate(rows):
        _row(axes, row, place, (low, high))
        _named(axes, row, place, layout)
    text = "magnitude"
    axes.text(layout.left, layout.bottom - 42, text, transform=None, fontsize=layout.text - 1.0, color=LIGHT["muted"])


def _row(axes: Any, row: SpanRow, place: int, seen: tuple[float, float]) -> None:
    colour, form = LIGHT[row.look.role], row.faint is not None
    low, high = max(row.low, seen[0]), min(row.high, seen[1])
    if row.faint is not None and row.low > seen[0]:
        begin = max(row.faint, seen[0])
        axes.plot([begin, low], [place, place], color=colour, linewidth=2.0, solid_capstyle="butt")
    axes.plot([low, high], [place, place], color=colour, linewidth=8.0 if form else 4.0, solid_capstyle="butt")
    for end, marker, beyond in ((low, "<", row.low < seen[0]), (high, ">", row.high > seen[1])):
        if beyond:  # the bar goes on outside of what is drawn
            axes.plot([end], [place], marker=marker, color=colour, markersize=9.0, clip_on=False)


def _named(axes: Any, row: SpanRow, place: int, layout: Layout) -> None:
    bold = "bold" if row.faint is not None else "normal"
    common = {"fontsize": layout.text, "va": "center", "annotation_clip": False}
    colour = LIGHT[row.look.role]
    if layout.name == "wide":
        edge = layout.width - layout.left - layout.right
        coordinates = ("axes pixels", "data")
        axes.annotate(row.label, (-12, place), xycoords=coordinates, ha="right", color=colour, weight=bold, **common)
        axes.annotate(row.words, (edge + 12, place), xycoords=coordinates, color=LIGHT["muted"], **common)
    else:
        text = f"{row.label}: {row.words}"
        axes.annotate(text, (0, place - 0.42), xycoords=("axes pixels", "data"), color=colour, weight=bold, **common)


def _ticks(low: float, high: float, most: int) -> Iterator[int]:
    step = 2 ** max(0, math.ceil(math.log2((high - low) / most)))
    yield from (step * number for number in range(math.ceil(low / step), math.floor(high / step) + 1))
