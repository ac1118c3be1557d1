"""Whether NumPy itself gives other bits for the same values in another shape or layout."""

from __future__ import annotations

from typing import Literal

from narrowgauge.conduct.tracing import Trace

__all__ = ["Layout", "repeated"]

Layout = Literal["C", "Fortran", "strided", "reversed"]


def repeated(trace: Trace, number: int, *, paths: int | None = None, layout: Layout | None = None) -> bool | None:
    """Whether NumPy differs from itself in operation `number` of a trace, in another batch size or memory layout.

    The operation runs on the kept values in plain NumPy, as it was and with `paths` columns, the kept ones in turn, or
    with operands laid out anew; True where a kept path has other bits. None where the operation is not one that NumPy
    can be asked to repeat.
    """
    raise NotImplementedError
