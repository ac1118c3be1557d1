"""Whether the branches of a split cancel to the bit: one line where they do, else what differs, where and why."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from narrowgauge.record.audit import AuditRecord, BranchesEntry, MismatchEntry, TriedEntry, WhereEntry
from narrowgauge.report.settings import bias_share, confidence
from narrowgauge.report.wording import clean, count, figure, interval, joined, levels_named, percent

__all__ = ["branch_alarms", "branch_lines", "branch_summary"]

_UNCONCERNED = {
    True: "hand both branches their draws in the same order",
    False: "this format is emulated and not concerned",
}
_MOST = 12  # mismatches that are shown


def branch_summary(entry: BranchesEntry) -> str:
    """Return what was tried and whether it all agreed."""
    if not entry.tried:
        return "not compared: a branch raises in every format that a split could use."
    found = "all bits agree" if not entry.mismatches else "they do not agree"
    what = "the kernel is both"
    if any(one.paths for one in entry.tried):
        what = f"{clean(entry.low)} against the low part of {clean(entry.correction)}"
    return f"{what}; {found}. Compared: {'; '.join(_tried(entry))}."


def branch_lines(entry: BranchesEntry, record: AuditRecord | None) -> list[str]:
    """Return a line for each mismatch with its place, cause and bias, then ignored casts and what could not be tried.

    Without a record it was a trial, of too few paths for a bias.
    """
    several = len({one.quantity for one in entry.mismatches} | set(() if record is None else record.quantities)) > 1
    shown = _grouped(entry.mismatches)
    lines = [
        _line(one, several=several) + ("" if record is None else _bias(record, one)) + _alike(alike)
        for one, alike in shown[:_MOST]
    ]
    if (left := len(shown) - _MOST) > 0:
        lines.append(f"{count(left)} further {'mismatches' if left > 1 else 'mismatch'}; audit.json has them all")
    if entry.casts:
        places = joined(f"{clean(one.file)}:{one.line}" for one in entry.casts if one.file is not None)
        lines.append(f"Casts of the correction that were ignored, since the audit chooses its formats: {places}.")
    lines += [
        f"Not compared in {clean(arm)}, since a branch raised: {clean(what)}" for arm, what in entry.raised.items()
    ]
    return [*lines, *map(clean, entry.remarks)]


def branch_alarms(record: AuditRecord) -> list[str]:
    """Return which splits must not be used because their branches differ, and what that comes from."""
    entry = record.branches
    if entry is None:
        return []
    refused = [one for one in entry.mismatches if one.splits == "not admissible"]
    lines = []
    for arm in dict.fromkeys(one.arm for one in refused):
        found = [one for one in refused if one.arm == arm]
        everywhere = any(one.condition != "branches" for one in found)
        where = "any level" if everywhere else levels_named(one.level for one in found)
        why = joined(dict.fromkeys(map(_reason, found)))
        lines.append(f"{clean(arm)}: no split is used on {where}, since {why}")
    if entry.low != entry.correction:  # else the kernel raises as such, which is said anyway
        lines += [
            f"{clean(arm)}: no split is used on any level, since a branch raised: {clean(what)}"
            for arm, what in entry.raised.items()
        ]
    return lines


def _reason(one: MismatchEntry) -> str:
    if one.numpys_own and one.where is not None and one.where.low is not None:
        return f"NumPy's own {clean(one.where.low.operation)} gives other bits by the layout or number of paths"
    return {
        "branches": "the two functions give other bits",
        "influence": "paths influence one another",
        "paths": "bits hang on the number of paths of a call",
        "layout": "bits hang on the layout of memory",
        "threads": "two threads at once give other bits",
        "repeat": "a repeat gives other bits",
    }[one.condition]


def _tried(entry: BranchesEntry) -> Iterable[str]:
    """Return what was run, formats of one kind together."""
    compared: dict[tuple[int, ...], list[str]] = {}
    for arm in dict.fromkeys(one.arm for one in entry.tried):
        levels = tuple(one.level for one in entry.tried if one.arm == arm and one.paths)
        if levels:
            compared.setdefault(levels, []).append(clean(arm))
    for levels, arms in compared.items():
        least = min(one.paths for one in entry.tried if one.arm in arms and one.level in levels)
        yield f"{joined(arms)} on {levels_named(levels)}, at least {count(least)} paths each"
    varied = [one for one in entry.tried if one.varied]
    conditions: dict[str, list[TriedEntry]] = {}
    for one in varied:
        conditions.setdefault(_conditions(one), []).append(one)
    for words, found in conditions.items():
        names = joined(dict.fromkeys(clean(one.arm) for one in found))
        yield f"{names} on {levels_named(one.level for one in found)} {words}"


def _grouped(mismatches: Sequence[MismatchEntry]) -> list[tuple[MismatchEntry, int]]:
    """Return the mismatches that are shown, each with how many more are like it.

    All of two branches, and of the tries of one condition in one format the one that differs most.
    """
    groups: dict[tuple[object, ...], list[MismatchEntry]] = {}
    for one in mismatches:
        own = (one.level, one.wide) if one.condition == "branches" else (one.function, one.numpys_own)
        groups.setdefault((one.arm, one.condition, one.quantity, *own), []).append(one)
    return [(max(found, key=lambda one: one.differing / one.paths), len(found) - 1) for found in groups.values()]


def _alike(further: int) -> str:
    what = "tries of that kind differ" if further > 1 else "try of that kind differs"
    return f" {count(further)} further {what}, too." if further else ""


def _conditions(one: TriedEntry) -> str:
    words = []
    if one.batches:
        words.append(f"with {joined(map(count, [*one.batches, one.varied]), 'or')} paths a call")
    if one.orders:
        words.append(f"in {count(len(one.orders))} memory layout{'' if len(one.orders) == 1 else 's'}")
    if one.threads:
        words.append(f"in {count(one.threads)} threads at once")
    if one.repeats:
        words.append("repeated")
    if one.changed:
        words.append(f"with other draws on {count(one.changed)} paths, which must not show on the rest")
    return joined(words)


def _line(one: MismatchEntry, *, several: bool) -> str:
    """Return one mismatch in words; of `several` quantities its own is named."""
    whose = f" of {clean(one.quantity)}" if several else ""
    pair = "" if one.wide is None else f" beside {clean(one.wide)}"
    text = f"{clean(one.arm)}{pair}, level {one.level}: "
    text += f"{count(one.differing)} of {count(one.paths)} paths{whose} differ" + _condition(one)
    if one.ulps_largest is None:
        text += ", some of them not finite"
    else:
        text += f", by {figure(one.ulps_largest)} ulps at most, {figure(one.ulps_median)} in the median"
    text += f". {_where(one.where)}" if one.where is not None else "."
    if one.explanation is not None:
        paths = "all of them" if one.explained == one.differing else f"each of the {count(one.explained)} looked into"
        text += f" Explained by {clean(one.explanation)}, {paths}."
    if one.numpys_own:
        text += " NumPy itself gives other bits for that operation on the same values"
        text += f"; {_UNCONCERNED[one.condition == 'layout']}." if one.splits == "not concerned" else "."
    return text


def _condition(one: MismatchEntry) -> str:
    if one.condition == "branches":
        return ""
    where = "" if one.function is None else f" in {clean(one.function)}"
    if one.condition == "influence":
        return f"{where} because {clean(one.detail)}: paths influence one another"
    return f"{where} with {'draws in memory ' if one.condition == 'layout' else ''}{clean(one.detail)}"


def _where(where: WhereEntry) -> str:
    if where.low is None and where.correction is None:
        return f"Where they part cannot be told{'' if where.incomplete is None else f': {clean(where.incomplete)}'}."
    sides = [clean(side.text) for side in (where.low, where.correction) if side is not None]
    rounding = "" if where.cause is None else f"; one rounding less explains that, a {clean(where.cause)}"
    return f"First: {'; against it '.join(sides)}{rounding}."


def _bias(record: AuditRecord, one: MismatchEntry) -> str:
    """Return what the mismatch does to the estimate, and whether that is allowed."""
    share = bias_share(record, one.quantity)
    limits = (0.0,) if share is None else (-share, 0.0, share)
    text = f" Bias of the estimate {interval(one.bias, one.bias_low, one.bias_high, limits)} at {confidence(record)}"
    if one.bias is None:
        text = " Its bias cannot be told"
    elif one.of_rmse is not None:
        text += f", {percent(abs(one.of_rmse))} of the target RMSE"
    if share is None:
        return f"{text}."
    if one.splits == "within budget":
        return f"{text}: inside {figure(share)}, this level's share of the target, which the audit file allows."
    return f"{text}; this level's share of the target is {figure(share)}."
