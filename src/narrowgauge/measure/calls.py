"""A kernel in one arithmetic, called on the draws of a block: an array that it gets, or a tape that it draws from."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.arithmetic import Arithmetic, arithmetic_named
from narrowgauge.arithmetic.rounding import Floats
from narrowgauge.dispatch.copies import Maker, PrivateCopy, new_setting
from narrowgauge.dispatch.feed import Feed
from narrowgauge.dispatch.setting import Observer, Place
from narrowgauge.draws.coarsen import Draws, coarse_draws, fine_draws
from narrowgauge.draws.tape import ArmDraws, Reader, Tape, TapeError
from narrowgauge.errors import KernelError
from narrowgauge.kernel.arms import Kind
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.contract import evaluate, evaluate_drawing, takes_one_path
from narrowgauge.kernel.loading import KernelSource, executing, private_copy
from narrowgauge.kernel.ownrounding import evaluate_own, own_copy, timed_own
from narrowgauge.measure.arms import REFERENCE

__all__ = ["Caller", "Quantities"]

Quantities = dict[str, npt.NDArray[np.float64]]


class Caller:
    """A private copy of a kernel in one arithmetic, or in plain NumPy for None; raises what making the copy raises.

    A kernel that takes one path a call is called for each, or with whole `rows` of them. `kind` says which draws of a
    block it sees. One that rounds for itself is called in the arithmetic's format as it is, in float64 for None.
    """

    def __init__(
        self,
        file: AuditFile,
        kernel: KernelSource,
        arithmetic: Arithmetic | None,
        observer: Observer | None = None,
        *,
        rows: bool = False,
        kind: Kind = "exact",
        made: Maker = new_setting,
    ) -> None:
        self._file = file
        self._kind = kind
        self._arithmetic = arithmetic or arithmetic_named(REFERENCE)
        self._feed = Feed() if file.kernel.takes == "rng" else None
        self._drawn: Floats | ArmDraws | None = None
        self._own = kernel if file.kernel.rounds == "itself" else None
        self.copy = self._copied(kernel, arithmetic, observer, made)
        self.one_path = takes_one_path(self.copy.function, file)
        self._rows = rows and self.one_path

    def _copied(
        self, kernel: KernelSource, arithmetic: Arithmetic | None, observer: Observer | None, made: Maker
    ) -> PrivateCopy:
        if self._own is not None:
            return own_copy(kernel, self._arithmetic.format)
        return private_copy(kernel, arithmetic, observer, self._feed, made)

    @property
    def remarks(self) -> list[tuple[Place | None, str]]:
        """What there is to say about the kernel's random numbers, in the order in which it was met."""
        return [] if self._feed is None else list(self._feed.remarks)

    def fine(self, draws: Draws | Tape, level: int, *, coarse_follows: bool = False) -> Quantities:
        """Return the quantities of the fine path; raises what the kernel raises, and what `evaluate` does.

        `coarse_follows`: `coarse` will be called next, and its draws are made before the kernel can write into these.
        """
        if isinstance(draws, Tape):
            self._drawn = ArmDraws(draws, self._arithmetic)
            return self._on_tape(self._drawn.fine(), level, draws.paths)
        if self._kind == "approximate":
            draws = draws.approximated()
        drawn = fine_draws(draws, self._arithmetic)
        self._drawn = coarse_draws(draws, drawn, self._arithmetic) if coarse_follows else None
        return self.on_array(drawn, level)

    def coarse(self, draws: Draws | Tape, level: int) -> Quantities:
        """Return the quantities of the coarse path below `level`, once, on the draws of the fine path just run."""
        drawn, self._drawn = self._drawn, None  # a block's draws are large
        if isinstance(draws, Tape):
            assert isinstance(drawn, ArmDraws)  # of this block, by `fine`
            try:
                reader = drawn.coarse()
            except TapeError as problem:
                raise KernelError(str(problem)) from None
            return self._on_tape(reader, level - 1, draws.paths)
        assert isinstance(drawn, np.ndarray)  # likewise
        return self.on_array(drawn, level - 1)

    def on_array(self, drawn: Floats, level: int) -> Quantities:
        """Return the quantities on draws that are rounded already, carriers of shape (steps, factors, paths)."""
        file = self._file
        if self._own is not None:
            return evaluate_own(
                self._own,
                self.copy,
                drawn,
                form=self._arithmetic.format,
                step=file.ladder.step_size(level),
                keywords=file.keywords(),
                layout=file.kernel.layout,
            )
        step, singly = file.ladder.step_size(level), self.one_path and not self._rows
        with executing():
            return evaluate(self.copy, drawn, step, file.keywords(), file.kernel.layout, singly=singly)

    def seconds(self, drawn: Floats, level: int) -> float:
        """Return the time of one call of a kernel that rounds for itself, on draws as `on_array` takes them."""
        file = self._file
        return timed_own(
            self.copy,
            drawn,
            form=self._arithmetic.format,
            step=file.ladder.step_size(level),
            keywords=file.keywords(),
            layout=file.kernel.layout,
        )

    def _on_tape(self, reader: Reader, level: int, paths: int) -> Quantities:
        assert self._feed is not None  # a tape is drawn from
        ladder = self._file.ladder
        with executing():
            return evaluate_drawing(
                self.copy,
                self._feed,
                reader,
                step=ladder.step_size(level),
                counts=(ladder.steps(level), paths),
                keywords=self._file.keywords(),
                row=self._rows,
            )
