"""What a kernel is called with and what it has to return."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.rounding import Floats
from narrowgauge.dispatch.copies import PrivateCopy
from narrowgauge.dispatch.setting import Wrapped
from narrowgauge.errors import EscapeError, KernelError, SettingsMixedError

__all__ = ["SINGLE", "arranged", "evaluate"]

SINGLE = "value"  # the name of a quantity that is returned as a bare array
_ACCEPTED = "accepted: an array of shape (paths,), or a mapping of names to such arrays"


def arranged(draws: Floats, layout: str) -> Floats:
    """Return the kernel's own copy of (steps, factors, paths) draws in the order that `layout` names.

    A layout without "factors" drops that axis, which has length one. The copy is C-contiguous.
    """
    axes = [name.strip() for name in layout.split(",")]
    source = draws if "factors" in axes else draws[:, 0, :]
    names = ["steps", "factors", "paths"] if "factors" in axes else ["steps", "paths"]
    return np.array(source.transpose([names.index(name) for name in axes]), order="C", copy=True)


def evaluate(
    copy: PrivateCopy, draws: Floats, step: float, keywords: Mapping[str, object], layout: str
) -> dict[str, npt.NDArray[np.float64]]:
    """Call a kernel on (steps, factors, paths) carriers and return its quantities, float64 arrays of shape (paths,).

    Raises EscapeError or RefusedError for what happened inside, also where the kernel swallowed it; KernelError for a
    result of the wrong kind or shape; and whatever the kernel raises.
    """
    paths = draws.shape[-1]
    setting = copy.setting
    if setting is not None:
        setting.faults.clear()
    try:
        with np.errstate(all="ignore"):
            result = copy.function(copy.own(arranged(draws, layout)), step, **keywords)
    finally:
        if setting is not None and setting.faults:
            raise setting.faults[0]
    named = result if isinstance(result, Mapping) else {SINGLE: result}
    if not named:
        raise KernelError(f"the kernel returned an empty mapping; {_ACCEPTED}")
    quantities = {}
    for name, values in named.items():
        if not isinstance(name, str) or not name:
            raise KernelError(f"the kernel returned a quantity named {name!r}; accepted: names that are strings")
        quantities[name] = _column(values, name, paths, copy)
    return quantities


def _column(values: Any, name: str, paths: int, copy: PrivateCopy) -> npt.NDArray[np.float64]:
    carrier = values._carrier if isinstance(values, Wrapped) else values
    label = "" if name == SINGLE else f" as {name!r}"
    if isinstance(values, Wrapped) and values._setting is not copy.setting:
        raise SettingsMixedError(f"the kernel returned an array of another run{label}: a cache of it outlives the run")
    if not isinstance(carrier, np.ndarray):
        raise KernelError(f"the kernel returned {_described(carrier)}{label}; {_ACCEPTED}")
    if carrier.shape != (paths,):
        raise KernelError(
            f"the kernel returned an array of shape {carrier.shape}{label} for {paths} paths; {_ACCEPTED}"
        )
    if carrier.dtype.kind not in "biuf":
        raise KernelError(f"the kernel returned an array of dtype {carrier.dtype}{label}; accepted: real numbers")
    if (
        copy.setting is not None
        and not isinstance(values, Wrapped)
        and carrier.dtype.kind == "f"  # booleans and integers are exact
        and not copy.setting.arithmetic.holds(carrier)
    ):
        raise copy.setting.fault(
            EscapeError,
            f"the kernel returned a plain array{label} whose values {copy.setting.arithmetic.format.name} does not "
            "have: they did not go through the emulated arithmetic",
        )
    return carrier.astype(np.float64)


def _described(value: Any) -> str:
    return "nothing (None)" if value is None else f"a {type(value).__name__}"
