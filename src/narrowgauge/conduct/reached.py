"""From the notes of a trial run to the `reach` and `range` parts of the record."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from typing import TypedDict

import numpy as np

from narrowgauge.conduct.observers import Constants, Kind, Line, Notes
from narrowgauge.dispatch.setting import Way
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.record.audit import (
    ConstantEntry,
    ConstantValue,
    DecisionEntry,
    LineCount,
    RangeEntry,
    ReachEntry,
    ReachLine,
)

__all__ = ["most_of", "range_entry", "reach_entry", "text_remarks"]

_SHOWN = 5  # values of one line; a step size times a counter has as many as there are steps
_KINDS: tuple[Kind, ...] = ("zero", "infinite", "subnormal", "moved")


def reach_entry(
    file: AuditFile, notes: Notes, narrow: Mapping[str, Notes], runs: Iterable[Notes], remarks: Sequence[str]
) -> ReachEntry:
    """Return what the reference reached.

    `narrow` are the arms that came to an end on the same draws, `runs` all runs of the trial.
    """
    lines = [
        ReachLine(**_place(file, place), operation=operation, route=route, count=number)
        for (place, operation, route), number in sorted(notes.operations.items(), key=lambda item: _by_name(item[0]))
    ]
    # A sum in a stated order rounds each partial result.
    rounded = sum(line.count for line in lines if line.route in ("rounded", "accumulated"))
    whole = sum(line.count for line in lines if line.route == "whole")
    everywhere = list(runs)
    return ReachEntry(
        operations=sum(line.count for line in lines),
        rounded=rounded,
        share=rounded / (rounded + whole) if rounded + whole else None,
        decisions=notes.decisions.total(),
        lines=lines,
        integers=_counts(file, most_of(everywhere, "integer")),
        changed_decisions=_changed(file, notes, narrow),
        allowed_escapes=_counts(file, most_of(everywhere, "escape")),
        remarks=list(remarks),
    )


def range_entry(file: AuditFile, constants: Constants, arms: Sequence[str]) -> RangeEntry:
    """Return what becomes of constants, in order of the lines; the first few values of each line, arm and kind."""
    entries = []
    for (arm, place, kind), values in sorted(constants.found.items(), key=lambda item: _by_kind(item[0], arms)):
        for parameter, own in _by_parameter(file, place, values).items():
            entries.append(
                ConstantEntry(
                    **_place(file, place),
                    parameter=parameter,
                    arm=arm,
                    kind=kind,
                    count=own.total(),
                    distinct=len(own),
                    values=[_value(constants, arm, value, count) for value, count in [*own.items()][:_SHOWN]],
                )
            )
    return RangeEntry(constants=entries)


def text_remarks(file: AuditFile, runs: Iterable[Notes]) -> list[str]:
    """Say on which lines values of the state became text, in any run of the trial."""
    found = most_of(runs, "text")
    words = "of the state became text, which leaves the emulation: what is read back from it is not rounded"
    return [
        f"{file.shown(place.file)}:{place.line}: {f'{count} values' if count > 1 else 'a value'} {words}"
        for place, count in sorted(found.items(), key=lambda item: _order(item[0]))
        if place is not None  # not of the kernel's code
    ]


def most_of(runs: Iterable[Notes], way: Way) -> Counter[Line]:
    """Return how often values left on each line, in the run where that was most."""
    most: Counter[Line] = Counter()
    for notes in runs:
        most |= notes.ways[way]
    return most


def _changed(file: AuditFile, reference: Notes, narrow: Mapping[str, Notes]) -> list[DecisionEntry]:
    """Return the lines where an arm took another number of decisions, or found another number of them true."""
    places = set(reference.decisions).union(*(notes.decisions for notes in narrow.values()))
    return [
        DecisionEntry(
            **_place(file, place),
            arm=arm,
            reference_count=reference.decisions[place],
            reference_true=reference.affirmed[place],
            count=notes.decisions[place],
            true=notes.affirmed[place],
        )
        for place in sorted(places, key=_order)
        for arm, notes in narrow.items()
        if (reference.decisions[place], reference.affirmed[place]) != (notes.decisions[place], notes.affirmed[place])
    ]


def _by_parameter(file: AuditFile, place: Line, values: Counter[float]) -> dict[str | None, Counter[float]]:
    """Return constants told apart by the array parameter that holds them; those of a line stay together."""
    if place is not None:
        return {None: values}
    arrays = {name: value for name, value in file.keywords().items() if isinstance(value, np.ndarray)}
    found: dict[str | None, Counter[float]] = {}
    for number, count in values.items():
        name = next((name for name, array in arrays.items() if (array == number).any()), None)
        found.setdefault(name, Counter())[number] = count
    return found


def _value(constants: Constants, arm: str, value: float, count: int) -> ConstantValue:
    finding = constants.finding(arm, value)
    if finding.kind == "infinite":
        return ConstantValue(value=value, became=None, ulps=None, count=count)
    return ConstantValue(value=value, became=finding.became, ulps=finding.ulps, count=count)


def _counts(file: AuditFile, found: Counter[Line]) -> list[LineCount]:
    return [LineCount(**_place(file, place), count=found[place]) for place in sorted(found, key=_order)]


class _Where(TypedDict):
    file: str | None
    line: int | None


def _place(file: AuditFile, place: Line) -> _Where:
    if place is None:
        return {"file": None, "line": None}
    return {"file": file.shown(place.file), "line": place.line}


def _order(place: Line) -> tuple[str, int]:
    return (place.file, place.line) if place else ("", 0)


def _by_name(key: tuple[Line, str, str]) -> tuple[tuple[str, int], str]:
    return _order(key[0]), key[1]


def _by_kind(key: tuple[str, Line, Kind], arms: Sequence[str]) -> tuple[tuple[str, int], int, int]:
    arm, place, kind = key
    return _order(place), arms.index(arm), _KINDS.index(kind)
