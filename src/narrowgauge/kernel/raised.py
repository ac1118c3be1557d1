"""What a kernel raised, as the lines of its traceback that are the user's."""

from __future__ import annotations

import os
import traceback

from narrowgauge.errors import RaisedElsewhereError

__all__ = ["own_traceback"]

_HERE = os.path.join(os.path.dirname(os.path.dirname(os.path.abspath(__file__))), "")


def own_traceback(problem: BaseException) -> str:
    """Return a traceback without the frames of this package, or "" if none is left; as it came from another process."""
    if isinstance(problem, RaisedElsewhereError):
        return problem.text
    found = traceback.TracebackException.from_exception(problem)
    waiting, kept = [found], 0
    while waiting:
        one = waiting.pop()
        one.stack[:] = [frame for frame in one.stack if not os.path.abspath(frame.filename).startswith(_HERE)]
        kept += len(one.stack)
        waiting += [
            linked for linked in (one.__cause__, one.__context__, *(one.exceptions or ())) if linked is not None
        ]
    return "".join(found.format()) if kept else ""
