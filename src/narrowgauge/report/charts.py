"""What a drawing shows, as data: series of points with intervals and lines, against levels or steps, in powers of two.

Heights are logarithms to base two throughout; what is zero or does not exist has no place there and is left out.
"""

from __future__ import annotations

import math
from collections.abc import Container, Iterable, Sequence
from dataclasses import dataclass

from scipy.stats import t

from narrowgauge.measure.moments import BATCHES
from narrowgauge.record.audit import AuditRecord, LevelEntry
from narrowgauge.report.palette import Look
from narrowgauge.report.settings import setting

__all__ = [
    "Dot",
    "GainChart",
    "GainRow",
    "LineChart",
    "Series",
    "SpanChart",
    "SpanRow",
    "Tick",
    "deviations",
    "extent",
    "interval_of",
    "power",
    "spoken",
]

_SUPERSCRIPTS = str.maketrans("-0123456789", "\u207b\u2070\u00b9\u00b2\u00b3\u2074\u2075\u2076\u2077\u2078\u2079")


@dataclass(frozen=True, slots=True)
class Dot:
    """A measured point with its interval; `filled` is whether the fitted law rests on it."""

    x: float
    y: float
    low: float
    high: float
    filled: bool = True


@dataclass(frozen=True, slots=True, kw_only=True)
class Series:
    """One thing that is drawn: measured dots, a solid line where they are, a dashed one beyond; (x, y) each."""

    label: str
    look: Look
    dots: tuple[Dot, ...]
    solid: tuple[tuple[float, float], ...] = ()
    dashed: tuple[tuple[float, float], ...] = ()
    thick: bool = False


@dataclass(frozen=True, slots=True)
class Tick:
    """A place on the axis across: its label, and a second one below."""

    x: float
    label: str
    below: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class LineChart:
    """Series over ticks.

    `measured_to` is where extrapolation begins, `rings` go around what is to be found, `guide` is a straight line and
    its name.
    """

    across: str
    below: str
    up: str
    ticks: tuple[Tick, ...]
    series: tuple[Series, ...]
    measured_to: float | None = None
    rings: tuple[tuple[float, float], ...] = ()
    guide: tuple[tuple[tuple[float, float], tuple[float, float]], str] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class GainRow:
    """The gain of the cheapest scheme of one level with its interval; a bound that does not exist is None."""

    level: int
    scheme: str
    look: Look
    split: bool
    gain: float
    low: float | None
    high: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class GainChart:
    """Gains by level against what runs today."""

    today: str
    rows: tuple[GainRow, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class SpanRow:
    """Magnitudes from 2^low to 2^high, both ends of the bar; `faint` is where a thinner bar before it begins."""

    label: str
    words: str
    look: Look
    low: float
    high: float
    faint: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class SpanChart:
    """The normal numbers of formats, with their subnormals as thinner bars, above the magnitudes of lines."""

    formats: tuple[SpanRow, ...]
    lines: tuple[SpanRow, ...]


def deviations(
    record: AuditRecord,
    measured: Iterable[tuple[LevelEntry, float | None, float | None]],
    rests_on: Container[float] | None = None,
) -> tuple[Dot, ...]:
    """Return standard deviations against levels, from levels with a variance and its standard error.

    A variance that is 0, or not there, has no place. Dots are filled on the levels that a fit `rests_on`.
    """
    found = []
    for level, variance, se in measured:
        if variance is not None and variance > 0.0:
            low, high = interval_of(record, level, variance, se)
            filled = rests_on is None or level.level in rests_on
            found.append(Dot(level.level, 0.5 * math.log2(variance), low, high, filled))
    return tuple(found)


def interval_of(record: AuditRecord, level: LevelEntry, variance: float, se: float | None) -> tuple[float, float]:
    """Return the interval of a standard deviation, in logarithms to base two, from the standard error of a variance.

    It is that of the logarithm of the variance, with Student's t over the batches, at the confidence of one look.
    """
    middle = 0.5 * math.log2(variance)
    if se is None:
        return middle, middle
    quantile = float(t.ppf(1.0 - _alpha(record) / 2.0, BATCHES * level.blocks - 1))
    half = 0.5 * quantile * se / (variance * math.log(2.0))
    return middle - half, middle + half


def _alpha(record: AuditRecord) -> float:
    """Return 1 - confidence of one look: the looks at ever more paths share what the audit file allows."""
    confidence, first, most = (setting(record, f"sampling.{key}") for key in ("confidence", "paths", "most_paths"))
    if not isinstance(confidence, float) or not isinstance(first, int) or not isinstance(most, int):
        return 0.01
    levels = next(iter(record.quantities.values())).levels
    blocks = [max(1, level.paths // max(1, level.blocks)) for level in levels]
    looks = {tuple(-(-(first * 2**number) // block) for block in blocks) for number in range(_doublings(first, most))}
    return (1.0 - confidence) / max(1, len(looks))


def _doublings(first: int, most: int) -> int:
    return max(1, (most // max(1, first)).bit_length())


def power(exponent: float) -> str:
    """Return a power of two as it is written, such as 2 with a raised -10; halves of an exponent are kept."""
    rounded = round(exponent, 1)
    if rounded == int(rounded):
        return "2" + str(int(rounded)).translate(_SUPERSCRIPTS)
    return f"2^{rounded:g}"


def spoken(series: Series, chart: LineChart) -> str:
    """Return a series of a chart in words: where it begins and where it ends, as powers of two."""
    if not series.dots:
        return f"{series.label} has no measured point."
    names = {tick.x: f"{chart.across} {tick.label}" for tick in chart.ticks}
    first, last = series.dots[0], series.dots[-1]
    if first is last:
        return f"{series.label}: 2 to the {first.y:.1f} at {names[first.x]}."
    way = "rises" if last.y > first.y else "falls"
    beyond = ""
    if series.dashed and series.dashed[-1][0] in names:
        x, y = series.dashed[-1]
        beyond = f", and is extrapolated to 2 to the {y:.1f} at {names[x]}"
    return (
        f"{series.label} {way} from 2 to the {first.y:.1f} at {names[first.x]} to 2 to the {last.y:.1f} at "
        f"{names[last.x]}{beyond}."
    )


def extent(values: Iterable[float], least: float) -> tuple[float, float]:
    """Return bounds of an axis around values, never closer than `least`."""
    found: Sequence[float] = sorted(value for value in values if math.isfinite(value))
    low, high = found[0], found[-1]
    missing = max(0.0, least - (high - low)) / 2.0
    return low - missing, high + missing
