"""One block of one level: the same draws through every arm, reduced to series that add up.

For a quantity P, its value on level l under arm a is P_l^a; the level difference D_l^a = P_l^a - P_(l-1)^a takes both
from the same draws (D_0 = P_0); the error is E_l^a = P_l^a - P_l^ref; the correction from a to b is D_l^b - D_l^a.
"""

from __future__ import annotations

import traceback
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.copies import PrivateCopy
from narrowgauge.draws.coarsen import Draws, coarse_draws, fine_draws
from narrowgauge.draws.streams import Purpose, block_paths, uniforms
from narrowgauge.errors import DispatchError, KernelError
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.contract import evaluate
from narrowgauge.kernel.loading import KernelSource, private_copy
from narrowgauge.measure.arms import REFERENCE, arms_of, pairs_of
from narrowgauge.measure.moments import Moments, Series

__all__ = ["BlockRunner", "LevelTally", "QuantityTally", "Raised"]

Values = npt.NDArray[np.float64]
Pair = tuple[str, str]


@dataclass(frozen=True, slots=True, kw_only=True)
class Raised:
    """What a kernel raised in an arm other than the reference, and where in the user's code."""

    kind: str
    message: str
    file: str | None
    line: int | None


@dataclass(frozen=True, slots=True, kw_only=True)
class QuantityTally:
    """Series of one quantity on one level: per arm P, E and D, per (narrow, wide) pair R. Adds with `+`.

    `coarse` holds the moments of the reference's coarse path, None on a level without one.
    """

    values: Mapping[str, Series]
    errors: Mapping[str, Series]
    differences: Mapping[str, Series]
    corrections: Mapping[Pair, Series]
    coarse: Moments | None

    def __add__(self, other: QuantityTally) -> QuantityTally:
        """Merge with the tally of further paths; an arm that either side lost is lost."""
        both = self.coarse is not None and other.coarse is not None
        return QuantityTally(
            values={a: s + other.values[a] for a, s in self.values.items() if a in other.values},
            errors={a: s + other.errors[a] for a, s in self.errors.items() if a in other.errors},
            differences={a: s + other.differences[a] for a, s in self.differences.items() if a in other.differences},
            corrections={p: s + other.corrections[p] for p, s in self.corrections.items() if p in other.corrections},
            coarse=self.coarse + other.coarse if both else None,  # type: ignore[operator]  # both are there
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class LevelTally:
    """All that was measured on one level so far. Adds with `+`, in the order of the blocks.

    `paths` were run, `dropped` of them were not finite in the reference and are in no series.
    """

    level: int
    paths: int
    dropped: int
    blocks: int
    quantities: Mapping[str, QuantityTally]
    raised: Mapping[str, Raised]

    def __add__(self, other: LevelTally) -> LevelTally:
        """Merge with the tally of the following blocks."""
        return LevelTally(
            level=self.level,
            paths=self.paths + other.paths,
            dropped=self.dropped + other.dropped,
            blocks=self.blocks + other.blocks,
            quantities={name: tally + other.quantities[name] for name, tally in self.quantities.items()},
            raised={**other.raised, **self.raised},
        )


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

    def paths(self, level: int) -> int:
        """Return the number of paths of one block of a level."""
        file = self._file
        return block_paths(file.sampling.block, file.ladder.steps(level), file.kernel.factors)

    def coupled(self, level: int) -> bool:
        """Whether a level has a coarse path on the same draws."""
        return level > 0 and self._file.kernel.coupling == "sum"

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
        keep = reference.finite()
        kept = None if keep.all() else keep
        runs: dict[str, _Paths] = {REFERENCE: reference}
        raised: dict[str, Raised] = {}
        for arm in self.arms[1:]:
            result = self._paths(draws, level, arm)
            if isinstance(result, Raised):
                raised[arm] = result
                continue
            _same_quantities(result, reference, level, arm)
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
        file = self._file
        arithmetic = arithmetic_named(arm)
        copy = self._copies.get(arm)
        try:
            if copy is None:
                copy = self._copies[arm] = private_copy(self._kernel, arithmetic)
            fine = fine_draws(draws, arithmetic)
            layout, ladder = file.kernel.layout, file.ladder
            values = evaluate(copy, fine, ladder.step_size(level), file.keywords(), layout)
            coarse = {}
            if self.coupled(level):
                drawn = coarse_draws(draws, fine, arithmetic)
                coarse = evaluate(copy, drawn, ladder.step_size(level - 1), file.keywords(), layout)
        except KernelError as problem:
            raise KernelError(str(problem), level=level, arm=arm) from problem.__cause__
        except DispatchError as problem:
            raise type(problem)(f"level {level}, arm {arm}: {problem}") from None
        except (Exception, SystemExit) as problem:  # whatever a kernel raises becomes data
            if arm == REFERENCE:
                what = f"the kernel raised {type(problem).__name__}: {problem}"
                raise KernelError(what, level=level, arm=arm) from problem
            return _raised(problem, copy)
        return _Paths(fine=values, coarse=coarse)

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


def _same_quantities(result: _Paths, reference: _Paths, level: int, arm: str) -> None:
    if list(result.fine) != list(reference.fine):
        here, there = ", ".join(result.fine), ", ".join(reference.fine)
        raise KernelError(f"the kernel returned {here} where the reference has {there}", level=level, arm=arm)


def _raised(problem: BaseException, copy: PrivateCopy | None) -> Raised:
    """Return an exception as data, with the innermost line in the user's modules."""
    files = copy.setting.files if copy is not None and copy.setting is not None else set()
    frames = [f for f in traceback.extract_tb(problem.__traceback__) if f.filename in files]
    last = frames[-1] if frames else None
    return Raised(
        kind=type(problem).__name__,
        message=str(problem),
        file=last.filename if last else None,
        line=last.lineno if last else None,
    )
