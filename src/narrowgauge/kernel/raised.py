"""What a kernel raised: as an error with level and arm, and as the lines of its traceback that are the user's."""

from __future__ import annotations

import os
import traceback
from collections.abc import Iterator
from contextlib import contextmanager

from narrowgauge.dispatch.setting import Setting
from narrowgauge.errors import AuditFileError, DispatchError, KernelError, RaisedElsewhereError, said

__all__ = [
    "HERE",
    "OF_THE_MACHINE",
    "Kept",
    "innermost_of",
    "kept_apart",
    "own_traceback",
    "raised",
    "whole_traceback",
    "with_place",
]

# What is for want of memory, disk or files says nothing about a format, and another run may not meet it.
OF_THE_MACHINE = (MemoryError, OSError)
_LONGEST = 65536  # characters of a traceback
HERE = os.path.join(os.path.dirname(os.path.dirname(os.path.abspath(__file__))), "")  # this package's folder


class Kept:
    """What a kernel raised of its own, or None; see `kept_apart`."""

    __slots__ = ("problem",)

    def __init__(self) -> None:
        self.problem: BaseException | None = None


@contextmanager
def kept_apart(level: int, arm: str) -> Iterator[Kept]:
    """Keep what a kernel raises inside as data, to be asked for afterwards: in a narrow arm it is a result.

    What the program itself found leaves as a KernelError with level and arm, and so does want of memory or files. Wrong
    audit files, refusals and escapes pass, and so does Ctrl-C.
    """
    kept = Kept()
    try:
        yield kept
    except KernelError as problem:
        if problem.level is not None:
            raise
        raise KernelError(said(problem), level=level, arm=arm) from problem.__cause__
    except (AuditFileError, DispatchError, KeyboardInterrupt):
        raise
    except OF_THE_MACHINE as problem:
        raise raised(problem, level, arm) from problem
    except BaseException as problem:  # whatever it is, it is the kernel's own
        kept.problem = problem


@contextmanager
def with_place(level: int, arm: str, but: str = "") -> Iterator[None]:
    """Have all that a kernel raises inside leave as a KernelError with level and arm, as `kept_apart` says.

    Its cause is the kernel's own, whose traceback is shown; `but` ends the message.
    """
    with kept_apart(level, arm) as kept:
        yield
    if kept.problem is not None:
        raise raised(kept.problem, level, arm, but) from kept.problem


def raised(problem: BaseException, level: int | None = None, arm: str | None = None, but: str = "") -> KernelError:
    """Return the error that says what a kernel raised."""
    return KernelError(f"the kernel raised {type(problem).__name__}: {said(problem)}{but}", level=level, arm=arm)


def innermost_of(problem: BaseException, setting: Setting | None) -> traceback.FrameSummary | None:
    """Return the innermost frame in the user's modules that an exception came through; None without one."""
    files = setting.files if setting is not None else set()
    frames = [frame for frame in traceback.extract_tb(problem.__traceback__) if frame.filename in files]
    return frames[-1] if frames else None


def own_traceback(problem: BaseException) -> str:
    """Return a traceback without the frames of this package, or "" if none is left; as it came from another process."""
    if isinstance(problem, RaisedElsewhereError):
        return problem.text
    try:
        return _cut(_own(traceback.TracebackException.from_exception(problem)))
    except BaseException:  # an exception of the kernel's own class may fail in any of its attributes
        return ""


def whole_traceback(problem: BaseException) -> str:
    """Return a traceback with every frame."""
    try:
        return _cut("".join(traceback.format_exception(problem)))
    except BaseException:  # as above
        return _cut("".join(traceback.format_tb(problem.__traceback__)))


def _cut(text: str) -> str:
    return text if len(text) <= _LONGEST else f"{text[:_LONGEST]} ...\n"


def _own(found: traceback.TracebackException) -> str:
    waiting, kept = [found], 0
    while waiting:
        one = waiting.pop()
        one.stack[:] = [frame for frame in one.stack if not os.path.abspath(frame.filename).startswith(HERE)]
        kept += len(one.stack)
        waiting += [
            linked for linked in (one.__cause__, one.__context__, *(one.exceptions or ())) if linked is not None
        ]
    return "".join(found.format()) if kept else ""
