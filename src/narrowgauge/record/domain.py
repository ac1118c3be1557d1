"""The part of an audit's record that a table `[domain]` fills: the verdict, tried in a box of parameters.

Scenarios are numbered from 1; `at` names one by its number. Shares of the box are taken in the coordinates of its
scales.
"""

from __future__ import annotations

from typing import Literal

from narrowgauge.record.plan import Entry, SchemeEntry

__all__ = [
    "ClaimedEntry",
    "DomainArmEntry",
    "DomainEntry",
    "DomainLevelEntry",
    "ProofEntry",
    "ScenarioEntry",
    "ScenarioLevelEntry",
    "SideEntry",
    "SpanEntry",
    "edge_alone",
    "near_enough",
]

OutcomeWord = Literal["passes", "undecided", "refused"]
_OF_THE_EDGE = ("budget", "edge")  # why a level is open of which all else is known


def edge_alone(reason: str | None) -> bool:
    """Return whether an edge is all that is open of a level that is undecided for this reason."""
    return reason in _OF_THE_EDGE


def near_enough(reason: str | None, edge_low: float | None, least: float) -> bool:
    """Return whether an edge is all that is open of a level, and its lower bound is so much at least."""
    return edge_alone(reason) and edge_low is not None and edge_low >= least


class SpanEntry(Entry, frozen=True, kw_only=True):
    """A parameter from `low` to `high`, both included."""

    low: float
    high: float


class SideEntry(SpanEntry, frozen=True, kw_only=True):
    """One side of the box; `audited` is where the audit itself was made."""

    scale: Literal["linear", "log"]
    audited: float


class ScenarioLevelEntry(Entry, frozen=True, kw_only=True):
    """How the scheme of a level does in one scenario; `reason` is None where it passes.

    `edge` is that of the scheme's narrow format, `bias` that of the scheme, each of the quantity that is worst off.
    An undecided level has no edge where a quantity that is open has none.
    """

    level: int
    outcome: OutcomeWord
    reason: str | None
    paths: int
    edge: float | None
    edge_low: float | None
    edge_high: float | None
    bias: float | None
    bias_low: float | None
    bias_high: float | None
    paths_needed: int | None


class ScenarioEntry(Entry, frozen=True, kw_only=True):
    """One scenario: `drawn` from the whole box, or a `corner` of it. Its worst level decides.

    `message` is what the kernel met in the reference, where that ended the scenario.
    """

    number: int
    kind: Literal["drawn", "corner"]
    parameters: dict[str, float]
    outcome: OutcomeWord
    reason: str | None
    level: int | None
    message: str | None
    levels: list[ScenarioLevelEntry]


class DomainArmEntry(Entry, frozen=True, kw_only=True):
    """The worst of one format on one level: lower bound of its edge, bias, paths that are not finite.

    Each comes with the scenario that it is from, `raised_at` is the first one in which the kernel raised.
    """

    edge_low: float | None
    edge_at: int | None
    bias: float | None
    bias_low: float | None
    bias_high: float | None
    bias_at: int | None
    nonfinite: int
    nonfinite_at: int | None
    raised_at: int | None


class DomainLevelEntry(Entry, frozen=True, kw_only=True):
    """One level over several scenarios: the scheme that was tried, its worst outcome, and the scenario that decides."""

    level: int
    scheme: SchemeEntry
    outcome: OutcomeWord
    reason: str | None
    edge_low: float | None
    decided_by: int | None
    arms: dict[str, DomainArmEntry]


class ClaimedEntry(Entry, frozen=True, kw_only=True):
    """The largest box that holds the audited point and, of all scenarios, only ones that pass; `share` of the whole.

    `levels` are those of the `scenarios` inside.
    """

    parameters: dict[str, SpanEntry]
    share: float
    scenarios: int
    levels: list[DomainLevelEntry]


class ProofEntry(Entry, frozen=True, kw_only=True):
    """What the drawn scenarios prove, taken for independent points that are evenly spread over the whole box.

    With `confidence` less than the share `fails_below` of the whole box fails: 1 - .05^(1/n) where all n pass. Of the
    claimed box it is at most that much over its share, `claimed_fails_below`. Corners are no sample and do not count.
    """

    confidence: float
    drawn: int
    passed: int
    fails_below: float
    claimed_fails_below: float | None


class DomainEntry(Entry, frozen=True, kw_only=True):
    """The verdict, tried in a box of parameters.

    `confidence` is that of all looks at a level of a scenario together; `share_of_audit` the path steps of all
    scenarios over those of the audit itself. `claimed` is None where the audited point itself does not pass.
    """

    sides: dict[str, SideEntry]
    confidence: float
    path_steps: int
    share_of_audit: float
    levels: list[DomainLevelEntry]
    claimed: ClaimedEntry | None
    proof: ProofEntry
    scenarios: list[ScenarioEntry]
