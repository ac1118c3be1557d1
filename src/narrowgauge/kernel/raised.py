"""What a kernel raised: as an error with level and arm, and as the lines of its traceback that are the user's."""

from __future__ import annotations

import os
import traceback
from collections.abc import Iterator
from contextlib import contextmanager

from narrowgauge.errors import AuditFileError, DispatchError, KernelError, RaisedElsewhereError, said

__all__ = ["OF_THE_MACHINE", "own_traceback", "whole_traceback", "with_place"]

# What is for want of memory, disk or files says nothing about a format, and another run may not meet it.
OF_THE_MACHINE = (MemoryError, OSError)
_LONGEST = 65536  # characters of a traceback
_HERE = os.path.join(os.path.dirname(os.path.dirname(os.path.abspath(__file__))), "")


@contextmanager
def with_place(level: int, arm: str, but: str = "") -> Iterator[None]:
    """Have what a kernel raises inside leave as a KernelError with level and arm, whose cause is the kernel's own.

    `but` ends the message. Wrong audit files, refusals and escapes pass, and so does Ctrl-C.
    """
    try:
        yield
    except KernelError as problem:
        raise KernelError(said(problem), level=level, arm=arm) from problem.__cause__
    except (AuditFileError, DispatchError, KeyboardInterrupt):
        raise
    except BaseException as problem:  # whatever it is, it is the kernel's own: its traceback is shown
        what = f"the kernel raised {type(problem).__name__}: {said(problem)}{but}"
        raise KernelError(what, level=level, arm=arm) from problem


def own_traceback(problem: BaseException) -> str:
    """Return a traceback without the frames of this package, or "" if none is left; as it came from another process."""
    if isinstance(problem, RaisedElsewhereError):
        return problem.text
    try:
        return _own(traceback.TracebackException.from_exception(problem))[:_LONGEST]
    except BaseException:  # an exception of the kernel's own class may fail in any of its attributes
        return ""


def whole_traceback(problem: BaseException) -> str:
    """Return a traceback with every frame."""
    try:
        return "".join(traceback.format_exception(problem))[:_LONGEST]
    except BaseException:  # likewise
        return "".join(traceback.format_tb(problem.__traceback__))[:_LONGEST]


def _own(found: traceback.TracebackException) -> str:
    waiting, kept = [found], 0
    while waiting:
        one = waiting.pop()
        one.stack[:] = [frame for frame in one.stack if not os.path.abspath(frame.filename).startswith(_HERE)]
        kept += len(one.stack)
        waiting += [
            linked for linked in (one.__cause__, one.__context__, *(one.exceptions or ())) if linked is not None
        ]
    return "".join(found.format()) if kept else ""
