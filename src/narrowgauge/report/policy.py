"""A policy on the terminal: what each level runs in, and what to know before it is used."""

from __future__ import annotations

from pathlib import Path

from rich.console import Group, RenderableType
from rich.text import Text

from narrowgauge.record.policy import LevelPart, PolicyDocument
from narrowgauge.report.layout import Hanging, Ruled
from narrowgauge.report.tables import VERDICT_STYLES
from narrowgauge.report.wording import NONE, clean, count, interval, joined, million, setting_value, shown_edge

__all__ = ["policy_lines"]

_ASSUMED = {"assumed": ", costs assumed", "measured": ", costs measured", "given": ""}


def policy_lines(document: PolicyDocument, path: Path, header: Path | None = None) -> Group:
    """Return the levels as a table, what a run costs, cautions, and where the policy and its C header are."""
    target = joined(f"{clean(name)} {setting_value(rmse)}" for name, rmse in document.target.rmse.items())
    table = Ruled(
        ("level", "number"),
        ("steps", "number"),
        ("scheme", "words"),
        ("paths", "number"),
        ("correction\npaths", "number"),
        ("verdict", "words"),
        ("gain", "words"),
    )
    for one in document.levels:
        table.add_row(*(Text(cell, style) for cell, style in _cells(one)))
    parts: list[RenderableType] = [
        Text(f"Policy for {clean(document.kernel.run)}", style="bold"),
        Text(f"Root-mean-square error: {target}."),
        Text(),
        table,
        Text(),
        Text(_cost(document)),
        Text(),
        Text("Cautions", style="bold"),
        *(Hanging(Text(clean(caution)), "- ") for caution in document.cautions),
        Text(),
        Text(f"Written to {clean(path)}" + (f", as a C header to {clean(header)}" if header is not None else "")),
    ]
    return Group(*parts)


def _cells(one: LevelPart) -> list[tuple[str, str]]:
    draws = "" if one.draws == "exact" else " with approximate draws"
    scheme = f"{one.narrow}{draws} alone" if one.wide is None else f"{one.narrow}{draws} with {one.wide}"
    correction = NONE if one.correction_paths is None else count(one.correction_paths)
    gain = interval(one.gain, one.gain_low, one.gain_high)
    return [
        (str(one.level), ""),
        (count(one.steps), ""),
        (scheme, ""),
        (count(one.paths), ""),
        (correction, ""),
        (one.verdict, VERDICT_STYLES[one.verdict]),
        (gain, ""),
    ]


def _cost(document: PolicyDocument) -> str:
    text = f"A run costs {million(document.plan.cost)} in the unit of the cost table"
    if document.plan.saving is not None:
        text += f"; {document.today} alone costs {shown_edge(document.plan.saving)} times as much"
    return f"{text}{_ASSUMED[document.cost.source]}."
