"""What is known of one scenario so far: its tallies, judged look by look."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, field

from narrowgauge.conduct.scenarios import Scenario
from narrowgauge.judge.domain import Outcome, SchemeFigures, judge_scheme, worse
from narrowgauge.judge.gain import Scheme
from narrowgauge.judge.schemes import LevelJudgement, judge_level
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.tally import LevelTally

__all__ = ["Trials", "Tried"]

_OUTSIDE = SchemeFigures(outcome="refused", reason="reference", edge=None, bias=None, paths_needed=None)


@dataclass(frozen=True, slots=True, kw_only=True)
class Trials:
    """What all scenarios share: the audit file with its costs, the scheme of each level, and 1 - confidence of a look.

    `broken` has, by level, the formats of which no split is admissible; `names` are the quantities; `dropping` says
    that the reference is not finite on some paths of the audit itself, so that such paths say nothing against a
    scenario.
    """

    file: AuditFile
    schemes: Mapping[int, Scheme]
    alpha: float
    broken: Mapping[int, Collection[str]]
    names: frozenset[str]
    dropping: bool


@dataclass(slots=True, kw_only=True)
class Tried:
    """One scenario. `problem` is what the reference met in it, by which it is refused."""

    scenario: Scenario
    tallies: dict[int, LevelTally] = field(default_factory=dict)
    judged: dict[int, LevelJudgement] = field(default_factory=dict)
    figures: dict[int, SchemeFigures] = field(default_factory=dict)
    problem: str | None = None

    def pending(self, trials: Trials) -> list[int]:
        """Return the levels that need more paths: those that are undecided, unless the kernel does not run here."""
        if self.problem is not None:
            return []
        return [level for level in trials.schemes if self.outcome_on(level) == "undecided"]

    def add(self, tallies: Sequence[LevelTally], problem: str | None, trials: Trials) -> None:
        """Add the blocks of a look, and judge their levels."""
        self.problem = problem
        for tally in tallies:
            done = self.tallies.get(tally.level)
            if set(tally.quantities) != trials.names:
                here, there = ", ".join(tally.quantities), ", ".join(sorted(trials.names))
                self.problem = f"level {tally.level}: the kernel returned {here} where the audit has {there}"
                return
            self.tallies[tally.level] = tally if done is None else done + tally
        for level in sorted({tally.level for tally in tallies}):
            self._judge(level, trials)

    def done(self, level: int) -> tuple[int, int]:
        """Return how many blocks and paths of a level there are."""
        tally = self.tallies.get(level)
        return (0, 0) if tally is None else (tally.blocks, tally.paths)

    def outcome_on(self, level: int) -> Outcome:
        """Return how a level does so far."""
        return self.on(level).outcome if self.figures or self.problem is not None else "undecided"

    def on(self, level: int) -> SchemeFigures:
        """Return how the scheme of a level does; refused where the kernel did not come so far."""
        return self.figures.get(level, _OUTSIDE)

    def verdict(self, levels: Sequence[int]) -> tuple[Outcome, int | None]:
        """Return the worst outcome over levels, and the first one that has it unless it passes."""
        worst: Outcome = "passes"
        for level in levels:
            worst = worse(worst, self.on(level).outcome)
        if self.problem is not None:
            worst = "refused"
        deciding = next((level for level in levels if self.on(level).outcome == worst), None)
        return worst, None if worst == "passes" else deciding

    def _judge(self, level: int, trials: Trials) -> None:
        tally = self.tallies[level]
        judged = self.judged[level] = judge_level(tally, trials.file, trials.alpha, trials.broken[level])
        self.figures[level] = judge_scheme(tally, judged, trials.file, trials.alpha, trials.schemes[level])
        if tally.dropped and not trials.dropping:
            self.figures[level] = _OUTSIDE
            self.problem = self.problem or (
                f"level {level}: the reference is not finite on {tally.dropped} of {tally.paths} paths"
            )
