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

Where no scenario lies in the box, or another scheme was tried, the claim is undecided.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Final

from narrowgauge.policy.gateclaims import RESOLUTION, beside
from narrowgauge.policy.gatefacts import fact
from narrowgauge.policy.gatefigures import arms_of
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.domain import DomainEntry, ScenarioEntry, ScenarioLevelEntry
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
}
_OF_THE_SAMPLE = ("edge", "bias")
_OF_THE_EDGE = ("budget", "edge")  # why a level is open of which all else is known
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
        if _tried(known, level):
            yield _on(level.level, inside, alone=alone)
        else:
            what = f"level {level.level}: the scenarios tried another scheme than the policy's; {_AGAIN}"
            yield fact(DOMAIN, "undecided", what, level=level.level)


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


def _on(level: int, inside: Sequence[ScenarioEntry], *, alone: bool) -> Finding:
    found = [(one, _entry(one, level)) for one in inside]
    refused = [(one, entry) for one, entry in found if entry is None or entry.outcome == "refused"]
    waiting = [(one, entry) for one, entry in found if entry is not None and _waits(entry)]
    certain = [(one, entry) for one, entry in refused if entry is None or entry.reason not in _OF_THE_SAMPLE]
    where = f"level {level}"
    if certain:
        one, entry = certain[0]
        why = one.message or _why(entry)
        message = f"{where}: {_counted(len(certain), inside)} refused, at {_shown(one)}: {why}"
        return fact(DOMAIN, "fails", message, level=level)
    edges = [entry for _, entry in found if entry is not None and entry.edge_low is not None]
    state: State = "undecided" if waiting or refused else "holds"
    message, needed = f"{where}: {_counted(len(inside), inside)} fine", None
    if waiting:
        needed = max((entry.paths_needed or 0 for _, entry in waiting), default=0) or None
        message = f"{where}: {_counted(len(waiting), inside)} undecided, at {_shown(waiting[0][0])}"
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
    return entry.reason not in _OF_THE_EDGE or entry.edge_low is None or entry.edge_low < LEAST_EDGE


def _entry(scenario: ScenarioEntry, level: int) -> ScenarioLevelEntry | None:
    """Return how a level does in a scenario; None where the kernel did not come so far."""
    stopped = scenario.message is not None and scenario.level in (None, level)
    return None if stopped else next((one for one in scenario.levels if one.level == level), None)


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
