"""The two branches of a split as they run: the low one alone, and the low and the high part of the correction.

| branch     | emulated                                        | rounds for itself                                |
|------------|-------------------------------------------------|--------------------------------------------------|
| low        | kernel(draws, h, **parameters)                  | the same, draws in the narrow type               |
| correction | correction(draws, h, **parameters), a pair; one | correction((low, high), h, **parameters), a pair |
|            | run for each part, wholly in its arithmetic     | of the same draws in the narrow and the wide type|

In an emulated correction casts are ignored, and counted by line.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from functools import partial
from typing import Any, Literal, NamedTuple

import msgspec
import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.arithmetic import Arithmetic, arithmetic_named
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.arithmetic.rounding import Floats
from narrowgauge.dispatch.copies import Maker, PrivateCopy, new_setting
from narrowgauge.dispatch.looser import LooserSetting, Manner
from narrowgauge.dispatch.setting import Observer, Wrapped
from narrowgauge.draws.coarsen import Draws, coarse_draws, fine_draws
from narrowgauge.draws.tape import Tape
from narrowgauge.errors import KernelError, said
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.branchlibrary import PairLibrary
from narrowgauge.kernel.contract import arranged, described, evaluate_lying
from narrowgauge.kernel.loading import KernelSource, branch_file, executing
from narrowgauge.kernel.ownrounding import called_own
from narrowgauge.kernel.raised import kept_apart
from narrowgauge.measure.calls import Caller, Quantities

__all__ = [
    "ORDERS",
    "Branch",
    "BranchError",
    "BranchSource",
    "Given",
    "Order",
    "branch_sources",
    "given",
    "its_own",
    "laid",
]

Part = Literal["low", "high"]
Order = Literal["C", "Fortran", "strided", "reversed"]
ORDERS: tuple[Order, ...] = ("C", "Fortran", "strided", "reversed")


class Given(NamedTuple):
    """The same draws as carriers of the narrow and of the wide format, (steps, factors, paths); None without one."""

    narrow: Floats
    wide: Floats | None

    def of(self, paths: Any) -> Given:
        """Return copies of some paths, by a slice or by their numbers."""
        return Given(*(None if part is None else np.array(part[..., paths], order="C") for part in self))  # type: ignore[arg-type]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class BranchSource:
    """A function of a split: where it comes from, and which part of its result counts, None for all of it.

    `paired`: it gets its draws in two formats.
    """

    file: AuditFile
    source: KernelSource
    part: Part | None = None
    paired: bool = False

    @property
    def rounds(self) -> Literal["emulated", "itself"]:
        """How it rounds."""
        return self.file.kernel.rounds

    @property
    def python(self) -> bool:
        """Whether it is a function in Python, which can be followed and emulated."""
        return self.source.foreign is None

    def emulated(self) -> BranchSource:
        """Return the same function, to be emulated."""
        kernel = msgspec.structs.replace(self.file.kernel, rounds="emulated")
        return replace(self, file=msgspec.structs.replace(self.file, kernel=kernel))


def branch_sources(file: AuditFile, kernel: KernelSource) -> tuple[BranchSource, BranchSource]:
    """Return the low branch and the low part of the correction; without [branches] the kernel is both."""
    whole = BranchSource(file=file, source=kernel)
    low, correction = (
        BranchSource(file=branch_file(file, name), source=kernel.branches[name]) if name in kernel.branches else whole
        for name in ("low", "correction")
    )
    if correction is whole:
        return low, correction
    return low, replace(correction, part="low", paired=correction.rounds == "itself")


def given(draws: Draws, narrow: str, wide: str | None, *, coupled: bool) -> tuple[Given, Given | None]:
    """Return the draws of the fine and of the coarse path in the two formats."""
    fine: list[Floats | None] = []
    coarse: list[Floats | None] = []
    for name in (narrow, wide):
        arithmetic = None if name is None else arithmetic_named(name)
        fine.append(None if arithmetic is None else fine_draws(draws, arithmetic))
        last = fine[-1]
        coarse.append(
            None if arithmetic is None or last is None or not coupled else coarse_draws(draws, last, arithmetic)
        )
    assert fine[0] is not None  # the narrow one
    return Given(fine[0], fine[1]), None if coarse[0] is None else Given(coarse[0], coarse[1])


class BranchError(Exception):
    """What a function of a split raised of its own, in one format on one level."""

    def __init__(self, problem: BaseException, level: int, arm: str) -> None:
        super().__init__(f"level {level}, arm {arm}: {type(problem).__name__}: {said(problem)}")
        self.problem = problem


@contextmanager
def its_own(level: int, arm: str) -> Iterator[None]:
    """Let what a function raises leave as a BranchError, and what this program finds as `kept_apart` says."""
    with kept_apart(level, arm) as kept:
        yield
    if kept.problem is not None:
        raise BranchError(kept.problem, level, arm) from kept.problem


class Branch(Caller):
    """A function of a split in one format, with a private copy of its own.

    `wide` is the other format of a correction that rounds for itself. `manner`: its lines are computed as a compiler
    may, which takes an emulated function. Making it and calling it raise BranchError for what the function raises.
    """

    def __init__(
        self,
        source: BranchSource,
        narrow: str,
        wide: str | None = None,
        *,
        rows: bool = False,
        observer: Observer | None = None,
        manner: Manner | None = None,
    ) -> None:
        self.source, self._wide, self._wider = source, wide, _Wider()
        kind = partial(LooserSetting, manner=manner) if manner is not None else None
        casts = source.part is not None and source.rounds == "emulated"
        further: dict[str, Any] = {"casts": casts} if kind is None else {"casts": True, "kind": kind}
        made: Maker = partial(new_setting, **further)
        with its_own(0, narrow):
            super().__init__(source.file, source.source, arithmetic_named(narrow), observer, rows=rows, made=made)

    def wide_draws(self, draws: Given) -> None:
        """Let the calls that follow have the wide ones of these draws."""
        self._wider.draws = draws.wide

    def on(self, draws: Given, level: int) -> Quantities:
        """Return the quantities on draws that are rounded already, which stay as they are."""
        self.wide_draws(draws)
        return self.on_array(np.array(draws.narrow), level)

    def on_array(self, drawn: Floats, level: int) -> Quantities:
        """Return the quantities on rounded draws, which the function may write into."""
        with its_own(level, self._arithmetic.format.name):
            return super().on_array(drawn, level)
        raise AssertionError("what it raises is raised")

    def taped(self, tape: Tape, level: int, *, coupled: bool) -> list[Quantities]:
        """Return the quantities of a function that draws for itself, on the fine and on the coarse path."""
        with its_own(level, self._arithmetic.format.name):
            fine = self.fine(tape, level, coarse_follows=coupled)
            return [fine, self.coarse(tape, level)] if coupled else [fine]
        raise AssertionError("what it raises is raised")

    def typed(self, draws: Given) -> tuple[npt.NDArray[Any], npt.NDArray[Any] | None]:
        """Return draws as the function gets them: in its layout's order, in its types where it rounds for itself."""
        layout, own = self.source.file.kernel.layout, self.source.rounds == "itself"
        form = self._arithmetic.format
        low = arranged(draws.narrow, layout)
        if not own:
            return np.array(low), None
        wide = None
        if draws.wide is not None and self._wide is not None:
            wide = arranged(draws.wide, layout).astype(FORMATS[self._wide].storage)
        return low.astype(form.storage), wide

    def lying(self, draws: Given, level: int, order: Order, *, over_paths: bool = True) -> Quantities:
        """Return the quantities on draws that lie in memory in one of the orders.

        Without `over_paths` no axis of the emulation counts as that of the paths.
        """
        low, wide = self.typed(draws)
        file, paths = self.source.file, draws.narrow.shape[-1]
        step, block = file.ladder.step_size(level), laid(low, order)
        form = self._arithmetic.format
        with its_own(level, form.name):
            if self._own is None:
                with executing():
                    return evaluate_lying(self.copy, block, step, file.keywords(), paths, over_paths=over_paths)
            self._wider.typed = None if wide is None else laid(wide, order)
            try:
                return called_own(self.copy, block, paths, form=form, step=step, keywords=file.keywords())
            finally:
                self._wider.typed = None
        raise AssertionError("what it raises is raised")

    def _copied(
        self, kernel: KernelSource, arithmetic: Arithmetic | None, observer: Observer | None, made: Maker
    ) -> PrivateCopy:
        foreign = kernel.foreign
        if isinstance(foreign, PairLibrary):
            assert self._wide is not None  # a correction of a pair of formats
            copy = PrivateCopy(foreign.pair(self._arithmetic.format, FORMATS[self._wide]), None)
        else:
            copy = super()._copied(kernel, arithmetic, observer, made)
        part = self.source.part
        if part is None:
            return copy
        self._wider.form, self._wider.layout = self._wide, self.source.file.kernel.layout
        wider = self._wider if self.source.paired else None
        return PrivateCopy(_Picked(copy.function, part, wider), copy.setting, copy.copies)


class _Wider:
    """The draws of the wide format for the call under way: carriers, or laid out as the function gets them."""

    draws: Floats | None = None
    typed: npt.NDArray[Any] | None = None
    form: str | None = None
    layout: str = ""

    def beside(self, low: Any) -> Any:
        """Return the wide draws that go with the narrow ones; the narrow ones again where there is no wide format."""
        if self.typed is not None:
            return self.typed
        if self.draws is None or self.form is None:
            return low
        return arranged(self.draws, self.layout).astype(FORMATS[self.form].storage)


class _Picked:
    """A correction whose result is one part of the pair; of `wider` it gets its draws in two formats."""

    def __init__(self, function: Any, part: Part, wider: _Wider | None) -> None:
        self.__wrapped__ = function  # for its signature
        self._part, self._wider = part, wider

    def __call__(self, draws: Any, h: float, *placed: Any, **keywords: Any) -> Any:
        given = draws if self._wider is None else (draws, self._wider.beside(draws))
        found = self.__wrapped__(given, h, *placed, **keywords)
        if not isinstance(found, tuple | list) or len(found) != 2:
            if isinstance(found, Wrapped | np.ndarray):
                what = "one array"
            else:
                what = f"{len(found)} results" if isinstance(found, tuple | list) else described(found)
            raise KernelError(
                f"the correction returned {what}; accepted: a pair, its low and its high part, each an array of shape "
                "(paths,) or a mapping of names to such arrays"
            )
        return found[0 if self._part == "low" else 1]


def laid(block: npt.NDArray[Any], order: Order) -> npt.NDArray[Any]:
    """Return an array with the same values that lie in memory in an order: views with gaps or a step of -1, too."""
    if order == "Fortran":
        return np.array(block, order="F")
    if order == "strided":
        room = np.zeros((*block.shape[:-1], 2 * block.shape[-1]), block.dtype)
        room[..., ::2] = block
        return room[..., ::2]
    if order == "reversed":
        return np.array(block[..., ::-1], order="C")[..., ::-1]
    return np.array(block, order="C")
