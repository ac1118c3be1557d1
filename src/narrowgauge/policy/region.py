"""What of the parameters a policy holds for: the point that was audited, or the box that the scenarios leave of it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

from msgspec import structs

from narrowgauge.errors import PolicyError
from narrowgauge.policy.choice import REFERENCE, Choice, scheme_of
from narrowgauge.record.domain import ClaimedEntry, DomainEntry, SpanEntry
from narrowgauge.record.policy import DomainPart, ParameterPart, Plain

__all__ = ["claimed_box", "held_in_box", "single_point"]

_ALONE = (
    "The policy was tried in a box of parameters, and no scenario that passes lies in what the others leave of it: "
    "only the audited point is claimed."
)
_PATHS = (
    "Paths are planned from the variances at the audited point: elsewhere in the box a run by the policy may miss the "
    "target, and its standard errors say so."
)


def single_point(parameters: Mapping[str, Plain]) -> DomainPart:
    """Return the domain of an audit without scenarios: its own parameters, and no others."""
    return DomainPart(
        parameters={name: ParameterPart(fixed=value) for name, value in parameters.items()},
        scenarios=1,
        failing_below=None,
        remarks=[],
    )


def claimed_box(entry: DomainEntry, parameters: Mapping[str, Plain]) -> DomainPart:
    """Return the box that an audit's scenarios leave, the other parameters fixed.

    A side of which a single value is left is that value. Where no scenario lies in what is left, the audited point
    alone is claimed: nothing was tried around it that passed. Raises PolicyError where the audited point itself fails.
    """
    claimed = entry.claimed
    if claimed is None:
        raise PolicyError(
            "the audited point itself does not pass as a scenario of [domain]; accepted: an audit without [domain], or "
            "with a larger domain.most_paths"
        )
    if claimed.scenarios == 0:
        return structs.replace(single_point(parameters), remarks=[_ALONE])
    sides = {name: _side(entry, name, span) for name, span in claimed.parameters.items()}
    fixed = {name: ParameterPart(fixed=value) for name, value in parameters.items() if name not in sides}
    return DomainPart(
        parameters={name: (sides | fixed)[name] for name in parameters},
        scenarios=claimed.scenarios,
        failing_below=entry.proof.claimed_fails_below,
        remarks=list(_remarks(entry, claimed)),
    )


def held_in_box(entry: DomainEntry, choices: Mapping[int, Choice]) -> dict[int, Choice]:
    """Return the schemes that the scenarios tried; the reference where a level's is another one.

    A policy that takes another scheme than the audit's own would claim it for parameters at which nobody tried it.
    """
    tried = {one.level: scheme_of(one.scheme) for one in entry.levels}
    return {
        level: choice
        if choice.scheme in (REFERENCE, tried[level])
        else replace(choice, scheme=REFERENCE, verdict="does not pay", reason="not tried in the domain")
        for level, choice in choices.items()
    }


def _side(entry: DomainEntry, name: str, span: SpanEntry) -> ParameterPart:
    if span.low == span.high:
        return ParameterPart(fixed=span.low)
    return ParameterPart(low=span.low, high=span.high, scale=entry.sides[name].scale)


def _remarks(entry: DomainEntry, claimed: ClaimedEntry) -> list[str]:
    proof, below = entry.proof, entry.proof.claimed_fails_below
    words = f"{proof.passed} of {proof.drawn} scenarios drawn from the whole box pass"
    if below is not None:
        words += f", so that with {proof.confidence:.0%} confidence less than {below:.1%} of what is claimed fails"
    found = [f"The policy was tried in a box of parameters, not everywhere in it: {words}."]
    if claimed.share < 1.0:
        found.append(f"Scenarios that do not pass leave {claimed.share:.1%} of the box that was asked for.")
    return [*found, _PATHS]
