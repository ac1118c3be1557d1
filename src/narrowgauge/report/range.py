"""What the range of a format does to a kernel, and which additions are lost: a sentence for each format, then lines."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from rich.text import Text

from narrowgauge.record.range import (
    LineArmEntry,
    LineRangeEntry,
    NonfiniteEntry,
    RangeLevelEntry,
    ShareEntry,
    ShiftEntry,
    WatchedEntry,
)
from narrowgauge.report.layout import Kind, Ruled
from narrowgauge.report.wording import NONE, clean, count, figure, joined, levels_named, percent

__all__ = ["Magnitudes", "magnitudes", "range_lines", "range_table", "room_table", "watched_on"]

_LINES = 3  # of each kind
_LEAST = 1e-2  # a smaller share of a line's results is left to audit.json


def watched_on(found: WatchedEntry | None) -> str:
    """Return on how many paths of which levels every number was looked at."""
    if found is None or not found.levels:
        return "not known, since the run that looks at every number was stopped."
    levels = levels_named(one.level for one in found.levels)
    paths = joined(dict.fromkeys(count(one.paths) for one in found.levels), "or")
    return f"every number of {paths} paths on {levels} was looked at."


def range_lines(found: WatchedEntry | None) -> list[str]:
    """Return what there is to say of each format, on its worst level; formats without anything to say share a line."""
    if found is None:
        return []
    arms = _arms(found)
    quiet = [arm for arm in arms if _is_quiet(found, arm)]
    lines = [line for arm in arms if arm not in quiet for line in _arm(found, arm)]
    if quiet:
        room = min((_headroom(found, arm) for arm in quiet), default=None)
        spare = "" if room is None else f", with {_bits(room)} to spare at the nearer end"
        lines.append(f"{joined(map(clean, quiet))}: every result is a normal number{spare}, and no addition is lost")
    return [f"{line}." for line in lines]


def _is_quiet(found: WatchedEntry, arm: str) -> bool:
    ones = [level.arms[arm] for level in found.levels if arm in level.arms]
    return not any(
        one.lost.count or one.below.count or one.overflows or one.first_nonfinite or one.stopped for one in ones
    )


def _headroom(found: WatchedEntry, arm: str) -> int:
    rooms = [
        min(line.headroom_above, line.headroom_below)
        for _, _, line in _lines(found, arm)
        if line.headroom_above is not None and line.headroom_below is not None
    ]
    return min(rooms, default=0)


def _lines(found: WatchedEntry, arm: str) -> Iterator[tuple[RangeLevelEntry, LineRangeEntry, LineArmEntry]]:
    for level in found.levels:
        for line in level.lines:
            if arm in line.arms:
                yield level, line, line.arms[arm]


def _arm(found: WatchedEntry, arm: str) -> Iterator[str]:
    name = clean(arm)
    parts = [f"{name}: {_magnitudes(found, arm)}"]
    lost = max(found.levels, key=lambda level: level.arms[arm].lost.share or 0.0)
    if lost.arms[arm].lost.count:
        parts.append(f"{_share(lost.arms[arm].lost)} of all additions are lost on level {lost.level}")
    below = max(found.levels, key=lambda level: level.arms[arm].below.share or 0.0)
    if below.arms[arm].below.count:
        parts.append(
            f"{_share(below.arms[arm].below)} of all results are below the normal numbers on level {below.level}"
        )
    large = max(found.levels, key=lambda level: level.arms[arm].overflows)
    if number := large.arms[arm].overflows:
        many = "1 result is" if number == 1 else f"{count(number)} results are"
        parts.append(f"{many} too large on level {large.level}")
    yield "; ".join(parts)
    for level in found.levels:
        one = level.arms[arm]
        if one.stopped is not None:
            yield f"{name}, level {level.level}: {clean(one.stopped).rstrip('.')}"
        if one.first_nonfinite is not None:
            yield f"{name}, level {level.level}: {_first(one.first_nonfinite)}"
            break
    yield from _worst(found, arm)
    if arm in found.shifts:
        yield f"{name}: {_shifted(found.shifts[arm])}"


def _magnitudes(found: WatchedEntry, arm: str) -> str:
    """Return the ends of the magnitudes in the reference, and the headroom there."""
    lines = [(line, own) for _, line, own in _lines(found, arm) if line.smallest is not None]
    if not lines:
        return "no results in float64 to compare with"
    smallest = min(line.smallest for line, _ in lines if line.smallest is not None)
    largest = max(line.largest for line, _ in lines if line.largest is not None)
    above = min(own.headroom_above for _, own in lines if own.headroom_above is not None)
    below = min(own.headroom_below for _, own in lines if own.headroom_below is not None)
    return f"results from 2^{smallest} to 2^{largest}, {_room(below, 'below')} and {_room(above, 'above')}"


def _room(bits: int, side: str) -> str:
    return f"{_bits(bits)} to spare {side}" if bits >= 0 else f"{_bits(-bits)} short {side}"


def _bits(number: int) -> str:
    return f"{number} bit{'' if number == 1 else 's'}"


def _share(one: ShareEntry) -> str:
    if one.share is None:
        return count(one.count)
    low, high = one.share_low or 0.0, 1.0 if one.share_high is None else one.share_high
    return f"{percent(one.share)} ({percent(low)} to {percent(high)})"


@dataclass(frozen=True, slots=True, kw_only=True)
class Magnitudes:
    """The results of one line on all levels that were watched, as exponents of two; None where there is no figure.

    `headroom` has, for each arm, the bits to spare below and above; negative where an end is passed.
    """

    place: str
    smallest: int | None
    largest: int | None
    headroom: dict[str, tuple[int, int]]


def magnitudes(found: WatchedEntry) -> list[Magnitudes]:
    """Return the magnitudes of each line, in the order of files and lines, all of its operations together."""
    lines: dict[tuple[str, int], list[LineRangeEntry]] = {}
    for level in found.levels:
        for line in level.lines:
            lines.setdefault((line.file or "", line.line or 0), []).append(line)
    return [_together(lines[key]) for key in sorted(lines)]


def _together(lines: Sequence[LineRangeEntry]) -> Magnitudes:
    room: dict[str, tuple[int, int]] = {}
    for line in lines:
        for arm, own in line.arms.items():
            if own.headroom_below is not None and own.headroom_above is not None:
                below, above = room.get(arm, (own.headroom_below, own.headroom_above))
                room[arm] = (min(below, own.headroom_below), min(above, own.headroom_above))
    return Magnitudes(
        place=_place(lines[0]),
        smallest=min((line.smallest for line in lines if line.smallest is not None), default=None),
        largest=max((line.largest for line in lines if line.largest is not None), default=None),
        headroom=room,
    )


def room_table(found: WatchedEntry) -> Ruled:
    """Return, line by line, the magnitudes of results and the bits that each format leaves below and above them."""
    arms = _arms(found)
    columns: list[tuple[str, Kind]] = [(clean(arm), "number") for arm in arms]
    table = Ruled(("line", "words"), ("smallest", "number"), ("largest", "number"), *columns)
    for one in magnitudes(found):
        ends = (NONE if end is None else f"2^{end}" for end in (one.smallest, one.largest))
        rooms = (f"{one.headroom[arm][0]}, {one.headroom[arm][1]}" if arm in one.headroom else NONE for arm in arms)
        table.add_row(*map(Text, (one.place, *ends, *rooms)))
    return table


def range_table(found: WatchedEntry) -> Ruled:
    """Return, by format and level, how many additions are lost and how many results leave the normal numbers."""
    table = Ruled(
        ("format", "unbroken"),
        ("level", "number"),
        ("lost additions", "words"),
        ("below the normal numbers", "words"),
        ("too large", "number"),
        ("first that is not finite", "words"),
    )
    for arm in _arms(found):
        for level in found.levels:
            if arm not in level.arms:
                continue
            one = level.arms[arm]
            first = (
                NONE if one.first_nonfinite is None else f"{_place(one.first_nonfinite)}, {one.first_nonfinite.kind}"
            )
            cells = (clean(arm), str(level.level), _share(one.lost), _share(one.below), count(one.overflows), first)
            table.add_row(*map(Text, cells))
    return table


def _arms(found: WatchedEntry) -> list[str]:
    return list(dict.fromkeys(arm for level in found.levels for arm in level.arms))


def _first(one: NonfiniteEntry) -> str:
    operands = joined("a number that is not finite" if each is None else figure(each) for each in one.operands)
    path = "" if one.path is None else f", path {count(one.path)}"
    place = f"{_place(one)}, step {count(one.step)}{path}"
    return f"the first result that is {one.kind} is at {place}: {clean(one.operation)} of {operands}"


def _place(one: NonfiniteEntry | LineRangeEntry) -> str:
    return "a place outside the kernel's file" if one.file is None else clean(f"{one.file}:{one.line}")


def _worst(found: WatchedEntry, arm: str) -> Iterator[str]:
    """Return the lines with the largest shares of lost additions, each on its worst level, and of small results."""
    lost: dict[tuple[str, str], tuple[float, str]] = {}
    below: dict[tuple[str, str], tuple[float, str]] = {}
    for level, line, own in _lines(found, arm):
        key, place = (_place(line), line.operation), f"{_place(line)}, {clean(line.operation)}"
        if own.lost:
            share = own.lost / own.additions
            words = f"{place}: {percent(share)} lost on level {level.level}, first on step {count(own.first_lost or 0)}"
            lost[key] = max(lost.get(key, (0.0, "")), (share, words))
        if small := own.subnormals + own.underflows:
            share = small / line.results
            words = f"{place}: {percent(min(share, 1.0))} below the normal numbers on level {level.level}"
            words += f", {count(own.underflows)} of them 0" if own.underflows else ""
            below[key] = max(below.get(key, (0.0, "")), (share, words))
    for kind in (lost, below):
        ranked = sorted((one for one in kind.values() if one[0] >= _LEAST), reverse=True)[:_LINES]
        yield from (f"{clean(arm)}: {words}" for _, words in ranked)


def _shifted(one: ShiftEntry) -> str:
    text = f"with all exponents {abs(one.exponent)} {'higher' if one.exponent > 0 else 'lower'}"
    if one.stopped is not None:
        return f"{text}: {clean(one.stopped).rstrip('.')}"
    before = [sum(getattr(level, name) for level in one.levels) for name in ("overflows", "subnormals", "underflows")]
    after = [
        sum(getattr(level, f"shifted_{name}") for level in one.levels)
        for name in ("overflows", "subnormals", "underflows")
    ]
    counts = (
        f"{count(after[0])} results would be too large (now {count(before[0])}) and {count(after[1] + after[2])} below "
        f"the normal numbers (now {count(before[1] + before[2])})"
    )
    return f"{text}, {counts}{_variances(one)}"


def _variances(one: ShiftEntry) -> str:
    """Return the error variance on the finest level where it is known before and after, the largest ratio."""
    for level in reversed(one.levels):
        ratios = [
            level.shifted_error_variance[name] / before  # type: ignore[operator]  # both are there
            for name, before in level.error_variance.items()
            if before and level.shifted_error_variance.get(name) is not None
        ]
        if ratios:
            times = figure(max(ratios), 2)
            would = "stay as it is" if times == "1.0" else f"be {times} times what it is"
            return f"; the error variance on level {level.level} would {would}"
    return ""
