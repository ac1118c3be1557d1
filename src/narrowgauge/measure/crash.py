"""Where in Python's code a process crashed, from the stack that the interpreter wrote as its last act."""

from __future__ import annotations

import re
from typing import IO

from narrowgauge.kernel.raised import HERE

__all__ = ["innermost"]

_FRAME = re.compile(r'^  File "(.+)", line (\d+) in (.+)$')


def innermost(trace: IO[bytes]) -> str:
    """Return " at FILE:LINE" of the innermost frame that is not this package's, and its callers; "" without a stack.

    The file is emptied: the next crash writes it anew.
    """
    trace.seek(0)
    lines = trace.read().decode("utf-8", "replace").splitlines()
    trace.seek(0)
    trace.truncate()
    found: list[str] = []
    for line in lines:
        frame = _FRAME.match(line)
        own = frame is not None and frame[1].startswith(HERE)
        if found and own:
            break
        if frame is not None and not own:
            # A library's function is there by the name of its file; "<string>" and its like are Python, too.
            python = frame[1].endswith((".py", ">"))
            found.append(f"{frame[1]}:{frame[2]}" if python else f"{frame[3]} of {frame[1]}")
    return f" at {', called from '.join(found)}" if found else ""
