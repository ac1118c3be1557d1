"""The widening search: few lines, kept in a wider format, that push the finest paying level of a narrow one further.

Code with such lines is an arm like any other: it has errors, and it costs what its operations cost, the share of the
widened ones at the wide format's. Operands that a narrow line takes of a wide one are converted there, and constants
follow their line. Sets are tried on one level first, all of the few parts that save most and the first ones of all; of
those that are best at their cost each level of the ladder is judged.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, field

from narrowgauge.arithmetic.formats import Format
from narrowgauge.conduct.laddered import Changed, edge_of, on_ladder, pays_fields, tallies_of
from narrowgauge.dispatch.byline import Item, Widths
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.linearms import LineRunner
from narrowgauge.record.lines import WideningEntry

__all__ = ["Candidates", "further", "searched"]

_TOGETHER = 4  # of the parts that save most every set is tried
_LONGEST = 8  # parts of the largest set
_VERIFIED = 5  # sets that are judged on all levels
_PLAIN: tuple[int, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Candidates:
    """What may be kept in the `wide` format: parts by their places, the one that saves most first.

    `operations` are their shares of all operations; `broken` has, by level, the formats of which no split is
    admissible.
    """

    form: Format
    wide: Format
    items: Mapping[int, Item]
    operations: Mapping[int, float]
    broken: Mapping[int, Collection[str]] = field(default_factory=dict)

    def share(self, parts: tuple[int, ...]) -> float:
        """Return the share of the operations that is charged at the wide cost."""
        return sum((self.operations[place] for place in parts), 0.0)

    def changed(self, file: AuditFile, parts: tuple[int, ...]) -> Changed:
        """Return the narrow format with these parts wide, at its cost."""
        wide, narrow = (file.costs.step(form.name) for form in (self.wide, self.form))
        named = {self.items[place]: self.wide for place in parts}
        return Changed(
            form=self.form.name,
            run=Widths(rest=self.form, named=named, converts=True),
            step_cost=narrow + self.share(parts) * (wide - narrow),
        )

    def sets(self) -> list[tuple[int, ...]]:
        """Return the sets to try, the empty one first."""
        places = list(self.items)
        together = places[:_TOGETHER]
        small = [s for size in range(len(together) + 1) for s in itertools.combinations(together, size)]
        longer = [tuple(places[:size]) for size in range(_TOGETHER + 1, min(len(places), _LONGEST) + 1)]
        return [*small, *longer]


def searched(
    file: AuditFile, runner: LineRunner, candidates: Candidates, level: int, paths: int
) -> tuple[WideningEntry, list[WideningEntry]]:
    """Return the format as it is, and the sets that pay further than it, from cheapest to best.

    The first choice is made on `paths` paths of one `level`, the verdicts rest on others: the best of many sets looks
    better than it is where it was found. Raises what running the kernel raises.
    """
    chosen = _promising(file, runner, candidates, level, paths)
    changes = {str(parts): candidates.changed(file, parts) for parts in chosen}
    confidence = 1 - (1 - file.sampling.confidence) / len(chosen)
    skip = math.ceil(paths / runner.paths(level))
    judged = on_ladder(file, runner, changes, confidence, broken=candidates.broken, skip=skip)
    plain, *entries = [
        WideningEntry(
            parts=list(parts),
            operations=candidates.share(parts),
            step_cost=changes[str(parts)].step_cost,
            **pays_fields(judged[str(parts)], candidates.form.name),
        )
        for parts in chosen
    ]
    return plain, further(plain, entries)


def further(plain: WideningEntry, entries: Sequence[WideningEntry]) -> list[WideningEntry]:
    """Return the entries that pay further than the plain format and every cheaper one, from cheapest to best."""
    best, found = _reach(plain), []
    for entry in sorted(entries, key=lambda one: (one.operations, -_reach(one))):
        if _reach(entry) > best:
            best = _reach(entry)
            found.append(entry)
    return found


def _reach(entry: WideningEntry) -> int:
    return -1 if entry.level is None else entry.level


def _promising(
    file: AuditFile, runner: LineRunner, candidates: Candidates, level: int, paths: int
) -> list[tuple[int, ...]]:
    """Return the empty set, and those that have a larger edge on a level than every cheaper one."""
    sets = candidates.sets()
    changes = {str(parts): candidates.changed(file, parts) for parts in sets}
    tallies = tallies_of(runner, changes, level, done=0, paths=paths)
    runner.forget(list(changes))
    alpha, form = 1 - file.sampling.confidence, candidates.form.name
    judged = {s: changes[str(s)].judged(file, tallies[str(s)], alpha, candidates.broken) for s in sets}
    edges = {s: edge_of(judged[s], form) for s in sets}
    best, found = edges[_PLAIN], []
    for parts in sorted(sets[1:], key=lambda one: (candidates.share(one), -edges[one])):
        if edges[parts] > best:
            best = edges[parts]
            found.append(parts)
    return [_PLAIN, *found[-_VERIFIED:]]
