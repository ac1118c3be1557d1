"""The claim of a policy on a box of parameters: its schemes hold in the scenarios of a record that lie in the box.

A scenario is fine on a level where it passes, and where nothing but its edge is open, whose lower bound is above nine
tenths of 1: as far as a gain or an edge of the audited point has to come, too. By the outcomes of the scenarios on a
level, and the reason of one that is refused:

| any refused                       | any not fine  | the claim on the level                           |
|-----------------------------------|---------------|--------------------------------------------------|
| not finite, raises                | yes or no     | fails, whatever the sample                       |
| edge, bias                        | yes or no     | fails; undecided where it cannot be tried again  |
| no                                | yes           | undecided                                        |
| no                                | no            | holds                                            |

Where no scenario lies in the box, or another scheme was tried, the claim is undecided. It does not hold, either, where
the scenarios are those of a box that has not all of the claimed one.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from typing import Final

from narrowgauge.policy.gateclaims import RESOLUTION, beside
from narrowgauge.policy.gatefacts import fact
from narrowgauge.policy.gatefigures import arms_of
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.domain import DomainEntry, ScenarioEntry, ScenarioLevelEntry, near_enough
from narrowgauge.record.gate import Finding, State
from narrowgauge.record.policy import LevelPart, ParameterPart, PolicyDocument

__all__ = ["DOMAIN", "LEAST_EDGE", "claims_box", "domain_findings"]

DOMAIN: Final = "domain"  # the check
_EDGE = 1.0  # what the edge of a format that pays is above
LEAST_EDGE = RESOLUTION * _EDGE  # how near its lower bound has to come
_WORDS = {
    "nonfinite": "a value is not finite",
    "raised": "the kernel raises in a narrow format",
    "bias": "rounding shifts a mean by more than its share of the target",
    "edge": "its edge is below 1",
    "branches": "the two branches of its split differ",
}
_OF_THE_SAMPLE = ("edge", "bias")
_AGAIN = "the gate without --measured tries the corners of the box"
_TOO_MUCH = (
    "where nothing has changed there the policy claims too much: let [domain] end at the box of the policy, whose "
    "corners are tried then, and renew it"
)


def claims_box(policy: PolicyDocument) -> bool:
    """Return whether a policy claims more than one point."""
    return any(part.low is not None for part in policy.domain.parameters.values())


def domain_findings(policy: PolicyDocument, record: AuditRecord, *, alone: bool = False) -> Iterator[Finding]:
    """Yield a finding for each level of a policy that claims a box of parameters, by the table above; else nothing.

    With `alone` what was refused cannot be tried again on fresh draws.
    """
    if not claims_box(policy):
        return
    known, parameters = record.domain, policy.domain.parameters
    inside = [] if known is None else [one for one in known.scenarios if _inside(one.parameters, parameters)]
    if known is None or not inside:
        what = f"the policy claims a box of parameters, and nothing was tried in it; {_AGAIN}"
        yield fact(DOMAIN, "undecided", what)
        return
    for level in policy.levels:
        if not _tried(known, level):
            what = f"level {level.level}: the scenarios tried another scheme than the policy's; {_AGAIN}"
            yield fact(DOMAIN, "undecided", what, level=level.level)
            continue
        found = _on(level.level, inside, levels=len(known.levels), alone=alone)
        if found.state == "holds" and not _covered(known, parameters):
            what = f"level {level.level}: the scenarios are of a box that has not all of the policy's; {_AGAIN}"
            found = fact(DOMAIN, "undecided", what, level=level.level)
        yield found


def _covered(known: DomainEntry, parameters: Mapping[str, ParameterPart]) -> bool:
    """Return whether the box in which scenarios were tried has all of the box that is claimed."""
    return all(
        name in known.sides and known.sides[name].low <= part.low and known.sides[name].high >= part.high
        for name, part in parameters.items()
        if part.low is not None and part.high is not None
    )


def _inside(values: Mapping[str, float], parameters: Mapping[str, ParameterPart]) -> bool:
    """Return whether a scenario lies in the box; what it does not name is as in the audit file, which was looked at."""
    return all(
        values[name] == part.fixed if part.low is None or part.high is None else part.low <= values[name] <= part.high
        for name, part in parameters.items()
        if name in values
    )


def _tried(known: DomainEntry, level: LevelPart) -> bool:
    schemes = [one.scheme for one in known.levels if one.level == level.level]
    return [(one.narrow, one.wide) for one in schemes] == [(arms_of(level)[0], level.wide)]


def _on(level: int, inside: Sequence[ScenarioEntry], *, levels: int, alone: bool) -> Finding:
    found = [(one, _entry(one, level, levels)) for one in inside]
    refused = [(one, entry) for one, entry in found if entry is None or entry.outcome == "refused"]
    waiting = [(one, entry) for one, entry in found if entry is not None and _waits(entry)]
    certain = [(one, entry) for one, entry in refused if entry is None or entry.reason not in _OF_THE_SAMPLE]
    where = f"level {level}"
    if certain:
        one, entry = certain[0]
        own = entry is not None and entry.reason != "reference"
        why = _why(entry) if own or one.message is None else one.message
        message = f"{where}: {_counted(len(certain), inside)} refused, at {_shown(one)}: {why}"
        return fact(DOMAIN, "fails", message, level=level)
    edges = [entry for _, entry in found if entry is not None and entry.edge_low is not None]
    state: State = "undecided" if waiting or refused else "holds"
    message, needed = f"{where}: {_counted(len(inside), inside)} fine", None
    if waiting:
        # What nobody can tell is more than any number.
        one, most = max(waiting, key=lambda pair: math.inf if pair[1].paths_needed is None else pair[1].paths_needed)
        needed = most.paths_needed
        message = f"{where}: {_counted(len(waiting), inside)} undecided, at {_shown(one)}"
        message += f"; about {needed:,} paths there would decide" if needed is not None else ""
    if refused:
        one, entry = refused[0]
        state = "undecided" if alone else "fails"
        message = f"{where}: {_counted(len(refused), inside)} refused, at {_shown(one)}: {_why(entry)}; "
        message += _AGAIN if alone else _TOO_MUCH
        edges = [entry for _, entry in refused if entry is not None and entry.edge_low is not None]
    worst = min(edges, key=lambda entry: entry.edge_low or 0.0, default=None)
    return Finding(
        check=DOMAIN,
        level=level,
        quantity=None,
        arm=None,
        state=state,
        message=message,
        compared=f"{where}: the least edge of its format in the box that the policy claims, at least the limit",
        estimate=None if worst is None else worst.edge,
        low=None if worst is None else worst.edge_low,
        high=None if worst is None else worst.edge_high,
        limit=_EDGE,
        paths_needed=needed,
    )


def _waits(entry: ScenarioLevelEntry) -> bool:
    """Return whether it is open that a scheme is fine: for another reason than its edge, or far below 1."""
    if entry.outcome != "undecided":
        return False
    return not near_enough(entry.reason, entry.edge_low, LEAST_EDGE)


def _entry(scenario: ScenarioEntry, level: int, levels: int) -> ScenarioLevelEntry | None:
    """Return how a level, of so many, does in a scenario; None where the kernel stopped before it was known.

    A kernel that stopped once all levels had been looked at did so on any one that is not refused for its own reason.
    """
    entry = next((one for one in scenario.levels if one.level == level), None)
    if scenario.message is None or entry is None or entry.outcome == "refused":
        return entry
    shown = len(scenario.levels) < levels or any(one.reason == "reference" for one in scenario.levels)
    return entry if shown else None


def _why(entry: ScenarioLevelEntry | None) -> str:
    """Return why a scenario is refused, with the figure where there is one."""
    if entry is None:
        return "the kernel does not run"
    if entry.reason == "edge" and None not in (edge := (entry.edge, entry.edge_low, entry.edge_high)):
        shown = [beside(value, _EDGE) for value in edge if value is not None]
        return f"its edge is {shown[0]} ({shown[1]} to {shown[2]}), at least 1 is accepted"
    return _WORDS.get(entry.reason or "", "the kernel does not run")


def _counted(number: int, inside: Sequence[ScenarioEntry]) -> str:
    verb = "is" if number == 1 else "are"
    return f"{number} of the {len(inside)} points that were tried in the box of the policy {verb}"


def _shown(scenario: ScenarioEntry) -> str:
    return ", ".join(f"{name} = {value:g}" for name, value in scenario.parameters.items())
