"""The first screen of the page: the verdict in one sentence, the finest paying levels, the saving, what to do next."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from narrowgauge.record.audit import AuditRecord
from narrowgauge.report.blocks import MARKS
from narrowgauge.report.settings import assumed_costs, confidence, measured_to, narrow_formats, today
from narrowgauge.report.verdict import ending, finest_words, paying_and_open, unreferenced
from narrowgauge.report.wording import begun, clean, joined, levels_named, percent

__all__ = ["FormatRow", "Gauge", "Headline", "format_rows", "gauges", "headline"]


@dataclass(frozen=True, slots=True)
class Headline:
    """The verdict in a sentence for somebody who decides, its mark (yes, no, open), and what it rests on."""

    sentence: str
    mark: str
    rests_on: str


@dataclass(frozen=True, slots=True, kw_only=True)
class FormatRow:
    """One format: how far it pays, level by level as (level, mark), the same in words, and why it ends there."""

    name: str
    finest: str
    levels: tuple[tuple[int, str], ...]
    spoken: str
    why: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Gauge:
    """What a run costs of what today's costs: in words, and its share and bounds from 0 to 1 (more is cut at 1)."""

    name: str
    label: str
    words: str
    share: float
    low: float
    high: float


def headline(record: AuditRecord) -> Headline:
    """Return the verdict as a manager understands it."""
    if not record.verdict.sound:
        sentence = "No verdict: the levels of this simulation do not fit together, so its figures cannot be relied on."
        return Headline(sentence, "open", "What follows is what the figures would say.")
    if lost := unreferenced(record):
        sentence = (
            f"No verdict: on {levels_named(lost)} float64 itself has no results of finite variance to compare with."
        )
        return Headline(sentence, "open", "What follows is what the figures would say.")
    paying, hoping = paying_and_open(record)
    where = "on its only level" if measured_to(record) == 0 else f"measured on levels 0 to {measured_to(record)}"
    if not paying and hoping:
        sentence = f"Not decided yet: whether lower precision pays in {joined(hoping, 'or')} needs more paths."
        return Headline(sentence, "open", f"The simulation was {where}.")
    if not paying:
        sentence = f"No: lower precision does not pay here. Keep {today(record)}."
        return Headline(sentence, "no", f"Tried: {joined(map(clean, narrow_formats(record)))}, {where}.")
    found = gauges(record)
    if not found:
        sentence = f"Yes: lower precision pays in {joined(paying)}, up to the levels named below."
        return Headline(sentence, "yes", f"What a whole run saves is not known: {_why_no_saving(record)}.")
    worst = max(found, key=lambda one: one.share)
    whom = f", for {worst.name}, which saves least" if len(record.quantities) > 1 else ""
    sentence = (
        f"Yes: at the same accuracy, the cheapest mix of formats costs {worst.words} of what {today(record)} alone "
        f"costs today{whom}."
    )
    rests = f"Each level runs in its cheapest admissible format. Lower precision pays in {joined(paying)}, {where}."
    if assumed_costs(record):
        rests += " The costs of a step are assumed, not measured."
    return Headline(sentence, "yes", rests)


def gauges(record: AuditRecord) -> list[Gauge]:
    """Return, for each quantity whose saving is known, what its run costs of what today's costs."""
    found = []
    for name, entry in record.quantities.items():
        plan = entry.allocation
        if not plan.saving or plan.saving <= 0.0 or not math.isfinite(plan.saving):
            continue
        share = 1.0 / plan.saving
        low = 1.0 / plan.saving_high if plan.saving_high else share
        high = 1.0 / plan.saving_low if plan.saving_low else share
        whole = f"the whole bar is what {today(record)} alone costs"
        shown = percent(share, (0.0, 1.0))
        if plan.saving_low and plan.saving_high:
            bounds = f"{percent(low, (0.0, 1.0))} to {percent(high, (0.0, 1.0))}"
            shown += f" ({confidence(record)} interval {bounds})"
        else:
            shown += " (no interval)"
        label = f"{clean(name)}: {shown}; {whole}" if len(record.quantities) > 1 else f"Cost of a run; {whole}"
        share, low, high = (min(1.0, part) for part in (share, low, high))
        found.append(Gauge(name=clean(name), label=label, words=shown, share=share, low=low, high=high))
    return found


def format_rows(record: AuditRecord) -> list[FormatRow]:
    """Return one row for each narrow format, over all quantities: the worst of them decides each level."""
    rows = []
    for name, entry in record.verdict.finest_paying_level.items():
        levels = tuple(_states(record, name))
        decides = entry.decided_by is not None and len(record.quantities) > 1
        why = ending(record, name)
        why = f"{begun(why)}." if why else ""
        rows.append(
            FormatRow(
                name=clean(name),
                finest=finest_words(entry, measured_to(record)),
                levels=levels,
                spoken=_spoken(levels),
                why=f"{why} The quantity {clean(entry.decided_by)} decides.".strip() if decides else why,
            )
        )
    return rows


def _states(record: AuditRecord, name: str) -> Iterable[tuple[int, str]]:
    for levels in zip(*(entry.levels for entry in record.quantities.values()), strict=True):
        marks = {MARKS.get(level.arms[name].verdict or "", "open") for level in levels}
        yield levels[0].level, next(mark for mark in ("no", "open", "yes") if mark in marks)


def _spoken(levels: Sequence[tuple[int, str]]) -> str:
    found = {verdict: [level for level, own in levels if own == mark] for verdict, mark in MARKS.items()}
    return "; ".join(f"{verdict} on {levels_named(there)}" for verdict, there in found.items() if there)


def _why_no_saving(record: AuditRecord) -> str:
    reasons = dict.fromkeys(entry.allocation.reason for entry in record.quantities.values())
    return joined(clean(reason) for reason in reasons if reason) or "no plan could be made"
