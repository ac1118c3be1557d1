"""Why two branches differ: the first operation in which they part, and whether a compiler's liberty explains it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.conduct.firstdifference import Located, Side, first_difference
from narrowgauge.conduct.tracing import MOST_PATHS, Trace
from narrowgauge.conduct.tracingown import run_traced
from narrowgauge.dispatch.looser import LooserSetting, Manner
from narrowgauge.dispatch.setting import Place
from narrowgauge.errors import NarrowgaugeError
from narrowgauge.judge.branches import Doubles, differs
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.contract import quantities_of
from narrowgauge.measure.branchruns import Branch, BranchError, BranchSource, Given, Order, its_own, laid
from narrowgauge.record.branches import PointEntry, WhereEntry

__all__ = ["MOST_STEPS", "Case", "Causes", "Run", "follow", "located", "narrow_down", "where_entry"]

MOST_STEPS = 256  # of a level on which causes are looked for: all results of a run are kept
_MOST_DIFFERING = 192  # of the paths that are followed; the rest agree
_MOST_LINES = 5  # with two products in a sum: 32 choices
_MOST_OF_EACH = 1024  # paths that differ, and that agree, which an explanation has to give


@dataclass(frozen=True, slots=True, kw_only=True)
class Run:
    """A function of a split in one format on one level; `wide` is the other format, `rows` as a kernel of one path."""

    source: BranchSource
    arm: str
    wide: str | None
    level: int
    rows: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """Paths of a block, of which the first `differing` have other results; `level` is that of the path, fine or coarse.

    Some that agree are among them: what explains the others must leave these alone.
    """

    level: int
    draws: Given
    low: Doubles
    correction: Doubles
    differing: int

    @classmethod
    def of(cls, level: int, draws: Given, low: Doubles, correction: Doubles) -> Case:
        """Return the case of a block, whose results differ on some path."""
        differ = differs(low, correction)
        first = np.flatnonzero(differ)[:_MOST_OF_EACH]
        chosen = np.concatenate([first, np.flatnonzero(~differ)[:_MOST_OF_EACH]])
        return cls(
            level=level, draws=draws.of(chosen), low=low[chosen], correction=correction[chosen], differing=first.size
        )

    def followed(self) -> Given:
        """Return the draws of the paths of which all results are kept, to find where the branches part."""
        first = min(self.differing, _MOST_DIFFERING)
        further = range(self.differing, min(self.low.size, self.differing + MOST_PATHS - first))
        return self.draws.of([*range(first), *further])


@dataclass(slots=True)
class Causes:
    """What explains every difference of two functions up to now: manners, each with the side, 0 or 1, that has it.

    None before the first one. What explains some differences and not others does so by chance.
    """

    left: list[tuple[Manner, int]] | None = None

    def __str__(self) -> str:
        """Return the first of them in words; empty where nothing explains all."""
        if not self.left:
            return ""
        manner, _ = self.left[0]
        return "fused multiply-add" if manner.kind == "fused" else f"wider intermediates, in {manner.wide}"


def follow(run: Run, draws: Given, quantity: str, trace: Trace, *, order: Order = "C", over_paths: bool = True) -> bool:
    """Run a function once more and keep all that it computes in a trace; whether that could be done.

    It cannot for a library, a command, or a kernel that is run path by path.
    """
    source = run.source
    if not source.python:
        return False
    with its_own(run.level, run.arm):
        if source.rounds == "itself":
            branch = Branch(source, run.arm, run.wide)
            branch.wide_draws(draws)
            file = source.file
            given = laid(branch.typed(draws)[0], order)
            result = run_traced(branch.copy, given, file.ladder.step_size(run.level), trace=trace, **file.keywords())
            trace.gave(np.asarray(quantities_of(result)[quantity]))
            if source.part is not None:
                _keep_what_leads(trace)
            return True
        branch = Branch(source, run.arm, run.wide, rows=run.rows, observer=trace)
        if branch.one_path and not run.rows:
            return False
        trace.draws(draws.narrow)
        found = branch.lying(draws, run.level, order, over_paths=over_paths)
        trace.gave(found[quantity])
        if source.part is not None:
            _keep_what_leads(trace)
        return True
    raise AssertionError("what it raises is raised")


def _keep_what_leads(trace: Trace) -> None:
    """Leave out of a trace what does not lead to the quantity that was told: a high part has the rows of a low one.

    Everything stays where some row came about in a way that does not show.
    """
    wanted = set(trace.returned)
    pending, numbers = list(wanted), set[int]()
    while pending:
        key = pending.pop()
        made = trace.made.get(key, ())
        if not made and key not in trace.draws_keys | trace.constants and len(trace.rows[key]) > 1:
            return
        for number in set(made) - numbers:
            numbers.add(number)
            keys = {row for one in trace.operations[number].operands for reading in one.readings for row in reading}
            pending += keys - wanted
            wanted |= keys
    trace.operations = [one for number, one in enumerate(trace.operations) if number in numbers]
    wanted |= {row for one in trace.operations for kept in one.results for reading in kept.readings for row in reading}
    trace.rows = {key: row for key, row in trace.rows.items() if key in wanted | trace.draws_keys | trace.constants}
    trace.made = {}
    for number, one in enumerate(trace.operations):
        for key in {row for kept in one.results for reading in kept.readings for row in reading}:
            trace.made.setdefault(key, []).append(number)


def located(low: Run, correction: Run, draws: Given, quantity: str) -> Located | None:
    """Return where two functions part on the same draws, None where nothing can be found or followed."""
    paths = draws.narrow.shape[-1]
    traces = Trace(paths), Trace(paths)
    try:
        done = [follow(run, draws, quantity, trace) for run, trace in zip((low, correction), traces, strict=True)]
    except (BranchError, NarrowgaugeError):  # a trace asks more of a function than a run
        return None
    return first_difference(*traces, form=FORMATS[low.arm]) if all(done) else None


def narrow_down(causes: Causes, runs: tuple[Run, Run], case: Case, quantity: str, found: Located | None) -> None:
    """Leave of the causes what makes every path of one function that of the other in this case, too.

    Each function with a source in Python is emulated anew with products fused into its sums, or with wider
    intermediates within an expression, everywhere or where the two were `found` to part, and held against the results
    of the other one, all bits, also on paths that agree as it is. A function whose own bits are not those of its
    emulation, since it casts to formats of its choice, is not asked.
    """
    (low, correction), draws = runs, Given(case.draws.narrow, None)
    sides = ((low, case.low, case.correction), (correction, case.correction, case.low))
    usual = [run.source.python and _gives(run, draws, quantity, None, own) for run, own, _ in sides]
    sides_found = (None, None) if found is None else (found.low, found.correction)
    places = [None if one is None else one.place for one in sides_found]
    if causes.left is None:
        further = [one for run, own in zip((low, correction), usual, strict=True) if own for one in _of_two(run, draws)]
        causes.left = _manners(low.arm, places, further)
    causes.left = [
        (manner, side)
        for manner, side in causes.left
        if usual[side] and _gives(sides[side][0], draws, quantity, manner, sides[side][2])
    ]


def _of_two(run: Run, draws: Given) -> list[Place | None]:
    """Return the lines of a function that add two products, of which a compiler may fuse either."""
    try:
        branch = Branch(run.source.emulated(), run.arm, rows=run.rows, manner=Manner("fused", across=True))
        branch.on(draws, run.level)
    except (BranchError, NarrowgaugeError):  # what cannot be emulated explains nothing
        return []
    setting = branch.copy.setting
    return list(setting.of_two) if isinstance(setting, LooserSetting) else []


def _manners(arm: str, places: Sequence[Place | None], of_two: Sequence[Place | None]) -> list[tuple[Manner, int]]:
    """Return what is tried on which side, 0 or 1: everywhere, then on the line of `places` alone.

    Of two products either may be fused, on each of the lines `of_two` for itself.
    """
    manners = [Manner("wider", wide="float32")] if FORMATS[arm].precision < FORMATS["float32"].precision else []
    manners.append(Manner("wider", wide="float64"))
    choices = [
        frozenset(some) for count in range(len(of_two) + 1) for some in combinations(of_two[:_MOST_LINES], count)
    ]
    manners += [Manner("fused", last=last, across=across) for across in (False, True) for last in choices]
    both = [(manner, side) for manner in manners for side in (0, 1)]
    alone = [(replace(manner, only=place), side) for manner, side in both if (place := places[side]) is not None]
    return [*both, *alone]


def _gives(run: Run, draws: Given, quantity: str, manner: Manner | None, wanted: Doubles) -> bool:
    """Whether a function emulated in some manner, or as usual, gives these results."""
    try:
        branch = Branch(run.source.emulated(), run.arm, rows=run.rows, manner=manner)
        found = branch.on(draws, run.level).get(quantity)
    except (BranchError, NarrowgaugeError):  # what cannot be emulated explains nothing
        return False
    return found is not None and not differs(found, wanted).any()


def where_entry(file: AuditFile, found: Located | None) -> WhereEntry | None:
    """Return a place where two runs part as an entry of the record."""
    if found is None:
        return None
    return WhereEntry(
        low=_point(file, found.low),
        correction=_point(file, found.correction),
        ulps=None if found.ulps is None or not np.isfinite(found.ulps) else float(found.ulps),
        incomplete=found.incomplete,
    )


def _point(file: AuditFile, side: Side | None) -> PointEntry | None:
    if side is None:
        return None
    place = side.place
    return PointEntry(
        kind=side.kind,
        file=None if place is None else file.shown(place.file),
        line=None if place is None else place.line,
        operation=side.operation,
        text=str(side),
    )
