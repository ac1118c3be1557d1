"""Why two branches differ: the first operation in which they part, and whether a compiler's liberty explains it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.conduct.branchemulation import Case, Emulation, Run
from narrowgauge.conduct.firstdifference import Located, Side, first_difference
from narrowgauge.conduct.tracing import Trace
from narrowgauge.conduct.tracingcauses import Cause, explains
from narrowgauge.conduct.tracingown import run_traced
from narrowgauge.dispatch.looser import Manner
from narrowgauge.dispatch.setting import Place
from narrowgauge.errors import NarrowgaugeError
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.contract import quantities_of
from narrowgauge.measure.branchruns import Branch, BranchError, Given, Order, its_own, laid
from narrowgauge.record.branches import PointEntry, WhereEntry

__all__ = ["MOST_STEPS", "Causes", "follow", "located", "narrow_down", "where_entry"]

MOST_STEPS = 256  # of a level on which causes are looked for: all results of a run are kept
_MOST_LINES = 5  # with two products in a sum: 32 choices


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
            low, wide = branch.typed(draws)
            if wide is not None:
                trace.draws(wide)
            given = laid(low, order)
            result = run_traced(branch.copy, given, file.ladder.step_size(run.level), trace=trace, **file.keywords())
            trace.gave(np.asarray(quantities_of(result)[quantity]))
            return True
        branch = Branch(source, run.arm, run.wide, rows=run.rows, observer=trace)
        if branch.one_path and not run.rows:
            return False
        trace.draws(draws.narrow)
        found = branch.lying(draws, run.level, order, over_paths=over_paths)
        trace.gave(found[quantity])
        return True
    raise AssertionError("what it raises is raised")


def located(low: Run, correction: Run, draws: Given, quantity: str) -> tuple[Located | None, Cause | None]:
    """Return where two functions part on the same draws, and what explains that operation on all of them.

    None where nothing can be found or followed.
    """
    paths = draws.narrow.shape[-1]
    first, second = Trace(paths), Trace(paths)
    try:
        done = follow(low, draws, quantity, first) and follow(correction, draws, quantity, second)
    except (BranchError, NarrowgaugeError):  # a trace asks more of a function than a run
        return None, None
    form = FORMATS[low.arm]
    found = first_difference(first, second, form=form) if done else None
    return found, None if found is None else explains(found, first, second, form)


def narrow_down(causes: Causes, runs: tuple[Run, Run], case: Case, quantity: str, found: Located | None) -> None:
    """Leave of the causes what makes every path of one function that of the other in this case, too.

    Each function with a source in Python is emulated anew with products fused into its sums, or with wider
    intermediates within an expression, everywhere or where the two were `found` to part, and held against the results
    of the other one, all bits, also on paths that agree as it is. A function whose own bits are not those of its
    emulation, since it casts to formats of its choice, is not asked.
    """
    sides = [
        Emulation(runs[0], case, quantity, own=case.low, wanted=case.correction),
        Emulation(runs[1], case, quantity, own=case.correction, wanted=case.low),
    ]
    sides_found = (None, None) if found is None else (found.low, found.correction)
    places = [None if one is None else one.place for one in sides_found]
    if causes.left is None:
        causes.left = _manners(runs[0].arm, places, [line for side in sides for line in side.lines_of_two()])
    causes.left = [(manner, side) for manner, side in causes.left if sides[side].gives(manner)]


def _manners(arm: str, places: Sequence[Place | None], of_two: Sequence[Place | None]) -> list[tuple[Manner, int]]:
    """Return what is tried on which side, 0 or 1: everywhere, then on the line of `places` alone.

    Of two products either may be fused, on each of the lines `of_two` for itself.
    """
    manners = [Manner("wider", wide="float32")] if FORMATS[arm].precision < FORMATS["float32"].precision else []
    manners.append(Manner("wider", wide="float64"))
    choices = [
        frozenset(some) for count in range(len(of_two) + 1) for some in combinations(of_two[:_MOST_LINES], count)
    ]
    # Across lines first: where nothing was fused across lines, that run answers for the other one.
    manners += [Manner("fused", last=last, across=across) for across in (True, False) for last in choices]
    both = [(manner, side) for manner in manners for side in (0, 1)]
    alone = [(replace(manner, only=place), side) for manner, side in both if (place := places[side]) is not None]
    return [*both, *alone]


def where_entry(file: AuditFile, found: Located | None, cause: Cause | None = None) -> WhereEntry | None:
    """Return a place where two runs part, and what explains it there, as an entry of the record."""
    if found is None:
        return None
    return WhereEntry(
        low=_point(file, found.low),
        correction=_point(file, found.correction),
        ulps=None if found.ulps is None or not np.isfinite(found.ulps) else float(found.ulps),
        incomplete=found.incomplete,
        cause=cause,
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
