"""One block of one level: the same draws through every arm, reduced to series that add up."""

from __future__ import annotations

import copy
import time
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Final, Literal

import msgspec
import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.arithmetic import Arithmetic, arithmetic_named
from narrowgauge.dispatch.copies import PrivateCopy
from narrowgauge.dispatch.setting import Observer
from narrowgauge.draws.coarsen import Draws
from narrowgauge.draws.streams import GRAIN, Purpose, UniformStream, apart, block_paths, uniforms
from narrowgauge.draws.tape import Tape
from narrowgauge.errors import DispatchError, KernelError, said
from narrowgauge.kernel.approximation import approximation_of
from narrowgauge.kernel.arms import Arm, Kind
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.loading import KernelSource
from narrowgauge.kernel.raised import innermost_of, kept_apart, raised
from narrowgauge.measure.arms import REFERENCE, arms_of, pairs_of
from narrowgauge.measure.calls import Caller
from narrowgauge.measure.drawplan import DrawPlan, plan_draws
from narrowgauge.measure.moments import Moments, Series
from narrowgauge.measure.rows import RowPlan, plan_rows
from narrowgauge.measure.tally import LevelTally, QuantityTally, Raised

__all__ = ["BlockRunner"]

_UNKNOWN: Final = "unknown"

Values = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Paths:
    """Fine and coarse values of every quantity of one arm; `coarse` is empty where levels are not coupled."""

    fine: dict[str, Values]
    coarse: dict[str, Values]

    def difference(self, name: str) -> Values:
        return self.fine[name] - self.coarse[name] if self.coarse else self.fine[name]

    def finite(self) -> npt.NDArray[np.bool_]:
        parts = (self.fine, self.coarse)
        return np.asarray(np.logical_and.reduce([np.isfinite(v) for part in parts for v in part.values()]))


class BlockRunner:
    """Runs blocks of an audit; keeps one private copy of the kernel per arm."""

    def __init__(self, audit_file: AuditFile, kernel: KernelSource) -> None:
        self._file = audit_file
        self._kernel = kernel
        self._callers: dict[str, Caller] = {}
        self._plan: DrawPlan | None = None
        self._rows: RowPlan | Literal["unknown"] | None = _UNKNOWN
        self.approximation = approximation_of(audit_file, kernel)
        self.arms = arms_of(audit_file.arms)
        self.pairs = pairs_of(self.arms, audit_file.formats.wide)
        self._names: tuple[int, list[str]] | None = None  # the level first run, and the quantities it has
        self._scenario: tuple[int, ...] = ()  # its number, if the runner is one of a scenario

    def elsewhere(self, scenario: int, parameters: Mapping[str, float], block: int) -> BlockRunner:
        """Return a runner at other parameters, with draws of their own and smaller blocks, and no copies made yet.

        How a kernel that draws for itself shares its draws between levels is found out at the audited point alone.
        """
        if self._file.kernel.takes == "rng":
            self._drawing()
        found, file = copy.copy(self), self._file
        found._file = msgspec.structs.replace(
            file,
            parameters={**file.parameters, **parameters},
            sampling=msgspec.structs.replace(file.sampling, block=block),
        )
        found._callers, found._rows, found._names, found._scenario = {}, _UNKNOWN, None, (scenario,)
        return found

    @property
    def remarks(self) -> tuple[str, ...]:
        """What the audit has to say about the draws of a kernel that draws for itself, and of one path a call."""
        rows = self._row_plan()
        drawing = self._drawing().remarks if self._file.kernel.takes == "rng" else ()
        return drawing if rows is None else (rows.remark, *drawing)

    @property
    def singly(self) -> bool:
        """Whether the kernel is run path by path."""
        rows = self._row_plan()
        return rows is not None and not rows.rows

    def caller(self, arithmetic: Arithmetic | None, observer: Observer | None = None, kind: Kind = "exact") -> Caller:
        """Return a new private copy of the kernel, called as in the blocks; plain NumPy for None."""
        return Caller(self._file, self._kernel, arithmetic, observer, rows=not self.singly, kind=kind)

    def paths(self, level: int) -> int:
        """Return the number of paths of one block of a level: the fewest where a kernel is run path by path."""
        file = self._file
        if self.singly:
            return GRAIN  # no axis is that of the paths
        factors = file.kernel.factors if file.kernel.takes != "rng" else self._drawing().factors
        return block_paths(file.sampling.block, file.ladder.steps(level), factors, file.ladder.refinement)

    def coupled(self, level: int) -> bool:
        """Whether a level has a coarse path on the same draws."""
        coupled = self._file.coupled(level)
        return coupled and (self._file.kernel.takes != "rng" or self._drawing().layout is not None)

    def draws(self, level: int, block: int, purpose: Purpose = Purpose.AUDIT, paths: int | None = None) -> Draws | Tape:
        """Return the float64 draws of a block, (steps, factors, paths); a tape where the kernel draws for itself.

        Of other numbers of `paths` than a block has there may be a few less.
        """
        file = self._file
        seed, takes, refinement = file.sampling.seed, file.kernel.takes, file.ladder.refinement
        steps = file.ladder.steps(level)
        paths = self.paths(level) if paths is None else apart(paths, steps, refinement)
        further = self._scenario if purpose is Purpose.AUDIT else ()
        purpose = Purpose.SCENARIO if further else purpose
        if takes == "rng":
            stream, drawing = UniformStream(seed, purpose, level, block, *further), self._drawing()
            return Tape(
                stream,
                paths=paths,
                steps=steps,
                refinement=refinement,
                layout=drawing.layout,
                singly=drawing.one_path,
                steady=drawing.steady,
            )
        values = uniforms(seed, purpose, level, block, (steps, file.kernel.factors, paths), *further)
        return Draws.of(takes, values, file.ladder.step_size(level), refinement, self.approximation)

    def _drawing(self) -> DrawPlan:
        """Return what the kernel draws, found out once."""
        if self._plan is None:
            self._plan = plan_draws(self._file, self._kernel)
        return self._plan

    def _row_plan(self) -> RowPlan | None:
        """Return how a kernel of one path a call is run, found out once; None for any other kernel."""
        if self._rows is _UNKNOWN:
            arms = [name for name in self.arms[1:] if Arm.named(name).exact]  # draws are no matter of rows
            self._rows = plan_rows(
                self._file, self._kernel, arms, lambda level, paths: self.draws(level, 0, Purpose.TRIAL, paths)
            )
        assert not isinstance(self._rows, str)
        return self._rows

    def run(self, level: int, block: int) -> LevelTally:
        """Run one block of one level through every arm.

        Raises KernelError where the kernel raises in the reference or returns the wrong thing, EscapeError or
        RefusedError, with level and arm, for a number that would go unrounded. What the kernel raises in another
        arm is kept in the tally, except what comes of the machine, which is a KernelError in any arm.
        """
        self._row_plan()  # what stands against running at all is said without level and arm
        draws = self.draws(level, block)
        reference = self._paths(draws, level, REFERENCE)
        assert isinstance(reference, _Paths)  # what the reference raises is raised
        first, names = self._names = self._names or (level, list(reference.fine))
        _same_quantities(reference.fine, names, f"level {first}", level, REFERENCE)
        keep = reference.finite()
        kept = None if keep.all() else keep
        runs: dict[str, _Paths] = {REFERENCE: reference}
        raised: dict[str, Raised] = {}
        for arm in self.arms[1:]:
            result = self._paths(draws, level, arm)
            if isinstance(result, Raised):
                raised[arm] = result
                continue
            _same_quantities(result.fine, reference.fine, "the reference", level, arm)
            runs[arm] = result
        with np.errstate(all="ignore"):
            quantities = {name: self._tally(name, runs, kept) for name in reference.fine}
        return LevelTally(
            level=level,
            paths=keep.size,
            dropped=int(keep.size - np.count_nonzero(keep)),
            blocks=1,
            quantities=quantities,
            raised=raised,
        )

    def differences(self, level: int, paths: int) -> dict[str, dict[str, Values]]:
        """Return by arm and quantity the level differences of a few paths, (paths,); arms that raise are left out.

        Raises what `run` raises.
        """
        draws = self.draws(level, 0, Purpose.IDENTITY, paths)
        runs = {arm: self._paths(draws, level, arm) for arm in self.arms}
        with np.errstate(all="ignore"):
            return {
                arm: {name: found.difference(name) for name in found.fine}
                for arm, found in runs.items()
                if isinstance(found, _Paths)
            }

    def seconds(self, level: int, paths: int) -> float:
        """Return how long a few paths of a level take in all arms, once the kernel's copies are made.

        Raises what `run` raises.
        """
        for _ in range(2):
            draws = self.draws(level, 0, Purpose.TRIAL, paths)
            start = time.perf_counter()
            for arm in self.arms:
                self._paths(draws, level, arm)
        return time.perf_counter() - start

    def _paths(self, draws: Draws | Tape, level: int, arm: str) -> _Paths | Raised:
        """Run fine and coarse path in one arm."""
        try:
            with kept_apart(level, arm) as kept:
                if arm not in self._callers:
                    named = Arm.named(arm)
                    self._callers[arm] = self.caller(arithmetic_named(named.format), kind=named.draws)
                caller, coupled = self._callers[arm], self.coupled(level)
                values = caller.fine(draws, level, coarse_follows=coupled)
                coarse = caller.coarse(draws, level) if coupled else {}
                if coarse:
                    _same_quantities(coarse, values, "its fine path", level, arm)
                return _Paths(fine=values, coarse=coarse)
        except DispatchError as problem:
            raise type(problem)(f"level {level}, arm {arm}: {said(problem)}") from None
        assert kept.problem is not None  # else the paths are returned
        if arm == REFERENCE:
            raise raised(kept.problem, level, arm) from kept.problem
        known = self._callers.get(arm)
        return self._raised(kept.problem, None if known is None else known.copy)

    def _raised(self, problem: BaseException, copy: PrivateCopy | None) -> Raised:
        """Return an exception as data, with the innermost line in the user's modules."""
        last = innermost_of(problem, None if copy is None else copy.setting)
        return Raised(
            kind=type(problem).__name__,
            message=said(problem),
            file=self._file.shown(last.filename) if last else None,
            line=last.lineno if last else None,
        )

    def _tally(self, name: str, runs: dict[str, _Paths], keep: npt.NDArray[np.bool_] | None) -> QuantityTally:
        differences = {arm: paths.difference(name) for arm, paths in runs.items()}
        reference = runs[REFERENCE]
        coarse = Moments.of(reference.coarse[name], keep) if reference.coarse else None
        return QuantityTally(
            values={arm: Series.of(paths.fine[name], keep) for arm, paths in runs.items()},
            errors={
                arm: Series.of(paths.fine[name] - reference.fine[name], keep)
                for arm, paths in runs.items()
                if arm != REFERENCE
            },
            differences={arm: Series.of(values, keep) for arm, values in differences.items()},
            corrections={
                (a, b): Series.of(differences[b] - differences[a], keep)
                for a, b in self.pairs
                if a in runs and b in runs
            },
            coarse=coarse,
        )


def _same_quantities(found: Iterable[str], known: Iterable[str], owner: str, level: int, arm: str) -> None:
    """Raise KernelError unless a run has the quantities that `owner` has, in whatever order."""
    if set(found) != set(known):
        here, there = ", ".join(found), ", ".join(known)
        raise KernelError(f"the kernel returned {here} where {owner} has {there}", level=level, arm=arm)
