"""The sections on what low precision is worth: the scheme of each level and what it saves, and approximate draws."""

from __future__ import annotations

from collections.abc import Iterable

from msgspec import UnsetType

from narrowgauge.record.audit import AuditRecord, QuantityEntry
from narrowgauge.report.blocks import Block, Drawing, Part, Words, points, tabled
from narrowgauge.report.figures import NARROW, WIDE, gains
from narrowgauge.report.notes import format_notes, separation_notes
from narrowgauge.report.parts import draws_chart, gain_chart
from narrowgauge.report.sections import drawn, per_quantity, place_of
from narrowgauge.report.settings import approximate_draws, assumed_costs, confidence, measured_to, narrow_formats, today
from narrowgauge.report.tables import (
    best_table,
    bounded_levels,
    common_table,
    format_table,
    missing_gains,
    parts_table,
    plan_table,
)
from narrowgauge.report.verdict import common_cost, finest_words, savings
from narrowgauge.report.wording import NONE, clean, interval, setting_value

__all__ = ["draws", "schemes"]


def schemes(record: AuditRecord) -> list[Block]:
    """Return which scheme each level should run with, what that gains, what each format is worth, and the plan."""

    def one(name: str, entry: QuantityEntry) -> Iterable[Block]:
        chart = gain_chart(record, entry)
        if chart is None:
            yield Words(f"There is no gain to draw: on no level can a scheme be compared with {today(record)}.", "note")
        else:
            rows = (f"level {row.level}: {row.scheme}, {interval(row.gain, row.low, row.high)}" for row in chart.rows)
            title = f"Gain of the cheapest scheme of {clean(name)}"
            yield Drawing(
                title=title,
                caption=f"Marks are gains with their {confidence(record)} intervals over {today(record)} alone, at "
                "equal variance of the level; a filled mark is a scheme of one format alone, a hollow one a split, and "
                "the shape is that of the narrow format.",
                alternative=f"{title}. One row for each level. {'; '.join(rows)}. The table below has the figures.",
                wide=gains(chart, WIDE, f"gain-{place_of(record, name)}-wide"),
                narrow=gains(chart, NARROW, f"gain-{place_of(record, name)}-narrow"),
            )
        yield tabled(f"The cheapest scheme of each level of {clean(name)}", best_table(record, entry))
        yield from (Words(f"{NONE} {why}.", "note") for why in missing_gains(record, entry))
        for arm in narrow_formats(record):
            yield Part(f"{clean(arm)} for {clean(name)}", tuple(_worth(record, name, entry, arm)))
        if entry.allocation.levels and len(record.quantities) == 1:
            title = f"Paths for an RMSE of {setting_value(entry.allocation.rmse)} in {clean(name)}"
            yield tabled(title, plan_table(entry.allocation))
            yield from _note(bounded_levels(entry.allocation.levels))

    lead = (
        f"The gain is what a level costs as {today(record)} alone over what it costs under a scheme, at equal "
        "variance. A scheme runs a level alone in one format, or splits it: most paths in a narrow format, few in two "
        "formats that correct them."
    )
    if assumed_costs(record):
        lead += " The costs of a step are assumed from the bits of the formats: measure them before you rely on a gain."
    blocks: list[Block] = [Words(lead, "answer"), *points(text.plain for text in savings(record))]
    blocks += per_quantity(record, one)
    if len(record.quantities) > 1:
        plan = record.verdict.plan
        if plan.levels:
            blocks.append(tabled("Paths for all quantities together", common_table(plan)))
            blocks += _note(bounded_levels(plan.levels))
        blocks.append(Words(common_cost(record)))
    return blocks


def _worth(record: AuditRecord, name: str, entry: QuantityEntry, arm: str) -> Iterable[Block]:
    yield tabled(f"What {clean(arm)} is worth for {clean(name)}", format_table(record, entry, arm))
    yield from points(format_notes(record, name, arm))
    if len(record.quantities) > 1:
        finest = finest_words(entry.finest_paying_level[arm], measured_to(record))
        yield Words(f"Finest level where it still pays, by {clean(name)} alone: {finest}.")


def draws(record: AuditRecord) -> list[Block] | str:
    """Return what approximate draws are, and what they and the arithmetic each put into the correction."""
    if isinstance(record.draws, UnsetType):
        return "No approximate draws were tried: the audit file has no [draws]."

    def one(name: str, entry: QuantityEntry) -> Iterable[Block]:
        found = entry.separation
        if isinstance(found, UnsetType):
            yield Words("Nothing was measured of them for this quantity.", "note")
            return
        for number, (arm, parts) in enumerate(found.parts.items()):
            chart = draws_chart(record, entry, parts)
            if chart is not None:
                key = f"draws-{place_of(record, name)}-{number}"
                caption = (
                    "Standard deviations of the correction to float64: of the format with exact draws (arithmetic), of "
                    "float64 with approximate draws (draws), and of the format with approximate draws (both)."
                )
                yield drawn(chart, key, f"What {clean(arm)} and its draws cost {clean(name)}", caption)
            if parts:
                yield tabled(f"Parts of the correction of {clean(arm)} for {clean(name)}", parts_table(entry, parts))
        for arm in found.orders:
            rows = found.parts.get(arm.partition("/")[0], [])
            yield Words(f"{clean(arm)}:")
            yield from points(separation_notes(found, rows, arm))

    what = approximate_draws(record.draws)
    return [Words(f"The approximate draws: {what}", "answer"), *per_quantity(record, one)]


def _note(words: str) -> list[Block]:
    return [Words(words, "note")] if words else []
