"""The charts of three more questions: which part of the law rules, what schemes gain, what approximate draws cost."""

from __future__ import annotations

import math

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.record.audit import AuditRecord, PartsEntry, QuantityEntry
from narrowgauge.report.charts import Dot, GainChart, GainRow, LineChart, Series, Tick, interval_of
from narrowgauge.report.crossing import fitted_law
from narrowgauge.report.palette import Look, look_of
from narrowgauge.report.settings import exact_formats, today
from narrowgauge.report.wording import count, scheme_words

__all__ = ["draws_chart", "gain_chart", "law_chart", "law_shares"]

_PARTS = {
    "arithmetic": Look(role="s1", marker="o", dash=(4.0, 2.0)),
    "draws": Look(role="s2", marker="s", dash=(1.5, 1.5)),
    "both": Look(role="s4", marker="^", dash=(3.0, 1.2)),
}
_SIGNAL = Look(role="ink", marker="D", dash=(5.0, 2.5))
_DRAWN_STRAIGHT = 24  # parts in which a curve is drawn


def law_chart(record: AuditRecord, entry: QuantityEntry) -> LineChart | None:
    """Return error variances in units of u^2 against the steps, which fall on one line where the law is delta^2/h.

    None where no format has two such points.
    """
    lines = []
    for arm in exact_formats(record):
        form = FORMATS[record.arms[arm].format]
        law, dots = fitted_law(entry, arm), []
        for level in entry.levels:
            figures = level.arms[arm]
            if figures.error_variance is None or figures.error_variance <= 0.0:
                continue
            scaled = 2.0 * math.log2(form.unit_roundoff)
            low, high = interval_of(record, level, figures.error_variance, figures.error_variance_se)
            middle = math.log2(figures.error_variance) - scaled
            filled = law is not None and level.level in law.levels
            dots.append(Dot(math.log2(level.steps), middle, 2.0 * low - scaled, 2.0 * high - scaled, filled))
        if len(dots) < 2:
            continue
        curve = []
        if law is not None and law.floor is not None and law.walk is not None and law.drift is not None:
            for number in range(_DRAWN_STRAIGHT + 1):
                x = dots[0].x + (dots[-1].x - dots[0].x) * number / _DRAWN_STRAIGHT
                total = law.floor + law.walk * 2.0**x + law.drift * 4.0**x
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
    if law is None or law.floor is None or law.walk is None or law.drift is None:
        return []
    found: list[tuple[int, float, float, float]] = []
    for level in entry.levels:
        walk, drift = law.walk * level.steps, law.drift * level.steps**2
        total = law.floor + walk + drift
        if total > 0.0:
            found.append((level.level, law.floor / total, walk / total, drift / total))
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
        dots = []
        for level, one in zip(entry.levels, parts, strict=True):
            variance, se = getattr(one, name), getattr(one, f"{name}_se")
            if variance is not None and variance > 0.0:
                low, high = interval_of(record, level, variance, se)
                dots.append(Dot(level.level, 0.5 * math.log2(variance), low, high))
        if dots:
            lines.append(Series(label=name, look=look, dots=tuple(dots), solid=tuple((dot.x, dot.y) for dot in dots)))
    if not lines or max(len(line.dots) for line in lines) < 2:
        return None
    signal = []
    for level in entry.levels:
        variance = level.reference.level_variance
        if variance is not None and variance > 0.0:
            low, high = interval_of(record, level, variance, level.reference.level_variance_se)
            signal.append(Dot(level.level, 0.5 * math.log2(variance), low, high))
    whole = Series(
        label="signal", look=_SIGNAL, dots=tuple(signal), solid=tuple((d.x, d.y) for d in signal), thick=True
    )
    return LineChart(
        across="level",
        below="steps",
        up="standard deviation, in the unit of the quantity",
        ticks=tuple(Tick(level.level, str(level.level), count(level.steps)) for level in entry.levels),
        series=(whole, *lines) if signal else tuple(lines),
    )
