"""Sentences about one quantity: what is undecided and why, non-finite values, bias, and how rounding adds up."""

from __future__ import annotations

from collections.abc import Iterable

from narrowgauge.record.audit import (
    REJECTED_BELOW,
    AccumulationEntry,
    ArmEntry,
    AuditRecord,
    LevelEntry,
    OrderEntry,
    PartsEntry,
    QuantityEntry,
    SeparationEntry,
)
from narrowgauge.report.settings import bias_share, narrow_formats, worthwhile
from narrowgauge.report.wording import (
    NONE,
    at_most,
    clean,
    count,
    figure,
    interval,
    joined,
    levels_named,
    percent,
    shown_edge,
)

__all__ = ["accumulation", "format_notes", "nonfinite", "orders", "rounded_up", "separation_notes"]


def format_notes(record: AuditRecord, quantity: str, name: str) -> list[str]:
    """Return what the table of one format leaves open: undecided levels, bias, exceptions, the RMSE it admits."""
    levels = record.quantities[quantity].levels
    share = bias_share(record, quantity)
    notes = [_undecided(record, level, name, share) for level in levels if level.arms[name].verdict == "undecided"]
    notes += [*_biased(levels, name, share), *_raised(levels, name), *_admitted(record, levels, name)]
    return notes


def _undecided(record: AuditRecord, level: LevelEntry, name: str, share: float | None) -> str:
    """Return a level's estimate, why it is not enough, and the paths that it would need."""
    arm, least = level.arms[name], worthwhile(record)
    edge = interval(arm.edge, arm.edge_low, arm.edge_high, (1.0, least))
    known = f"edge {edge}" if arm.edge is not None else "no edge can be told"
    why = {
        "budget": f"the interval is neither above 1 nor below {least:g}, and the paths of the audit file ran out",
        "bias": _bias_unsettled(arm, share),
        "kurtosis": _rare(level, arm, record.rules.least_effective_size),
    }.get(arm.reason or "", "the paths ran out")
    needed = "how many paths would settle it cannot be told"
    if arm.paths_needed is not None:
        needed = f"about {rounded_up(arm.paths_needed)} paths would settle it"
    return f"Level {level.level} is undecided after {count(level.paths)} paths: {known}; {why}; {needed}."


def _bias_unsettled(arm: ArmEntry, share: float | None) -> str:
    if share is None or arm.bias is None or arm.bias_low is None or arm.bias_high is None:
        return "whether the shift of the mean stays inside its share of the target is not known"
    straddles = (arm.bias_low < -share <= arm.bias_high) or (arm.bias_low <= share < arm.bias_high)
    if not straddles:  # the open question is another scheme's, or another quantity's
        return "whether a scheme that it hangs on shifts a mean by too much is not known"
    shift = interval(arm.bias, arm.bias_low, arm.bias_high, (-share, share))
    return f"the mean shifts by {shift}, and {figure(share)} either way is this level's share of the target"


def _rare(level: LevelEntry, arm: ArmEntry, least: int) -> str:
    why = "so few paths carry a correction that the sample does not know what it misses"
    scheme = arm.scheme
    one = level.corrections.get(f"{scheme.narrow}:{scheme.wide}") if scheme is not None else None
    if one is None or one.effective_size is None or one.effective_size >= least:
        return why
    size = shown_edge(one.effective_size, (float(least),))
    return f"{why} (effectively {size} of them, {least} are asked for)"


def _biased(levels: list[LevelEntry], name: str, share: float | None) -> Iterable[str]:
    """Say by how much the mean shifts on the first level where that is too much."""
    found = [
        level for level in levels if (level.arms[name].verdict, level.arms[name].reason) == ("does not pay", "bias")
    ]
    shown = next((level for level in found if level.arms[name].bias is not None), None)
    if shown is None:
        return
    arm = shown.arms[name]
    shift = interval(arm.bias, arm.bias_low, arm.bias_high, () if share is None else (-share, share))
    allowed = "" if share is None else f"; {figure(share)} either way is its share of the target"
    yield f"On level {shown.level} the mean shifts by {shift}{allowed}."


def _raised(levels: list[LevelEntry], name: str) -> Iterable[str]:
    """Say what the kernel raised, with file and line, on the first level where it did."""
    found = [level for level in levels if level.arms[name].raised is not None]
    if not found or (raised := found[0].arms[name].raised) is None:
        return
    place = "" if raised.file is None else f" ({clean(raised.file)}:{raised.line})"
    where = levels_named(level.level for level in found)
    yield f"On {where} the kernel raised {clean(raised.type)}: {clean(raised.message)}{place}."


def _admitted(record: AuditRecord, levels: list[LevelEntry], name: str) -> Iterable[str]:
    """Say, without a target, from which RMSE on the bias of the paying levels would be admissible."""
    rows = [
        (arm.admitted_rmse, level.level)
        for level in levels
        if (arm := level.arms[name]).admitted_rmse is not None and arm.verdict == "pays"
    ]
    if record.asked.get("target") is not None or not rows:
        return
    rmse, level = max((rmse or 0.0, level) for rmse, level in rows)
    if rmse == 0.0:
        yield "There is no target to judge bias by; the schemes of the levels that pay have none."
    else:
        yield (
            "There is no target to judge bias by; that of the levels that pay admits an RMSE of "
            f"{figure(rmse)} or more, which level {level} decides."
        )


def nonfinite(record: AuditRecord, entry: QuantityEntry) -> str:
    """Return how many values are infinite or not numbers; none is printed with its bound, formats alike together."""
    formats: dict[str, list[str]] = {}
    for name in narrow_formats(record):
        formats.setdefault(_nonfinite(entry.levels, name), []).append(clean(name))
    return "; ".join(f"{joined(names)}: {words}" for words, names in formats.items()) + "."


def _nonfinite(levels: list[LevelEntry], name: str) -> str:
    parts = []
    # Levels with one number of paths have one bound.
    free: dict[tuple[int, float], list[int]] = {}
    for level in levels:
        arm = level.arms[name]
        if arm.nonfinite_bound is None:
            continue
        if arm.nonfinite:
            share = f"{count(arm.nonfinite)} in {count(level.paths)} paths on level {level.level}"
            parts.append(f"{share} ({at_most(arm.nonfinite_bound)})")
        else:
            free.setdefault((level.paths, arm.nonfinite_bound), []).append(level.level)
    parts += [
        f"none in {count(paths)} paths on {levels_named(found)} ({at_most(bound)})"
        for (paths, bound), found in free.items()
    ]
    return joined(parts) or "nothing was measured"


def accumulation(entry: QuantityEntry) -> list[str]:
    """Return, for each arm, which part of the law rules where, and its figures; and whether the formats agree."""
    lines = [
        clean(one.sentence).replace("delta^2/h", "\u03b4\u00b2/h") + _law(one) for one in entry.accumulation.values()
    ]
    one = entry.agreement
    if one.reason is not None:
        lines.append(f"Whether the walk is the same in all formats cannot be told: {clean(one.reason)}.")
    elif one.agrees is not None:
        differ = "" if one.spread is None else f": they differ by {percent(one.spread, (0.0, 0.05))}"
        answer = "agree" if one.agrees else "do not agree"
        lines.append(f"The walks of the formats {answer} within 5%{differ}.")
    return lines


def _law(one: AccumulationEntry) -> str:
    law = one.error
    if law.reason is not None or law.walk is None:
        return ""
    walk = interval(law.walk, law.walk_low, law.walk_high, (0.0,))
    found = f" Walk {walk} u\u00b2 a step"
    if law.slope is not None:
        found += f"; slope {interval(law.slope, law.slope_low, law.slope_high, (0.0,))}"
    if law.deviation is not None:
        found += f"; largest misfit {figure(law.deviation, 2)}%"
    return found + (f", p = {shown_edge(law.fit_p, (REJECTED_BELOW,), 2)}." if law.fit_p is not None else ".")


def orders(entry: QuantityEntry) -> str:
    """Return the orders of the level differences in h, and the largest kurtosis of them."""
    one = entry.orders
    found = [
        f"{words} {figure(value)}" if value is not None else f"{words} not to be told"
        for words, value in (("of the variance", one.level_variance), ("of the mean", one.level_mean))
    ]
    text = f"Order in h of the level differences: {joined(found)}."
    tails = [(level.reference.level_kurtosis, level.level) for level in entry.levels]
    known = [(kurtosis, level) for kurtosis, level in tails if kurtosis is not None]
    if known:
        kurtosis, level = max(known)
        text += f" Their largest kurtosis is {figure(kurtosis)} (level {level})."
    return text


def separation_notes(found: SeparationEntry, parts: list[PartsEntry], name: str) -> list[str]:
    """Return which part costs the accuracy of an arm with approximate draws, and how its correction goes with h."""
    sides = [
        f"{words} on {levels_named(levels)}"
        for side, words in (("draws", "the approximate draws"), ("arithmetic", "the arithmetic"))
        if (levels := [one.level for one in parts if one.larger == side])
    ]
    lines = [f"What puts more into the correction: {joined(sides)}."] if sides else []
    lost = [one.level for one in parts if None in (one.arithmetic, one.draws, one.both)]
    if lost:
        lines.insert(0, f"{NONE} on {levels_named(lost)}: the kernel raised there, or has no finite variance.")
    draws_alone = "float64/approximate"
    shown = {"with both": found.orders.get(name), "with draws alone": found.orders.get(draws_alone)}
    if name == draws_alone:
        shown = {"with draws alone": found.orders[name]}
    orders = [f"{words} {_order(one)}" for words, one in shown.items() if one is not None]
    return [*lines, f"Order in h of the correction's variance: {joined(orders)}."]


def _order(one: OrderEntry) -> str:
    if one.slope is None:
        return f"not to be told ({clean(one.reason)})"
    return f"{interval(one.slope, one.slope_low, one.slope_high)} ({levels_named(one.levels)})"


def rounded_up(paths: int) -> str:
    """Return a number of paths with two digits that count, never fewer than asked."""
    size = 10 ** max(0, len(str(paths)) - 2)
    return count(-(-paths // size) * size)
