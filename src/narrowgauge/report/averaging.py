"""What summing the paths of a plan in each format does to the means: a sentence for each format."""

from __future__ import annotations

from typing import NamedTuple

from rich.text import Text

from narrowgauge.record.averaging import AveragedEntry, AveragingEntry, FormatSumsEntry, SumEntry
from narrowgauge.report.layout import Ruled
from narrowgauge.report.tables import VERDICT_STYLES
from narrowgauge.report.wording import NONE, clean, count, figure, joined, shown_edge

__all__ = ["averaged_over", "averaging_lines", "sums_tables"]

_ORDERS = {"running": "one after the other", "pairwise": "in pairs, as NumPy adds"}


class _Worst(NamedTuple):
    """The sum of a format that is worst in one order, and its place."""

    entry: AveragedEntry
    sums: SumEntry


def averaged_over(found: AveragingEntry) -> str:
    """Return what is told of sums."""
    share = f"{found.share:.0%}"
    return f"what adding them up in a format does to means, on the worst level; bounds are {share} of a standard error."


def averaging_lines(found: AveragingEntry) -> list[str]:
    """Return one sentence for each format; those without anything to say share one."""
    entries = [entry for branches in found.quantities.values() for entry in branches if entry.formats]
    if not entries:
        return ["Nothing is known of sums, since no branch has values that vary."]
    formats = list(entries[0].formats)
    planned = any(entry.paths is not None for entry in entries)
    share = f"{found.share:.0%}"
    said = {name: _format(entries, name, found.share, planned=planned) for name in formats}
    lines = [f"{clean(name)}: {words}." for name, words in said.items() if words]
    quiet = [clean(name) for name, words in said.items() if not words]
    if quiet and planned:
        lines.append(f"{joined(quiet)}: the plan's sums err by less than {share} of their standard error.")
    elif quiet:
        lines.append(f"{joined(quiet)}: sums of any number of paths err by less than {share} of their standard error.")
    return lines


def sums_tables(found: AveragingEntry, quantity: str) -> dict[str, Ruled]:
    """Return, by the order of adding in words, how many paths each sum of a quantity may take in each format.

    A number below the plan's is marked like a format that does not pay.
    """
    entries = [entry for entry in found.quantities[quantity] if entry.formats]
    formats = list(dict.fromkeys(name for entry in entries for name in entry.formats))
    tables = {}
    for order, words in _ORDERS.items() if entries else ():
        table = Ruled(
            ("level", "number"), ("sum of", "unbroken"), ("planned", "number"), *((clean(f), "words") for f in formats)
        )
        for entry in entries:
            planned = NONE if entry.paths is None else count(entry.paths)
            branch = "corrections" if entry.branch == "correction" else "paths"
            cells = [Text(one) for one in (str(entry.level), branch, planned)]
            for name in formats:
                one = entry.formats.get(name)
                cells.append(Text(NONE) if one is None else _allowed(_sums(one, order), entry.paths))
            table.add_row(*cells)
        tables[words] = table
    return tables


def _allowed(one: SumEntry, planned: int | None) -> Text:
    if one.largest is None:
        return Text("any number")
    if planned is not None and one.largest < planned:
        return Text(f"{figure(_rounded_down(one.largest), 2)}, too few", style=VERDICT_STYLES["does not pay"])
    return Text(figure(_rounded_down(one.largest), 2))


def _format(entries: list[AveragedEntry], name: str, share: float, *, planned: bool) -> str:
    """Return what is worst in each order, "" where there is nothing to say."""
    parts = []
    for order, words in _ORDERS.items():
        ones = [_Worst(entry, _sums(entry.formats[name], order)) for entry in entries]
        one = max(ones, key=_planned_harm) if planned else min(ones, key=_fewest)
        if planned and _planned_harm(one) > share:
            parts.append(f"{words}, {_harm(one, share)}")
        elif not planned and one.sums.largest is not None:
            parts.append(f"{words}, {_paths(one.sums.largest)} paths may be summed on level {one.entry.level}")
    return "; ".join(parts)


def _sums(one: FormatSumsEntry, order: str) -> SumEntry:
    return one.running if order == "running" else one.pairwise


def _planned_harm(one: _Worst) -> float:
    if one.entry.paths is None:
        return 0.0
    return float("inf") if one.sums.share is None else one.sums.share


def _fewest(one: _Worst) -> float:
    return float("inf") if one.sums.largest is None else one.sums.largest


def _harm(one: _Worst, share: float) -> str:
    entry, sums = one
    where = f"the {'corrections' if entry.branch == 'correction' else 'paths'} of level {entry.level}"
    size = "pass its range" if sums.share is None else f"err by {shown_edge(sums.share, (share,), 2)} standard errors"
    known = "" if sums.largest is None else f", {_paths(sums.largest)} stay within bounds"
    return f"sums of {where} {size} ({count(entry.paths or 0)} are planned{known})"


def _paths(number: int) -> str:
    return f"at most {count(_rounded_down(number))}"


def _rounded_down(number: int) -> int:
    """Return a number of paths with two digits that count, rounded down."""
    size: int = 10 ** max(0, len(str(number)) - 2)
    return number // size * size
