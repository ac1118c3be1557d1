"""The colours of the page, by role, in light and dark; and the mark of each format.

Text and names at lines reach a contrast of 4.5 to what they stand on (WCAG 2.2, criterion 1.4.3, recalled from memory),
which is more than the 3 asked of what is drawn (1.4.11); the colours of the formats stay apart for people with each
kind of colour blindness. Tests compute both. No figure is told by colour alone: each format has a marker and a dash of
its own, and its name at its line.
"""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["DARK", "GROUNDS", "LIGHT", "SERIES", "SIGNAL", "TEXTS", "Look", "look_of", "variables"]

# What things stand on, and what is written or drawn on it; a rule only parts one thing from the next.
GROUNDS = ("paper", "panel")
TEXTS = ("ink", "muted", "link", "yes", "no", "open", "alarm")
SERIES = ("s1", "s2", "s3", "s4", "s5", "s6")

LIGHT = {
    "paper": "#fcfbf7",
    "panel": "#f1eee5",
    "rule": "#cfcabb",
    "ink": "#1b2125",
    "muted": "#565e66",
    "link": "#16518f",
    "yes": "#0b5c86",
    "no": "#8a4300",
    "open": "#6d3b8c",
    "alarm": "#9c1c2b",
    "s1": "#1237be",
    "s2": "#ad4485",
    "s3": "#217a4a",
    "s4": "#5b1f7e",
    "s5": "#5e6f00",
    "s6": "#502101",
}
DARK = {
    "paper": "#14181b",
    "panel": "#1f2529",
    "rule": "#3d464d",
    "ink": "#ece8de",
    "muted": "#aab2b8",
    "link": "#8fc1f5",
    "yes": "#7cc8ef",
    "no": "#f0a862",
    "open": "#d0a3ee",
    "alarm": "#ff9a9a",
    "s1": "#7f9bff",
    "s2": "#f46fad",
    "s3": "#4fd08a",
    "s4": "#d7acef",
    "s5": "#edce58",
    "s6": "#d7904a",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Look:
    """How one format is drawn: a role of the palette, a marker, and dashes in widths of the line."""

    role: str
    marker: str
    dash: tuple[float, ...]


_LOOKS = {
    "float16": Look(role="s1", marker="o", dash=(4.0, 2.0)),
    "bfloat16": Look(role="s2", marker="s", dash=(1.5, 1.5)),
    "float32": Look(role="s3", marker="^", dash=(6.0, 2.0, 1.2, 2.0)),
    "tf32": Look(role="s4", marker="D", dash=(3.0, 1.2)),
    "e4m3": Look(role="s5", marker="v", dash=(6.0, 1.5)),
    "e5m2": Look(role="s6", marker="p", dash=(1.2, 2.4)),
}
SIGNAL = Look(role="ink", marker="D", dash=(5.0, 2.5))
_REFERENCE = Look(role="ink", marker="x", dash=(5.0, 3.0))


def look_of(name: str) -> Look:
    """Return the look of a format, the same in every report; that of the reference for float64."""
    return _LOOKS.get(name, _REFERENCE)


def variables(colours: dict[str, str]) -> str:
    """Return the colours as CSS variables."""
    return "".join(f"--{role}:{value};" for role, value in colours.items())
