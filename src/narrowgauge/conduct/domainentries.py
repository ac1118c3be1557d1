"""From scenarios to the part of the record that a table [domain] fills."""

from __future__ import annotations

import math
from collections.abc import Sequence

from narrowgauge.conduct.entries import finite, interval_fields, scheme_entry
from narrowgauge.conduct.run import Outcome
from narrowgauge.conduct.scenarios import audited_point, steps_of
from narrowgauge.conduct.tried import Trials, Tried
from narrowgauge.judge.box import CONFIDENCE, Box, claimed, failing_share, inside, share
from narrowgauge.judge.domain import ArmFigures, arm_figures, worse
from narrowgauge.judge.domain import Outcome as Word
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.domaintable import AxisTable
from narrowgauge.record.domain import (
    ClaimedEntry,
    DomainArmEntry,
    DomainEntry,
    DomainLevelEntry,
    ProofEntry,
    ScenarioEntry,
    ScenarioLevelEntry,
    SideEntry,
    SpanEntry,
)

__all__ = ["domain_entry"]


def domain_entry(trials: Trials, tried: Sequence[Tried], outcome: Outcome) -> DomainEntry:
    """Return all that the scenarios showed."""
    file, sides = trials.file, _sides(trials.file)
    point, levels = audited_point(file), list(trials.schemes)
    words = {one.scenario.number: one.verdict(levels)[0] for one in tried}
    passing = [one for one in tried if words[one.scenario.number] == "passes"]
    failing = [one.scenario.values for one in tried if words[one.scenario.number] != "passes"]
    box = claimed(list(sides.values()), point, [one.scenario.values for one in passing], failing)
    drawn = [words[one.scenario.number] for one in tried if one.scenario.drawn]
    fails_below = failing_share(sum(word != "passes" for word in drawn), len(drawn))
    entry = None if box is None else _claimed_entry(trials, sides, box, passing)
    steps = sum(tally.paths * steps_of(file, level) for one in tried for level, tally in one.tallies.items())
    audit = sum(tally.paths * steps_of(file, level) for level, tally in outcome.tallies.items())
    return DomainEntry(
        sides={
            name: SideEntry(low=axis.low, high=axis.high, scale=axis.scale, audited=value)
            for (name, axis), value in zip(sides.items(), point, strict=True)
        },
        confidence=file.sampling.confidence,
        path_steps=steps,
        share_of_audit=steps / audit,
        levels=[_level_entry(trials, level, tried) for level in levels],
        claimed=entry,
        proof=ProofEntry(
            confidence=CONFIDENCE,
            drawn=len(drawn),
            passed=sum(word == "passes" for word in drawn),
            fails_below=fails_below,
            claimed_fails_below=None if entry is None or entry.share == 0 else min(1.0, fails_below / entry.share),
        ),
        scenarios=[_scenario_entry(one, list(sides), levels) for one in tried],
    )


def _sides(file: AuditFile) -> dict[str, AxisTable]:
    assert file.domain is not None  # or there are no scenarios
    return file.domain.parameters


def _claimed_entry(trials: Trials, sides: dict[str, AxisTable], box: Box, passing: Sequence[Tried]) -> ClaimedEntry:
    held = [one for one in passing if inside(one.scenario.values, box)]
    return ClaimedEntry(
        parameters={name: SpanEntry(low=low, high=high) for name, (low, high) in zip(sides, box, strict=True)},
        share=share(list(sides.values()), box),
        scenarios=len(held),
        levels=[_level_entry(trials, level, held) for level in trials.schemes],
    )


def _level_entry(trials: Trials, level: int, tried: Sequence[Tried]) -> DomainLevelEntry:
    """Return the worst of a level over scenarios; among those with the worst outcome the least edge decides."""
    worst: Word = "passes"
    for one in tried:
        worst = worse(worst, one.on(level).outcome)
    least, deciding = math.inf, None
    for one in tried:
        figures = one.on(level)
        edge = -math.inf if figures.edge is None else figures.edge.low
        if figures.outcome == worst and (deciding is None or edge < least):
            least, deciding = edge, one
    found = None if deciding is None else deciding.on(level)
    return DomainLevelEntry(
        level=level,
        scheme=scheme_entry(trials.schemes[level]),
        outcome=worst,
        reason=None if found is None else found.reason,
        edge_low=None if found is None or found.edge is None else finite(found.edge.low),
        decided_by=None if deciding is None else deciding.scenario.number,
        arms={arm: _arm_entry(trials, level, arm, tried) for arm in trials.file.narrow},
    )


def _arm_entry(trials: Trials, level: int, arm: str, tried: Sequence[Tried]) -> DomainArmEntry:
    found: list[tuple[int, ArmFigures]] = [
        (one.scenario.number, arm_figures(one.tallies[level], one.judged[level], trials.file, arm))
        for one in tried
        if level in one.judged
    ]
    edges = [(figures.edge.low, number) for number, figures in found if figures.edge is not None]
    biases = [(figures.spent, -number, figures.bias) for number, figures in found if figures.bias is not None]
    lost = [(figures.nonfinite, -number) for number, figures in found if figures.nonfinite]
    edge = min(edges, default=None)
    bias = max(biases, key=lambda one: one[:2], default=None)
    most = max(lost, default=None)
    return DomainArmEntry(
        edge_low=None if edge is None else finite(edge[0]),
        edge_at=None if edge is None else edge[1],
        **interval_fields("bias", None if bias is None else bias[2]),
        bias_at=None if bias is None else -bias[1],
        nonfinite=0 if most is None else most[0],
        nonfinite_at=None if most is None else -most[1],
        raised_at=next((number for number, figures in found if figures.raised), None),
    )


def _scenario_entry(one: Tried, names: Sequence[str], levels: Sequence[int]) -> ScenarioEntry:
    outcome, level = one.verdict(levels)
    return ScenarioEntry(
        number=one.scenario.number,
        kind="drawn" if one.scenario.drawn else "corner",
        parameters=dict(zip(names, one.scenario.values, strict=True)),
        outcome=outcome,
        reason=_reason(one, level),
        level=level,
        message=one.problem,
        levels=[
            ScenarioLevelEntry(
                level=level,
                outcome=one.figures[level].outcome,
                reason=one.figures[level].reason,
                paths=one.tallies[level].paths,
                **interval_fields("edge", one.figures[level].edge),
                **interval_fields("bias", one.figures[level].bias),
                paths_needed=one.figures[level].paths_needed,
            )
            for level in levels
            if level in one.figures
        ],
    )


def _reason(one: Tried, level: int | None) -> str | None:
    if one.problem is not None:
        return "reference"
    return None if level is None else one.on(level).reason
