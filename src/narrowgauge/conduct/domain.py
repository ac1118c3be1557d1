"""The verdict, tried elsewhere: scenarios of a box of parameters, each a small audit of the schemes of the verdict.

A scenario is judged as the audit is, at fewer paths; levels that stay undecided are looked at again with twice as many
until the budget ends. The scenarios share the engine of the audit and its ledger.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

import msgspec

from narrowgauge.conduct.branches import broken_splits
from narrowgauge.conduct.domainentries import domain_entry
from narrowgauge.conduct.run import Outcome, Watcher
from narrowgauge.conduct.scenarios import Scenario, block_of, corners_of, looks_of, scenarios_of, steps_of
from narrowgauge.conduct.stepcosts import with_costs
from narrowgauge.conduct.tried import Trials, Tried
from narrowgauge.judge.domain import SchemeFigures, tried_scheme
from narrowgauge.judge.gain import Scheme
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.domaintable import DomainTable
from narrowgauge.measure.engines import Engine, Errand
from narrowgauge.measure.scenarios import Look, Wanted, run_look
from narrowgauge.measure.store import Ledger
from narrowgauge.measure.task import pinned
from narrowgauge.record.domain import DomainEntry, near_enough

__all__ = ["Corners", "Explored", "explore"]

_MOST_CORNERS = 8  # of a box that is tried at its corners alone


@dataclass(frozen=True, slots=True, kw_only=True)
class Explored:
    """What the scenarios showed, and the fingerprints of the processes that ran them."""

    entry: DomainEntry
    fingerprints: frozenset[str]


@dataclass(frozen=True, slots=True, kw_only=True)
class Corners:
    """What is tried in place of the scenarios of [domain]: given schemes, by level, at the corners of a box alone.

    A corner with an edge whose lower bound is `least_edge` or more, of which nothing else is open, needs no more paths.
    `quantities` is how many of them are judged.
    """

    domain: DomainTable
    schemes: Mapping[int, Scheme]
    least_edge: float
    quantities: int

    def asked(self, file: AuditFile) -> tuple[AuditFile, tuple[Scenario, ...]]:
        """Return the audit file with this box, and its corners; with the quantities they share its confidence."""
        boxed = msgspec.structs.replace(file, domain=self.domain)
        points = corners_of(boxed, _MOST_CORNERS)
        alpha = (1 - file.sampling.confidence) / (len(points) * self.quantities)
        sampling = msgspec.structs.replace(file.sampling, confidence=1 - alpha)
        scenarios = (Scenario(number=number, values=one, drawn=False) for number, one in enumerate(points, start=1))
        return msgspec.structs.replace(boxed, sampling=sampling), tuple(scenarios)


def explore(
    file: AuditFile,
    outcome: Outcome,
    *,
    engine: Engine,
    ledger: Ledger | None = None,
    watcher: Watcher | None = None,
    corners: Corners | None = None,
) -> Explored | None:
    """Try the schemes of an audit's verdict in the scenarios of [domain], or what `corners` say; None without either.

    What the `ledger` has is not run again, and what is finished is put there. Raises what a worker that fails raises; a
    kernel that raises is a result.
    """
    if corners is not None:
        file, scenarios = corners.asked(file)
    elif file.domain is not None:
        scenarios = scenarios_of(file)
    else:
        return None
    with pinned():  # the same sums in the same order, whatever machine
        file = with_costs(file, outcome.costs)
        schemes = _schemes(file, outcome) if corners is None else corners.schemes
        explorer = _Explorer(file, outcome, engine, ledger, watcher, scenarios=scenarios, schemes=schemes)
        return explorer.explored(math.inf if corners is None else corners.least_edge)


def _schemes(file: AuditFile, outcome: Outcome) -> dict[int, Scheme]:
    """Return the scheme of each level that the verdict recommends."""
    return {
        level: tried_scheme(tally, outcome.judgements[level], file, outcome.alpha)
        for level, tally in sorted(outcome.tallies.items())
    }


def _near(figures: SchemeFigures, least_edge: float) -> bool:
    """Return whether nothing but the edge of a scheme is open, and its lower bound is so much at least."""
    return near_enough(figures.reason, None if figures.edge is None else figures.edge.low, least_edge)


class _Explorer:
    def __init__(
        self,
        file: AuditFile,
        outcome: Outcome,
        engine: Engine,
        ledger: Ledger | None,
        watcher: Watcher | None,
        *,
        scenarios: Sequence[Scenario],
        schemes: Mapping[int, Scheme],
    ) -> None:
        assert file.domain is not None  # `explore` has seen to it
        self._file, self._outcome = file, outcome
        self._engine, self._ledger, self._watcher = engine, ledger, watcher
        self._looks = looks_of(file.domain)
        self._trials = Trials(
            file=file,
            schemes=schemes,
            alpha=(1 - file.sampling.confidence) / len(self._looks),
            broken={level: broken_splits(outcome.branches, level) for level in outcome.tallies},
            names=frozenset(outcome.tallies[0].quantities),
            dropping=any(tally.dropped for tally in outcome.tallies.values()),
        )
        self._tried = {scenario.number: Tried(scenario=scenario) for scenario in scenarios}
        self._fingerprints: set[str] = set()

    def explored(self, least_edge: float) -> Explored:
        """Look at all scenarios until each is decided, but for an edge of so much, or the budget ends."""
        for look, paths in enumerate(self._looks):
            pending = {
                number: levels
                for number, tried in self._tried.items()
                if (
                    levels := [level for level in tried.pending(self._trials) if not _near(tried.on(level), least_edge)]
                )
            }
            if not pending:
                break
            self._announce(look, paths, pending)
            for found in self._found(look, paths, pending):
                self._add(found)
        entry = domain_entry(self._trials, list(self._tried.values()), self._outcome)
        return Explored(entry=entry, fingerprints=frozenset(self._fingerprints))

    def _found(self, look: int, paths: int, pending: Mapping[int, Sequence[int]]) -> Iterator[Look]:
        """Yield the looks that the ledger has, then those that are run now, in whatever order."""
        errands = []
        for number, levels in pending.items():
            known = None if self._ledger is None else self._ledger.look((number, look))
            if known is not None:
                yield known
                continue
            tried = self._tried[number]
            wanted = Wanted(
                paths=paths,
                block=block_of(self._file, self._looks, look),
                levels=tuple((level, *tried.done(level)) for level in levels),
            )
            named = dict(zip(self._sides, tried.scenario.values, strict=True))
            run = functools.partial(run_look, scenario=number, look=look, parameters=named, wanted=wanted)
            shown = ", ".join(f"{name} = {value:g}" for name, value in named.items())
            errands.append(Errand(name=f"scenario {number} ({shown}), look {look + 1}", level=None, run=run))
        for found in self._engine.errands(errands) if errands else ():
            if self._ledger is not None:
                self._ledger.put_look(found)
            yield found

    @property
    def _sides(self) -> Sequence[str]:
        assert self._file.domain is not None  # as above
        return list(self._file.domain.parameters)

    def _add(self, found: Look) -> None:
        tallies, problem = found.opened()
        self._tried[found.scenario].add(tallies, problem, self._trials)
        self._fingerprints.add(found.fingerprint)
        if self._watcher is not None:
            self._watcher.advanced(sum(tally.paths * steps_of(self._file, tally.level) for tally in tallies))

    def _announce(self, look: int, paths: int, pending: Mapping[int, Sequence[int]]) -> None:
        if self._watcher is not None:
            steps = sum(
                (paths - self._tried[number].done(level)[1]) * steps_of(self._file, level)
                for number, levels in pending.items()
                for level in levels
            )
            self._watcher.scenarios(look + 1, len(self._looks), len(pending), steps)
