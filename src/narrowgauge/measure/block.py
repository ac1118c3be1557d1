"""One block of one level: the same draws through every arm, reduced to series that add up."""

from __future__ import annotations

import traceback
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.copies import PrivateCopy
from narrowgauge.draws.coarsen import Draws, coarse_draws, fine_draws
from narrowgauge.draws.streams import Purpose, block_paths, uniforms
from narrowgauge.errors import AuditFileError, DispatchError, KernelError
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.contract import evaluate
from narrowgauge.kernel.loading import KernelSource, private_copy
from narrowgauge.measure.arms import REFERENCE, arms_of, pairs_of
from narrowgauge.measure.moments import Moments, Series
from narrowgauge.measure.tally import LevelTally, QuantityTally, Raised

__all__ = ["BlockRunner"]

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
        self._copies: dict[str, PrivateCopy] = {}
        self.arms = arms_of(audit_file.arms)
        self.pairs = pairs_of(self.arms, audit_file.formats.wide)
        self._names: tuple[int, list[str]] | None = None  # the level first run, and the quantities it has

    def paths(self, level: int) -> int:
        """Return the number of paths of one block of a level."""
        file = self._file
        return block_paths(file.sampling.block, file.ladder.steps(level), file.kernel.factors)

    def coupled(self, level: int) -> bool:
        """Whether a level has a coarse path on the same draws."""
        return self._file.coupled(level)

    def draws(self, level: int, block: int, purpose: Purpose = Purpose.AUDIT, paths: int | None = None) -> Draws:
        """Return the float64 draws of a block, (steps, factors, paths)."""
        file = self._file
        shape = (file.ladder.steps(level), file.kernel.factors, paths or self.paths(level))
        values = uniforms(file.sampling.seed, purpose, level, block, shape)
        return Draws.of(file.kernel.takes, values, file.ladder.step_size(level), file.ladder.refinement)

    def run(self, level: int, block: int) -> LevelTally:
        """Run one block of one level through every arm.

        Raises KernelError where the kernel raises in the reference or returns the wrong thing, EscapeError or
        RefusedError, with level and arm, for a number that would go unrounded. What the kernel raises in another
        arm is kept in the tally.
        """
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

    def _paths(self, draws: Draws, level: int, arm: str) -> _Paths | Raised:
        """Run fine and coarse path in one arm."""
        file, arithmetic = self._file, arithmetic_named(arm)
        copy = self._copies.get(arm)
        try:
            if copy is None:
                copy = self._copies[arm] = private_copy(self._kernel, arithmetic)
            fine = fine_draws(draws, arithmetic)
            layout, ladder = file.kernel.layout, file.ladder
            values = evaluate(copy, fine, ladder.step_size(level), file.keywords(), layout)
            coarse: dict[str, Values] = {}
            if self.coupled(level):
                drawn = coarse_draws(draws, fine, arithmetic)
                coarse = evaluate(copy, drawn, ladder.step_size(level - 1), file.keywords(), layout)
        except KernelError as problem:
            raise KernelError(str(problem), level=level, arm=arm) from problem.__cause__
        except DispatchError as problem:
            raise type(problem)(f"level {level}, arm {arm}: {problem}") from None
        except AuditFileError:  # there is no such function
            raise
        except (Exception, SystemExit) as problem:  # whatever a kernel raises becomes data
            if arm == REFERENCE:
                what = f"the kernel raised {type(problem).__name__}: {problem}"
                raise KernelError(what, level=level, arm=arm) from problem
            return self._raised(problem, copy)
        if coarse:
            _same_quantities(coarse, values, "its fine path", level, arm)
        return _Paths(fine=values, coarse=coarse)

    def _raised(self, problem: BaseException, copy: PrivateCopy | None) -> Raised:
        """Return an exception as data, with the innermost line in the user's modules."""
        files = copy.setting.files if copy is not None and copy.setting is not None else set()
        frames = [f for f in traceback.extract_tb(problem.__traceback__) if f.filename in files]
        last = frames[-1] if frames else None
        return Raised(
            kind=type(problem).__name__,
            message=str(problem),
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
