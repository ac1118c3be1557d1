"""A trace of a function that rounds for itself: arrays that tell what NumPy does with them.

There is no duck array where a kernel is called with plain arrays of its format. For the one run that looks for a
difference it is called with a subclass of ndarray, which hands every operation to NumPy as plain arrays, of the same
memory, and tells the trace; the bits are those of the run without.
"""

from __future__ import annotations

from typing import Any

from narrowgauge.conduct.tracing import Trace
from narrowgauge.dispatch.copies import PrivateCopy

__all__ = ["run_traced"]


def run_traced(copy: PrivateCopy, draws: Any, *further: Any, trace: Trace, **keywords: Any) -> Any:
    """Return what `copy.function(draws, *further, **keywords)` returns, as plain arrays, and trace the call.

    `copy` is a fresh one that rounds for itself (`own_copy`); its modules' names for NumPy are exchanged during the
    call, and a place is the innermost line of its modules. `draws` is an array of the kernel's own type in any memory
    layout, which is kept as it is; it is told to the trace, `gave` is left to the caller.
    """
    raise NotImplementedError
