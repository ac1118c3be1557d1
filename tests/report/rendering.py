"""Texts as a console of any width prints them, for the tests beside this file."""

from __future__ import annotations

import io
import re
from collections import Counter

from rich.console import Console

COLOUR = re.compile(r"\x1b\[[0-9;]*m")
HOSTILE = "va\x1b[31mlue[red]<script>\u202e\nnext"


def rendered(document, width=80, **terminal):
    """The document as a console of this width prints it, without blanks at the ends of lines."""
    stream = io.StringIO()
    environment = {"TERM": "xterm-256color", **terminal.pop("environment", {})}
    console = Console(
        file=stream, width=width, markup=False, highlight=False, emoji=False, _environ=environment, **terminal
    )
    console.print(document)
    return "".join(f"{line.rstrip()}\n" for line in stream.getvalue().split("\n")).rstrip() + "\n"


def flat(document, width=80):
    """The document's words on one line."""
    return " ".join(rendered(document, width).split())


def numbers(text):
    """Every number in a text, with its sign, commas and power of ten, and how often it occurs."""
    return Counter(re.findall(r"(?<![\w.])-?\d[\d,]*(?:\.\d+)?(?:e[-+]\d+)?%?(?![\w.]*\d)", text))
