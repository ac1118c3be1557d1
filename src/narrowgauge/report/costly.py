"""The section on source lines: which of them cost the accuracy, and what keeping some in a wider format buys."""

from __future__ import annotations

from collections.abc import Iterator

from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.lines import FormatLines
from narrowgauge.report.blocks import Block, Part, Source, SourceRow, Words, tabled, visible
from narrowgauge.report.lines import (
    HEADING,
    Listing,
    best_widening,
    line_hint,
    listings,
    shares_table,
    shown_quantity,
    study_words,
    unfinished,
    what_if_note,
    what_if_table,
    widening_note,
    widening_table,
)
from narrowgauge.report.wording import begun, clean, percent

__all__ = ["DEPTHS", "source_lines"]

DEPTHS = 24  # blanks before a line that are shown; more look like these
_TAB = 4


def source_lines(record: AuditRecord) -> list[Block] | str:
    """Return the user's source with the share of each line that matters, format by format."""
    found = record.lines
    if found is None:
        words = "Not measured in this audit: how much of the error variance each line of the source brings."
        return f"{words} {line_hint(record)}".strip()
    if not found.formats:
        return unfinished(found.reason or "no format was studied") + "."
    lead = (
        "On the first level where a format does not pay, each line, the draws, the step size and all other constants "
        "were rounded alone, and then all but each, on the same paths. A line with a large share is one to keep in a "
        "wider format."
    )
    blocks: list[Block] = [Words(lead, "answer")]
    if found.reason is not None:
        blocks.append(Words(f"{unfinished(found.reason)}.", "note"))
    for form, study in found.formats.items():
        blocks.append(Part(f"Lines of {clean(form)}", tuple(_study(record, form, study))))
    return blocks


def _study(record: AuditRecord, form: str, study: FormatLines) -> Iterator[Block]:
    if best := best_widening(form, study):
        yield Words(f"{begun(best)}.")
    yield Words(study_words(record, form, study))
    name = shown_quantity(record, form, study)
    if name is None:
        return
    shown = [listing for listing in listings(record, study, name) if listing.lines]
    if not shown:
        yield Words("No line or input brings as much as a hundredth of the error variance.", "note")
    yield from (_source(listing, form) for listing in shown)
    for quantity in study.quantities:
        table = shares_table(record, study, quantity)
        if table.rows:
            yield tabled(f"Shares of the error variance of {clean(quantity)} in {clean(form)}, largest first", table)
    if study.plain is not None:
        wide = clean(study.wide or "")
        yield tabled(
            f"What keeping parts of {clean(form)} in {wide} buys, from cheapest to best", widening_table(form, study)
        )
    if note := widening_note(study):
        yield Words(note, "note")
    if study.what_ifs:
        yield tabled(f"How far {clean(form)} would pay in another arithmetic", what_if_table(study))
    if note := what_if_note(study):
        yield Words(note, "note")


def _source(listing: Listing, form: str) -> Source:
    if listing.file is None:
        rows = tuple(SourceRow(0, one.text, *_share(one.share)) for one in listing.lines)
        return Source(caption=f"Inputs that cost {clean(form)} accuracy", first="input", heading=HEADING, rows=rows)
    found: list[SourceRow] = []
    for one in listing.lines:
        if one.gap:
            found.append(SourceRow(0, f"from line {one.line}", gap=True))
        text = one.text.expandtabs(_TAB).rstrip()
        bare = text.lstrip(" ")
        found.append(SourceRow(min(len(text) - len(bare), DEPTHS), bare, *_share(one.share)))
    caption = f"{visible(listing.file)}, from line {listing.lines[0].line}"
    return Source(caption=caption, first="source", heading=HEADING, rows=tuple(found))


def _share(share: float | None) -> tuple[float | None, str]:
    return (None, "") if share is None else (min(max(share, 0.0), 1.0), percent(share))
