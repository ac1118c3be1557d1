"""The first sections of the page: where noise crosses the signal, and whether the law of rounding holds."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence

from rich.text import Text

from narrowgauge.record.audit import REJECTED_BELOW, AuditRecord, QuantityEntry
from narrowgauge.report.blocks import Block, Drawing, Part, Table, Words, points, tabled
from narrowgauge.report.charts import LineChart, spoken
from narrowgauge.report.crossing import NO_NOISE, crossing_chart, crossing_words
from narrowgauge.report.figures import NARROW, WIDE, lines
from narrowgauge.report.layout import Ruled
from narrowgauge.report.notes import accumulation, nonfinite, orders
from narrowgauge.report.parts import law_chart, law_shares
from narrowgauge.report.settings import confidence, coupled, exact_formats, measured_to
from narrowgauge.report.tables import missing_noise, signal_table
from narrowgauge.report.wording import NONE, clean, figure, interval, levels_named, percent, shown_edge

__all__ = ["crossing", "drawn", "law", "per_quantity", "place_of"]


def per_quantity(record: AuditRecord, blocks: Callable[[str, QuantityEntry], Iterable[Block]]) -> list[Block]:
    """Return the blocks of the only quantity, or those of several, each below its name."""
    if len(record.quantities) == 1:
        return [block for name, entry in record.quantities.items() for block in blocks(name, entry)]
    return [Part(f"Quantity {clean(name)}", tuple(blocks(name, entry))) for name, entry in record.quantities.items()]


def drawn(chart: LineChart, key: str, title: str, caption: str) -> Drawing:
    """Return the drawing of a chart, with each of its series in words for a listener."""
    told = " ".join(spoken(series, chart) for series in chart.series)
    return Drawing(
        title=title,
        caption=caption,
        alternative=f"{title}. Line chart, {chart.up} against {chart.across}. {told} The table below has the figures.",
        wide=lines(chart, WIDE, f"{key}-wide"),
        narrow=lines(chart, NARROW, f"{key}-narrow"),
    )


def crossing(record: AuditRecord) -> list[Block]:
    """Return where rounding noise crosses the level's own signal: the answer, the drawing, the table."""

    def one(name: str, entry: QuantityEntry) -> Iterable[Block]:
        yield from points(crossing_words(record, entry, arm) for arm in exact_formats(record))
        chart = crossing_chart(record, entry)
        if chart is None:
            words = "There is nothing to draw along a ladder: fewer than two levels have a signal."
            yield Words(f"{words} The table has what was measured.", "note")
        else:
            key = f"crossing-{place_of(record, name)}"
            yield drawn(chart, key, f"Signal and rounding noise of {clean(name)}", _crossing_caption(record))
        yield tabled(f"Signal and noise of {clean(name)}: standard deviations", signal_table(record, entry))
        yield from (Words(f"{NONE} {why}.", "note") for why in missing_noise(record, entry))
        if measured_to(record) > 0 and coupled(record):
            yield Words(orders(entry))
        yield Words(f"Non-finite values, with bounds at 99%: {nonfinite(record, entry)}")

    if not exact_formats(record):
        return [Words(NO_NOISE, "answer")]
    lead = (
        "The signal is what a level adds to the estimate; the noise is what a format's rounding does to it, path by "
        "path. A format has something to offer on the levels where its noise lies well below the signal."
    )
    return [Words(lead, "answer"), *per_quantity(record, one)]


def _crossing_caption(record: AuditRecord) -> str:
    return (
        f"Each mark is a measured standard deviation with its {confidence(record)} interval, often smaller than the "
        "mark. Solid lines of the formats are the fitted law; a filled mark is a level on which the fit rests, a "
        "hollow one is not. Dashed lines are extrapolated: the law with more steps, the signal by its order in h. A "
        "ring shows where a noise crosses the signal."
    )


def law(record: AuditRecord) -> list[Block]:
    """Return whether rounding follows delta^2/h, and which part of the law rules where."""

    def one(name: str, entry: QuantityEntry) -> Iterable[Block]:
        yield from points(accumulation(entry))
        chart = law_chart(record, entry)
        if chart is None:
            yield Words("Nothing is drawn: no format has a rounding error on two levels.", "note")
        else:
            caption = (
                "Divided by the square of its unit roundoff u, the error of every format falls on one line where "
                "rounding scales with u; where independent roundings add up, the line climbs as the dotted one does. "
                f"Marks are measured, with {confidence(record)} intervals; lines are the fitted law."
            )
            title = f"Error variance of {clean(name)} in units of u squared"
            yield drawn(chart, f"law-{place_of(record, name)}", title, caption)
        if entry.accumulation:
            yield tabled(f"The fitted law of the error of {clean(name)}", _coefficients(record, entry, "error"))
            yield from _shares(entry, name)
            caption = f"The same law for the correction of {clean(name)} to float64"
            yield tabled(caption, _coefficients(record, entry, "correction"))

    lead = (
        "Over n steps the error variance is u\u00b2 (floor + walk n + drift n\u00b2). The walk is the \u03b4\u00b2/h "
        "law of independent roundings; the floor is what inputs and final operations leave at any step; the drift is "
        "systematic, and counts only where its interval is above 0; elsewhere the law is drawn without it."
    )
    return [Words(lead, "answer"), *per_quantity(record, one)]


def _coefficients(record: AuditRecord, entry: QuantityEntry, which: str) -> Ruled:
    bounds = f"({confidence(record)} interval)"
    table = Ruled(
        ("format", "unbroken"),
        (f"floor\n{bounds}", "words"),
        (f"walk\n{bounds}", "words"),
        (f"drift\n{bounds}", "words"),
        ("slope", "words"),
        ("largest\nmisfit", "number"),
        ("p", "number"),
        ("rests on", "words"),
    )
    for arm, laws in entry.accumulation.items():
        one = laws.error if which == "error" else laws.correction
        if one.reason is not None:
            cells = (*[NONE] * 6, f"not fitted: {clean(one.reason)}")
        else:
            misfit = NONE if one.deviation is None else f"{figure(one.deviation, 2)}%"
            cells = (
                *(
                    interval(getattr(one, part), getattr(one, f"{part}_low"), getattr(one, f"{part}_high"), (0.0,))
                    for part in ("floor", "walk", "drift", "slope")
                ),
                misfit,
                shown_edge(one.fit_p, (REJECTED_BELOW,), 2),
                levels_named(one.levels),
            )
        table.add_row(*map(Text, (clean(arm), *cells)))
    return table


def _shares(entry: QuantityEntry, name: str) -> Iterable[Table]:
    """Yield a table of the parts of the law by level, a column for each format whose law is fitted."""
    found = {arm: {level: parts for level, *parts in law_shares(entry, arm)} for arm in entry.accumulation}
    arms = [arm for arm, rows in found.items() if rows]
    if not arms:
        return
    table = Ruled(("level", "number"), *((clean(arm), "words") for arm in arms))
    for level in entry.levels:
        cells = [_parts(found[arm][level.level]) if level.level in found[arm] else NONE for arm in arms]
        table.add_row(*map(Text, (str(level.level), *cells)))
    yield tabled(f"Which part rules: shares of the fitted error variance of {clean(name)}", table)


def _parts(parts: Sequence[float]) -> str:
    """Return the parts that are there, the largest first."""
    named = sorted(zip(parts, ("floor", "walk", "drift"), strict=True), key=lambda one: -one[0])
    return ", ".join(f"{word} {percent(part, (0.0, 0.5, 1.0))}" for part, word in named if part > 0.0)


def place_of(record: AuditRecord, name: str) -> int:
    """Return the place of a quantity among all: an id of the page that no name can spoil."""
    return list(record.quantities).index(name)
