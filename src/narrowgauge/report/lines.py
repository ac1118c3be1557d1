"""Which lines cost the accuracy: the source with shares at its right, and what keeping lines in a wider format buys."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import groupby

from rich.console import Console, ConsoleOptions, RenderableType, RenderResult
from rich.text import Text

from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.lines import FormatLines, LineEntry, PartShare, PaysEntry, SumEntry, WideningEntry
from narrowgauge.report.layout import Hanging
from narrowgauge.report.wording import clean, count, figure, interval, joined, percent

__all__ = ["line_hint", "line_parts"]

_MATTERS = 0.01  # of the variance: smaller shares stand in lines.csv alone
_HEADING = "share of error variance"
_BARS = ((80, 20), (60, 10))  # from which width on a bar is how long at most
_FURTHER = 4  # blanks before the rest of a line that is broken
_INPUTS = {"draws": "the draws", "step size": "the step size", "constants": "all other constants"}


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
        for line in Text(_HEADING, style="bold").wrap(console, width):
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
        parts += [Text(f"Which lines cost the accuracy was not found out: {clean(record.lines.reason)}"), Text()]
    for form, study in record.lines.formats.items():
        parts += [
            Text(f"Which lines cost {clean(form)} its accuracy", style="bold"),
            *_study(record, form, study),
            Text(),
        ]
    return parts


def line_hint(record: AuditRecord) -> list[RenderableType]:
    """Say in one line how to find out which lines cost the accuracy, where a format ends early and nobody asked."""
    if record.lines is not None or record.reach is None:
        return []
    last = max((entry.levels[-1].level for entry in record.quantities.values()), default=0)
    ending = [
        clean(arm)
        for arm, one in record.verdict.finest_paying_level.items()
        if "/" not in arm and (one.level is None or one.level < last)
    ]
    if not ending:
        return []
    return [Text(f"The option --lines finds out which lines cost {joined(ending)} {_their(ending)} accuracy.")]


def _their(names: list[str]) -> str:
    return "their" if len(names) > 1 else "its"


def _study(record: AuditRecord, form: str, study: FormatLines) -> list[RenderableType]:
    if not study.quantities:
        return [Text(f"No figures on level {study.level}: {clean(study.reason or '')}.")]
    decider = record.verdict.finest_paying_level[form].decided_by
    name = decider if decider in study.quantities else next(iter(study.quantities))
    found = study.quantities[name]
    where = f"On level {study.level}, {count(study.steps)} {'step' if study.steps == 1 else 'steps'}, from "
    where += f"{count(study.paths)} paths of every run"
    where += f"; for {clean(name)}, others in lines.csv" if len(study.quantities) > 1 else ""
    parts: list[RenderableType] = [Text(f"{where}. {_sum_words(found.error)}")]
    if found.error.total is not None or any(part.error.share is not None for part in found.parts):
        parts += _sources(record, study, found.parts)
    return [*parts, *_widenings(form, study)]


def _sum_words(found: SumEntry) -> str:
    if found.total is None or found.total.share is None:
        return f"No shares: {clean(found.reason or '')}."
    total = found.total
    return (
        f"A share is the mean of what a line costs alone and of what is saved without it; all together they are "
        f"{figure(total.share)} of the error variance (alone {figure(total.alone)}, saved {figure(total.saved)})."
    )


def _sources(record: AuditRecord, study: FormatLines, parts: list[PartShare]) -> list[RenderableType]:
    """Return the source of every file with a line that matters, and then the inputs that do."""
    assert record.lines is not None  # it has this study
    shares = {_key(study.parts[one.part]): one.error.share for one in parts}
    matter = {key: share for key, share in shares.items() if share is not None and share >= _MATTERS}
    shown: list[RenderableType] = []
    rows: list[tuple[str, float | None]] = []
    for file, lines in groupby(record.lines.source, key=lambda line: line.file):
        own = list(lines)
        if not any((file, line.line) in matter for line in own):
            continue
        rows.append((f"{clean(file)}, from line {own[0].line}", None))
        before = own[0].line
        for line in own:
            if line.line > before + 1:
                rows.append(("    ...", None))
            rows.append((line.text, matter.get((file, line.line))))
            before = line.line
    inputs: list[tuple[str, float | None]] = [
        (f"({words})", matter[kind, None]) for kind, words in _INPUTS.items() if (kind, None) in matter
    ]
    if rows or inputs:
        shown.append(Source([*rows, *inputs]))
    return shown


def _key(part: LineEntry) -> tuple[str | None, int | None]:
    return (part.file, part.line) if part.kind == "line" else (part.kind, None)


def _widenings(form: str, study: FormatLines) -> list[RenderableType]:
    """Return what is bought by keeping parts in the wider format, from cheapest to best."""
    tried = [
        f"with {clean(one.name)} it {_pays(one)}; a step costs {figure(one.step_cost)}" for one in study.what_ifs or ()
    ]
    if study.plain is None or study.widenings is None:
        none: list[RenderableType] = [Text(f"No search for lines to widen: {clean(study.reason or '')}.")]
        return [*none, *_bulleted([f"{clean(form)} {line}" for line in tried])]
    wide = clean(study.wide or "")
    lines = [f"{clean(form)} as it is {_pays(study.plain)}"]
    lines += [f"with {_named(study, one)} in {wide} it {_pays(one)}; {_charged(one)}" for one in study.widenings]
    if not study.widenings:
        lines.append(f"no few lines that are kept in {wide} make it pay further")
    return _bulleted([*lines, *tried])


def _bulleted(lines: list[str]) -> list[RenderableType]:
    return [Hanging(Text(line), "- ") for line in lines]


def _pays(one: PaysEntry) -> str:
    if one.level is None:
        return "pays on no level"
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
