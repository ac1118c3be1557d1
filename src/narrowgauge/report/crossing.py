"""Where rounding noise crosses the signal of a level: measured, or by the fitted law and the signal's own decay."""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise
from typing import Literal

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.judge.accumulation import established, rejected
from narrowgauge.record.audit import AuditRecord, LawEntry, LevelEntry, QuantityEntry
from narrowgauge.report.charts import Dot, LineChart, Series, Tick, deviations
from narrowgauge.report.palette import SIGNAL, look_of
from narrowgauge.report.settings import coupled, exact_formats, setting
from narrowgauge.report.wording import clean, count

__all__ = [
    "NO_NOISE",
    "Crossing",
    "Signal",
    "crossing_chart",
    "crossing_of",
    "crossing_words",
    "fitted_law",
    "law_at",
    "law_parts",
    "noise_dots",
    "signal_dots",
    "signal_of",
]

NO_NOISE = "No format was measured with exact draws, so there is no rounding noise by itself."
_FARTHEST = 64  # levels beyond the ladder at which nobody looks any more
_MOST_STEPS = 500.0  # their logarithm to base two: the square of so many is still a number
_DRAWN_BEYOND = 6
_FINEST = 4  # levels by which the signal's decay is known
_STEPS = 8  # parts of a level between which a law is drawn straight


@dataclass(frozen=True, slots=True, kw_only=True)
class Crossing:
    """Where noise reaches the signal: on `level` it does, on the level before it does not.

    `how` is "measured", "law" (beyond the ladder, level None where it does not within sight), or "unknown".
    """

    how: Literal["measured", "law", "unknown"]
    level: int | None
    reason: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Signal:
    """The decay of a level's variance: V_l = 2^(a - beta l), through the four finest levels with the recorded order."""

    a: float
    beta: float

    def at(self, level: float) -> float:
        """Return the logarithm to base two of the standard deviation on a level."""
        return 0.5 * (self.a - self.beta * level)


def crossing_of(record: AuditRecord, entry: QuantityEntry, arm: str) -> Crossing:
    """Return where the noise of a format with exact draws crosses the signal of one quantity."""
    finest = entry.levels[-1]
    for level in entry.levels:
        noise, signal = level.arms[arm].error_variance, level.reference.level_variance
        if noise is not None and signal is not None and noise >= signal and noise > 0.0:
            return Crossing(how="measured", level=level.level)
    if len(entry.levels) == 1 or not coupled(record):
        return Crossing(how="unknown", level=None, reason="there is no ladder along which the signal falls")
    law, decay = fitted_law(entry, arm), signal_of(record, entry)
    if law is None:
        return Crossing(how="unknown", level=None, reason="the law is not fitted")
    if rejected(law):
        return Crossing(how="unknown", level=None, reason="the law does not fit")
    if decay is None:
        return Crossing(how="unknown", level=None, reason="how the signal falls with h is not known")
    for number in range(finest.level + 1, finest.level + _FARTHEST + 1):
        noise_at = law_at(record, law, arm, finest, number)
        if noise_at is not None and noise_at >= decay.at(number):
            return Crossing(how="law", level=number)
    return Crossing(how="law", level=None, reason=f"not within {_FARTHEST} levels")


def crossing_words(record: AuditRecord, entry: QuantityEntry, arm: str) -> str:
    """Return where the noise of a format crosses the signal of a quantity, in a sentence."""
    found, name = crossing_of(record, entry, arm), clean(arm)
    finest = entry.levels[-1].level
    if all(level.arms[arm].error_variance is None for level in entry.levels):
        return f"{name}: no noise was measured."
    if all(not level.arms[arm].error_variance for level in entry.levels):
        return f"{name}: no rounding error was seen on any level."
    if found.how == "measured":
        return f"{name}: {_measured_words(entry, found)}"
    held = f"{name}: on every level where both were measured the noise stays below the signal"
    if found.how == "unknown":
        return f"{held}; where they cross beyond cannot be told, since {found.reason}."
    if found.level is None:
        return f"{held}; by its law they do not cross beyond either, at least {found.reason}."
    span = f"between levels {found.level - 1} and {found.level}"
    return f"{held}; by its law they cross {span} (extrapolated, measured to level {finest})."


def _measured_words(entry: QuantityEntry, found: Crossing) -> str:
    first = entry.levels[0].level
    if found.level == first:
        return f"the noise is above the signal on level {first} already."
    before = max(level.level for level in entry.levels if found.level is not None and level.level < found.level)
    return f"the noise crosses the signal between levels {before} and {found.level}, as measured."


def fitted_law(entry: QuantityEntry, arm: str) -> LawEntry | None:
    """Return the law of the error of an arm, or None where it is not fitted."""
    if arm not in entry.accumulation:
        return None
    law = entry.accumulation[arm].error
    return None if law.reason is not None or None in (law.floor, law.walk, law.drift) else law


def law_parts(law: LawEntry, steps: float) -> tuple[float, float, float]:
    """Return what floor, walk and drift of a fitted law bring at a number of steps, in units of u^2.

    It is the law by which the verdict was found: a drift that is not significant has no part in it.
    """
    floor, walk, drift = established(law)
    return floor, walk * steps, drift * steps**2


def signal_of(record: AuditRecord, entry: QuantityEntry) -> Signal | None:
    """Return the decay of the signal, or None where the record has no order or the levels no variance."""
    order = entry.orders.level_variance
    levels = [level for level in entry.levels if level.level > 0][-_FINEST:]
    variances = [level.reference.level_variance for level in levels]
    if order is None or not levels or not coupled(record):
        return None
    beta = order * math.log2(_refinement(record))
    heights = [math.log2(v) + beta * one.level for v, one in zip(variances, levels, strict=True) if v and v > 0.0]
    return Signal(a=sum(heights) / len(heights), beta=beta) if len(heights) == len(levels) else None


def law_at(record: AuditRecord, law: LawEntry, arm: str, finest: LevelEntry, level: float) -> float | None:
    """Return the logarithm to base two of the noise that a law gives on a level; None where it gives none."""
    logarithm = math.log2(finest.steps) + (level - finest.level) * math.log2(_refinement(record))
    if logarithm > _MOST_STEPS:
        return None
    total = sum(law_parts(law, 2.0**logarithm))
    return math.log2(_roundoff(record, arm)) + 0.5 * math.log2(total) if total > 0.0 else None


def crossing_chart(record: AuditRecord, entry: QuantityEntry) -> LineChart | None:
    """Return the chart of signal and noise by level, or None where there are not two levels with a signal."""
    signal = signal_dots(record, entry)
    if len(signal) < 2:
        return None
    finest, end = entry.levels[-1], _end(record, entry)
    beyond = end > finest.level
    decay = signal_of(record, entry)
    lines = [
        Series(
            label="signal",
            look=SIGNAL,
            dots=signal,
            solid=tuple((dot.x, dot.y) for dot in signal),
            dashed=tuple((x, decay.at(x)) for x in _along(finest.level, end)) if decay and beyond else (),
            thick=True,
        )
    ]
    for arm in exact_formats(record):
        law, dots = fitted_law(entry, arm), noise_dots(record, entry, arm)
        if not dots:
            continue
        further = law if law and beyond and not rejected(law) else None
        lines.append(
            Series(
                label=record.arms[arm].format,
                look=look_of(record.arms[arm].format),
                dots=dots,
                solid=_curve(record, law, arm, entry, (dots[0].x, finest.level)) if law else (),
                dashed=_curve(record, further, arm, entry, (finest.level, end)) if further else (),
            )
        )
    met = [_meeting(lines[0], noise) for noise in lines[1:]]
    levels = range(entry.levels[0].level, end + 1)
    steps = {level.level: level.steps for level in entry.levels}
    return LineChart(
        across="level",
        below="steps",
        up="standard deviation, in the unit of the quantity",
        ticks=tuple(Tick(x, str(x), count(steps[x]) if x in steps else "") for x in levels),
        series=tuple(lines),
        rings=tuple(place for place in met if place is not None),
        measured_to=finest.level if beyond else None,
    )


def _meeting(signal: Series, noise: Series) -> tuple[float, float] | None:
    """Return where the line of the noise first reaches that of the signal from below, both straight between points."""
    own, other = dict((*signal.solid, *signal.dashed)), dict((*noise.solid, *noise.dashed))
    if not own or not other:
        return None
    first, last = max(min(own), min(other)), min(max(own), max(other))
    places = sorted(x for x in {*own, *other} if first <= x <= last)
    gaps = [(x, _height(own, x), _height(own, x) - _height(other, x)) for x in places]
    for (x0, y0, gap0), (x1, y1, gap1) in pairwise(gaps):
        if gap0 > 0.0 >= gap1:
            part = gap0 / (gap0 - gap1)
            return x0 + part * (x1 - x0), y0 + part * (y1 - y0)
    return None


def _height(line: dict[float, float], x: float) -> float:
    if x in line:
        return line[x]
    x0, x1 = max(place for place in line if place < x), min(place for place in line if place > x)
    return line[x0] + (line[x1] - line[x0]) * (x - x0) / (x1 - x0)


def _end(record: AuditRecord, entry: QuantityEntry) -> int:
    """Return the last level that is drawn: past every crossing and finest level that is near."""
    finest = entry.levels[-1].level
    found = [crossing_of(record, entry, arm).level for arm in exact_formats(record)]
    paying = [one.level for one in entry.finest_paying_level.values() if one.extrapolated]
    most = finest + max(_DRAWN_BEYOND, finest)
    wanted = [level + 1 for level in (*found, *paying) if level is not None and finest < level]
    near = [level for level in wanted if level <= most]
    return max(near, default=most if wanted else finest)


def signal_dots(record: AuditRecord, entry: QuantityEntry) -> tuple[Dot, ...]:
    """Return the measured standard deviations of the signal, by level."""
    owns = ((level, level.reference) for level in entry.levels)
    return deviations(record, ((level, own.level_variance, own.level_variance_se) for level, own in owns))


def noise_dots(record: AuditRecord, entry: QuantityEntry, arm: str) -> tuple[Dot, ...]:
    """Return the measured standard deviations of the error of a format, by level."""
    owns, law = ((level, level.arms[arm]) for level in entry.levels), fitted_law(entry, arm)
    measured = ((level, own.error_variance, own.error_variance_se) for level, own in owns)
    return deviations(record, measured, () if law is None else law.levels)


def _curve(
    record: AuditRecord, law: LawEntry, arm: str, entry: QuantityEntry, span: tuple[float, float]
) -> tuple[tuple[float, float], ...]:
    heights = [(x, law_at(record, law, arm, entry.levels[-1], x)) for x in _along(*span)]
    return tuple((x, y) for x, y in heights if y is not None)


def _along(first: float, last: float) -> list[float]:
    parts = max(1, round((last - first) * _STEPS))
    return [first + (last - first) * number / parts for number in range(parts + 1)]


def _refinement(record: AuditRecord) -> int:
    found = setting(record, "ladder.refinement")
    return found if isinstance(found, int) and found > 1 else 2


def _roundoff(record: AuditRecord, arm: str) -> float:
    return FORMATS[record.arms[arm].format].unit_roundoff
