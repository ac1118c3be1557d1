"""The page that a person reads: an audit's record as one HTML file that needs no network and no script.

Sections stand in the order in which a person asks. Each is a function of the record that returns its blocks, or a
sentence that says that there is nothing to show, and why. What the record holds by name (kernels, paths, messages) is
hostile: it reaches the page as text, escaped by the template and with unprintable characters as escapes.
"""

from __future__ import annotations

import base64
import hashlib
import importlib.util
from collections.abc import Callable
from pathlib import Path

from narrowgauge.errors import NarrowgaugeError
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.canonical import write_atomically
from narrowgauge.report.blocks import Block, Section, Words
from narrowgauge.report.questions import QUESTIONS

__all__ = ["PAGE_FILE", "ReportError", "missing_packages", "need_packages", "page", "write_page"]

PAGE_FILE = "report.html"
_KEPT = ("audit.json", "levels.csv", "lines.csv", "blocks.sqlite", "policy.json")
_NEEDED = ("matplotlib", "jinja2")
_TEMPLATES = Path(__file__).parent / "templates"


class ReportError(NarrowgaugeError):
    """The page cannot be made, or not be written where it should be."""


def missing_packages() -> list[str]:
    """Return which of the packages that the page needs are not installed."""
    return [name for name in _NEEDED if importlib.util.find_spec(name) is None]


def need_packages() -> None:
    """Raise ReportError unless all that the page needs is installed."""
    if missing := missing_packages():
        what = f"the page needs {' and '.join(missing)}, which {'is' if len(missing) == 1 else 'are'} not installed"
        raise ReportError(f"report: {what}; accepted: pip install '.[report]' first")


def write_page(record: AuditRecord, target: Path, shown: str) -> None:
    """Write the page of an audit; `shown` is what messages call the file.

    Raises ReportError where packages are missing, or the file cannot be written.
    """
    need_packages()
    if target.name in _KEPT:
        raise ReportError(f"{shown}: is a file of an audit; accepted: another name, such as {PAGE_FILE}")
    text = page(record)
    try:
        write_atomically(target, text)
    except OSError as problem:
        raise ReportError(f"{shown}: cannot be written: {problem.strerror}") from None


def page(record: AuditRecord) -> str:
    """Return the page of an audit; the same record gives the same text."""
    import jinja2
    import markupsafe
    import numpy as np

    from narrowgauge.report import headline
    from narrowgauge.report.blocks import visible
    from narrowgauge.report.costly import DEPTHS
    from narrowgauge.report.nextsteps import next_steps
    from narrowgauge.report.palette import DARK, LIGHT, SERIES, variables
    from narrowgauge.report.settings import terms
    from narrowgauge.report.verdict import alarms

    found = headline.headline(record)
    with np.errstate(all="ignore"):  # a kernel of this process may have asked NumPy to raise
        sections = _sections(record)
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(_TEMPLATES),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        # The last door: whatever a template writes is printable, or markup of this package's own.
        finalize=lambda value: value if isinstance(value, markupsafe.Markup) else visible(value),
    )
    style = environment.get_template("page.css").render(
        light=variables(LIGHT), dark=variables(DARK), roles=("ink", "muted", "rule", "paper", *SERIES), depths=DEPTHS
    )
    digest = base64.b64encode(hashlib.sha256(style.encode()).digest()).decode("ascii")
    return environment.get_template("page.html").render(
        style=markupsafe.Markup(style),
        policy=f"default-src 'none'; style-src 'sha256-{digest}'; img-src data:; base-uri 'none'; form-action 'none'",
        markup=markupsafe.Markup,
        kernel=record.kernel.run,
        alarms=[(mark, text.plain) for mark, text in alarms(record)],
        headline=found,
        gauges=headline.gauges(record) if found.mark == "yes" else [],  # else what is saved is not to be relied on
        formats=headline.format_rows(record),
        steps=next_steps(record),
        sections=sections,
        legend=QUESTIONS["words"],
        terms=terms(record),
    )


Answer = Callable[[AuditRecord], "list[Block] | str"]


def _sections(record: AuditRecord) -> list[Section]:
    """Return the answers in the order in which a person asks."""
    from narrowgauge.report import behind, costly, elsewhere, inside, sections, worth

    answers: dict[str, Answer] = {
        "crossing": sections.crossing,
        "law": sections.law,
        "schemes": worth.schemes,
        "draws": worth.draws,
        "branches": inside.branches,
        "lines": costly.source_lines,
        "range": inside.ranges,
        "averaging": inside.averaging,
        "domain": elsewhere.domain,
        "rounding": behind.rounding,
        "measured": behind.measured,
        "cautions": behind.cautions,
    }
    return [
        Section(key=key, short=short, question=words, blocks=_blocks(answers[key](record)))
        for key, (short, words) in QUESTIONS.items()
        if key != "words"
    ]


def _blocks(found: list[Block] | str) -> tuple[Block, ...]:
    return (Words(found, "answer"),) if isinstance(found, str) else tuple(found)
