"""The report of a gate in Markdown, for the page that a hosting service shows of a run.

Text of users and kernels is escaped: it makes no link, no tag and no further column. A page has a limit (one mebibyte,
where a service says one), so that long messages and long lists are cut, and say so.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence

from narrowgauge.record.gate import Finding, GateEntry, GateReport, State
from narrowgauge.record.printable import clean

__all__ = ["summary_text"]

_STATES: tuple[State, ...] = ("fails", "undecided", "note", "holds")
_WORDS = {"pass": "passes", "fail": "**fails**", "inconclusive": "is **inconclusive**, which is no pass"}
_MOST_ROWS, _MOST_CHARACTERS, _MOST_BYTES = 50, 400, 2**19
# What begins an emphasis, code, link, image, column, formula, reference, emoji or address: "CommonMark", version
# 0.31.2, 2024, sections 2.4 and 6 (from memory), and what hosting services add to it.
_SPECIAL = re.compile(r"[!#$*@\[\\\]^_`|~]|:(?=\S)|(?<=www)\.", re.IGNORECASE)


def summary_text(report: GateReport) -> str:
    """Return a report as Markdown with tables: each audit file in a row, then all that does not hold."""
    kept, size = [], 0
    for line in _lines(report):
        size += len(line.encode("utf-8")) + 1
        if size > _MOST_BYTES:
            kept += ["", "The page ends here, at its limit; the report in JSON has the rest."]
            break
        kept.append(line)
    return "\n".join(kept) + "\n"


def _lines(report: GateReport) -> Iterator[str]:
    yield f"## Precision gate: {report.verdict}"
    yield ""
    yield "| audit | kernel | the gate | fails | undecided | notes | holds |"
    yield "|---|---|---|--:|--:|--:|--:|"
    for entry in report.gates:
        counts = [sum(one.state == state for one in entry.findings) for state in _STATES]
        cells = [_name(entry.audit), _name(entry.kernel), _WORDS[entry.verdict], *(f"{one:,}" for one in counts)]
        yield _row(cells)
    for entry in report.gates:
        if any(one.state != "holds" for one in entry.findings):
            yield from _entry(entry)


def _entry(entry: GateEntry) -> Iterator[str]:
    ordered = [one for state in _STATES if state != "holds" for one in entry.findings if one.state == state]
    yield ""
    yield f"### {_name(entry.audit)}"
    yield ""
    yield "| state | check | what was found | where |"
    yield "|---|---|---|---|"
    for one in ordered[:_MOST_ROWS]:
        place = one.place or entry.place
        yield _row([one.state, one.check, _escaped(_message(one)), _name(f"{place.file}:{place.line}")])
    yield ""
    if len(ordered) > _MOST_ROWS:
        yield f"{len(ordered) - _MOST_ROWS:,} further findings are not shown."
        yield ""
    yield f"To renew the policy, where the change is meant: {_name(entry.renew)}"
    if entry.same_machine is False:
        yield ""
        yield "The policy was drawn up on another class of machine than this one."


def _message(finding: Finding) -> str:
    text = clean(finding.message)
    return text if len(text) <= _MOST_CHARACTERS else f"{text[:_MOST_CHARACTERS]} ... (cut)"


def _row(cells: Sequence[str]) -> str:
    return f"| {' | '.join(cells)} |"


def _name(text: str) -> str:
    """Return a name as code: a tag, not backticks, which the name may hold."""
    return f"<code>{_escaped(clean(text)[:_MOST_CHARACTERS])}</code>"


def _escaped(text: str) -> str:
    """Return text whose every character stands for itself."""
    marked = text.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")
    return _SPECIAL.sub(lambda found: f"&#{ord(found[0])};", marked)
