"""Paragraphs with hanging lines, and tables that never break a number: too narrow a terminal gets a paragraph a row."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Literal

from rich.box import Box
from rich.cells import cell_len
from rich.console import Console, ConsoleOptions, RenderResult
from rich.table import Table
from rich.text import Text

__all__ = ["Hanging", "Kind", "Ruled"]

Kind = Literal["number", "words", "unbroken"]

# Nothing but one rule below the headings, the third row of eight.
_RULE = Box("    \n    \n -  \n    \n    \n    \n    \n    \n", ascii=True)
_GAP = 2  # between two columns


class Hanging:
    """A paragraph behind a mark, whose further lines stand below its first word, or as far in as `indent` says."""

    def __init__(self, text: Text, mark: str, indent: int | None = None) -> None:
        self._text, self._mark = text, mark
        self._indent = len(mark) if indent is None else indent

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        width = max(1, options.max_width - max(len(self._mark), self._indent))
        for number, line in enumerate(self._text.wrap(console, width, overflow="fold")):
            yield Text(self._mark if number == 0 else " " * self._indent).append_text(line)


class Ruled:
    """A table with these headings; numbers stand to the right, and only words may be broken, at their blanks.

    Where it would not fit that way, each row is a paragraph instead, every cell behind its heading.
    """

    def __init__(self, *columns: tuple[str, Kind]) -> None:
        self._columns = columns
        self._rows: list[tuple[Text, ...]] = []

    @property
    def columns(self) -> tuple[tuple[str, Kind], ...]:
        """The headings and kinds of the columns."""
        return self._columns

    @property
    def rows(self) -> tuple[tuple[Text, ...], ...]:
        """The rows so far."""
        return tuple(self._rows)

    def add_row(self, *cells: Text) -> None:
        """Add a row of one cell for each column."""
        self._rows.append(cells)

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        widths = self._widths(options.max_width)
        if widths is None:
            yield from (Hanging(self._paragraph(row), "", 2) for row in self._rows)
            return
        table = Table(box=_RULE, show_edge=False, pad_edge=False, padding=(0, 1, 0, 0), header_style="bold")
        for (heading, kind), width in zip(self._columns, widths, strict=True):
            justify: Literal["right", "left"] = "right" if kind == "number" else "left"
            table.add_column(Text(heading), justify=justify, overflow="fold", width=width)
        for row in self._rows:
            table.add_row(*row)
        yield table

    def _widths(self, most: int) -> list[int] | None:
        """Return the width of each column, or None where not even the longest words fit beside each other."""
        natural, least = [], []
        for place, (heading, kind) in enumerate(self._columns):
            lines = [*heading.split("\n"), *(row[place].plain for row in self._rows)]
            words = [word for line in lines for word in line.split()] if kind == "words" else lines
            natural.append(_longest(lines))
            least.append(_longest(words))
        room = most - _GAP * (len(self._columns) - 1)
        if sum(least) > room:
            return None
        while sum(natural) > room:  # the widest column that can give way does
            widest = max((p for p in range(len(least)) if natural[p] > least[p]), key=natural.__getitem__)
            natural[widest] -= 1
        return natural

    def _paragraph(self, row: Sequence[Text]) -> Text:
        labels = [" ".join(heading.split("\n")) for heading, _ in self._columns]
        text = Text(f"{labels[0]} ", style="bold").append_text(row[0])
        filled = [(label, cell) for label, cell in zip(labels[1:], row[1:], strict=True) if cell.plain]
        for number, (label, cell) in enumerate(filled):
            text.append(f"{': ' if number == 0 else '; '}{label} ", style="not bold").append_text(cell)
        return text


def _longest(texts: Iterable[str]) -> int:
    return max((cell_len(text) for text in texts), default=0)
