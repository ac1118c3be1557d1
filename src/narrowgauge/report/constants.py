"""Constants of the kernel that a format cannot take: what becomes of each, by line."""

from __future__ import annotations

from collections.abc import Iterator

from narrowgauge.record.audit import ConstantEntry, ConstantValue, RangeEntry
from narrowgauge.report.wording import clean, count, joined

__all__ = ["constant_lines", "no_constants"]

_LINES, _VALUES = 10, 2
_DIGITS = 4  # as many as tell a subnormal from what it was


def no_constants(found: RangeEntry | None) -> str:
    """Return what it means that there are no lines to show."""
    if found is None:
        return "Not known, since float64 stops before all of them are met."
    return (
        "None: every constant that meets the state becomes a normal number of each format, at most half a unit in the "
        "last place away."
    )


def constant_lines(found: RangeEntry | None) -> list[str]:
    """Return a sentence for each line of the kernel or parameter, the first ten; what is left out is counted."""
    rows: dict[str, list[ConstantEntry]] = {}
    for entry in () if found is None else found.constants:
        rows.setdefault(_place(entry), []).append(entry)
    lines = [f"{place}: {'; '.join(_changes(entries))}" for place, entries in rows.items()]
    left = len(lines) - _LINES
    if left > 0:
        lines[_LINES:] = [f"{count(left)} further {'lines' if left > 1 else 'line'}; audit.json has them all"]
    return lines


def _changes(entries: list[ConstantEntry]) -> Iterator[str]:
    """Say what becomes of the constants of one line, formats that agree together."""
    alike: dict[str, list[str]] = {}
    for entry in entries:
        alike.setdefault(_change(entry), []).append(clean(entry.arm))
    for words, arms in alike.items():
        yield f"{words} in {joined(arms)}"


def _change(entry: ConstantEntry) -> str:
    shown = [f"{value.value:g}" for value in entry.values[:_VALUES]]
    left = entry.distinct - len(shown)
    if left:
        shown.append(f"{count(left)} further {'values' if left > 1 else 'value'}")
    if entry.kind == "subnormal" and all(value.became == value.value for value in entry.values):
        return f"{joined(shown)} {'are' if entry.distinct > 1 else 'is'} subnormal"
    becomes = "become" if entry.distinct > 1 else "becomes"
    whole = {"zero": "0", "infinite": "infinite", "subnormal": "subnormal", "moved": "another number"}[entry.kind]
    if entry.distinct == 1 and entry.kind in ("subnormal", "moved"):
        whole = f"{_became(entry.values[0])}{', subnormal,' if entry.kind == 'subnormal' else ''}"
    return f"{joined(shown)} {becomes} {whole}"


def _became(value: ConstantValue) -> str:
    return "" if value.became is None else f"{value.became:.{_DIGITS}g}"


def _place(entry: ConstantEntry) -> str:
    if entry.parameter is not None:
        return clean(f"parameters.{entry.parameter}")
    return "outside the kernel's file" if entry.file is None else f"{clean(entry.file)}:{entry.line}"
