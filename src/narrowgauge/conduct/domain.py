"""The verdict, tried elsewhere: scenarios of a box of parameters, each a small audit of the schemes of the verdict.

A scenario is judged as the audit is, at fewer paths; levels that stay undecided are looked at again with twice as many
until the budget ends. The scenarios share the engine of the audit and its ledger.
"""

from __future__ import annotations

import functools
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

from narrowgauge.conduct.branches import broken_splits
from narrowgauge.conduct.domainentries import domain_entry
from narrowgauge.conduct.run import Outcome, Watcher
from narrowgauge.conduct.scenarios import block_of, looks_of, scenarios_of, steps_of
from narrowgauge.conduct.stepcosts import with_costs
from narrowgauge.conduct.tried import Trials, Tried
from narrowgauge.judge.domain import tried_scheme
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.engines import Engine, Errand
from narrowgauge.measure.scenarios import Look, Wanted, run_look
from narrowgauge.measure.store import Ledger
from narrowgauge.measure.task import pinned
from narrowgauge.record.domain import DomainEntry

__all__ = ["Explored", "explore"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Explored:
    """What the scenarios showed, and the fingerprints of the processes that ran them."""

    entry: DomainEntry
    fingerprints: frozenset[str]


def explore(
    file: AuditFile, outcome: Outcome, *, engine: Engine, ledger: Ledger | None = None, watcher: Watcher | None = None
) -> Explored | None:
    """Try the schemes of an audit's verdict in the scenarios of [domain]; None without that table.

    What the `ledger` has is not run again, and what is finished is put there. Raises what a worker that fails raises; a
    kernel that raises is a result.
    """
    if file.domain is None:
        return None
    with pinned():  # the same sums in the same order, whatever machine
        return _Explorer(with_costs(file, outcome.costs), outcome, engine, ledger, watcher).explored()


class _Explorer:
    def __init__(
        self, file: AuditFile, outcome: Outcome, engine: Engine, ledger: Ledger | None, watcher: Watcher | None
    ) -> None:
        assert file.domain is not None  # `explore` has seen to it
        self._file, self._outcome = file, outcome
        self._engine, self._ledger, self._watcher = engine, ledger, watcher
        self._looks = looks_of(file.domain)
        self._trials = Trials(
            file=file,
            schemes={
                level: tried_scheme(tally, outcome.judgements[level], file, outcome.alpha)
                for level, tally in sorted(outcome.tallies.items())
            },
            alpha=(1 - file.sampling.confidence) / len(self._looks),
            broken={level: broken_splits(outcome.branches, level) for level in outcome.tallies},
            names=frozenset(outcome.tallies[0].quantities),
            dropping=any(tally.dropped for tally in outcome.tallies.values()),
        )
        self._tried = {scenario.number: Tried(scenario=scenario) for scenario in scenarios_of(file)}
        self._fingerprints: set[str] = set()

    def explored(self) -> Explored:
        """Look at all scenarios until each is decided or the budget ends."""
        for look, paths in enumerate(self._looks):
            pending = {
                number: levels for number, tried in self._tried.items() if (levels := tried.pending(self._trials))
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
