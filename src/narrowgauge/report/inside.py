"""The sections on what formats do inside the kernel: branches of a split, range and headroom, sums over the paths."""

from __future__ import annotations

from collections.abc import Iterable

from msgspec import UnsetType

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.range import WatchedEntry
from narrowgauge.report.averaging import averaged_over, averaging_lines, sums_tables
from narrowgauge.report.blocks import Block, Drawing, Part, Words, points, tabled
from narrowgauge.report.branches import branch_lines, branch_summary
from narrowgauge.report.charts import SpanChart, SpanRow, power
from narrowgauge.report.constants import constant_lines, no_constants
from narrowgauge.report.figures import NARROW, WIDE
from narrowgauge.report.palette import Look, look_of
from narrowgauge.report.range import Magnitudes, magnitudes, range_lines, range_table, room_table, watched_on
from narrowgauge.report.spans import spans
from narrowgauge.report.wording import begun, clean

__all__ = ["averaging", "branches", "ranges"]

_MOST_LINES, _LONGEST = 16, 20  # lines that are drawn, and characters of their names
_LINE = Look(role="ink", marker="o", dash=(1.0, 0.0))


def branches(record: AuditRecord) -> list[Block] | str:
    """Return whether the branches of a split cancel to the bit, and what differs, where and why."""
    if record.branches is None:
        return (
            "Not measured in this audit: whether the low branch run alone and the low half of the correction branch "
            "give the same bits. Every figure of a split takes it for granted that they do."
        )
    lead = (
        "A split adds the mean of many cheap paths of its low branch to that of a few corrections. The sum is right "
        "only if the low branch gives the very numbers that the low half of the correction gives."
    )
    summary = branch_summary(record.branches)
    lines = branch_lines(record.branches, record)
    return [Words(f"Branches of a split: {summary}", "answer"), *points(map(clean, lines)), Words(lead, "note")]


def ranges(record: AuditRecord) -> list[Block]:
    """Return how far results stay from the ends of each format, which additions are lost, and lost constants."""
    found = None if record.range is None else record.range.watched
    if record.range is None:
        words = (
            "Not measured in this audit: the largest and smallest magnitude on each line, and the headroom that a "
            "format leaves, in bits."
        )
        return [Words(words, "answer"), *_constants(record)]
    blocks: list[Block] = [Words(begun(watched_on(found)), "answer"), *points(range_lines(found))]
    if found is not None and found.levels:
        blocks += _magnitudes(record, found)
        blocks.append(tabled("Lost additions and results outside the normal numbers", range_table(found)))
    return [*blocks, *_constants(record)]


def _constants(record: AuditRecord) -> list[Block]:
    """Return the constants of the kernel that a format cannot take."""
    title = "Constants that a format cannot take"
    if record.range is None:
        why = "the kernel rounds for itself" if not isinstance(record.canary, UnsetType) else "the audit has none"
        return [Part(title, (Words(f"Not looked for: {why}."),))]
    lines = points(constant_lines(record.range))
    return [Part(title, tuple(lines or [Words(no_constants(record.range))]))]


def _magnitudes(record: AuditRecord, found: WatchedEntry) -> Iterable[Block]:
    chart = _chart(record, found)
    caption = (
        "Results of each line in float64; in each format bits to spare below, bits to spare above (negative: short)"
    )
    if chart is None:
        yield Words("No line has a result of float64 that is not zero, so there is no magnitude to draw.", "note")
    else:
        told = [f"{row.label}: from {_spoken(row)}" for row in (*chart.formats, *chart.lines)]
        left = sum(one.smallest is not None for one in magnitudes(found)) - len(chart.lines)
        few = f" Of the lines the {_MOST_LINES} nearest to an end are drawn." if left > 0 else ""
        title = "What formats hold, and what lines compute"
        yield Drawing(
            title=title,
            caption="Thick bars are the normal numbers of a format, the thin piece before them its subnormals; an "
            "arrow says that a bar goes on beyond the drawing. Below them, the results of each line in float64, with "
            f"marks where a format ends.{few}",
            alternative=f"{title}. Bars over powers of two. {'; '.join(told)}. The table below has the figures.",
            wide=spans(chart, WIDE, "range-wide"),
            narrow=spans(chart, NARROW, "range-narrow"),
        )
    yield tabled(caption, room_table(found))


def _chart(record: AuditRecord, found: WatchedEntry) -> SpanChart | None:
    """Return formats and lines, of more than fit the ones nearest to an end; None where no line has a magnitude."""
    arms = dict.fromkeys(arm for level in found.levels for arm in level.arms)
    formats = dict.fromkeys(record.arms[arm].format for arm in arms)
    lines = [one for one in magnitudes(found) if one.smallest is not None and one.largest is not None]
    if not lines or not formats:
        return None
    near = sorted(lines, key=_room)[:_MOST_LINES]
    return SpanChart(
        formats=tuple(_format_row(name) for name in formats),
        lines=tuple(_line_row(one) for one in lines if one in near),
    )


def _room(one: Magnitudes) -> int:
    return min((min(pair) for pair in one.headroom.values()), default=0)


def _format_row(name: str) -> SpanRow:
    form = FORMATS[name]
    return SpanRow(
        label=name,
        words=_words(form.emin, form.emax),
        look=look_of(name),
        low=float(form.emin),
        high=form.emax + 1.0,
        faint=float(form.emin - form.precision + 1),
    )


def _line_row(one: Magnitudes) -> SpanRow:
    assert one.smallest is not None  # lines without magnitudes are not drawn
    assert one.largest is not None
    place = one.place if len(one.place) <= _LONGEST else f"\u2026{one.place[1 - _LONGEST :]}"
    return SpanRow(
        label=place,
        words=_words(one.smallest, one.largest),
        look=_LINE,
        low=float(one.smallest),
        high=one.largest + 1.0,
    )


def _words(low: int, high: int) -> str:
    return f"{power(low)} to {power(high)}"


def _spoken(row: SpanRow) -> str:
    return f"2 to the {row.low:.0f} to 2 to the {row.high - 1.0:.0f}"


def averaging(record: AuditRecord) -> list[Block] | str:
    """Return what summing the paths of the plan in each format does to means, and how many paths a sum may take."""
    found = record.averaging
    if found is None:
        return (
            "Not measured in this audit: what summing the paths in each format does to the mean. The figures hold for "
            "sums in float64."
        )
    words = f"Sums over the paths: {averaged_over(found)} Every other figure of this page holds for sums in float64."
    blocks: list[Block] = [Words(words, "answer"), *points(averaging_lines(found))]
    for name in found.quantities:
        tables = {words: table for words, table in sums_tables(found, name).items() if table.rows}
        if tables:
            shown = [
                tabled(f"The most paths of {clean(name)} that may be summed {words}", table)
                for words, table in tables.items()
            ]
            blocks.append(Part(f"Sums of {clean(name)}", tuple(shown)))
    return blocks
