"""What to do next, in the order in which it helps: put right, measure, settle, then run and have it validated."""

from __future__ import annotations

from collections.abc import Iterable

from msgspec import UnsetType

from narrowgauge.record.audit import AuditRecord
from narrowgauge.report.branches import branch_alarms
from narrowgauge.report.canary import canary_alarms
from narrowgauge.report.domain import refused_corners, scenarios_counted
from narrowgauge.report.lines import best_widening, line_hint
from narrowgauge.report.notes import rounded_up
from narrowgauge.report.settings import assumed_costs, coupled, measured_to, narrow_formats, setting
from narrowgauge.report.verdict import unreferenced
from narrowgauge.report.wording import clean, count, joined, levels_named

__all__ = ["next_steps"]


def next_steps(record: AuditRecord) -> list[str]:
    """Return what a reader can do about what the audit found; the last one is said of every audit."""
    steps = [*_unsound(record)]
    if not steps:
        steps = [*_parting(record), *_raised(record), *_asked(record), *_undecided(record), *_lines(record)]
        steps += [*_farther(record), *_elsewhere(record), *_run(record)]
    return [
        *steps,
        "Take results that people rely on through your own model validation and change control: this audit is "
        "evidence, not approval.",
    ]


def _unsound(record: AuditRecord) -> Iterable[str]:
    if not record.verdict.sound:
        yield (
            "Put the kernel or the coupling of its draws right: coarse paths must have the law of the fine paths one "
            "level below. Then audit again."
        )
    if lost := unreferenced(record):
        what = f"the kernel has no results of finite variance in float64 on {levels_named(lost)}"
        yield f"Find out why {what}. Then audit again."
    if not isinstance(record.canary, UnsetType) and (found := canary_alarms(record.canary)):
        arms = dict.fromkeys(one.partition(",")[0] for one in found)
        yield f"Build or write the kernel so that it rounds in {joined(arms)} as it claims. Then audit again."


def _parting(record: AuditRecord) -> Iterable[str]:
    if broken := branch_alarms(record):
        yield f"Make both branches of a split give the same bits, or use no split. As it is: {'; '.join(broken)}."


def _raised(record: AuditRecord) -> Iterable[str]:
    """Name the first line on which a format stops the kernel."""
    for name in narrow_formats(record):
        found = [
            raised
            for entry in record.quantities.values()
            for level in entry.levels
            if (raised := level.arms[name].raised) is not None
        ]
        if found:
            place = "" if found[0].file is None else f" at {clean(found[0].file)}:{found[0].line}"
            yield f"If {clean(name)} is wanted, see why the kernel raises {clean(found[0].type)}{place}."


def _asked(record: AuditRecord) -> Iterable[str]:
    if assumed_costs(record):
        yield (
            "Measure what a step costs in each format on your hardware and give it under [cost]: every verdict rests "
            "on it, and here it is assumed."
        )
    if record.asked.get("target") is None:
        yield (
            "Give [target] rmse, the error that you can accept: without it a shift of the mean is not judged and no "
            "paths are planned."
        )


def _undecided(record: AuditRecord) -> Iterable[str]:
    """Say how many paths would settle what is open, formats and levels together by the most that any needs."""
    open_levels: dict[str, set[int]] = {}
    needed = []
    for name in narrow_formats(record):
        for entry in record.quantities.values():
            for level in entry.levels:
                arm = level.arms[name]
                if arm.verdict == "undecided":
                    open_levels.setdefault(clean(name), set()).add(level.level)
                    needed.append(arm.paths_needed)
    if not open_levels:
        return
    what = joined(f"{name} on {levels_named(levels)}" for name, levels in open_levels.items())
    known = [paths for paths in needed if paths is not None]
    most = setting(record, "sampling.most_paths")
    enough = f" to about {rounded_up(max(known))}" if known else ""
    now = f" (now {count(most)})" if isinstance(most, int) else ""
    rest = "" if len(known) == len(needed) else "; for some of it, how many are enough cannot be told"
    yield f"To settle {what}, raise [sampling] most_paths{enough}{now}{rest}."


def _lines(record: AuditRecord) -> Iterable[str]:
    """Name the lines to widen, or say how to find them."""
    for form, study in ({} if record.lines is None else record.lines.formats).items():
        if best := best_widening(form, study):
            yield f"To use {clean(form)} on more levels, keep its costliest lines wider: {best}."
    if hint := line_hint(record):
        yield hint


def _elsewhere(record: AuditRecord) -> Iterable[str]:
    if record.domain is None:
        return
    if found := refused_corners(record.domain):
        most = f" and {count(len(found) - 1)} more" if len(found) > 1 else ""
        yield (
            f"Keep to the parameters that are claimed, or audit where the verdict fails: {found[0]}{most} "
            f"{'are' if most else 'is'} refused."
        )
    open_ones = [one for one in record.domain.scenarios if one.outcome == "undecided"]
    most_paths = setting(record, "domain.most_paths")
    if open_ones:
        levels = [level for one in open_ones for level in one.levels if level.outcome == "undecided"]
        known = [level.paths_needed for level in levels if level.paths_needed is not None]
        enough = f" to about {rounded_up(max(known))}" if known else ""
        now = f" (now {count(most_paths)})" if isinstance(most_paths, int) else ""
        rest = "" if len(known) == len(levels) else "; for some of it, how many are enough cannot be told"
        left = f"{scenarios_counted(len(open_ones))} of [domain] left undecided"
        yield f"To settle {left}, raise [domain] most_paths{enough}{now}{rest}."


def _farther(record: AuditRecord) -> Iterable[str]:
    measured = measured_to(record)
    beyond = [
        f"{clean(name)} to level {entry.level}"
        for name, entry in record.verdict.finest_paying_level.items()
        if entry.extrapolated and entry.level is not None and entry.level > measured
    ]
    if beyond:
        yield (
            f"Before you rely on {joined(beyond)}, which is extrapolated, set [ladder] finest to the finest level that "
            "you run and audit again."
        )
    weak = [
        clean(name)
        for name, entry in record.quantities.items()
        if entry.allocation.weak_error is not None
        and entry.allocation.rmse is not None
        and entry.allocation.weak_error > entry.allocation.rmse
    ]
    if weak and coupled(record):
        yield f"Add levels: the finest one leaves {joined(weak)} a discretisation error above the target."


def _run(record: AuditRecord) -> Iterable[str]:
    pays = any(entry.level is not None for entry in record.verdict.finest_paying_level.values())
    planned = bool(record.verdict.plan.levels)
    if pays and planned:
        yield "Run each level with the scheme and the paths of the plan below, and keep this audit with the results."
    elif pays:
        yield "Run each level with the scheme found cheapest below, and keep this audit with the results."
