"""The facts of a gate, whatever the sample: settings, kernel, escapes, branches, finite values."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterator, Mapping
from typing import Any, get_args

from msgspec import UnsetType

from narrowgauge.policy.gatefigures import REFERENCE, arms_of
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.gate import Check, Finding, Place, State
from narrowgauge.record.policy import FormatName, PolicyDocument

__all__ = ["FACTS", "fact", "facts_of", "settings_facts"]

# A policy knows of these where the audit took the default; with another value less is rounded, or an error is hidden.
_DEFAULTS = ("kernel.shared", "target.largest_correction")
FACTS = ("settings", "fingerprint", "run", "escapes", "branches", "finite")


def facts_of(policy: PolicyDocument, record: AuditRecord, stale: str) -> list[Finding]:
    """Return a finding for each fact, in the order of the table; `stale` is "note" or "fail"."""
    found = [*settings_facts(policy, record.asked), _fingerprint(policy, record, stale), *_run(policy, record)]
    if found[-1].state == "fails":
        return found
    return [*found, _escapes(policy, record), *_branches(policy, record), *_finite(policy, record)]


def fact(
    check: Check,
    state: State,
    message: str,
    *,
    level: int | None = None,
    quantity: str | None = None,
    arm: str | None = None,
    place: Place | None = None,
) -> Finding:
    """Return a finding that has no figures."""
    return Finding(check=check, level=level, quantity=quantity, arm=arm, state=state, message=message, place=place)


def settings_facts(policy: PolicyDocument, asked: Mapping[str, object]) -> list[Finding]:
    """Return a finding for each setting of an audit file that is not the policy's, or one that all are.

    With other settings the figures of the two are not those of the same thing.
    """
    differing = list(_differing(policy, asked))
    if not differing:
        return [fact("settings", "holds", "the audit file has the settings of the policy")]
    return [
        fact("settings", "fails", f"{key} is {_shown(now)} in the audit file and {_shown(then)} in the policy")
        for key, now, then in differing
    ]


def _differing(policy: PolicyDocument, asked: Mapping[str, object]) -> Iterator[tuple[str, object, object]]:
    ladder, target, cost = _table(asked, "ladder"), _table(asked, "target"), _table(asked, "cost")
    for key in ("horizon", "coarsest_steps", "refinement", "finest"):
        yield from _unlike(f"ladder.{key}", ladder.get(key), getattr(policy.ladder, key))
    rmse = target.get("rmse")
    for name, value in policy.target.rmse.items():
        yield from _unlike(f"target.rmse, {name},", rmse.get(name) if isinstance(rmse, dict) else rmse, value)
    for key in ("bias_share", "worthwhile"):
        yield from _unlike(f"target.{key}", target.get(key), getattr(policy.target, key))
    for key in (one for one in _DEFAULTS if one in policy.assumed):
        table, _, name = key.partition(".")
        yield from _unlike(key, _table(asked, table).get(name), policy.assumed[key])
    yield from _unlike("formats.today", _table(asked, "formats").get("today"), policy.today)
    yield from _costs(policy, cost)
    yield from _parameters(policy, _table(asked, "parameters"))


def _costs(policy: PolicyDocument, cost: Mapping[str, Any]) -> Iterator[tuple[str, object, object]]:
    """Yield what differs of the costs; those of a step that were measured are measured again, or taken as they were."""
    steps = [
        unlike
        for name in get_args(FormatName)
        if name in policy.cost.steps
        for unlike in _unlike(f"cost.{name}", cost.get(name), policy.cost.steps[name])
    ]
    measured, was = cost.get("measured", False), policy.cost.source == "measured"
    if steps and measured != was:
        yield "cost.measured", measured, was
    elif not was:
        yield from steps
    # What an approximate draw costs was asked where such draws were.
    cheap = () if policy.cost.approximate_draws is None else ("approximate_draws",)
    for key in ("draws", *cheap, "path"):
        yield from _unlike(f"cost.{key}", cost.get(key), getattr(policy.cost, key))


def _parameters(policy: PolicyDocument, given: Mapping[str, Any]) -> Iterator[tuple[str, object, object]]:
    known = policy.domain.parameters
    for name in dict.fromkeys([*known, *given]):
        if name not in known or name not in given:
            yield f"parameters.{name}", given.get(name), "no parameter" if name not in known else known[name].fixed
            continue
        part, value = known[name], given[name]
        if part.low is None or part.high is None:
            yield from _unlike(f"parameters.{name}", value, part.fixed)
        elif not (isinstance(value, int | float) and part.low <= value <= part.high):
            yield f"parameters.{name}", value, f"from {part.low} to {part.high}"


def _fingerprint(policy: PolicyDocument, record: AuditRecord, stale: str) -> Finding:
    source = record.source
    if isinstance(source, UnsetType):
        return fact("fingerprint", "undecided", "the audit does not say what its kernel was")
    same = (source.fingerprint, source.covers) == (policy.kernel.fingerprint, policy.kernel.covers)
    # Syntax trees count with the function's name, the bytes of a library do not.
    if same and (source.covers == "syntax trees" or record.kernel.run == policy.kernel.run):
        return fact("fingerprint", "holds", "the kernel is the one that the policy was drawn up for")
    return fact(
        "fingerprint",
        "fails" if stale == "fail" else "note",
        "the kernel has changed since the policy was drawn up, and the guard of running code will refuse it; "
        "renew the policy in the same commit",
    )


def _run(policy: PolicyDocument, record: AuditRecord) -> Iterator[Finding]:
    """Yield what the kernel returned otherwise, or raised, and what was not measured; else that nothing is missing."""
    returned, planned = list(record.quantities), list(policy.target.rmse)
    if set(returned) != set(planned):
        what = f"the kernel returns {', '.join(returned)}, the policy is on {', '.join(planned)}"
        yield fact("run", "fails", what)
        return
    missing = {arm for level in policy.levels for arm in arms_of(level)} - set(record.arms)
    if missing:
        yield fact("run", "fails", f"the audit has no {', '.join(sorted(missing))}, which the policy uses")
        return
    numbers = [level.level for level in policy.levels]
    if any([level.level for level in quantity.levels] != numbers for quantity in record.quantities.values()):
        yield fact("run", "fails", "the audit has not the levels of the policy")
        return
    found = [*dict.fromkeys(_otherwise(policy, record)), *_raised(policy, record)]
    found = found or [*dict.fromkeys(_lacking(policy, record))]  # what raised is not measured
    yield from found or [fact("run", "holds", "the kernel runs and returns the quantities of the policy")]


def _otherwise(policy: PolicyDocument, record: AuditRecord) -> Iterator[Finding]:
    """Yield a finding for each arm that rounds in another way, as one does that is no longer emulated."""
    for level in policy.levels:
        arm = arms_of(level)[0]
        if record.arms[arm].rounding != level.rounding:
            what = (
                f"the rounding of {arm} is {record.arms[arm].rounding} in the audit and {level.rounding} in the policy"
            )
            yield fact("run", "fails", what, arm=arm)


def _raised(policy: PolicyDocument, record: AuditRecord) -> Iterator[Finding]:
    """Yield a finding for each arm of a level in which the kernel raised."""
    for plan, level in zip(policy.levels, next(iter(record.quantities.values())).levels, strict=True):
        for arm in (one for one in arms_of(plan) if one in level.arms):
            raised = level.arms[arm].raised
            if raised is not None:
                place = None if not raised.file or not raised.line else Place(file=raised.file, line=raised.line)
                what = f"level {level.level}: {arm} raised {raised.type}: {raised.message}"
                yield fact("run", "fails", what, level=level.level, arm=arm, place=place)


def _lacking(policy: PolicyDocument, record: AuditRecord) -> Iterator[Finding]:
    """Yield a finding for each arm and each correction of the policy that was not measured on a level."""
    for quantity in record.quantities.values():
        for plan, level in zip(policy.levels, quantity.levels, strict=True):
            arms = arms_of(plan)
            pairs = {f"{arm}:{REFERENCE}" for arm in arms if arm != REFERENCE}
            pairs |= {":".join(arms)} if plan.wide is not None else set()
            lacking = [f"arm {arm}" for arm in arms if arm not in level.arms]
            lacking += [f"correction {pair}" for pair in sorted(pairs - set(level.corrections))]
            if lacking:
                what = f"level {level.level}: the audit has no {', '.join(lacking)}, which the policy uses"
                yield fact("run", "fails", what, level=level.level)


def _escapes(policy: PolicyDocument, record: AuditRecord) -> Finding:
    if record.reach is None:
        return fact("escapes", "holds", "the kernel rounds for itself: nothing is emulated that could be left")
    known = [(one.file, one.line) for one in policy.evidence.allowed_escapes]
    found = [(one.file, one.line) for one in record.reach.allowed_escapes]
    # An edit above them moves lines that were there, so that their number in a file counts where their places do not.
    before, now = (Counter(file for file, _ in places) for places in (known, found))
    new = [one for one in found if one not in known and now[one[0]] > before[one[0]]]
    if new:
        places = ", ".join(f"{one[0]}:{one[1]}" for one in new)
        file, line = new[0]
        where = None if file is None or line is None else Place(file=file, line=line)
        return fact("escapes", "fails", f"values leave the emulation on lines where none did: {places}", place=where)
    return fact("escapes", "holds", "no value leaves the emulation where none did")


def _branches(policy: PolicyDocument, record: AuditRecord) -> Iterator[Finding]:
    splits = [level for level in policy.levels if level.wide is not None]
    if not splits:
        return
    if record.branches is None:
        yield fact("branches", "undecided", "the policy has splits, and the audit compared no branches")
        return
    arms = list(dict.fromkeys(level.narrow for level in splits))
    tried = {one.arm for one in record.branches.tried}
    raised = {arm: record.branches.raised[arm] for arm in arms if arm in record.branches.raised}
    for arm, said in raised.items():
        yield fact("branches", "fails", f"{arm}: a branch raised: {said}", arm=arm)
    for arm in (one for one in arms if one not in tried and one not in raised):
        yield fact("branches", "undecided", f"the policy has splits of {arm}, of which no branches were tried", arm=arm)
    known = [one for one in record.branches.mismatches if one.splits != "not concerned"]
    clean = not raised and tried.issuperset(arms)
    for level in splits:
        for one in known:
            # What a path hangs on beside its draws, it hangs on everywhere; two functions may differ on some levels.
            if one.arm != level.narrow or (one.condition == "branches" and one.level != level.level):
                continue
            bad = one.splits == "not admissible"
            clean = False
            what = f"{one.condition}: {one.differing} of {one.paths} paths differ, tried on level {one.level}"
            what += "" if bad else "; the mean shifts within its share of the target, which branches.allow accepts"
            where = None if one.where is None else one.where.low or one.where.correction
            place = None
            if where is not None and where.file is not None and where.line is not None:
                place = Place(file=where.file, line=where.line)
            state: State = "fails" if bad else "note"
            yield fact("branches", state, what, level=level.level, quantity=one.quantity, arm=level.narrow, place=place)
    if clean:
        yield fact("branches", "holds", "the branches of every split agree to the bit")


def _finite(policy: PolicyDocument, record: AuditRecord) -> Iterator[Finding]:
    clean = True
    for name, quantity in record.quantities.items():
        for plan, level in zip(policy.levels, quantity.levels, strict=True):
            counts = {REFERENCE: level.reference.nonfinite}
            for arm in arms_of(plan):
                counts[arm] = max(counts.get(arm, 0), level.arms[arm].nonfinite)
            for arm, count in counts.items():
                if count:
                    clean = False
                    what = f"level {level.level}, {name}: {count} of {level.paths} paths are not finite in {arm}"
                    yield fact("finite", "fails", what, level=level.level, quantity=name, arm=arm)
    if clean:
        yield fact("finite", "holds", "every value is finite")


def _unlike(key: str, now: object, then: object) -> Iterator[tuple[str, object, object]]:
    same = now == then and isinstance(now, bool) == isinstance(then, bool)
    if not same and not (isinstance(now, float) and isinstance(then, float) and math.isclose(now, then, rel_tol=1e-15)):
        yield key, now, then


def _table(asked: Mapping[str, object], name: str) -> dict[str, Any]:
    table = asked.get(name)
    return table if isinstance(table, dict) else {}


def _shown(value: object) -> str:
    return "not there" if value is None else str(value)
