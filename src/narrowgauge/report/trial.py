"""What the emulation got hold of: operations by line of the kernel, decisions, and what would escape."""

from __future__ import annotations

from collections.abc import Iterable

from rich.text import Text

from narrowgauge.record.audit import DecisionEntry, LineCount, ReachEntry, ReachLine
from narrowgauge.report.layout import Ruled
from narrowgauge.report.wording import clean, count, percent

__all__ = ["ROUNDED", "decisions", "reach_notes", "reach_summary", "reach_table"]

ROUNDED = "In a trial run the emulation met"
_LINES = 10  # of each kind of note

# The routes in the order of their columns, and how a column is called; a route without a row is shown by its name.
_COLUMNS = {
    "rounded": "rounded one by one",
    "accumulated": "rounded, summed in a stated order",
    "whole": "rounded once as a whole",
    "exact": "exact, never rounds",
}


def reach_table(reach: ReachEntry) -> Ruled:
    """Return one row for each line of the kernel: which operations it ran, how often, and how they were rounded."""
    order = [*_COLUMNS, *sorted({line.route for line in reach.lines} - set(_COLUMNS))]
    routes = [route for route in order if any(line.route == route for line in reach.lines)]
    table = Ruled(("line", "words"), *((_COLUMNS.get(route, clean(route)), "words") for route in routes))
    rows: dict[tuple[str, int], list[ReachLine]] = {}
    for line in reach.lines:
        rows.setdefault((line.file or "", line.line or 0), []).append(line)
    names = _short_names(file for file, _ in rows)
    for (file, number), found in rows.items():
        place = f"{names[file]}:{number}" if file else "outside the kernel's file"
        cells = [
            ", ".join(f"{clean(one.operation)} {count(one.count)}" for one in found if one.route == route)
            for route in routes
        ]
        table.add_row(*(Text(cell) for cell in (place, *cells)))
    return table


def reach_summary(reach: ReachEntry) -> str:
    """Return how many operations of the trial run were rounded, and what share of those that round one by one."""
    exact = sum(line.count for line in reach.lines if line.route == "exact")
    others = reach.operations - reach.rounded - exact
    text = f"{count(reach.operations)} operations on arrays, of which {_were(reach.rounded)} rounded one by one"
    text += f" and {count(exact)} {'is' if exact == 1 else 'are'} exact"
    if others:
        text += f"; {_were(others)} rounded in another way"
    if reach.share is not None and others:
        text += f", so that {percent(reach.share)} of all that rounds was rounded one by one"
    return f"{text}. {decisions(reach)}"


def _were(number: int) -> str:
    return f"{count(number)} {'was' if number == 1 else 'were'}"


def decisions(reach: ReachEntry) -> str:
    """Return how often the control flow depended on the state."""
    if reach.decisions == 0:
        return "No branch of the control flow depended on the state."
    times = "once" if reach.decisions == 1 else f"{count(reach.decisions)} times"
    return f"The control flow took a decision that depends on the state {times}; each format decides for itself."


def reach_notes(reach: ReachEntry) -> list[str]:
    """Return what left the emulation where it may, integers taken out of it, changed decisions, then the remarks."""
    allowed = [_counted(one, "let out unrounded, as kernel.allow says") for one in reach.allowed_escapes]
    taken = [_counted(one, "taken out of the state by int()") for one in reach.integers]
    changed = [_changed(one) for one in reach.changed_decisions]
    return [*_first(allowed), *_first(taken), *_first(changed), *reach.remarks]


def _counted(one: LineCount, words: str) -> str:
    return f"{_place(one)}: {'a value was' if one.count == 1 else f'{count(one.count)} values were'} {words}"


def _changed(one: DecisionEntry) -> str:
    here = f"{count(one.count)} {'decision' if one.count == 1 else 'decisions'}, {count(one.true)} of them true"
    there = f"{count(one.reference_count)}, {count(one.reference_true)} of them true"
    return f"{_place(one)}: {clean(one.arm)} takes {here}, where the reference takes {there}"


def _place(one: LineCount | DecisionEntry) -> str:
    return "outside the kernel's file" if one.file is None else f"{one.file}:{one.line}"


def _first(notes: list[str]) -> list[str]:
    """Return the first notes of a kind, and how many more the record has."""
    left = len(notes) - _LINES
    if left <= 0:
        return notes
    return [
        *notes[:_LINES],
        f"{count(left)} further {'lines' if left > 1 else 'line'} like that; audit.json has them all",
    ]


def _short_names(files: Iterable[str]) -> dict[str, str]:
    """Return the last part of each path, or the whole of it where two paths end alike."""
    unique = list(dict.fromkeys(files))
    last = [file.replace("\\", "/").rpartition("/")[2] for file in unique]
    return {file: clean(name if last.count(name) == 1 else file) for file, name in zip(unique, last, strict=True)}
