"""Whether a kernel that takes one path a call can be run with whole rows of paths: tried, and held to single paths.

Rows are much faster, and right where the kernel does with an array what it does with a number. They are taken only if
nothing in the control flow depends on the state, and every arm gives with them what it gives path by path.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from narrowgauge.arithmetic.arithmetic import Arithmetic, arithmetic_named
from narrowgauge.dispatch.setting import Place, Route, Setting, Way
from narrowgauge.draws.coarsen import Draws
from narrowgauge.draws.tape import Tape
from narrowgauge.errors import DispatchError, KernelError, said
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.loading import KernelSource
from narrowgauge.kernel.raised import OF_THE_MACHINE, innermost_of, kept_apart, raised, with_place
from narrowgauge.measure.arms import PLAIN, REFERENCE
from narrowgauge.measure.calls import Caller, Quantities

__all__ = ["RowPlan", "plan_rows"]

# Of NumPy's own functions in float32 and float64 the one of a number and the one of an array differ in last places.
_LAST_PLACES = 64
_LEVEL = 2
_MANY, _FEW = 1024, 32  # paths that are compared in plain NumPy, and in each arm
_BREAK = "\n"


@dataclass(frozen=True, slots=True, kw_only=True)
class RowPlan:
    """How a kernel that takes one path a call is run, and what there is to say about it."""

    rows: bool
    remark: str


class _Decisions:
    """An observer that keeps the first line whose control flow depends on the state."""

    def __init__(self) -> None:
        self.first: Place | None = None
        self.count = 0

    def saw(self, setting: Setting, operation: str, route: Route, operands: Sequence[Any], result: Any) -> None:
        """Leave it: an operation is no decision."""

    def met(self, setting: Setting, constant: Any) -> None:
        """Leave it: a constant is none."""

    def left(self, setting: Setting, way: Way) -> None:
        """Leave it: an integer is counted as a decision."""

    def decided(self, setting: Setting, answer: bool) -> None:
        """Keep the place of the first decision."""
        self.first = self.first or setting.where()
        self.count += 1


def plan_rows(
    file: AuditFile, kernel: KernelSource, arms: Sequence[str], draws_of: Callable[[int, int], Draws | Tape]
) -> RowPlan | None:
    """Try whole rows against single paths in every arm; None for a kernel that takes all paths in one call.

    `draws_of` gives the draws of a level for a number of paths. Raises what single paths raise in plain NumPy.
    """
    trial = _Trial(file, kernel)
    if not trial.plain.one_path:
        return None
    reason = trial.against(arms, draws_of)
    if reason:
        return RowPlan(
            rows=False, remark=f"the kernel takes one path a call and is run path by path, which is slow: {reason}"
        )
    return RowPlan(
        rows=True,
        remark="the kernel takes one path a call: it is run with whole rows of paths, which give what single ones do",
    )


class _Trial:
    """One level of a kernel, run with rows and with single paths."""

    def __init__(self, file: AuditFile, kernel: KernelSource) -> None:
        self._file, self._kernel = file, kernel
        self._level = min(_LEVEL, file.ladder.finest)
        self.plain = Caller(file, kernel, None)

    def against(self, arms: Sequence[str], draws_of: Callable[[int, int], Draws | Tape]) -> str:
        """Return what stands against rows: first in the reference and in plain NumPy, then in every other arm."""
        many, few = draws_of(self._level, _MANY), draws_of(self._level, _FEW)
        singles = self._plainly(many)
        reason = self._differs(REFERENCE, many, singles) or self._differs(PLAIN, many, singles)
        if reason:
            return reason
        self._plainly(few)  # writes what the arms have to ask for
        for arm in arms:
            with kept_apart(self._level, arm) as kept:
                found = Caller(self._file, self._kernel, arithmetic_named(arm)).fine(few, self._level)
            if kept.problem is not None:  # the audit keeps it as data
                return f"{arm} raised {type(kept.problem).__name__} with single paths"
            reason = self._differs(arm, few, found)
            if reason:
                break
        return reason

    def _plainly(self, draws: Draws | Tape) -> Quantities:
        """Run single paths in plain NumPy; what the kernel raises is a KernelError."""
        with with_place(self._level, PLAIN):
            return self.plain.fine(draws, self._level)

    def _differs(self, arm: str, draws: Draws | Tape, singles: Quantities) -> str:
        """Return what stands against rows in one arm or in plain NumPy; empty if nothing does."""
        observer = _Decisions()
        arithmetic = None if arm == PLAIN else arithmetic_named(arm)
        caller = Caller(self._file, self._kernel, arithmetic, observer if arithmetic else None, rows=True)
        try:
            rows = caller.fine(draws, self._level)
        except KeyboardInterrupt:
            raise
        except (DispatchError, KernelError) as problem:
            what = f"with a row of paths: {said(problem)}"
            for name in caller.copy.setting.files if caller.copy.setting else ():
                what = what.replace(name, self._file.shown(name))
            return what
        except OF_THE_MACHINE as problem:  # says nothing about rows
            raise raised(problem, self._level, arm) from problem
        except BaseException as problem:  # written for numbers, the kernel may raise anything
            what = f"with a row of paths it raises {type(problem).__name__}: {said(problem).partition(_BREAK)[0]}"
            last = innermost_of(problem, caller.copy.setting)
            return f"{self._file.shown(last.filename)}:{last.lineno}: {what}" if last else what
        if observer.count:
            place = f"{self._file.shown(observer.first.file)}:{observer.first.line}: " if observer.first else ""
            return f"{place}a decision depends on the state"
        return _apart(rows, singles, arithmetic)


def _apart(rows: Quantities, singles: Quantities, arithmetic: Arithmetic | None) -> str:
    """Return the first path that a row gives another value; native formats may differ in last places."""
    native = arithmetic is None or arithmetic.format.native
    precision = 53 if arithmetic is None else arithmetic.format.precision
    for name, single in singles.items():
        if name not in rows:
            return f"with a row of paths it does not return {name}"
        largest = np.max(np.abs(single), initial=0.0, where=np.isfinite(single))
        near = _LAST_PLACES * 2.0**-precision * largest if native else 0.0
        same = np.isclose(rows[name], single, rtol=0.0, atol=near, equal_nan=True)
        if not same.all():
            path = int(np.argmin(same))
            found, alone = float(rows[name][path]), float(single[path])
            return f"with a row of paths it gives path {path} the value {found!r}, with that path alone {alone!r}"
    return ""
