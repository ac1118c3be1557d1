"""What a page is made of: sections that answer a question, and in them paragraphs, lists, tables and drawings.

All of it is plain text; the template escapes it. Only the `drawings` of a figure are markup, made by `figures.py`.
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass
from typing import ClassVar

from narrowgauge.report.layout import Ruled
from narrowgauge.report.tables import VERDICT_STYLES

__all__ = [
    "MARKS",
    "Block",
    "Cell",
    "Drawing",
    "Part",
    "Points",
    "Section",
    "Source",
    "SourceRow",
    "Table",
    "Words",
    "points",
    "tabled",
    "visible",
]

_INTERVAL = re.compile(r"(\S+ )(\([^()]*\d\))")
_PHONE = 40  # characters across
MARKS = {"pays": "yes", "undecided": "open", "does not pay": "no"}
_MARKS = {VERDICT_STYLES[verdict]: mark for verdict, mark in MARKS.items()}


@dataclass(frozen=True, slots=True)
class Words:
    """A paragraph; `weight` is "answer" for the sentence that answers a section's question, else "note" or plain."""

    kind: ClassVar[str] = "words"
    text: str
    weight: str = ""


@dataclass(frozen=True, slots=True)
class Points:
    """A list of sentences."""

    kind: ClassVar[str] = "points"
    texts: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Cell:
    """One cell of a table; `mark` is yes, no or open for a verdict."""

    text: str
    mark: str = ""

    @property
    def pieces(self) -> tuple[str, str]:
        """The text in two: a figure and its interval in brackets, which must not be broken; else "" for the second."""
        found = _INTERVAL.fullmatch(self.text)
        return (found[1], found[2]) if found else (self.text, "")


@dataclass(frozen=True, slots=True, kw_only=True)
class Table:
    """A table whose first column heads its rows; each column with its heading and kind (see `layout.Kind`)."""

    kind: ClassVar[str] = "table"
    caption: str
    columns: tuple[tuple[str, str], ...]
    rows: tuple[tuple[Cell, ...], ...]

    @property
    def slim(self) -> bool:
        """Whether the table fits a phone as it is; else each of its rows becomes a block there."""
        widths = []
        for place, (heading, _) in enumerate(self.columns):
            words = max(map(len, heading.split()), default=0)
            widths.append(max(words, *(len(row[place].text) for row in self.rows)) if self.rows else words)
        return sum(widths) + 2 * len(widths) <= _PHONE


@dataclass(frozen=True, slots=True, kw_only=True)
class Drawing:
    """A figure for wide and for narrow screens, with a title, a caption, and the same as text for a listener."""

    kind: ClassVar[str] = "drawing"
    title: str
    caption: str
    alternative: str
    wide: str
    narrow: str


@dataclass(frozen=True, slots=True)
class SourceRow:
    """A line of source: blanks before it, the rest, and its share from 0 to 1 with the figure; or a gap before it."""

    indent: int
    text: str
    share: float | None = None
    figure: str = ""
    gap: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Source:
    """Lines of source with a bar and a figure, below one heading, to the right of those that matter."""

    kind: ClassVar[str] = "source"
    caption: str
    first: str
    heading: str
    rows: tuple[SourceRow, ...]


@dataclass(frozen=True, slots=True)
class Part:
    """Blocks below a heading of their own."""

    kind: ClassVar[str] = "part"
    title: str
    blocks: tuple[Block, ...]


Block = Words | Points | Table | Drawing | Source | Part


@dataclass(frozen=True, slots=True, kw_only=True)
class Section:
    """The answer to one question; `key` is what links lead to, `short` the question in the list of contents."""

    key: str
    short: str
    question: str
    blocks: tuple[Block, ...]


def tabled(caption: str, ruled: Ruled) -> Table:
    """Return a table of the terminal as one of the page, with the same words; verdicts have their mark."""
    return Table(
        caption=caption,
        columns=tuple((" ".join(heading.split("\n")), kind) for heading, kind in ruled.columns),
        rows=tuple(tuple(Cell(cell.plain, _MARKS.get(str(cell.style), "")) for cell in row) for row in ruled.rows),
    )


def points(texts: Iterable[str]) -> list[Block]:
    """Return a list of these sentences, or nothing where there are none."""
    found = tuple(texts)
    return [Points(found)] if found else []


def visible(text: object) -> str:
    r"""Return text in which a character that cannot be printed shows as its escape, such as \x1b or \u202e."""
    return "".join(
        character if character.isprintable() else character.encode("unicode_escape").decode("ascii")
        for character in str(text)
    )
