"""Whether the two branches of a split cancel to the bit, before anything is measured.

The low branch run alone must give the numbers that the low part of the correction gives on the same draws: that is the
cheap and sufficient condition for both to have one mean. Where [branches] names two functions they are compared on
every level; and each function is held against itself with other paths, in other layouts of memory, and in two threads.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Sequence
from functools import partial

import msgspec
import numpy as np

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.conduct.branchcauses import MOST_STEPS, Causes, located, narrow_down, where_entry
from narrowgauge.conduct.branchcomparison import Comparer, Mismatch
from narrowgauge.conduct.branchemulation import Run
from narrowgauge.conduct.branchvariations import REPEATS, Found, Varied, vary
from narrowgauge.conduct.entries import finite, interval_fields
from narrowgauge.conduct.trial import NOT_IDENTICAL, same_bits
from narrowgauge.dispatch.setting import Place
from narrowgauge.draws.coarsen import Draws
from narrowgauge.draws.streams import GRAIN, Purpose
from narrowgauge.draws.tape import Tape
from narrowgauge.errors import AuditFileError, DispatchError, said
from narrowgauge.judge.asked import rmse_of
from narrowgauge.judge.branches import bias, differs, split_formats, ulps, wide_formats, within
from narrowgauge.judge.intervals import Interval
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.branchlibrary import PairLibrary
from narrowgauge.kernel.contract import check_parameters
from narrowgauge.kernel.loading import KernelSource
from narrowgauge.kernel.raised import with_place
from narrowgauge.measure.arms import PLAIN, REFERENCE
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.branchruns import Branch, BranchError, BranchSource, branch_sources, given
from narrowgauge.measure.calls import Caller
from narrowgauge.record.branches import BranchesEntry, CastEntry, MismatchEntry, TriedEntry, WhereEntry

__all__ = ["branches_entry", "broken_splits"]

_STEPS = 8  # of the finer level on which conditions are tried: enough to pass through the time loop
_SINGLE = 32  # paths of a kernel that is run path by path


def branches_entry(
    file: AuditFile, kernel: KernelSource, runner: BlockRunner, *, quick: bool = False
) -> BranchesEntry | None:
    """Return what the branches of all splits come to, or None where no scheme is a split.

    A `quick` check is one of a few steps and paths.

    Raises what the functions of [branches] raise in the reference, AuditFileError where parameters do not fit them, and
    EscapeError or RefusedError for what would go unrounded in them.
    """
    formats = split_formats(file)
    return _Check(file, kernel, runner, formats, quick).entry() if formats else None


def broken_splits(entry: BranchesEntry | None, level: int) -> frozenset[str]:
    """Return the narrow formats whose splits are not admissible on a level.

    Conditions are tried on few levels and hold for all of them.
    """
    if entry is None:
        return frozenset()
    refused = [one for one in entry.mismatches if one.splits == "not admissible"]
    return frozenset(entry.raised) | {one.arm for one in refused if one.condition != "branches" or one.level == level}


class _Check:
    """The runs of one check, and what was found."""

    def __init__(
        self, file: AuditFile, kernel: KernelSource, runner: BlockRunner, formats: Sequence[str], quick: bool
    ) -> None:
        self._file, self._kernel, self._runner, self._formats = file, kernel, runner, formats
        self._rows = not runner.singly
        self._sources = branch_sources(file, kernel)
        self._named = file.branches is not None and file.branches.named
        self._paths = 0 if file.branches is None else file.branches.paths or 0
        self._compared = range(file.ladder.finest + 1)
        if quick:
            self._compared, self._paths = range(file.ladder.level_within(_STEPS) + 1), GRAIN
        self._alpha = 1 - file.sampling.confidence
        self._tried: dict[tuple[str, int], TriedEntry] = {}
        self._mismatches: list[MismatchEntry] = []
        self._casts: Counter[Place | None] = Counter()
        self._remarks: list[str] = []
        self._raised: dict[str, str] = {}

    def entry(self) -> BranchesEntry:
        """Compare, vary, and return all of it."""
        low, correction = self._sources
        if self._named:
            self._check_functions()
        for arm in self._formats:
            try:
                self._arm(arm)
            except BranchError as problem:
                self._raised[arm] = said(problem)
        lines = sorted(self._casts.items(), key=lambda item: (item[0] is None, item[0]))
        return BranchesEntry(
            low=low.source.run,
            correction=correction.source.run,
            tried=list(self._tried.values()),
            mismatches=self._mismatches,
            casts=[_line(self._file, place, count) for place, count in lines],
            raised=self._raised,
            remarks=list(dict.fromkeys(self._remarks)),
        )

    def _check_functions(self) -> None:
        """See that both functions can be called, and run in float64, before any format is tried."""
        for name, source in zip(("low", "correction"), self._sources, strict=True):
            if isinstance(source.source.foreign, PairLibrary):
                pairs = [(arm, wide) for arm in self._formats for wide in wide_formats(self._file, arm)]
                source.source.foreign.check_pairs(pairs)
            if not source.python or source.source.run == self._file.kernel.run:
                continue
            try:
                with with_place(0, PLAIN):
                    plain = Caller(source.file, source.source, None)
                    check_parameters(plain.copy.function, source.file)
                    if source.part is None and source.rounds == "emulated":
                        self._identical(source, plain)
            except AuditFileError as problem:
                key = f"branches.{name}" if problem.key == "kernel.run" else problem.key
                raise AuditFileError(problem.source, key, problem.problem, problem.accepted) from None

    def _identical(self, source: BranchSource, plain: Caller) -> None:
        """Raise KernelError unless float64 through the emulation gives plain NumPy's bits."""
        level = self._file.ladder.level_within(_STEPS)
        draws = self._runner.draws(level, 0, Purpose.IDENTITY, GRAIN)
        before = plain.fine(draws, level)
        found = Caller(source.file, source.source, arithmetic_named(REFERENCE)).fine(draws, level)
        for name in before | found:
            same_bits(name, before, found, level, NOT_IDENTICAL)

    def _arm(self, arm: str) -> None:
        """Try one format; raises BranchError for what a function raises in it, which no split of it survives."""
        ladder = self._file.ladder
        tasks: list[tuple[int, Callable[[], None]]] = []
        for wide in self._wides(arm) if self._named else ():
            comparer, causes = Comparer(self._runner, self._sources, arm, wide, rows=self._rows), Causes()
            tasks += [(level, partial(self._compare, comparer, level, causes)) for level in self._compared]
            tasks.append((0, partial(self._explain, comparer, causes)))
        finer = ladder.level_within(_STEPS)
        if self._named:
            tasks.append((finer, partial(self._high, arm, finer)))
        # A program that is started for every call is not started as often.
        varied = (0,) if self._file.command is not None else (finer, 0)
        tasks += [(level, partial(self._vary, arm, level)) for level in dict.fromkeys(varied)]
        for level, task in tasks:
            try:
                task()
            except DispatchError as problem:
                raise type(problem)(f"level {level}, arm {arm}: {said(problem)}") from None

    def _wides(self, arm: str) -> tuple[str | None, ...]:
        """Return the wide formats that a correction depends on; an emulated one's low part depends on none."""
        return wide_formats(self._file, arm) if self._sources[1].paired else (None,)

    def _compare(self, comparer: Comparer, level: int, causes: Causes) -> None:
        """Compare the branches on one level, and write down what differs."""
        arm = comparer.arm
        found = comparer.level(level, self._paths)
        paths = max(one.paths for one in found.values())
        self._try(arm, level, paths=paths)
        intervals = {}
        for name, one in found.items():
            assert one.series is not None  # there was a block
            intervals[name] = bias(one.series, one.differing, one.largest, self._alpha)
        allowed = within(self._file, intervals)
        for name, one in found.items():
            if one.differing:
                where, asked = self._cause(comparer, one, name, causes)
                self._mismatches.append(
                    self._mismatch(
                        (arm, level, name),
                        one,
                        intervals[name],
                        where=where,
                        asked=asked,
                        wide=comparer.wide,
                        splits="within budget" if allowed else "not admissible",
                    )
                )

    def _cause(self, comparer: Comparer, one: Mismatch, name: str, causes: Causes) -> tuple[WhereEntry | None, int]:
        """Return where the branches part, and on how many paths that differ an explanation was looked for."""
        case = one.case
        if case is None or self._file.ladder.steps(case.level) > MOST_STEPS:
            return None, 0
        low, correction = (comparer.run(side, case.level) for side in (0, 1))
        found, cause = located(low, correction, case.followed(), name)
        if causes.left != []:
            narrow_down(causes, (low, correction), case, name, found)
        return where_entry(self._file, found, cause), case.differing

    def _explain(self, comparer: Comparer, causes: Causes) -> None:
        """Write down what explains all differences of a comparison on all its levels."""
        why = str(causes)
        for place, one in enumerate(self._mismatches):
            if one.condition == "branches" and (one.arm, one.wide) == (comparer.arm, comparer.wide):
                asked = one.explained if why else 0
                self._mismatches[place] = msgspec.structs.replace(
                    one, explanation=why if asked else None, explained=asked
                )

    def _high(self, arm: str, level: int) -> None:
        """Hold the high part of the correction against what the kernel gives in the wide format."""
        _, correction = self._sources
        draws = self._draws(level)
        if correction.part is None or not isinstance(draws, Draws):
            return
        whole = BranchSource(file=self._file, source=self._kernel)
        high = BranchSource(file=correction.file, source=correction.source, part="high", paired=correction.paired)
        for wide in wide_formats(self._file, arm):
            both, _ = given(draws, arm, wide, coupled=False)
            alone, _ = given(draws, wide, wide, coupled=False)
            branch = Branch(high, arm, wide) if high.paired else Branch(high, wide)
            found = branch.on(both if high.paired else alone, level)
            if branch.copy.setting is not None and branch.copy.setting.casts is not None:
                self._casts |= branch.copy.setting.casts  # once for each line, however often it is run
            kernels = Branch(whole, wide).on(alone, level)
            for name, values in kernels.items():
                count = int(differs(values, found[name]).sum()) if name in found else values.size
                if count:
                    self._remarks.append(
                        f"the high part of {name} is not what {self._file.kernel.run} gives in {wide}, on {count} of "
                        f"{values.size} paths of level {level}; the figures of this audit are those of "
                        f"{self._file.kernel.run}"
                    )

    def _vary(self, arm: str, level: int) -> None:
        """Try the conditions on one level, of each function."""
        draws = self._draws(level)
        if isinstance(draws, Tape):
            self._repeat_on_tape(arm, level, draws)
            return
        for wide in self._wides(arm):
            for source in dict.fromkeys(self._sources):
                run = Run(source=source, arm=arm, wide=wide, level=level, rows=self._rows)
                ladder = self._file.ladder
                both, _ = given(draws, arm, wide, coupled=False)
                varied = vary(run, both, refinement=ladder.refinement, steps=ladder.steps(level))
                self._try(arm, level, varied=both.narrow.shape[-1], found=varied)
                self._remarks += varied.remarks
                for found in varied.found:
                    self._mismatches.append(self._varied(run, found))

    def _repeat_on_tape(self, arm: str, level: int, draws: Tape) -> None:
        """Run a kernel that draws for itself twice on the same tape, which fixes the number of paths."""
        for source in dict.fromkeys(self._sources):
            first = Branch(source, REFERENCE, rows=self._rows)
            first.taped(draws, level, coupled=False)
            branch = Branch(source, arm, rows=self._rows)
            (before,), (after,) = (branch.taped(draws, level, coupled=False) for _ in range(2))
            self._try(arm, level, varied=draws.paths)
            for name, values in before.items():
                if differs(values, after[name]).any():
                    run = Run(source=source, arm=arm, wide=None, level=level, rows=self._rows)
                    one = Found(
                        condition="repeat", detail="a second call", quantity=name, before=values, after=after[name]
                    )
                    self._mismatches.append(self._varied(run, one))
        self._remarks.append(
            "A kernel that draws for itself gets its random numbers in the order in which it asks for them: batch "
            "sizes, memory layouts, threads and the influence of paths on one another are not tried."
        )

    def _varied(self, run: Run, found: Found) -> MismatchEntry:
        """Return what a condition changes.

        NumPy's own differences break a claim where NumPy's arithmetic is the one that runs: in float32, and in a
        function that rounds for itself. Those of another layout break it where two functions are named, which need not
        get their draws in the same one, and nowhere else.
        """
        one = Mismatch()
        size = found.before.size - found.before.size % 32  # moments go by 32 batches
        if size:
            one.add([(found.before[:size], found.after[:size])], run.arm)
        interval = Interval(estimate=np.nan, low=-np.inf, high=np.inf, se=np.inf)
        if one.series is not None:
            interval = bias(one.series, one.differing, one.largest, self._alpha)
        one.differing = int(differs(found.before, found.after).sum())
        differ = differs(found.before, found.after)
        one.apart = [ulps(found.before[differ], found.after[differ], FORMATS[run.arm])]
        kept = found.condition == "layout" and not self._named
        numpy_computes = FORMATS[run.arm].native or run.source.rounds == "itself"
        concerned = not found.numpys_own or (numpy_computes and not kept)
        splits = "within budget" if within(self._file, {found.quantity: interval}) else "not admissible"
        return self._mismatch(
            (run.arm, run.level, found.quantity),
            one,
            interval,
            where=where_entry(self._file, found.located),
            wide=run.wide,
            splits=splits if concerned else "not concerned",
            found=found,
            function=run.source.source.run,
            paths=found.before.size,
        )

    def _mismatch(
        self,
        key: tuple[str, int, str],
        one: Mismatch,
        interval: Interval,
        *,
        where: WhereEntry | None,
        wide: str | None,
        splits: str,
        asked: int = 0,
        found: Found | None = None,
        function: str | None = None,
        paths: int | None = None,
    ) -> MismatchEntry:
        arm, level, quantity = key
        apart = np.concatenate(one.apart)
        rmse = rmse_of(self._file, quantity)
        return MismatchEntry(
            arm=arm,
            level=level,
            quantity=quantity,
            condition="branches" if found is None else found.condition,
            function=function,
            detail=None if found is None else found.detail,
            wide=wide,
            paths=one.paths if paths is None else paths,
            differing=one.differing,
            ulps_largest=finite(float(apart.max())),
            ulps_median=finite(float(np.median(apart))),
            **interval_fields("bias", interval),
            of_rmse=None if rmse is None else finite(interval.estimate / rmse),
            where=where,
            explanation=None,
            explained=asked,
            numpys_own=found is not None and found.numpys_own,
            splits=splits,  # type: ignore[arg-type]  # one of its words
        )

    def _try(self, arm: str, level: int, *, paths: int = 0, varied: int = 0, found: Varied | None = None) -> None:
        """Note what was run in a format on a level."""
        before = self._tried.get((arm, level))
        self._tried[arm, level] = TriedEntry(
            arm=arm,
            level=level,
            paths=paths or (0 if before is None else before.paths),
            varied=varied,
            batches=[] if found is None else list(found.batches),
            orders=max([] if before is None else before.orders, [] if found is None else list(found.orders), key=len),
            threads=0 if found is None else found.threads,
            repeats=REPEATS if varied else 0,
            changed=0 if found is None else found.changed,
        )

    def _draws(self, level: int) -> Draws | Tape:
        paths = _SINGLE if self._runner.singly else GRAIN
        return self._runner.draws(level, 0, Purpose.BRANCHES, paths)


def _line(file: AuditFile, place: Place | None, count: int) -> CastEntry:
    if place is None:
        return CastEntry(file=None, line=None, count=count)
    return CastEntry(file=file.shown(place.file), line=place.line, count=count)
