"""The gate: whether a fresh audit of a kernel still supports its policy; pure, and without numpy.

The verdict follows from the findings, facts and claims alike:

| any fails | any undecided | verdict      |
|-----------|---------------|--------------|
| yes       | yes or no     | fail         |
| no        | yes           | inconclusive |
| no        | no            | pass         |

A claim has a fresh figure with bounds, and a limit that follows from the policy:

| bounds against the limit "at most"      | state     | "at least"                                  |
|-----------------------------------------|-----------|---------------------------------------------|
| the lower one above it                  | fails     | the upper one below it                      |
| the upper one not above it              | holds     | the lower one above nine tenths of it       |
| else                                    | undecided | else                                        |

False alarms. A claim fails at 1 in 1,000 and is then measured again, on fresh draws (`second`), where it has to fail
once more: 1 in a million for a claim that is just at its limit, 1 in 10,000 for a gate of a hundred such claims. With
more claims each has the share that keeps m alpha^2 at 1 in 10,000, and each of J looks alpha / J of that. An unchanged
kernel is far from most limits: its error variance is below the policy's bound of it where 1.5 times that is the limit,
which is four standard errors of its logarithm away or more once it is decided. The limit of gains and edges has no
such room: it is the policy's own lower bound. With s the standard error of the fresh one and p that of the policy's, a
failure needs the two to be 3.3 s + 2.6 p apart, which is at least 3.8 of sqrt(s^2 + p^2) for s and p of which neither
is below half of the other: less than 1 of 10,000 for a claim at one stage. A policy that is unlucky in that way fails
its gate again and again, and is to be renewed from draws of another seed. The corners of a claimed box are judged as
scenarios are: a level is refused at 1 in 1,000, all corners and quantities together, and again on fresh draws, where an
edge is below 1 for certain that was above 1 for certain when the policy was drawn up; the levels take their shares of
the 1 in 10,000. A finished audit cannot be drawn again: it is judged at 1 in a million at once, and what it decided at
its own confidence holds (`alone`).

What writes a verdict down takes the report as `record.gate` has it:

    policy/junit.py     junit_text(report: GateReport) -> str
    policy/sarif.py     sarif_text(report: GateReport) -> str
    policy/summary.py   summary_text(report: GateReport) -> str
    record/gate.py      gate_text(report: GateReport) -> str         the JSON

From Python, `api.gate(audit: Path, *, seed=None, workers=2) -> GateEntry` measures and judges one audit file.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import msgspec

from narrowgauge.policy.gateclaims import RESOLUTION, SHARES, Claim, claims_of, counted_shares
from narrowgauge.policy.gatedomain import DOMAIN, claims_box, domain_findings
from narrowgauge.policy.gatefacts import FACTS, facts_of
from narrowgauge.policy.gatefigures import confidence_of, looks_of
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.gate import Finding, Verdict
from narrowgauge.record.policy import PolicyDocument

__all__ = ["ALPHA", "FALSE_ALARMS", "concerned", "fails_for_now", "judge", "levels_open", "second", "verdict_of"]

ALPHA = 1e-3  # of a claim, at one stage
FALSE_ALARMS = 1e-4  # of a gate
_NEVER = 3e4  # times nearer that bounds would have to come, by a billion times the paths


@dataclass(frozen=True, slots=True, kw_only=True)
class _Sides:
    """The two-sided error rates at which a claim fails, and at which it holds."""

    fails: float
    holds: float


def judge(
    policy: PolicyDocument,
    record: AuditRecord,
    *,
    stale: str = "note",
    alone: bool = False,
    counted: bool = False,
) -> list[Finding]:
    """Return a finding for each fact and each claim of a policy, from a fresh record of its kernel.

    `stale` says whether a kernel that changed and still holds is a "note" or has to "fail"; with `alone` a claim that
    fails cannot be measured again, and fails at 1 in a million only; with `counted` it is open what the record does not
    say of lost additions and subnormals.
    """
    facts = facts_of(policy, record, stale)
    if any(one.check in ("settings", "run") and one.state == "fails" for one in facts):
        return facts
    claims = list(claims_of(policy, record, counted=counted))
    sides = _sides(policy, record, claims, alone=alone)
    return [*facts, *(_found(claim, sides) for claim in claims), *domain_findings(policy, record, alone=alone)]


def second(first: Sequence[Finding], fresh: Sequence[Finding]) -> list[Finding]:
    """Return the findings of both stages: of the claims that failed at the first, what the fresh draws show.

    Claims that did not fail stay as they are, and so do facts; one that fails on the fresh draws alone fails, too, in
    the place of what the first stage said of the same: a path that is not finite is no chance of the sample.
    """
    again = {_key(one): one for one in fresh}
    found = [
        msgspec.structs.replace(again[_key(one)], stages=2) if _repeats(one) and _key(one) in again else one
        for one in first
    ]
    broken = [one for one in fresh if _is_fact(one) and one.state == "fails"]
    known = {_key(one) for one in found if one.state == "fails"}
    new = [one for one in broken if _key(one) not in known]
    checks, keys = {one.check for one in new}, {_key(one) for one in new}
    kept = [one for one in found if _key(one) not in keys]
    return [*(one for one in kept if one.state != "holds" or not _is_fact(one) or one.check not in checks), *new]


def concerned(fresh: Iterable[Finding], before: Sequence[Finding]) -> list[Finding]:
    """Return the findings that a stage is run for: all at the first, then those of the claims that failed `before`."""
    again = {_key(one) for one in before if _repeats(one)}
    return [one for one in fresh if not before or _key(one) in again]


def levels_open(findings: Iterable[Finding], levels: Sequence[int]) -> list[int]:
    """Return the levels whose undecided claims need more paths; a claim on all levels needs them on each.

    None where a fact fails: nothing that more paths show would change the verdict. What is tried elsewhere draws paths
    of its own.
    """
    findings = list(findings)
    if any(one.state == "fails" and _is_fact(one) for one in findings):
        return []
    waiting = {one.level for one in findings if one.state == "undecided" and one.check not in (*FACTS, DOMAIN)}
    return [level for level in levels if level in waiting or None in waiting]


def verdict_of(findings: Iterable[Finding]) -> Verdict:
    """Return the verdict of the truth table above."""
    states = {one.state for one in findings}
    return "fail" if "fails" in states else "inconclusive" if "undecided" in states else "pass"


def fails_for_now(findings: Iterable[Finding]) -> bool:
    """Return whether a claim failed that has to be measured again."""
    return any(_repeats(one) for one in findings)


def _repeats(finding: Finding) -> bool:
    return finding.state == "fails" and not _is_fact(finding)


def _is_fact(finding: Finding) -> bool:
    """Return whether no other sample could show otherwise; of what is tried elsewhere a figure has a limit."""
    return finding.check in FACTS or (finding.check == DOMAIN and finding.limit is None)


def _key(finding: Finding) -> tuple[str, int | None, str | None, str | None]:
    return finding.check, finding.level, finding.quantity, finding.arm


def _sides(policy: PolicyDocument, record: AuditRecord, claims: Sequence[Claim], *, alone: bool) -> _Sides:
    """Return the rates of a claim where the levels of a box are judged at 1 in 1,000 beside them.

    They are the same while more paths are drawn as in the end, when shares are counted and corners are tried, too.
    """
    looks = looks_of(record)
    shares = counted_shares(policy, next(iter(record.quantities)))
    number = max(1, sum(claim.check not in SHARES for claim in claims) + shares)
    corners = len(policy.levels) if claims_box(policy) else 0  # a ladder has at most 65
    each = min(ALPHA, math.sqrt((FALSE_ALARMS - corners * ALPHA**2) / number))
    if alone:
        return _Sides(fails=each**2 / looks, holds=max(each, 1 - confidence_of(record)) / looks)
    return _Sides(fails=each / looks, holds=each / looks)


def _found(claim: Claim, sides: _Sides) -> Finding:
    """Decide one claim by the table above."""
    strict, bounds = claim.bounds(sides.fails), claim.bounds(sides.holds)
    if strict is None or bounds is None:
        return claim.finding(state="undecided", bounds=None, paths_needed=None)
    if claim.at_least:
        fails, holds = strict.high < claim.limit, bounds.low >= RESOLUTION * claim.limit
        room = _log(bounds.estimate, RESOLUTION * claim.limit)
        width = _log(bounds.estimate, bounds.low)
    else:
        fails, holds = strict.low > claim.limit, claim.settled or bounds.high <= claim.limit
        room, width = claim.limit - bounds.estimate, bounds.high - bounds.estimate
    if fails:
        return claim.finding(state="fails", bounds=strict, paths_needed=None)
    if holds:
        return claim.finding(state="holds", bounds=bounds, paths_needed=None)
    return claim.finding(state="undecided", bounds=bounds, paths_needed=_needed(claim.paths, width, room))


def _log(over: float, under: float) -> float:
    return math.log(over / under) if under > 0 else math.inf


def _needed(paths: int, width: float, room: float) -> int | None:
    """Return the paths at which bounds this wide, which narrow as 1 / sqrt(paths), fit the room; None: never, or many.

    Beyond its limit a claim has as far to go to fail.
    """
    times = width / abs(room) if room else math.inf
    return math.ceil(paths * times**2) if 1.0 <= times < _NEVER else None
