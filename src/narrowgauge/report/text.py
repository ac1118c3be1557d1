"""An audit and its trial as text for a terminal: what is wrong first, then tables, then the verdict.

Everything is made of text objects, never of markup: a name in the user's code cannot colour or hide anything.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from pathlib import Path

from msgspec import UnsetType
from rich.console import Group, RenderableType
from rich.rule import Rule
from rich.text import Text

from narrowgauge.record.audit import AuditRecord, BranchesEntry, FaultEntry, PlanEntry, QuantityEntry, TrialEntry
from narrowgauge.report.averaging import averaged_over, averaging_lines
from narrowgauge.report.branches import branch_lines, branch_summary
from narrowgauge.report.canary import CANNOT_SHOW, canary_lines
from narrowgauge.report.constants import constant_lines, no_constants
from narrowgauge.report.domain import deciding, domain_notes, domain_table
from narrowgauge.report.layout import Hanging
from narrowgauge.report.lines import line_hint, line_parts
from narrowgauge.report.notes import accumulation, format_notes, nonfinite, orders, separation_notes
from narrowgauge.report.progress import Progress, planned_text
from narrowgauge.report.range import range_lines, watched_on
from narrowgauge.report.settings import (
    approximate_draws,
    arithmetics,
    assumptions,
    coupled,
    measured_costs,
    measured_to,
    narrow_formats,
    terms,
)
from narrowgauge.report.tables import (
    best_table,
    bounded_levels,
    common_table,
    format_table,
    missing_figures,
    parts_table,
    plan_table,
    signal_table,
)
from narrowgauge.report.trial import reach_notes, reach_summary, reach_table
from narrowgauge.report.verdict import alarms, common_cost, finest_words, lead, savings, verdict_sentences
from narrowgauge.report.wording import NONE, clean, joined, setting_value
from narrowgauge.report.workers import speed_notes

__all__ = ["Progress", "audit_text", "planned_text", "trial_text", "verdict_text"]

_CONSTANTS = "Constants that a format cannot take"
_RANGE = "Range and lost additions"
_SUMS = "Sums over the paths"
_CANARY = "Whether the kernel rounds in the formats it claims"
_FILES = "audit.json (everything), levels.csv (one row per quantity, level and arm)"
_LINES_FILE = "lines.csv (one row per format, quantity and line)"


def audit_text(record: AuditRecord, folder: Path | None) -> Group:
    """Return the whole audit: alarms, how to read it, each quantity, the verdict, assumptions, cautions, files."""
    parts: list[RenderableType] = [*_alarms(record), Text(f"Audit of {clean(record.kernel.run)}", style="bold"), Text()]
    parts += [Text("Words of the tables"), *_legend(record), Text()]
    for name in record.quantities:
        parts += _quantity(record, name)
    parts += [*_verdict(record), *line_parts(record)]
    parts += [*_heading("Behind the figures"), _labelled("Arithmetic", f"{arithmetics(record)}.")]
    if not isinstance(record.draws, UnsetType):
        parts.append(_labelled("Approximate draws", approximate_draws(record.draws)))
    if record.reach is not None:
        parts.append(_labelled("Reach of the emulation, in a trial run", reach_summary(record.reach)))
        parts += _bullets(reach_notes(record.reach))
    if record.range is not None:
        lines = constant_lines(record.range)
        parts.append(_labelled(_CONSTANTS, "listed by line." if lines else no_constants(record.range)))
        parts += _bullets(lines)
        parts.append(_labelled(_RANGE, watched_on(record.range.watched)))
        parts += _bullets(range_lines(record.range.watched))
    if record.averaging is not None:
        parts += [_labelled(_SUMS, averaged_over(record.averaging)), *_bullets(averaging_lines(record.averaging))]
    if not isinstance(record.canary, UnsetType):
        parts += [_labelled(_CANARY, CANNOT_SHOW), *_bullets(canary_lines(record.canary))]
    if record.branches is not None:
        parts += _branches(record.branches, record)
    if costs := measured_costs(record):
        parts.append(_labelled("Measured costs of a step of one path, by every audit anew", f"{costs}."))
    assumed = assumptions(record)
    parts.append(_labelled("Assumed, since the audit file does not say", f"{assumed}." if assumed else "nothing."))
    parts += [Text(), *_heading("Cautions"), *_bullets(record.cautions)]
    return Group(*parts, Text(), *_hint(record), *speed_notes(record), *_files(folder, record))


def verdict_text(record: AuditRecord, folder: Path | None) -> Group:
    """Return what is wrong, the verdict in words, and where the files are."""
    return Group(*_alarms(record), *_verdict(record), *_hint(record), *speed_notes(record), *_files(folder, record))


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


def _legend(record: AuditRecord) -> list[RenderableType]:
    return [Hanging(_labelled(term, f"{words}."), "  ") for term, words in terms(record).items()]


def _quantity(record: AuditRecord, name: str) -> list[RenderableType]:
    """Return the tables and sentences of one quantity."""
    entry = record.quantities[name]
    parts: list[RenderableType] = [*_heading(f"Quantity {clean(name)}"), signal_table(record, entry), Text()]
    parts += [best_table(record, entry), Text()]
    parts += [Text(f"{NONE} {why}.") for why in missing_figures(record, entry)]
    parts.append(_labelled("Non-finite values, with bounds at 99%", nonfinite(record, entry)))
    if measured_to(record) > 0 and coupled(record):
        parts.append(Text(orders(entry)))
    parts.append(Text())
    for arm in narrow_formats(record):
        parts.append(Text(f"{clean(arm)} for {clean(name)}", style="bold"))
        parts += [format_table(record, entry, arm), *_bullets(format_notes(record, name, arm))]
        parts += _separation(entry, arm)
        if len(record.quantities) > 1:
            finest = finest_words(entry.finest_paying_level[arm], measured_to(record))
            parts.append(Text(f"Finest level where it still pays, by {clean(name)} alone: {finest}."))
        parts.append(Text())
    parts.append(Text("How its rounding errors add up", style="bold"))
    parts += [*_bullets(accumulation(entry)), Text()]
    if entry.allocation.levels and len(record.quantities) == 1:
        title = f"Paths for an RMSE of {setting_value(entry.allocation.rmse)} in {clean(name)}"
        parts += [Text(title, style="bold"), plan_table(entry.allocation), *_bounded(entry.allocation.levels), Text()]
    return parts


def _separation(entry: QuantityEntry, arm: str) -> list[RenderableType]:
    """Return what arithmetic, draws and both do to the correction of an arm with approximate draws."""
    found = entry.separation
    if isinstance(found, UnsetType) or arm not in found.orders:
        return []
    rows = found.parts.get(arm.partition("/")[0], [])
    table: list[RenderableType] = [Text(), parts_table(entry, rows)] if rows else []
    return [*table, *_bullets(separation_notes(found, rows, arm))]


def _verdict(record: AuditRecord) -> list[RenderableType]:
    parts: list[RenderableType] = [*_heading("Verdict"), lead(record)]
    parts += [Hanging(one, "- ") for one in verdict_sentences(record)]
    parts += [Text(), *(Hanging(one, "- ") for one in savings(record))]
    plan = record.verdict.plan
    if len(record.quantities) > 1:
        if plan.levels:
            parts += [Text(), Text("Paths for all quantities together", style="bold"), common_table(plan)]
            parts += _bounded(plan.levels)
        parts.append(Text(common_cost(record)))
    return [*parts, Text(), *_domain(record)]


def _domain(record: AuditRecord) -> list[RenderableType]:
    """Return how the verdict does elsewhere; nothing without [domain]."""
    found = record.domain
    if found is None:
        return []
    notes = _bullets(domain_notes(found))
    return [
        *_heading("Elsewhere in the domain"),
        *notes,
        Text(),
        domain_table(found),
        *_bullets(deciding(found)),
        Text(),
    ]


def _bounded(levels: Sequence[PlanEntry]) -> list[RenderableType]:
    words = bounded_levels(levels)
    return [Text(words)] if words else []


def _hint(record: AuditRecord) -> list[RenderableType]:
    words = line_hint(record)
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
