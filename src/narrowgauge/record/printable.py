"""Text of users, kernels and files made fit for a line of a terminal, of XML, of JSON or of Markdown."""

from __future__ import annotations

__all__ = ["clean", "clean_lines"]


def clean(text: object) -> str:
    """Return text for one line: line ends and tabs become spaces; control and format characters are dropped.

    What would move the cursor, change colours, or turn the direction of writing does not reach a terminal.
    """
    shown = "".join(
        character if character.isprintable() else " " if character.isspace() else "" for character in str(text)
    )
    return shown or "(no printable name)"


def clean_lines(text: str) -> str:
    """Return text of several lines, each of them clean; blanks at their beginnings stay."""
    return "\n".join(clean(line) if line.strip() else "" for line in text.split("\n"))
