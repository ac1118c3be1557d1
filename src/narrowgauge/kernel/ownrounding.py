"""Kernels that round for themselves: called with draws in each format's own type, and taken at their word.

A Python function is executed anew under plain NumPy, so that nothing of the user's changes; whatever arrays it returns,
np.asarray has to convert. Nothing is emulated and nothing can escape.
"""

from __future__ import annotations

import time
from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.formats import FORMATS, Format
from narrowgauge.arithmetic.rounding import Floats
from narrowgauge.dispatch.copies import PrivateCopy
from narrowgauge.errors import KernelError
from narrowgauge.kernel.contract import ACCEPTED, arranged, check_shape, described, label_of, quantities_of
from narrowgauge.kernel.loading import KernelSource, private_copy
from narrowgauge.kernel.owntables import OWN_FORMATS

__all__ = ["called_own", "evaluate_own", "own_copy", "timed_own"]

_TYPES: dict[np.dtype[Any], Format] = {FORMATS[name].storage: FORMATS[name] for name in OWN_FORMATS}


def own_copy(kernel: KernelSource, form: Format) -> PrivateCopy:
    """Return the kernel's function for one format; raises what making the copy raises, and what `function` does."""
    if kernel.foreign is None:
        return private_copy(kernel, None)
    return PrivateCopy(kernel.foreign.function(form), None)


def evaluate_own(
    kernel: KernelSource,
    copy: PrivateCopy,
    draws: Floats,
    *,
    form: Format,
    step: float,
    keywords: Mapping[str, object],
    layout: str,
) -> dict[str, npt.NDArray[np.float64]]:
    """Call a kernel on (steps, factors, paths) carriers that hold values of `form`, in its type and the layout's order.

    Returns the quantities, float64 arrays of shape (paths,). Raises KernelError for a result of the wrong kind or shape
    or of a type that does not hold the format, for NaN in the reference of a library or command, and whatever the
    kernel raises.
    """
    given = arranged(draws, layout).astype(form.storage)
    found = called_own(copy, given, draws.shape[-1], form=form, step=step, keywords=keywords)
    if kernel.foreign is not None and form.name == "float64":
        for name, values in found.items():
            if (wrong := np.isnan(values)).any():
                count = f"{int(wrong.sum())} of {wrong.size} paths, the first is path {int(np.argmax(wrong))}"
                raise KernelError(
                    f"{kernel.run} gives NaN in the reference for {name!r}: {count}; {kernel.foreign.nan}"
                )
    return found


def called_own(
    copy: PrivateCopy, given: Any, paths: int, *, form: Format, step: float, keywords: Mapping[str, object]
) -> dict[str, npt.NDArray[np.float64]]:
    """Call a kernel on draws of its own type as they lie in memory; returns and raises as `evaluate_own` does."""
    with np.errstate(all="ignore"):
        result = copy.function(given, step, **keywords)
        return {name: _column(values, name, paths, form) for name, values in quantities_of(result).items()}


def timed_own(
    copy: PrivateCopy,
    draws: Floats,
    *,
    form: Format,
    step: float,
    keywords: Mapping[str, object],
    layout: str,
) -> float:
    """Return the seconds of one call alone, without what it takes to hand it its draws in its type."""
    given = arranged(draws, layout).astype(form.storage)
    with np.errstate(all="ignore"):
        start = time.perf_counter()
        copy.function(given, step, **keywords)
        return time.perf_counter() - start


def _column(values: Any, name: str, paths: int, form: Format) -> npt.NDArray[np.float64]:
    label = label_of(name)
    if values is None:
        raise KernelError(f"the kernel returned {described(values)}{label}; {ACCEPTED}")
    try:
        array = np.asarray(values)
    except (TypeError, ValueError, RuntimeError) as problem:
        what = f"the kernel returned {described(values)}{label} that np.asarray does not convert ({problem})"
        raise KernelError(f"{what}; {ACCEPTED}") from None
    check_shape(array, label, paths)
    if array.dtype.kind not in "biu":
        held = _TYPES.get(array.dtype.newbyteorder("="))
        if held is None:
            raise KernelError(f"the kernel returned an array of dtype {array.dtype}{label}; accepted: real numbers")
        if not held.includes(form):
            raise KernelError(
                f"the kernel got its draws in {form.name} and returned {held.name}{label}, which does not hold all "
                f"numbers of {form.name}; accepted: {form.name} or a wider type (some array libraries narrow float64 "
                "to float32 unless they are told not to)"
            )
    return array.astype(np.float64)
