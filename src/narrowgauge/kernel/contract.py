"""What a kernel is called with and what it has to return.

| takes | called as                                                                          |
|-------|------------------------------------------------------------------------------------|
| rng   | kernel(rng, h, steps=..., paths=..., **parameters); `steps` only if it is accepted |
| else  | kernel(draws, h, **parameters)                                                     |

`rng` stands in for np.random.Generator; a kernel that calls np.random, or makes a generator of its own, leaves it be.
An adapter turns this call into the one that a function of a library expects:

    def kernel(rng, h, *, steps, paths, volatility):
        return library.simulate(n_steps=steps, n_paths=paths, dt=h, sigma=volatility)[:, -1]
"""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.rounding import Floats
from narrowgauge.dispatch.array import as_state
from narrowgauge.dispatch.copies import PrivateCopy
from narrowgauge.dispatch.feed import Feed
from narrowgauge.dispatch.randoms import generator
from narrowgauge.dispatch.setting import Wrapped
from narrowgauge.draws.tape import Reader, TapeError
from narrowgauge.errors import AuditFileError, EscapeError, KernelError, SettingsMixedError
from narrowgauge.kernel.auditfile import AuditFile

__all__ = ["SINGLE", "arranged", "check_parameters", "evaluate", "evaluate_drawing"]

SINGLE = "value"  # the name of a quantity that is returned as a bare array
_COUNTS = ("steps", "paths")  # what a kernel that draws for itself has to be told
_ACCEPTED = "accepted: an array of shape (paths,), or a mapping of names to such arrays"


def arranged(draws: Floats, layout: str) -> Floats:
    """Return the kernel's own copy of (steps, factors, paths) draws in the order that `layout` names.

    A layout without "factors" drops that axis, which has length one. The copy is C-contiguous.
    """
    axes = [name.strip() for name in layout.split(",")]
    source = draws if "factors" in axes else draws[:, 0, :]
    names = ["steps", "factors", "paths"] if "factors" in axes else ["steps", "paths"]
    return np.array(source.transpose([names.index(name) for name in axes]), order="C", copy=True)


def check_parameters(function: Callable[..., object], file: AuditFile) -> None:
    """Raise AuditFileError unless a kernel can be called with draws, step size and the audit file's parameters."""
    try:
        takes = list(inspect.signature(function).parameters.values())
    except ValueError:  # a function that does not tell
        return
    positional = [one for one in takes if one.kind in (one.POSITIONAL_ONLY, one.POSITIONAL_OR_KEYWORD)]
    if len(positional) < 2 and not any(one.kind is one.VAR_POSITIONAL for one in takes):
        what = f"the kernel takes {len(positional)} positional arguments"
        raise AuditFileError(file.source, "kernel.run", what, "a function of the draws, the step size and parameters")
    named = [
        one for one in takes if one not in positional[:2] and one.kind in (one.POSITIONAL_OR_KEYWORD, one.KEYWORD_ONLY)
    ]
    if file.kernel.takes == "rng":
        open_ended = any(one.kind is one.VAR_KEYWORD for one in takes)
        _check_counts(file, {one.name for one in named} | (set(_COUNTS) if open_ended else set()))
        named = [one for one in named if one.name not in _COUNTS]
    known = ", ".join(one.name for one in named) or "no parameters"
    for one in named:
        if one.default is one.empty and one.name not in file.parameters:
            raise AuditFileError(file.source, f"parameters.{one.name}", "missing, and the kernel has no default", known)
    if not any(one.kind is one.VAR_KEYWORD for one in takes):
        for name in file.parameters:
            if name not in {one.name for one in named}:
                raise AuditFileError(file.source, f"parameters.{name}", "the kernel takes no such argument", known)


def evaluate(
    copy: PrivateCopy, draws: Floats, step: float, keywords: Mapping[str, object], layout: str
) -> dict[str, npt.NDArray[np.float64]]:
    """Call a kernel on (steps, factors, paths) carriers and return its quantities, float64 arrays of shape (paths,).

    Raises EscapeError or RefusedError for what happened inside, also where the kernel swallowed it; KernelError for a
    result of the wrong kind or shape; and whatever the kernel raises.
    """
    owned = _owned(copy, keywords)
    return _called(copy, lambda: copy.function(copy.own(arranged(draws, layout)), step, **owned), draws.shape[-1])


def evaluate_drawing(
    copy: PrivateCopy,
    feed: Feed,
    reader: Reader,
    *,
    step: float,
    counts: tuple[int, int],
    keywords: Mapping[str, object],
) -> dict[str, npt.NDArray[np.float64]]:
    """Call a kernel that draws for itself, from `reader`; `counts` are steps and paths. Returns as `evaluate` does.

    Raises KernelError besides, where the kernel asks for other random numbers than the run it is compared with, also
    where it swallowed that.
    """
    given = dict(zip(_COUNTS, counts, strict=True))
    asked = _accepted(copy.function)
    keywords = {**_owned(copy, keywords), **{name: given[name] for name in _COUNTS if name in asked}}
    try:
        with feed.run(reader):
            return _called(copy, lambda: copy.function(generator(feed), step, **keywords), counts[1])
    except TapeError as problem:
        raise KernelError(str(problem)) from None


def _called(copy: PrivateCopy, call: Callable[[], Any], paths: int) -> dict[str, npt.NDArray[np.float64]]:
    """Return the quantities of one call."""
    setting = copy.setting
    if setting is not None:
        setting.faults.clear()
        setting.paths = paths
    try:
        with np.errstate(all="ignore"):
            result = call()
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


def _accepted(function: Callable[..., object]) -> set[str]:
    """Return which of `steps` and `paths` a kernel accepts by keyword; a function that does not tell accepts both."""
    try:
        takes = list(inspect.signature(function).parameters.values())
    except ValueError:
        return set(_COUNTS)
    if any(one.kind is one.VAR_KEYWORD for one in takes):
        return set(_COUNTS)
    return {one.name for one in takes if one.kind in (one.POSITIONAL_OR_KEYWORD, one.KEYWORD_ONLY)} & set(_COUNTS)


def _check_counts(file: AuditFile, accepted: set[str]) -> None:
    """Raise AuditFileError unless a kernel that draws for itself can be told how many paths to run."""
    for name in _COUNTS:
        if name in file.parameters:
            what = "the audit gives this number itself, by level and block"
            raise AuditFileError(file.source, f"parameters.{name}", what, "a parameter of another name")
    if "paths" not in accepted:
        what = 'with takes = "rng" the kernel has to take the number of paths'
        wanted = "a function (rng, h, *, steps, paths, **parameters); steps may be left out"
        raise AuditFileError(file.source, "kernel.run", what, wanted)


def _owned(copy: PrivateCopy, keywords: Mapping[str, object]) -> dict[str, Any]:
    """Return parameters as the kernel gets them: arrays of floats are constants of the state, rounded once."""
    return {name: as_state(value, copy.setting) for name, value in keywords.items()}


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
    # Booleans and integers are exact; of floats each must be a value of the format, also one that is wrapped.
    if copy.setting is not None and carrier.dtype.kind == "f" and not copy.setting.arithmetic.holds(carrier):
        plain = "an array" if isinstance(values, Wrapped) else "a plain array"
        raise copy.setting.fault(
            EscapeError,
            f"the kernel returned {plain}{label} whose values {copy.setting.arithmetic.format.name} does not "
            "have: they did not go through the emulated arithmetic",
        )
    return carrier.astype(np.float64)


def _described(value: Any) -> str:
    return "nothing (None)" if value is None else f"a {type(value).__name__}"
