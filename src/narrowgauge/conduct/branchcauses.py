"""Why two runs of branches differ: the first operation in which they part, and whether a compiler's liberty explains it."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.conduct.firstdifference import Located, Side, first_difference
from narrowgauge.conduct.tracing import MOST_PATHS, Trace
from narrowgauge.conduct.tracingown import run_traced
from narrowgauge.dispatch.looser import Manner
from narrowgauge.dispatch.setting import Place
from narrowgauge.errors import NarrowgaugeError
from narrowgauge.judge.branches import Doubles, differs
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.contract import quantities_of
from narrowgauge.kernel.raised import kept_apart
from narrowgauge.measure.branchruns import Branch, BranchSource, Given, Order, laid
from narrowgauge.record.branches import PointEntry, WhereEntry

__all__ = ["MOST_STEPS", "Case", "Causes", "Run", "explanation", "follow", "located", "where_entry"]

MOST_STEPS = 256  # of a level on which causes are looked for: all results of a run are kept
_ENOUGH = 64  # paths that are followed, since rows of fewer are alike by chance


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
    """Paths of a block whose results differ, with their draws; `level` is that of the path, fine or coarse.

    `draws` has, after the paths that differ, some that do not where they are few; `low` and `correction` are the results
    of the quantity on those that differ.
    """

    level: int
    draws: Given
    low: Doubles
    correction: Doubles

    @classmethod
    def of(cls, level: int, draws: Given, low: Doubles, correction: Doubles) -> Case:
        """Return the case of a block, whose results differ on some path."""
        differ = differs(low, correction)
        chosen = np.flatnonzero(differ)[:MOST_PATHS]
        further = np.flatnonzero(~differ)[: max(0, _ENOUGH - chosen.size)]
        return cls(
            level=level,
            draws=draws.of(np.concatenate([chosen, further])),
            low=low[chosen],
            correction=correction[chosen],
        )


@dataclass(slots=True)
class Causes:
    """What explained a difference before, which is tried first."""

    known: tuple[Manner, int] | None = None


def follow(
    run: Run, draws: Given, quantity: str, trace: Trace, *, order: Order = "C", over_paths: bool = True
) -> bool:
    """Run a function once more and keep all that it computes in a trace; whether that could be done.

    It cannot for a library, a command, or a kernel that is run path by path.
    """
    source = run.source
    if not source.python:
        return False
    with kept_apart(run.level, run.arm) as kept:
        if source.rounds == "itself":
            branch = Branch(source, run.arm, run.wide)
            branch.wide_draws(draws)
            file = source.file
            given = laid(branch.typed(draws)[0], order)
            result = run_traced(
                branch.copy, given, file.ladder.step_size(run.level), trace=trace, **file.keywords()
            )
            trace.gave(np.asarray(quantities_of(result)[quantity]))
            return True
        branch = Branch(source, run.arm, run.wide, rows=run.rows, observer=trace)
        if branch.one_path and not run.rows:
            return False
        trace.draws(draws.narrow)
        found = branch.lying(draws, run.level, order, over_paths=over_paths)
        trace.gave(found[quantity])
    return kept.problem is None


def located(low: Run, correction: Run, draws: Given, quantity: str) -> Located | None:
    """Return where two functions part on the same draws, None where nothing can be found or followed."""
    paths = draws.narrow.shape[-1]
    traces = Trace(paths), Trace(paths)
    try:
        done = [follow(run, draws, quantity, trace) for run, trace in zip((low, correction), traces, strict=True)]
    except NarrowgaugeError:  # a trace asks more of a function than a run; its results are there without
        return None
    return first_difference(*traces, form=FORMATS[low.arm]) if all(done) else None


def explanation(
    low: Run, correction: Run, case: Case, quantity: str, causes: Causes, found: Located | None
) -> str | None:
    """Return in words what makes every differing path of one function that of the other; None where nothing does.

    Each function with a source in Python is emulated anew with products fused into its sums, or with wider intermediates
    within an expression, everywhere or where the two were `found` to part, and held against the results of the other
    one, all bits.
    """
    count = case.low.size
    draws = Given(case.draws.narrow[..., :count], None)
    sides = ((low, case.correction), (correction, case.low))
    sides_found = (None, None) if found is None else (found.low, found.correction)
    places = [None if one is None else one.place for one in sides_found]
    for manner, side in _manners(low.arm, causes, places):
        run, wanted = sides[side]
        if run.source.python and _gives(run, draws, quantity, manner, wanted):
            causes.known = manner, side
            return "fused multiply-add" if manner.kind == "fused" else f"wider intermediates, in {manner.wide}"
    return None


def _manners(arm: str, causes: Causes, places: Sequence[Place | None]) -> Iterator[tuple[Manner, int]]:
    """Yield what is tried on which side, 0 or 1: what is known, everywhere, then on the line of `places` alone."""
    manners = [Manner("wider", wide="float32")] if FORMATS[arm].precision < FORMATS["float32"].precision else []
    manners.append(Manner("wider", wide="float64"))
    manners += [Manner("fused", first=first, across=across) for across in (False, True) for first in (True, False)]
    tried = [] if causes.known is None else [causes.known]
    both = [(manner, side) for manner in manners for side in (0, 1)]
    alone = [(replace(manner, only=place), side) for manner, side in both if (place := places[side]) is not None]
    yield from dict.fromkeys([*tried, *both, *alone])


def _gives(run: Run, draws: Given, quantity: str, manner: Manner, wanted: Doubles) -> bool:
    """Whether a function emulated in some manner gives these results."""
    found: npt.NDArray[np.float64] | None = None
    try:
        with kept_apart(run.level, run.arm):
            branch = Branch(run.source.emulated(), run.arm, rows=run.rows, manner=manner)
            found = branch.on(draws, run.level).get(quantity)
    except NarrowgaugeError:  # what cannot be emulated explains nothing
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
