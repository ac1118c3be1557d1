"""Which lines cost the accuracy: the source with shares at its right, and what keeping lines in a wider format buys."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import groupby, pairwise
from typing import NamedTuple

from rich.console import Console, ConsoleOptions, RenderableType, RenderResult
from rich.text import Text

from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.lines import (
    CARRIED,
    FormatLines,
    LineEntry,
    PaysEntry,
    QuantityLines,
    ShareEntry,
    SumEntry,
    WideningEntry,
)
from narrowgauge.report.layout import Hanging, Kind, Ruled
from narrowgauge.report.settings import confidence, measured_to
from narrowgauge.report.wording import NONE, clean, count, figure, interval, joined, percent

__all__ = [
    "HEADING",
    "ListedLine",
    "Listing",
    "best_widening",
    "line_hint",
    "line_parts",
    "listings",
    "shares_table",
    "shown_quantity",
    "study_words",
    "unfinished",
    "what_if_note",
    "what_if_table",
    "widening_note",
    "widening_table",
]

_MATTERS = 0.01  # of the variance: smaller shares stand in lines.csv alone
HEADING = "share of error variance"
_BARS = ((80, 20), (60, 10))  # from which width on a bar is how long at most
_PAYS: tuple[tuple[str, Kind], ...] = (
    ("pays to level", "words"),
    ("gain there", "words"),
    ("cost of a step", "number"),
)
_FURTHER = 4  # blanks before the rest of a line that is broken
_INPUTS = {"draws": "the draws", "step size": "the step size", "constants": "all other constants"}


class ListedLine(NamedTuple):
    """A line of source or an input by name, with its share of a variance where that matters, and if a gap precedes."""

    line: int | None
    text: str
    share: float | None
    gap: bool = False


class Listing(NamedTuple):
    """Lines of one file, or the inputs of the kernel, whose file is None."""

    file: str | None
    lines: list[ListedLine]


class Source:
    """Source lines, each with its share of a variance or None: a bar and a figure stand right of those that matter."""

    def __init__(self, rows: list[tuple[str, float | None]]) -> None:
        self._rows = rows

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        width = options.max_width
        longest = next((most for least, most in _BARS if width >= least), 0)
        figures = [percent(share) if share is not None else "" for _, share in self._rows]
        most = max((len(text) for text in figures), default=0)
        right = most + (longest + 1 if longest else 0)
        left = max(width - right - 2, 1)
        for line in Text(HEADING, style="bold").wrap(console, width):
            line.align("right", width)
            yield line
        for (text, share), shown in zip(self._rows, figures, strict=True):
            bar = "#" * max(1, round(longest * min(share, 1.0))) if share is not None and longest else ""
            lines = list(_broken(text, left, console))
            first = lines[0].plain.ljust(left + 2) + bar.ljust(longest + 1 if longest else 0) + shown.rjust(most)
            yield Text(first.rstrip() if share is None else first, style="none" if share is None else "bold")
            yield from lines[1:]


def _broken(text: str, width: int, console: Console) -> Iterator[Text]:
    """Yield a source line in pieces of at most `width`, the further ones behind its indentation."""
    words = clean(text).strip() if text.strip() else ""
    indent = min(len(text) - len(text.lstrip()), width // 2)
    further = min(indent + _FURTHER, width // 2)
    for number, line in enumerate(Text(words).wrap(console, width - further, overflow="fold") or [Text("")]):
        yield Text(" " * (further if number else indent)).append_text(line)


def line_parts(record: AuditRecord) -> list[RenderableType]:
    """Return the studies of all formats, each below a title; nothing without one."""
    if record.lines is None:
        return []
    parts: list[RenderableType] = []
    if record.lines.reason is not None:
        parts += [Text(), Text(f"{unfinished(record.lines.reason)}.")]
    for form, study in record.lines.formats.items():
        parts += [Text(), Text(f"Lines of {clean(form)}", style="bold"), *_study(record, form, study)]
    return parts[1:]


def unfinished(reason: str) -> str:
    """Return why a study of the lines was stopped."""
    return f"Which lines cost the accuracy was not found out: {clean(reason)}"


def line_hint(record: AuditRecord) -> str:
    """Say how to find out which lines cost the accuracy, where a format ends early and nobody asked; "" elsewhere."""
    if record.lines is not None or record.reach is None:
        return ""
    ending = [
        clean(arm)
        for arm, one in record.verdict.finest_paying_level.items()
        if "/" not in arm and (one.level is None or one.level < measured_to(record))
    ]
    if not ending:
        return ""
    return f"The option --lines finds out which lines cost {joined(ending)} {_their(ending)} accuracy."


def _their(names: list[str]) -> str:
    return "their" if len(names) > 1 else "its"


def _study(record: AuditRecord, form: str, study: FormatLines) -> list[RenderableType]:
    parts: list[RenderableType] = [Text(study_words(record, form, study))]
    name = shown_quantity(record, form, study)
    if name is None:
        return parts
    rows: list[tuple[str, float | None]] = []
    for listing in listings(record, study, name):
        rows += _rows(listing)
    if rows:
        parts.append(Source(rows))
    return [*parts, *_widenings(form, study)]


def _rows(listing: Listing) -> Iterator[tuple[str, float | None]]:
    if listing.file is None:
        yield from ((f"({one.text})", one.share) for one in listing.lines)
        return
    yield f"{clean(listing.file)}, from line {listing.lines[0].line}", None
    for one in listing.lines:
        if one.gap:
            yield "    ...", None
        yield one.text, one.share


def shown_quantity(record: AuditRecord, form: str, study: FormatLines) -> str | None:
    """Return the quantity whose shares stand at the source; None where a study has none.

    It is the one that decides, or where that has no shares, as a yes/no quantity may, the first that has.
    """
    decider = record.verdict.finest_paying_level[form].decided_by
    names = sorted(study.quantities, key=lambda name: name != decider)
    shared = (name for name in names if (total := study.quantities[name].error.total) and total.share is not None)
    return next(shared, next(iter(names), None))


def study_words(record: AuditRecord, form: str, study: FormatLines) -> str:
    """Return what was studied, and to what the shares add up, or why there are none."""
    name = shown_quantity(record, form, study)
    if name is None:
        return f"No figures on level {study.level}: {clean(study.reason or '')}."
    where = f"On level {study.level}, {count(study.steps)} {'step' if study.steps == 1 else 'steps'}, from "
    where += f"{count(study.paths)} paths of every run"
    where += f"; for {clean(name)}, others in lines.csv" if len(study.quantities) > 1 else ""
    return f"{where}. {_sum_words(study.quantities[name].error)}"


def _sum_words(found: SumEntry) -> str:
    if found.total is None or found.total.share is None:
        return f"No shares: {clean(found.reason or '')}."
    total = found.total
    return (
        f"A share is the mean of what a line costs alone and of what is saved without it; all together they are "
        f"{figure(total.share)} of the error variance (alone {figure(total.alone)}, saved {figure(total.saved)})."
    )


def listings(record: AuditRecord, study: FormatLines, name: str) -> list[Listing]:
    """Return the source of every file with a line that matters to a quantity, and then the inputs that do."""
    assert record.lines is not None  # it has this study
    matter = {_key(study.parts[place]): share for place, share in _mattering(study.quantities[name]).items()}
    found = []
    for file, lines in groupby(record.lines.source, key=lambda line: line.file):
        first, *rest = lines
        own = [
            ListedLine(line.line, line.text, matter.get((file, line.line)), gap=line.line > before.line + 1)
            for before, line in pairwise([first, first, *rest])
        ]
        if any(line.share is not None for line in own):
            found.append(Listing(file, own))
    inputs = [ListedLine(None, words, matter[kind, None]) for kind, words in _INPUTS.items() if (kind, None) in matter]
    return [*found, Listing(None, inputs)] if inputs else found


def _mattering(found: QuantityLines) -> dict[int, float]:
    """Return the shares of the error variance that are large enough to be shown, by the place of their part."""
    shares = {one.part: one.error.share for one in found.parts}
    return {place: share for place, share in shares.items() if share is not None and share >= _MATTERS}


def shares_table(record: AuditRecord, study: FormatLines, name: str) -> Ruled:
    """Return the parts that matter to a quantity, largest share first, with the intervals of their shares."""
    found = study.quantities[name]
    entries, matter = {one.part: one for one in found.parts}, _mattering(found)
    bounds = f"({confidence(record)} interval)"
    columns: list[tuple[str, Kind]] = [
        ("part", "words"),
        (f"share\n{bounds}", "words"),
        ("alone", "number"),
        ("saved", "number"),
    ]
    if coupled := any(one.correction is not None for one in found.parts):
        columns.append((f"of the correction\n{bounds}", "words"))
    table = Ruled(*columns, ("operations", "number"))
    for place in sorted(matter, key=lambda place: -matter[place]):
        one, part = entries[place], study.parts[place]
        cells = [_name(part), _share(one.error), _percent(one.error.alone), _percent(one.error.saved)]
        if coupled:
            cells.append(NONE if one.correction is None else _share(one.correction))
        table.add_row(*map(Text, (*cells, percent(part.operations))))
    return table


def _share(one: ShareEntry) -> str:
    if one.share is None or one.share_low is None or one.share_high is None:
        return _percent(one.share)
    return f"{percent(one.share)} ({percent(one.share_low)} to {percent(one.share_high)})"


def _percent(share: float | None) -> str:
    return NONE if share is None else percent(share)


def widening_table(form: str, study: FormatLines) -> Ruled:
    """Return the format as it is, and the sets of parts whose widening makes it pay further."""
    table = Ruled((f"kept in {clean(study.wide or '')}", "words"), *_PAYS, ("operations\nat wide cost", "number"))
    for one in [study.plain, *(study.widenings or [])]:
        if one is not None:
            named = _named(study, one) if one.parts else f"nothing: {clean(form)} as it is"
            table.add_row(*map(Text, (named, *_paying(one), percent(one.operations))))
    return table


def what_if_table(study: FormatLines) -> Ruled:
    """Return how far the format would pay in other arithmetics."""
    table = Ruled(("with", "words"), *_PAYS)
    for one in study.what_ifs or ():
        table.add_row(*map(Text, (clean(one.name), *_paying(one))))
    return table


def _paying(one: PaysEntry) -> tuple[str, str, str]:
    if one.level is None:
        none = "on no level" if one.possible is None else f"on no level for sure, perhaps to {one.possible}"
        return none, NONE, figure(one.step_cost)
    open_ended = f", perhaps {one.possible}" if one.possible is not None and one.possible > one.level else ""
    return f"{one.level}{open_ended}", interval(one.gain, one.gain_low, one.gain_high), figure(one.step_cost)


def best_widening(form: str, study: FormatLines) -> str:
    """Return the set that makes the format pay furthest, in words; "" where no set makes it pay further."""
    if not study.widenings:
        return ""
    best = study.widenings[-1]
    return f"with {_named(study, best)} in {clean(study.wide or '')}, {clean(form)} {_pays(best)}"


def widening_note(study: FormatLines) -> str:
    """Return why no set of parts is named, "" where one is."""
    if study.plain is None or study.widenings is None:
        return f"No search for lines to widen: {clean(study.reason or '')}."
    return "" if study.widenings else f"No few lines that are kept in {clean(study.wide or '')} make it pay further."


def what_if_note(study: FormatLines) -> str:
    """Return why carried errors were not tried, "" where they were, or nothing was asked for."""
    if not study.what_ifs or any(one.name == CARRIED for one in study.what_ifs):
        return ""
    return (
        "Carried errors and wide increments were not tried: no addition x = x + e was seen whose result the next step "
        "starts from. A state that is stored in the rows of an array is not followed there."
    )


def _key(part: LineEntry) -> tuple[str | None, int | None]:
    return (part.file, part.line) if part.kind == "line" else (part.kind, None)


def _widenings(form: str, study: FormatLines) -> list[RenderableType]:
    """Return what is bought by keeping parts in the wider format, from cheapest to best."""
    tried = [
        f"with {clean(one.name)} it {_pays(one)}; a step costs {figure(one.step_cost)}" for one in study.what_ifs or ()
    ]
    if study.plain is None or study.widenings is None:
        none: list[RenderableType] = [Text(widening_note(study))]
        return [*none, *_bulleted([f"{clean(form)} {line}" for line in tried]), *_untried(study)]
    wide = clean(study.wide or "")
    lines = [f"{clean(form)} as it is {_pays(study.plain)}"]
    lines += [f"with {_named(study, one)} in {wide} it {_pays(one)}; {_charged(one)}" for one in study.widenings]
    if not study.widenings:
        lines.append(f"no few lines that are kept in {wide} make it pay further")
    return [*_bulleted([*lines, *tried]), *_untried(study)]


def _untried(study: FormatLines) -> list[RenderableType]:
    note = what_if_note(study)
    return [Text(note)] if note else []


def _bulleted(lines: list[str]) -> list[RenderableType]:
    return [Hanging(Text(line), "- ") for line in lines]


def _pays(one: PaysEntry) -> str:
    if one.level is None:
        return (
            "pays on no level"
            if one.possible is None
            else f"pays on no level for sure, perhaps to level {one.possible}"
        )
    open_ended = f", perhaps to level {one.possible}" if one.possible is not None and one.possible > one.level else ""
    return (
        f"pays to level {one.level}{open_ended}, with a gain of {interval(one.gain, one.gain_low, one.gain_high)} there"
    )


def _charged(one: WideningEntry) -> str:
    charged = f"{percent(one.operations)} of the operations are charged at the wide cost"
    return f"{charged}, a step costs {figure(one.step_cost)}"


def _named(study: FormatLines, one: WideningEntry) -> str:
    return joined([_name(study.parts[place]) for place in one.parts])


def _name(part: LineEntry) -> str:
    if part.kind != "line":
        return _INPUTS[part.kind]
    role = {"state": " (the state)", "payoff": " (the payoff)"}.get(part.role or "", "")
    return clean(f"{part.file}:{part.line}{role}")
