"""Figures and names as a reader meets them: rounded, but never across a threshold; and without control characters."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Sequence
from itertools import pairwise
from typing import TYPE_CHECKING

from narrowgauge.record.printable import clean, clean_lines

if TYPE_CHECKING:
    from narrowgauge.record.audit import BestEntry, SchemeEntry

__all__ = [
    "NONE",
    "at_most",
    "begun",
    "clean",
    "clean_lines",
    "count",
    "duration",
    "figure",
    "interval",
    "joined",
    "levels_named",
    "million",
    "percent",
    "scheme_words",
    "setting_value",
    "shown_edge",
]

NONE = "\N{EN DASH}"  # stands where there is no figure
_DIGITS = 3
_UNCOUNTED = 10**12  # nobody runs, or reads, as many
_COARSER_BELOW = 0.1
_EXACT_DIGITS = 17  # a float64 is told apart from every other by this many
# Up to how many seconds a unit is used, how many it has, and its name.
_UNITS_OF_TIME = ((90.0, 1.0, "s"), (90 * 60.0, 60.0, "min"), (48 * 3600.0, 3600.0, "h"), (math.inf, 86400.0, "days"))
_SMALLEST_FIXED, _LARGEST_FIXED = -3, 6  # exponents of ten between which a figure is written without one


def begun(words: str) -> str:
    """Return words as the beginning of a sentence: with a capital."""
    return f"{words[:1].upper()}{words[1:]}"


def figure(value: float | None, digits: int = _DIGITS) -> str:
    """Return a number with `digits` significant digits; for example 29.1, 0.0123, 1.5e-06 or 32,768.

    Digits before the decimal point are never replaced by zeros below a million.
    """
    if value is None:
        return NONE
    if value == 0:
        return "0"
    mantissa, _, power = f"{value:.{digits - 1}e}".partition("e")
    exponent = int(power)
    if _SMALLEST_FIXED <= exponent < _LARGEST_FIXED:
        return f"{value:,.{max(0, digits - 1 - exponent)}f}"
    return f"{mantissa}e{power}"


def shown_edge(value: float | None, thresholds: Sequence[float] = (1.0,), digits: int = 0) -> str:
    """Return a number with some significant digits, or as many more as keep it on its side of every threshold.

    So 0.9996 is not shown as 1.00; a number that equals a threshold is shown as equal to it. Without `digits` they are
    three, and two below a tenth.
    """
    if value is None:
        return NONE
    least = digits or (_DIGITS if abs(value) >= _COARSER_BELOW else _DIGITS - 1)
    for number in range(least, _EXACT_DIGITS + 1):
        text = figure(value, number)
        read = float(text.replace(",", ""))
        if all(_side(read, threshold) == _side(value, threshold) for threshold in thresholds):
            return text
    return repr(value)


def interval(
    estimate: float | None, low: float | None, high: float | None, thresholds: Sequence[float] = (1.0,)
) -> str:
    """Return an estimate with its interval in brackets; a bound that does not exist is left open in words."""
    if estimate is None:
        return NONE
    shown = shown_edge(estimate, thresholds)
    if low is not None and high is not None:
        return f"{shown} ({shown_edge(low, thresholds)} to {shown_edge(high, thresholds)})"
    if low is not None:
        return f"{shown} (at least {shown_edge(low, thresholds)})"
    return f"{shown} (at most {shown_edge(high, thresholds)})" if high is not None else f"{shown} (no interval)"


def percent(share: float, thresholds: Sequence[float] = (0.0, 1.0)) -> str:
    """Return a share of one in per cent, never rounded to all or to nothing."""
    return f"{shown_edge(100.0 * share, [100.0 * threshold for threshold in thresholds])}%"


def at_most(share: float) -> str:
    """Return an upper bound of a share of paths, rounded up: at most 1 in 7,115, or in per cent from a tenth on."""
    if share >= _COARSER_BELOW:
        return f"at most {math.ceil(100.0 * share)}%"
    return f"at most 1 in {count(math.floor(1.0 / share))}" if share > 0.0 else "none at all"


def count(number: int) -> str:
    """Return a whole number with its thousands parted; from a million million on with a power of ten."""
    return f"{number:,}" if number < _UNCOUNTED else figure(number)


def million(number: float) -> str:
    """Return a number with three digits and from a million on in words, such as 25.6 million."""
    for size, word in ((10**9, "thousand million"), (10**6, "million")):
        if size <= number < _UNCOUNTED:
            return f"{figure(number / size)} {word}"
    return figure(number)


def duration(seconds: float) -> str:
    """Return an estimated duration, in two digits: less than 1 s, about 40 s, about 2.5 h, about 4.1 days."""
    if seconds < 1.0:
        return "less than 1 s"
    size, unit = next((size, unit) for most, size, unit in _UNITS_OF_TIME if seconds < most)
    return f"about {figure(seconds / size, 2)} {unit}"


def joined(words: Iterable[str], conjunction: str = "and") -> str:
    """Return words as a list in a sentence: a, b and c."""
    found = list(words)
    return " ".join([", ".join(found[:-1]), conjunction, found[-1]]) if len(found) > 1 else "".join(found)


def levels_named(levels: Iterable[int]) -> str:
    """Return levels in words, such as "level 3" or "levels 0 to 2 and 5"."""
    ordered = sorted(set(levels))
    runs: list[list[int]] = [ordered[:1]]
    for before, level in pairwise(ordered):
        if level == before + 1:
            runs[-1].append(level)
        else:
            runs.append([level])
    named = [f"{run[0]} to {run[-1]}" if len(run) > 2 else " and ".join(map(str, run)) for run in runs]
    if any(" and " in name for name in named) and len(named) > 1:
        named = [part for name in named for part in name.split(" and ")]
    return f"{'level' if len(ordered) == 1 else 'levels'} {joined(named)}"


def scheme_words(scheme: SchemeEntry | BestEntry) -> str:
    """Return a scheme as the tables name it, such as "float16 alone" or "float16 with float64"."""
    return (
        f"{clean(scheme.narrow)} alone" if scheme.wide is None else f"{clean(scheme.narrow)} with {clean(scheme.wide)}"
    )


def setting_value(value: object) -> str:
    """Return a value of the audit file as the file writes it; None as "none"."""
    if value is None:
        return "none"
    if isinstance(value, float):
        return f"{value:g}" if float(f"{value:g}") == value else repr(value)
    return clean(json.dumps(value, ensure_ascii=False))


def _side(value: float, threshold: float) -> int:
    return (value > threshold) - (value < threshold)
