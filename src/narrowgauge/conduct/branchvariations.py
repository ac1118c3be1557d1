"""Whether a function gives a path the same bits whatever it is computed with, and however its draws lie in memory.

A path is part of a block on one branch and of another block on the other: what it comes to must not depend on the
number of paths of a call, on their draws, on the memory layout, on another call at the same time, or on an earlier one.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from functools import partial
from typing import TypeVar

import numpy as np

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.conduct.branchcauses import follow
from narrowgauge.conduct.branchemulation import Run
from narrowgauge.conduct.firstdifference import Located, first_difference
from narrowgauge.conduct.tracing import MOST_PATHS, Trace
from narrowgauge.conduct.tracingrepeats import repeated
from narrowgauge.errors import DispatchError, KernelError, NarrowgaugeError, said
from narrowgauge.judge.branches import Doubles, differs
from narrowgauge.measure.branchruns import ORDERS, Branch, BranchError, Given, Order
from narrowgauge.measure.calls import Quantities
from narrowgauge.record.branches import Condition

__all__ = ["BATCHES", "CHANGED", "REPEATS", "THREADS", "Found", "Varied", "vary"]

T = TypeVar("T")

BATCHES = (1, 3, 7, 8, 64)  # paths of a call, beside those of a block
THREADS, REPEATS = 2, 2
CHANGED = 3  # paths whose draws are exchanged for others
_ROUNDS = 3  # calls of each thread


@dataclass(frozen=True, slots=True, kw_only=True)
class Found:
    """A condition under which a quantity has other bits: all results as they were and as they are then.

    `located` is where it parts from itself, `numpys_own` whether NumPy does so there, too.
    """

    condition: Condition
    detail: str
    quantity: str
    before: Doubles
    after: Doubles
    located: Located | None = None
    numpys_own: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Varied:
    """What was tried of one function, and what was found; `remarks` say what could not be tried, and why."""

    batches: tuple[int, ...]
    orders: tuple[Order, ...]
    threads: int
    changed: int
    found: tuple[Found, ...]
    remarks: tuple[str, ...]


def vary(run: Run, draws: Given, *, refinement: int, steps: int) -> Varied:
    """Run a function under every condition that its kind allows; raises what it raises under none of them."""
    return _Variations(run, draws, {steps, steps + 1, steps // refinement, steps // refinement + 1}).all()


class _Variations:
    """One function in one format on one level, and the results that all others are held against."""

    def __init__(self, run: Run, draws: Given, lengths: set[int]) -> None:
        self._run, self._draws = run, draws
        self._paths = draws.narrow.shape[-1]
        self._own = run.source.rounds == "itself"
        self._branch = Branch(run.source, run.arm, run.wide, rows=run.rows)
        self._singly = self._branch.one_path and not run.rows
        self._rounds = 1 if run.source.file.command is not None else _ROUNDS  # each call starts a program
        self._remarks: list[str] = []
        self._base: Quantities = self._branch.on(draws, run.level)

    def all(self) -> Varied:
        """Try all conditions."""
        foreign, whole = self._run.source.file.foreign, not self._singly
        sizes = BATCHES if self._rounds > 1 else BATCHES[:1]
        batches = tuple(k for k in sizes if k < self._paths) if whole else ()
        orders = ORDERS if whole and not foreign else ()
        found = [*self._repeat(), *self._threads()]
        for k in batches:
            found += self._batch(k)
        for order in orders:
            found += self._order(order)
        if whole:
            found += self._influence()
        return Varied(
            batches=batches,
            orders=orders,
            threads=THREADS,
            changed=CHANGED if whole else 0,
            found=tuple(found),
            remarks=tuple(self._remarks),
        )

    def _repeat(self) -> Iterator[Found]:
        again = self._attempt("a repeat", lambda: self._branch.on(self._draws, self._run.level))
        yield from self._compared("repeat", "a second call", again)

    def _threads(self) -> Iterator[Found]:
        """Two calls at once, on the paths as they are and the other way round.

        Of one copy where the function rounds for itself, as deployed code would; else of one copy each.
        """
        run, gate = self._run, threading.Barrier(THREADS)
        backwards = self._draws.of(slice(None, None, -1))
        alone = self._attempt("paths the other way round", lambda: self._branch.on(backwards, run.level))
        if alone is None:
            return

        def calls(draws: Given) -> list[Quantities]:
            shared = self._own and run.wide is None
            branch = self._branch if shared else Branch(run.source, run.arm, run.wide, rows=run.rows)
            found = []
            for _ in range(self._rounds):
                gate.wait()
                found.append(branch.on(draws, run.level))
            return found

        def together() -> list[list[Quantities]]:
            with ThreadPoolExecutor(THREADS) as pool:
                waiting = [pool.submit(_guarded, gate, partial(calls, draws)) for draws in (self._draws, backwards)]
                return [job.result() for job in waiting]

        found = self._attempt("two threads at once", together)
        for before, results in zip((self._base, alone), found or (), strict=False):
            for after in results:
                differing = list(self._compared("threads", "two threads at once", after, before))
                if differing:
                    yield from differing
                    return

    def _batch(self, paths: int) -> Iterator[Found]:
        """Run the first and the last `paths` of a block alone; where they differ, all of it in calls of so many."""
        for first in (0, self._paths - paths):
            part = slice(first, first + paths)
            alone = self._attempt(f"{paths} {'path' if paths == 1 else 'paths'} a call", partial(self._alone, part))
            if alone is None:
                return
            before = {name: values[part] for name, values in self._base.items()}
            differing = [name for name in before if name in alone and differs(before[name], alone[name]).any()]
            if not differing:
                continue
            found = {name: np.empty(self._paths) for name in differing}
            for begin in range(0, self._paths, paths):
                piece = slice(begin, min(begin + paths, self._paths))
                results = self._alone(piece)
                for name in differing:
                    found[name][piece] = results[name]
            for name in differing:
                kept = range(part.start, part.stop)
                located, own = self._where(name, kept, self._draws.of(part), paths=paths)
                yield Found(
                    condition="paths",
                    detail=f"{paths} a call",
                    quantity=name,
                    before=self._base[name],
                    after=found[name],
                    located=located,
                    numpys_own=own,
                )
            return

    def _alone(self, part: slice) -> Quantities:
        # No axis counts as that of the paths, of which there can be as many as steps.
        return self._branch.lying(self._draws.of(part), self._run.level, "C", over_paths=False)

    def _order(self, order: Order) -> Iterator[Found]:
        name = f"draws in memory {_WORDS[order]}"
        found = self._attempt(name, lambda: self._branch.lying(self._draws, self._run.level, order))
        for one in self._compared("layout", _WORDS[order], found):
            kept = np.flatnonzero(differs(one.before, one.after))[:MOST_PATHS]
            located, own = self._where(one.quantity, kept.tolist(), self._draws, order=order)
            yield replace(one, located=located, numpys_own=own)

    def _influence(self) -> Iterator[Found]:
        """Give a few paths other draws; all others must stay."""
        changed = np.unique(np.array([0, self._paths // 2, self._paths - 1]))
        others = (changed + self._paths // 4) % self._paths
        factor = 1.0 if self._run.source.file.kernel.takes == "uniforms" else -2.0  # exact in every format
        exchanged = []
        for part in self._draws:
            if part is not None:
                exchanged.append(np.array(part))
                exchanged[-1][..., changed] = factor * part[..., others]
        draws = Given(exchanged[0], exchanged[1] if len(exchanged) > 1 else None)
        found = self._attempt("other draws on a few paths", lambda: self._branch.on(draws, self._run.level))
        if found is None:
            return
        held = {name: values.copy() for name, values in found.items()}
        for name, values in held.items():
            values[changed] = self._base[name][changed] if name in self._base else 0.0
        for one in self._compared("influence", f"{changed.size} other paths have other draws", held):
            kept = np.flatnonzero(differs(one.before, one.after))[:MOST_PATHS]
            located, _ = self._where(one.quantity, kept.tolist(), draws)
            yield replace(one, located=located)

    def _compared(
        self,
        condition: Condition,
        detail: str,
        found: Mapping[str, Doubles] | None,
        base: Mapping[str, Doubles] | None = None,
    ) -> Iterator[Found]:
        for name, before in (base or self._base).items():
            after = None if found is None else found.get(name)
            if after is not None and differs(before, after).any():
                yield Found(condition=condition, detail=detail, quantity=name, before=before, after=after)

    def _attempt(self, what: str, call: Callable[[], T]) -> T | None:
        """Return what a call gives; where the function does not take that, say so and return None."""
        try:
            return call()
        except (BranchError, DispatchError, KernelError) as error:
            problem = error.problem if isinstance(error, BranchError) else error
            why = f"{type(problem).__name__}: {said(problem)}"
            self._remarks.append(f"{self._run.arm}: {what} could not be tried, {why}")
            return None

    def _where(
        self,
        quantity: str,
        kept: range | list[int],
        draws: Given,
        *,
        paths: int | None = None,
        order: Order = "C",
    ) -> tuple[Located | None, bool]:
        """Return where the function parts from itself, and whether NumPy does so with the same values, too."""
        run = self._run
        before = Trace(self._paths, list(kept))
        after = Trace(self._paths, list(kept)) if paths is None else Trace(paths)
        try:
            done = follow(run, self._draws, quantity, before)
            done = done and follow(run, draws, quantity, after, order=order, over_paths=paths is None)
            found = first_difference(before, after, form=FORMATS[run.arm]) if done else None
        except (BranchError, NarrowgaugeError):  # a trace asks more of a function than a run
            return None, False
        if found is None or found.low is None or found.low.kind != "operation":
            return found, False
        own = repeated(before, found.low.number, paths=paths, layout=None if paths is not None else order)
        numpy_computes = self._own or FORMATS[run.arm].native
        # An operand need not lie in memory as the draws do, so that a repeat can miss it.
        return found, own is True or (paths is None and numpy_computes and _same_call(before, after, found))


_WORDS: dict[Order, str] = {
    "C": "in C's order",
    "Fortran": "in Fortran's order",
    "strided": "with gaps between the paths",
    "reversed": "with the paths backwards",
}


def _same_call(before: Trace, after: Trace, found: Located) -> bool:
    """Whether two runs of one function part at an operation that both have, on the same values of the same shape."""
    if found.low is None or found.correction is None or found.correction.kind != "operation":
        return False
    one, other = before.operations[found.low.number], after.operations[found.correction.number]
    return (one.place, one.name, one.operands) == (other.place, other.name, other.operands)


def _guarded(gate: threading.Barrier, calls: Callable[[], list[Quantities]]) -> list[Quantities]:
    """Let the other thread go where this one fails."""
    try:
        return calls()
    except BaseException:  # raised on; the other thread would wait for ever
        gate.abort()
        raise
