"""An audit and its trial as text for a terminal: what is wrong, then the verdict, then one answer after the other.

The order and the words are those of the page; the last lines, which a terminal leaves in sight, repeat the verdict.

Everything is made of text objects, never of markup: a name in the user's code cannot colour or hide anything.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from pathlib import Path

from msgspec import UnsetType
from rich.console import Group, RenderableType
from rich.rule import Rule
from rich.text import Text

from narrowgauge.record.audit import AuditRecord, BranchesEntry, FaultEntry, PlanEntry, QuantityEntry, TrialEntry
from narrowgauge.report.averaging import averaged_over, averaging_lines
from narrowgauge.report.blocks import MARKS
from narrowgauge.report.branches import branch_lines, branch_summary
from narrowgauge.report.canary import CANNOT_SHOW, HELD_AGAINST, canary_lines
from narrowgauge.report.constants import constant_lines, no_constants
from narrowgauge.report.domain import deciding, domain_notes, domain_table
from narrowgauge.report.headline import headline
from narrowgauge.report.layout import Hanging
from narrowgauge.report.lines import line_parts
from narrowgauge.report.nextsteps import next_steps
from narrowgauge.report.notes import accumulation, format_notes, nonfinite, orders, separation_notes
from narrowgauge.report.progress import Progress, planned_text
from narrowgauge.report.questions import QUESTIONS
from narrowgauge.report.range import range_lines, watched_on
from narrowgauge.report.settings import (
    approximate_draws,
    arithmetics,
    assumptions,
    coupled,
    exact_formats,
    measured_costs,
    measured_to,
    narrow_formats,
    terms,
)
from narrowgauge.report.tables import (
    VERDICT_STYLES,
    best_table,
    bounded_levels,
    common_table,
    format_table,
    missing_gains,
    missing_noise,
    parts_table,
    plan_table,
    signal_table,
)
from narrowgauge.report.trial import ROUNDED, reach_notes, reach_summary, reach_table
from narrowgauge.report.verdict import alarms, common_cost, finest_words, savings, verdict_sentences
from narrowgauge.report.wording import NONE, begun, clean, joined, setting_value
from narrowgauge.report.workers import speed_notes

__all__ = ["Progress", "audit_text", "planned_text", "trial_text", "verdict_text"]

_CONSTANTS = "Constants that a format cannot take"
_SUMS = "Sums over the paths"
_CANARY = "Whether the kernel rounds in the formats it claims"
_FILES = "audit.json (everything), levels.csv (one row per quantity, level and arm)"
_MARKED = {mark: VERDICT_STYLES[verdict] for verdict, mark in MARKS.items()}
_OPTIONAL = ("draws", "branches", "lines", "range", "averaging", "domain")  # of the questions
_LINES_FILE = "lines.csv (one row per format, quantity and line)"


def audit_text(record: AuditRecord, folder: Path | None) -> Group:
    """Return the whole audit: alarms, the verdict, what to do next, the answer to each question, files."""
    parts: list[RenderableType] = [*_alarms(record), Text(f"Audit of {clean(record.kernel.run)}", style="bold"), Text()]
    parts += _verdict(record)
    for key, question in QUESTIONS.items():
        if found := _ANSWERS[key](record):
            parts += [*_heading(question.words), *found, Text()]
    return Group(*parts, _sentence(record), *speed_notes(record), *_files(folder, record))


def verdict_text(record: AuditRecord, folder: Path | None) -> Group:
    """Return what is wrong, the verdict in words with what it saves and where it holds, and where the files are."""
    parts = [*_alarms(record), *_verdict(record), *_saved(record), Text()]
    if found := _domain(record):
        parts += [*_heading(QUESTIONS["domain"].words), *found, Text()]
    return Group(*parts, *speed_notes(record), *_files(folder, record))


def trial_text(trial: TrialEntry) -> Group:
    """Return what would be rounded, line by line, what would escape, decisions and remarks."""
    if trial.reach is None:
        return _own_text(trial)
    escapes = [fault for fault in trial.faults if fault.kind == "escape"]
    parts: list[RenderableType] = [*_heading("What would escape"), *_faults(escapes)]
    if not escapes:
        parts.append(Text("Nothing: every operation stays in the emulation."))
    identical = "float64 through the emulation gives plain NumPy's bits."
    if any(fault.arm == "float64" for fault in escapes):
        identical = "float64 through the emulation stops before it can be held against plain NumPy."
    elif not trial.identical:
        identical = "float64 through the emulation does not give plain NumPy's bits."
    parts += [Text(identical, style="none" if trial.identical else "bold red"), Text()]
    parts += _raised(trial)
    parts += _heading("What would be rounded, in float64 on a small sample")
    if trial.reach.lines:
        parts += [reach_table(trial.reach), Text(), Text(reach_summary(trial.reach))]
    else:
        parts.append(Text("No operation was seen."))
    lines = constant_lines(trial.range)
    parts += [Text(), *_heading(_CONSTANTS), *(_bullets(lines) if lines else [Text(no_constants(trial.range))])]
    parts += _approximate(trial)
    notes = reach_notes(trial.reach)
    if notes:
        parts += [Text(), *_heading("Remarks"), *_bullets(notes)]
    if trial.branches is not None:
        parts += [Text(), *_branches(trial.branches, None)]
    return Group(*parts)


def _branches(entry: BranchesEntry, record: AuditRecord | None) -> list[RenderableType]:
    return [_labelled("Branches of a split", branch_summary(entry)), *_bullets(branch_lines(entry, record))]


def _own_text(trial: TrialEntry) -> Group:
    """Return what the trial of a kernel that rounds for itself showed."""
    parts: list[RenderableType] = [Text("A second run gives the same bits in every format."), Text(), *_raised(trial)]
    parts += [*_heading(_CANARY), *_bullets(canary_lines(trial.canary or ())), Text(), Text(CANNOT_SHOW)]
    if trial.branches is not None:
        parts += [Text(), *_branches(trial.branches, None)]
    return Group(*parts, *_approximate(trial))


def _approximate(trial: TrialEntry) -> list[RenderableType]:
    if trial.draws is None:
        return []
    return [Text(), *_heading("Approximate draws, measured in the audit"), Text(approximate_draws(trial.draws))]


def _raised(trial: TrialEntry) -> list[RenderableType]:
    raised = [fault for fault in trial.faults if fault.kind == "raised"]
    return [*_heading("What the kernel would raise"), *_faults(raised), Text()] if raised else []


def _faults(faults: Iterable[FaultEntry]) -> list[RenderableType]:
    """Return one item for each message, with the arms that it stopped."""
    arms: dict[str, list[str]] = {}
    for fault in faults:
        arms.setdefault(fault.message, []).append(clean(fault.arm))
    return [Hanging(_labelled(joined(names), message), "- ") for message, names in arms.items()]


def _alarms(record: AuditRecord) -> list[RenderableType]:
    found: list[RenderableType] = [Hanging(text, mark) for mark, text in alarms(record)]
    return [*found, Text()] if found else []


def _verdict(record: AuditRecord) -> list[RenderableType]:
    """Return what stands on the first screen of the page."""
    parts: list[RenderableType] = [*_heading("Verdict"), _sentence(record), Text(headline(record).rests_on)]
    parts += [Hanging(one, "- ") for one in verdict_sentences(record)]
    parts += [Text(), Text("What to do next", style="bold")]
    parts += [Hanging(Text(clean(step)), f"{number}. ") for number, step in enumerate(next_steps(record), start=1)]
    return [*parts, Text()]


def _sentence(record: AuditRecord) -> Text:
    found = headline(record)
    first, colon, rest = found.sentence.partition(":")
    return Text().append(first, style=_MARKED[found.mark]).append(f"{colon}{rest}")


def _per_quantity(
    record: AuditRecord, parts: Callable[[str, QuantityEntry], Iterable[RenderableType]]
) -> list[RenderableType]:
    """Return the parts of the only quantity, or those of several, each below its name, with a blank line between."""
    found: list[RenderableType] = []
    for name, entry in record.quantities.items():
        if len(record.quantities) > 1:
            found.append(Text(f"Quantity {clean(name)}", style="bold underline"))
        found += [*parts(name, entry), Text()]
    return found[:-1]


def _crossing(record: AuditRecord) -> list[RenderableType]:
    from narrowgauge.report.crossing import NO_NOISE, crossing_words  # they need NumPy, which a trial's text does not

    def one(name: str, entry: QuantityEntry) -> Iterable[RenderableType]:
        yield from _bullets(crossing_words(record, entry, arm) for arm in exact_formats(record))
        yield from (Text(), Text(f"Signal and noise of {clean(name)}: standard deviations", style="bold"))
        yield from (signal_table(record, entry), Text())
        yield from (Text(f"{NONE} {why}.") for why in missing_noise(record, entry))
        if measured_to(record) > 0 and coupled(record):
            yield Text(orders(entry))
        yield _labelled("Non-finite values, with bounds at 99%", nonfinite(record, entry))

    return _per_quantity(record, one) if exact_formats(record) else [Text(NO_NOISE)]


def _schemes(record: AuditRecord) -> list[RenderableType]:
    def one(name: str, entry: QuantityEntry) -> Iterable[RenderableType]:
        yield Text(f"The cheapest scheme of each level of {clean(name)}", style="bold")
        yield from (best_table(record, entry), Text())
        yield from (Text(f"{NONE} {why}.") for why in missing_gains(record, entry))
        for arm in narrow_formats(record):
            yield from (Text(), Text(f"What {clean(arm)} is worth for {clean(name)}", style="bold"))
            yield from (format_table(record, entry, arm), *_bullets(format_notes(record, name, arm)))
            if len(record.quantities) > 1:
                finest = finest_words(entry.finest_paying_level[arm], measured_to(record))
                yield Text(f"Finest level where it still pays, by {clean(name)} alone: {finest}.")

    return [*_saved(record), Text(), *_per_quantity(record, one)]


def _saved(record: AuditRecord) -> list[RenderableType]:
    """Return what the cheapest schemes save, and the paths that they need for the target."""
    parts: list[RenderableType] = [Hanging(one, "- ") for one in savings(record)]
    plan = record.verdict.plan
    if len(record.quantities) > 1:
        if plan.levels:
            parts += [Text(), Text("Paths for all quantities together", style="bold"), common_table(plan)]
            parts += _bounded(plan.levels)
        return [*parts, Text(common_cost(record))]
    for name, entry in record.quantities.items():
        if entry.allocation.levels:
            title = f"Paths for an RMSE of {setting_value(entry.allocation.rmse)} in {clean(name)}"
            parts += [Text(), Text(title, style="bold"), plan_table(entry.allocation)]
            parts += _bounded(entry.allocation.levels)
    return parts


def _draws(record: AuditRecord) -> list[RenderableType]:
    """Return what arithmetic, draws and both do to the correction of each arm with approximate draws."""

    def one(name: str, entry: QuantityEntry) -> Iterable[RenderableType]:
        found = entry.separation
        if isinstance(found, UnsetType):
            yield Text("Nothing was measured of them for this quantity.")
            return
        for arm in found.orders:
            narrow = arm.partition("/")[0]
            rows = found.parts.get(narrow, [])
            if rows:
                title = f"Parts of the correction of {clean(narrow)} for {clean(name)}"
                yield from (Text(), Text(title, style="bold"), parts_table(entry, rows))
            yield from (Text(), Text(f"{clean(arm)}:"), *_bullets(separation_notes(found, rows, arm)))

    if isinstance(record.draws, UnsetType):
        return []
    what = _labelled("The approximate draws", approximate_draws(record.draws))
    return [what, *_per_quantity(record, one)]


def _ranges(record: AuditRecord) -> list[RenderableType]:
    if record.range is None:
        return []
    lines = constant_lines(record.range)
    parts: list[RenderableType] = [Text(begun(watched_on(record.range.watched)))]
    parts += _bullets(range_lines(record.range.watched))
    parts.append(_labelled(_CONSTANTS, "listed by line." if lines else no_constants(record.range)))
    return [*parts, *_bullets(lines)]


def _averaging(record: AuditRecord) -> list[RenderableType]:
    if record.averaging is None:
        return []
    return [_labelled(_SUMS, averaged_over(record.averaging)), *_bullets(averaging_lines(record.averaging))]


def _domain(record: AuditRecord) -> list[RenderableType]:
    """Return how the verdict does elsewhere; nothing without [domain]."""
    found = record.domain
    if found is None:
        return []
    return [*_bullets(domain_notes(found)), Text(), domain_table(found), *_bullets(deciding(found))]


def _rounding(record: AuditRecord) -> list[RenderableType]:
    parts: list[RenderableType] = []
    if not isinstance(record.canary, UnsetType):
        parts += [Text(HELD_AGAINST), *_bullets(canary_lines(record.canary)), Text(CANNOT_SHOW)]
    if record.reach is not None:
        parts += [Text(f"{ROUNDED} {reach_summary(record.reach)}"), *_bullets(reach_notes(record.reach))]
    return parts


def _measured(record: AuditRecord) -> list[RenderableType]:
    parts: list[RenderableType] = [_labelled("Arithmetic", f"{arithmetics(record)}.")]
    if costs := measured_costs(record):
        parts.append(_labelled("Measured costs of a step of one path, by every audit anew", f"{costs}."))
    assumed = assumptions(record)
    parts.append(_labelled("Assumed, since the audit file does not say", f"{assumed}." if assumed else "nothing."))
    if left := [QUESTIONS[key].short.lower() for key in _OPTIONAL if not _ANSWERS[key](record)]:
        parts.append(_labelled("Not measured in this audit", f"{joined(left)}."))
    return parts


def _legend(record: AuditRecord) -> list[RenderableType]:
    return [Hanging(_labelled(term, f"{words}."), "  ") for term, words in terms(record).items()]


def _bounded(levels: Sequence[PlanEntry]) -> list[RenderableType]:
    words = bounded_levels(levels)
    return [Text(words)] if words else []


def _files(folder: Path | None, record: AuditRecord) -> list[RenderableType]:
    files = _FILES if record.lines is None or not record.lines.formats else f"{_FILES}, {_LINES_FILE}"
    return [] if folder is None else [_labelled(f"Written to {folder}", files)]


def _heading(words: str) -> list[RenderableType]:
    return [Text(words, style="bold"), Rule(characters="=", style="none")]


def _labelled(label: str, words: str) -> Text:
    return Text(f"{clean(label)}: ", style="bold").append(clean(words), style="not bold")


def _bullets(lines: Iterable[str]) -> list[RenderableType]:
    return [Hanging(Text(clean(line)), "- ") for line in lines]


_ANSWERS: dict[str, Callable[[AuditRecord], list[RenderableType]]] = {
    "crossing": _crossing,
    "law": lambda record: _per_quantity(record, lambda _, entry: _bullets(accumulation(entry))),
    "schemes": _schemes,
    "draws": _draws,
    "branches": lambda record: [] if record.branches is None else _branches(record.branches, record),
    "lines": line_parts,
    "range": _ranges,
    "averaging": _averaging,
    "domain": _domain,
    "rounding": _rounding,
    "measured": _measured,
    "cautions": lambda record: _bullets(record.cautions),
    "words": _legend,
}
