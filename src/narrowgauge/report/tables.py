"""The tables of one quantity: signal and noise, the cheapest schemes, what each format is worth, paths for the target.

A figure that does not exist is an en dash, and a line below the table says why.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence

from rich.text import Text

from narrowgauge.record.audit import (
    AllocationEntry,
    ArmEntry,
    AuditRecord,
    CommonPlanEntry,
    PartsEntry,
    PlanEntry,
    QuantityEntry,
)
from narrowgauge.report.layout import Ruled
from narrowgauge.report.settings import assumed_costs, confidence, exact_formats, today, worthwhile
from narrowgauge.report.wording import (
    NONE,
    clean,
    count,
    figure,
    interval,
    levels_named,
    percent,
    scheme_words,
    shown_edge,
)

__all__ = [
    "REFUSED",
    "UNSETTLED",
    "VERDICT_STYLES",
    "best_table",
    "bounded_levels",
    "common_table",
    "format_table",
    "missing_gains",
    "missing_noise",
    "parts_table",
    "plan_table",
    "signal_table",
]

# Why a format does not pay on a level, and why that is not known yet.
REFUSED = {
    "edge": "edge too small",
    "bias": "bias too large",
    "nonfinite": "non-finite values",
    "raised": "the kernel raised",
    "branches": "branches differ",
    "no_variance": "nothing varies",
    "kurtosis": "rare corrections",
    "budget": "paths ran out",
}
UNSETTLED = {**REFUSED, "edge": "edge not settled", "bias": "bias not settled", "branches": "branches not settled"}

# The words say it all; the colour only finds them sooner.
VERDICT_STYLES = {"pays": "bold cyan", "does not pay": "yellow", "undecided": "magenta"}


def signal_table(record: AuditRecord, entry: QuantityEntry) -> Ruled:
    """Return standard deviations: of the reference's level difference, and of each narrow format's rounding error."""
    formats = exact_formats(record)
    names = ("level", "steps", "paths", "signal", *(f"noise\n{clean(name)}" for name in formats))
    table = Ruled(*((name, "number") for name in names))
    for level in entry.levels:
        arms = [level.arms.get(name) for name in formats]
        table.add_row(
            *_plain(
                str(level.level),
                count(level.steps),
                count(level.paths),
                _signal(level.reference.level_variance),
                *(_noise(arm.error_variance if arm else None, level.reference.level_variance) for arm in arms),
            )
        )
    return table


def best_table(record: AuditRecord, entry: QuantityEntry) -> Ruled:
    """Return the cheapest admissible scheme of each level, its gain, and up to which cost ratio it is worth it."""
    table = Ruled(
        ("level", "number"),
        ("cheapest\nscheme", "words"),
        (f"gain over\n{today(record)} alone\n{_inside(record)}", "unbroken"),
        ("breaks\neven at", "number"),
    )
    for level in entry.levels:
        best = level.best
        if best is None:
            what = "nothing varies" if level.reference.level_variance == 0 else "none is finite"
            table.add_row(*_plain(str(level.level), what, NONE, NONE))
            continue
        correction = level.corrections.get(f"{best.narrow}:{best.wide}")
        gain = interval(best.gain, best.gain_low, best.gain_high)
        ratio = correction.breakeven_cost_ratio if correction else None
        table.add_row(*_plain(str(level.level), scheme_words(best), gain, shown_edge(ratio, (1.0,), 2)))
    return table


def format_table(record: AuditRecord, entry: QuantityEntry, name: str) -> Ruled:
    """Return what one narrow format is worth on each level: its best scheme, the edge, the verdict."""
    table = Ruled(
        ("level", "number"), ("scheme", "words"), (f"edge\n{_inside(record)}", "unbroken"), ("verdict", "words")
    )
    thresholds = (1.0, worthwhile(record))
    for level in entry.levels:
        arm = level.arms[name]
        scheme = NONE
        if arm.scheme is not None:
            scheme = "alone" if arm.scheme.wide is None else f"with {clean(arm.scheme.wide)}"
        edge = interval(arm.edge, arm.edge_low, arm.edge_high, thresholds)
        table.add_row(*_plain(str(level.level), scheme, edge), verdict_words(arm))
    return table


def parts_table(entry: QuantityEntry, parts: Sequence[PartsEntry]) -> Ruled:
    """Return standard deviations of a format's correction by arithmetic, by draws and by both, and which is larger."""
    names = ("level", "signal", "arithmetic", "draws", "both")
    table = Ruled(*((name, "number") for name in names), ("larger", "words"))
    for level, one in zip(entry.levels, parts, strict=True):
        known = one.arithmetic is not None and one.draws is not None
        table.add_row(
            *_plain(
                str(level.level),
                _signal(level.reference.level_variance),
                *(_noise(own, level.reference.level_variance) for own in (one.arithmetic, one.draws, one.both)),
                one.larger or ("not settled" if known else NONE),
            )
        )
    return table


def verdict_words(arm: ArmEntry) -> Text:
    """Return the verdict of a format on a level, with its reason in words."""
    if arm.verdict is None:
        return Text(NONE)
    words = Text(arm.verdict, style=VERDICT_STYLES[arm.verdict])
    if arm.reason is not None:
        table = UNSETTLED if arm.verdict == "undecided" else REFUSED
        words.append(f": {table.get(arm.reason, clean(arm.reason))}", style="none")
    return words


def plan_table(allocation: AllocationEntry) -> Ruled:
    """Return the paths of each branch that reach the target, and each level's share of the cost."""
    table = Ruled(
        ("level", "number"),
        ("scheme", "words"),
        ("paths", "number"),
        ("correction\npaths", "number"),
        ("share\nof cost", "number"),
    )
    for plan, share in zip(allocation.levels, _shares(allocation.levels), strict=True):
        few = "" if plan.correction_paths is None else count(plan.correction_paths)
        table.add_row(*_plain(str(plan.level), scheme_words(plan.scheme), count(plan.paths), few, share))
    return table


def common_table(plan: CommonPlanEntry) -> Ruled:
    """Return the paths of each branch that serve all quantities, which quantity needs so many, and shares of cost."""
    table = Ruled(
        ("level", "number"),
        ("scheme", "words"),
        ("paths", "number"),
        ("needed\nby", "words"),
        ("correction\npaths", "number"),
        ("needed\nby", "words"),
        ("share\nof cost", "number"),
    )
    for one, share in zip(plan.levels, _shares(plan.levels), strict=True):
        few = "" if one.correction_paths is None else count(one.correction_paths)
        whose = "" if one.correction_paths_decided_by is None else clean(one.correction_paths_decided_by)
        paths = (count(one.paths), clean(one.paths_decided_by), few, whose)
        table.add_row(*_plain(str(one.level), scheme_words(one.scheme), *paths, share))
    return table


def bounded_levels(levels: Sequence[PlanEntry]) -> str:
    """Return which levels of a plan rest on corrections that were hardly seen, as a sentence; "" if none does."""
    found = [one.level for one in levels if one.bounded]
    if not found:
        return ""
    return (
        f"On {levels_named(found)} too few corrections were seen for their variance to be known: their paths follow "
        "from its upper bound."
    )


def _shares(levels: Sequence[PlanEntry]) -> list[str]:
    total = sum(one.cost for one in levels)
    return [percent(one.cost / total) if total > 0 else NONE for one in levels]


def missing_noise(record: AuditRecord, entry: QuantityEntry) -> list[str]:
    """Return why there are en dashes in the table of signal and noise."""
    found = []
    lost = [level.level for level in entry.levels if level.reference.level_variance is None]
    if lost:
        found.append(f"no signal on {levels_named(lost)}: fewer than two paths are finite in the reference")
    for name in exact_formats(record):
        arms = [(level.level, level.arms.get(name)) for level in entry.levels]
        dashes = [(level, arm) for level, arm in arms if arm is None or arm.error_variance is None]
        for words in dict.fromkeys(_why(arm) for _, arm in dashes):
            levels = levels_named(level for level, arm in dashes if _why(arm) == words)
            found.append(f"no noise of {clean(name)} on {levels}: {words}")
    return found


def missing_gains(record: AuditRecord, entry: QuantityEntry) -> Iterable[str]:
    """Return why gains and break-even ratios are missing."""
    levels = entry.levels
    nothing = [level.level for level in levels if level.best is not None and level.best.gain is None]
    if nothing:
        yield f"no gain on {levels_named(nothing)}: {today(record)} has no finite variance there to compare with"
    if any(level.best is not None and level.best.wide is None for level in levels):
        yield "no break-even ratio for a scheme of one format: it has no correction"
    still = [level.reference.level_variance == 0 for level in levels if level.best is None]
    if not all(still):
        yield "no gain where no scheme is finite"
    if any(still):
        yield "no gain where nothing varies"


def _why(arm: ArmEntry | None) -> str:
    """Return why an arm has no error."""
    if arm is None:
        return "it was not run"
    if arm.raised is not None:
        return REFUSED["raised"]
    return REFUSED.get(arm.reason or "", "fewer than two paths are finite")


def _inside(record: AuditRecord) -> str:
    """Return what stands below the heading of a figure that has an interval and depends on the costs."""
    assumed = "\ncosts assumed" if assumed_costs(record) else ""
    return f"({confidence(record)} interval){assumed}"


def _signal(variance: float | None) -> str:
    return NONE if variance is None else figure(math.sqrt(variance))


def _noise(variance: float | None, signal: float | None) -> str:
    """Return a standard deviation in two digits, or as many more as keep it on its side of the signal's."""
    thresholds = () if signal is None else (math.sqrt(signal),)
    return NONE if variance is None else shown_edge(math.sqrt(variance), thresholds, 2)


def _plain(*cells: str) -> list[Text]:
    """Return cells as text, which a table would otherwise read as markup."""
    return [Text(cell) for cell in cells]
