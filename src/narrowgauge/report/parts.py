"""The charts of three more questions: which part of the law rules, what schemes gain, what approximate draws cost."""

from __future__ import annotations

import math
from dataclasses import replace

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.record.audit import AuditRecord, PartsEntry, QuantityEntry
from narrowgauge.report.charts import GainChart, GainRow, LineChart, Series, Tick, deviations
from narrowgauge.report.crossing import fitted_law, law_parts, noise_dots, signal_dots
from narrowgauge.report.palette import SIGNAL, Look, look_of
from narrowgauge.report.settings import exact_formats, today
from narrowgauge.report.wording import count, scheme_words

__all__ = ["draws_chart", "gain_chart", "law_chart", "law_shares"]

_PARTS = {
    "arithmetic": Look(role="s1", marker="o", dash=(4.0, 2.0)),
    "draws": Look(role="s2", marker="s", dash=(1.5, 1.5)),
    "both": Look(role="s4", marker="^", dash=(3.0, 1.2)),
}
_DRAWN_STRAIGHT = 24  # parts in which a curve is drawn


def law_chart(record: AuditRecord, entry: QuantityEntry) -> LineChart | None:
    """Return error variances in units of u^2 against the steps, which fall on one line where the law is delta^2/h.

    None where no format has two such points.
    """
    lines = []
    steps = {float(level.level): math.log2(level.steps) for level in entry.levels}
    for arm in exact_formats(record):
        form = FORMATS[record.arms[arm].format]
        law, scaled = fitted_law(entry, arm), 2.0 * math.log2(form.unit_roundoff)
        dots = [
            replace(
                one, x=steps[one.x], y=2.0 * one.y - scaled, low=2.0 * one.low - scaled, high=2.0 * one.high - scaled
            )
            for one in noise_dots(record, entry, arm)
        ]
        if len(dots) < 2:
            continue
        curve = []
        if law is not None:
            for number in range(_DRAWN_STRAIGHT + 1):
                x = dots[0].x + (dots[-1].x - dots[0].x) * number / _DRAWN_STRAIGHT
                total = sum(law_parts(law, 2.0**x))
                curve += [(x, math.log2(total))] if total > 0.0 else []
        lines.append(Series(label=form.name, look=look_of(form.name), dots=tuple(dots), solid=tuple(curve)))
    if not lines:
        return None
    ticks = tuple(Tick(math.log2(level.steps), count(level.steps), f"level {level.level}") for level in entry.levels)
    return LineChart(
        across="steps",
        below="",
        up="error variance, in units of u\u00b2",
        ticks=ticks,
        series=tuple(lines),
        guide=_guide(lines, ticks),
    )


def _guide(lines: list[Series], ticks: tuple[Tick, ...]) -> tuple[tuple[tuple[float, float], tuple[float, float]], str]:
    """Return a line of slope 1 below all points: what the variance does where roundings walk."""
    first, last = ticks[0].x, ticks[-1].x
    lift = min(dot.y - (dot.x - first) for line in lines for dot in line.dots) - 0.8
    return ((first, lift), (last, lift + last - first)), "slope \u03b4\u00b2/h"


def law_shares(entry: QuantityEntry, arm: str) -> list[tuple[int, float, float, float]]:
    """Return, for each level, the shares of floor, walk and drift in the law of an arm; [] where it is not fitted."""
    law = fitted_law(entry, arm)
    if law is None:
        return []
    found: list[tuple[int, float, float, float]] = []
    for level in entry.levels:
        floor, walk, drift = law_parts(law, level.steps)
        total = floor + walk + drift
        if total > 0.0:
            found.append((level.level, floor / total, walk / total, drift / total))
    return found


def gain_chart(record: AuditRecord, entry: QuantityEntry) -> GainChart | None:
    """Return the gain of the cheapest scheme on each level, or None where no level has one."""
    rows = []
    for level in entry.levels:
        best = level.best
        if best is None or best.gain is None or best.gain <= 0.0:
            continue
        rows.append(
            GainRow(
                level=level.level,
                scheme=scheme_words(best),
                look=look_of(record.arms[best.narrow].format),
                split=best.wide is not None,
                gain=best.gain,
                low=best.gain_low if best.gain_low is None or best.gain_low > 0.0 else None,
                high=best.gain_high if best.gain_high is None or best.gain_high > 0.0 else None,
            )
        )
    return GainChart(today=today(record), rows=tuple(rows)) if rows else None


def draws_chart(record: AuditRecord, entry: QuantityEntry, parts: list[PartsEntry]) -> LineChart | None:
    """Return the chart of what arithmetic, draws and both do to the correction, or None where nothing was measured."""
    lines = []
    for name, look in _PARTS.items():
        rows = zip(entry.levels, parts, strict=True)
        dots = deviations(record, ((level, getattr(one, name), getattr(one, f"{name}_se")) for level, one in rows))
        if dots:
            lines.append(Series(label=name, look=look, dots=dots, solid=tuple((dot.x, dot.y) for dot in dots)))
    if not lines or max(len(line.dots) for line in lines) < 2:
        return None
    signal = signal_dots(record, entry)
    whole = Series(label="signal", look=SIGNAL, dots=signal, solid=tuple((d.x, d.y) for d in signal), thick=True)
    return LineChart(
        across="level",
        below="steps",
        up="standard deviation, in the unit of the quantity",
        ticks=tuple(Tick(level.level, str(level.level), count(level.steps)) for level in entry.levels),
        series=(whole, *lines) if signal else tuple(lines),
    )
