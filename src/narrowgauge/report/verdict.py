"""The audit in words: what is wrong with the ladder, how far each format pays, what that saves."""

from __future__ import annotations

from collections.abc import Iterable

from msgspec import UnsetType
from rich.text import Text

from narrowgauge.record.audit import AuditRecord, DecidedEntry, FinestEntry, QuantityEntry
from narrowgauge.report.branches import branch_alarms
from narrowgauge.report.canary import canary_alarms
from narrowgauge.report.questions import QUESTIONS
from narrowgauge.report.settings import assumed_costs, confidence, coupled, measured_to, today
from narrowgauge.report.wording import (
    clean,
    count,
    figure,
    interval,
    joined,
    levels_named,
    million,
    setting_value,
    shown_edge,
)
from narrowgauge.report.workers import worker_alarms

__all__ = [
    "alarms",
    "common_cost",
    "ending",
    "finest_words",
    "paying_and_open",
    "savings",
    "unreferenced",
    "verdict_sentences",
]

# Why the run of paying levels ends, after "on level 5 ": the format does not pay there, or that is not known.
_ENDS = {
    "edge": "the edge is too small",
    "bias": "rounding shifts the mean by more than its share of the target",
    "nonfinite": "there are non-finite values",
    "raised": "the kernel raises an exception",
    "branches": "the two branches do not agree to the bit",
    "no_variance": "nothing varies, so that costs cannot be compared",
}
_OPEN = {
    "bias": "it is not known whether rounding shifts the mean by more than its share of the target",
    "kurtosis": "too few paths carry the correction for the sample to be trusted",
    "budget": "the paths ran out before the edge was settled",
}


def alarms(record: AuditRecord) -> list[tuple[str, Text]]:
    """Return what has to be read first: levels that do not fit together, dropped paths, false formats, odd workers.

    Each paragraph comes with the mark that stands before it.
    """
    found = []
    sound = record.rules.telescoping_se
    broken = [line for name, entry in record.quantities.items() for line in _broken(clean(name), entry, sound)]
    if broken or not record.verdict.sound:
        text = Text("THE KERNEL OR THE COUPLING OF ITS DRAWS IS WRONG. ", style="bold red")
        text.append(
            "In the reference, the coarse paths of a level and the fine paths of the level below must have the same "
            f"mean. They differ by more than {sound:g} standard errors, which is not chance. Until that is put right, "
            "no figure below can be relied on.",
            style="not bold default",
        )
        found += [("", text), *(("- ", Text(line)) for line in broken)]
    dropped = list(_dropped(record))
    if dropped:
        text = Text("PATHS WERE DROPPED. ", style="bold red")
        words = "The reference is not finite on some paths; they count in no arm: "
        text.append(f"{words}{'; '.join(dropped)}.", style="not bold default")
        found.append(("", text))
    unsound = canary_alarms(() if isinstance(record.canary, UnsetType) else record.canary)
    if unsound:
        text = Text("THE KERNEL DOES NOT ROUND IN THE FORMATS IT CLAIMS. ", style="bold red")
        text.append("What is said below of these formats is said of what was run:", style="not bold default")
        found += [("", text), *(("- ", Text(line)) for line in unsound)]
    if differ := branch_alarms(record):
        text = Text("THE BRANCHES OF A SPLIT DO NOT CANCEL. ", style="bold red")
        text.append(f'What differs, and where: see "{QUESTIONS["branches"].words}".', style="not bold default")
        found += [("", text), *(("- ", Text(f"{line}.")) for line in differ)]
    return found + [("", text) for text in worker_alarms(record)]


def _broken(name: str, entry: QuantityEntry, sound: float) -> Iterable[str]:
    for level in entry.levels:
        one = level.telescoping
        if one is None or one.sound:
            continue
        where = f"{name}, level {level.level} against level {level.level - 1}"
        if one.difference is None or one.se is None:
            yield f"{where}: the means cannot be compared."
            continue
        times = f", so {shown_edge(abs(one.difference) / one.se, (sound,))} of them" if one.se > 0 else ""
        yield f"{where}: difference {figure(one.difference)}, standard error {figure(one.se)}{times}."


def _dropped(record: AuditRecord) -> Iterable[str]:
    # A path is dropped for all quantities at once, so that the first one has the whole count.
    for level in next(iter(record.quantities.values())).levels:
        if level.reference.nonfinite:
            yield f"{count(level.reference.nonfinite)} of {count(level.paths)} on level {level.level}"


def paying_and_open(record: AuditRecord) -> tuple[list[str], list[str]]:
    """Return the formats that pay on level 0 at least, and those of which that is not known."""
    entries = record.verdict.finest_paying_level.items()
    paying = [clean(name) for name, entry in entries if entry.level is not None]
    return paying, [clean(name) for name, entry in entries if entry.level is None and entry.possible is not None]


def unreferenced(record: AuditRecord) -> list[int]:
    """Return the levels on which the reference has no finite figures of some quantity, so that there is no verdict."""
    levels = (level for entry in record.quantities.values() for level in entry.levels)
    return sorted({level.level for level in levels if level.reference.level_variance is None})


def verdict_sentences(record: AuditRecord) -> list[Text]:
    """Return one sentence for each narrow format: the finest level where it still pays, why there, who decides."""
    return [_sentence(record, name, entry) for name, entry in record.verdict.finest_paying_level.items()]


def _sentence(record: AuditRecord, name: str, entry: DecidedEntry) -> Text:
    text = Text(f"{clean(name)}: ", style="bold")
    text.append(f"finest level where it still pays: {finest_words(entry, measured_to(record))}", style="not bold")
    why = ending(record, name)
    text.append(f"; {why}." if why else ".", style="not bold")
    if entry.decided_by is not None and len(record.quantities) > 1:
        text.append(f" The quantity {clean(entry.decided_by)} decides.", style="not bold")
    apart = _paying_beyond(record, name, entry)
    if apart:
        text.append(f" It pays on {levels_named(apart)} too, but not on all levels up to there.", style="not bold")
    return text


def finest_words(entry: FinestEntry, measured: int) -> str:
    """Return the finest paying level in words, for example "17 (extrapolated, measured to level 8)" or "none"."""
    reason = entry.reason or ""
    if entry.level is None:
        if entry.possible is None:
            return "none"
        return f"not established ({_not_refuted(entry.possible)})"
    if entry.extrapolated:
        low = entry.level if entry.cautious is None else entry.cautious
        high = entry.level if entry.possible is None else entry.possible
        between = "" if low == high else f"; between {low} and {high} by its bounds"
        return f"{entry.level} (extrapolated, measured to level {measured}{between})"
    if reason.startswith("or finer"):
        return f"{entry.level} {clean(reason)}"
    if entry.possible is not None and entry.possible > entry.level:
        return f"{entry.level} ({_not_refuted(entry.possible)})"
    return str(entry.level)


def _not_refuted(possible: int) -> str:
    return f"level {possible} is not refuted" if possible == 0 else f"up to level {possible} not refuted"


def _undecided_next(record: AuditRecord, name: str, entry: DecidedEntry) -> bool:
    """Return whether the format is undecided, not refuted, for the deciding quantity on the level after the last."""
    decider = record.quantities.get(entry.decided_by or "")
    level = 0 if entry.level is None else entry.level + 1
    return decider is not None and any(
        one.level == level and one.arms[name].verdict == "undecided" for one in decider.levels
    )


def ending(record: AuditRecord, name: str) -> str:
    """Return why the paying levels of a format end where they do, or "" if nothing is to be said."""
    entry, measured = record.verdict.finest_paying_level[name], measured_to(record)
    undecided = _undecided_next(record, name, entry)
    reason = entry.reason or ""
    if reason in _ENDS or reason in _OPEN:
        words = (_OPEN if undecided else _ENDS).get(reason) or _ENDS.get(reason) or _OPEN[reason]
        if record.arms[name].draws == "approximate":
            words = words.replace("rounding shifts", "approximate draws and rounding shift")
        return f"on level {0 if entry.level is None else entry.level + 1} {words}"
    if reason == "extrapolated to where the error is a tenth of the variance":
        return "extrapolation ends where the variance of the error is a tenth of that of the quantity"
    if reason == "extrapolated" and not entry.extrapolated:
        return f"extrapolation from level {measured} on finds that it stops paying"
    if reason == "one level":
        return "the ladder has no other"
    known = not reason or reason.startswith(("or finer", "extrapolated"))  # said with the level itself
    return "" if known else clean(reason)


def _paying_beyond(record: AuditRecord, name: str, entry: DecidedEntry) -> list[int]:
    """Return the measured levels past the end where the format pays for every quantity."""
    end = -1 if entry.level is None else entry.level
    by_quantity = [
        {level.level for level in quantity.levels if level.level > end and level.arms[name].verdict == "pays"}
        for quantity in record.quantities.values()
    ]
    return sorted(set.intersection(*by_quantity))


def savings(record: AuditRecord) -> list[Text]:
    """Return, by quantity, what the cheapest schemes save and what error of the discretisation stays."""
    found = []
    for name, entry in record.quantities.items():
        sentences = [*_saved(record, entry), *_left_over(record, entry)]
        if sentences:
            text = Text(f"{clean(name)}: ", style="bold")
            text.append(" ".join(sentences), style="not bold")
            found.append(text)
    return found


def common_cost(record: AuditRecord) -> str:
    """Return what a run that serves all quantities costs, and what today alone would, or why that is not planned."""
    plan = record.verdict.plan
    if plan.cost is None or not plan.levels:
        why = "the audit file has no [target]" if plan.reason == "no target" else clean(plan.reason)
        return f"No run that serves all quantities is planned: {why}."
    text = "A run that serves all quantities takes on each level one scheme and the most paths that any of them needs. "
    text += f"It costs {million(plan.cost)} in the unit of the cost table"
    rivals = [(today(record), plan.saving)]
    if today(record) != "float64":
        rivals.append(("float64", plan.saving_over_reference))
    shown = [f"{name} alone costs {shown_edge(saving)} times as much" for name, saving in rivals if saving]
    by = "by the variances measured" + (", or their upper bounds" if any(one.bounded for one in plan.levels) else "")
    by += ", costs assumed" if assumed_costs(record) else ""
    return f"{text}; planned likewise, {joined(shown)} ({by})." if shown else f"{text}."


def _saved(record: AuditRecord, entry: QuantityEntry) -> Iterable[str]:
    plan, several = entry.allocation, len(record.quantities) > 1
    rivals = [(today(record), plan.saving, plan.saving_low, plan.saving_high)]
    if today(record) != "float64":
        over = (plan.saving_over_reference, plan.saving_over_reference_low, plan.saving_over_reference_high)
        rivals.append(("float64", *over))
    target = f"for an RMSE of {setting_value(plan.rmse)}, " if plan.rmse is not None else ""
    inside = f"{confidence(record)} interval" + (", costs assumed" if assumed_costs(record) else "")
    shown = [
        f"{name} alone costs {interval(saving, low, high)} times as much"
        for name, saving, low, high in rivals
        if saving
    ]
    if shown:
        ours = "the scheme that serves all quantities" if several else "the cheapest scheme"
        yield f"{target}{joined(shown)} as {ours} on each level ({inside})."
    if plan.cost is not None and not several:
        yield f"The cheapest schemes cost {million(plan.cost)} in the unit of the cost table."
    if several:  # said once, of the plan for all of them
        return
    if plan.reason == "no target":
        yield "No paths are planned, since the audit file has no [target]."
    elif plan.reason is not None:
        yield f"No paths are planned: {clean(plan.reason)}."


def _left_over(record: AuditRecord, entry: QuantityEntry) -> Iterable[str]:
    weak, rmse = entry.allocation.weak_error, entry.allocation.rmse
    if len(entry.levels) == 1 or not coupled(record):
        return
    if weak is None:
        yield "What the finest level leaves of the discretisation error cannot be told from these levels."
        return
    thresholds = () if rmse is None else (rmse,)
    after = "" if rmse is None else ", which the target does not count"
    if rmse is not None and weak > rmse:
        after = ", which is more than the target: add levels"
    yield f"The finest level leaves a discretisation error of about {shown_edge(weak, thresholds)}{after}."
