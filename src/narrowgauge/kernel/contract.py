"""What a kernel is called with and what it has to return.

| takes | called as                                                                          |
|-------|------------------------------------------------------------------------------------|
| rng   | kernel(rng, h, steps=..., paths=..., **parameters); `steps` only if it is accepted |
| else  | kernel(draws, h, **parameters)                                                     |

A kernel whose layout names no axis of paths, or that draws for itself and does not accept `paths`, takes one path a
call and returns a number, or a mapping of names to numbers.

`rng` stands in for np.random.Generator; a kernel that calls np.random, or makes a generator of its own, leaves it be.
An adapter turns this call into the one that a function of a library expects:

    def kernel(rng, h, *, steps, paths, volatility):
        return library.simulate(n_steps=steps, n_paths=paths, dt=h, sigma=volatility)[:, -1]
"""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.rounding import Floats
from narrowgauge.dispatch.array import as_state
from narrowgauge.dispatch.copies import PrivateCopy
from narrowgauge.dispatch.feed import Feed
from narrowgauge.dispatch.randoms import generator
from narrowgauge.dispatch.setting import Wrapped
from narrowgauge.draws.columns import Columns
from narrowgauge.draws.tape import Reader, TapeError
from narrowgauge.errors import AuditFileError, EscapeError, KernelError, SettingsMixedError
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.audittables import axes_of

__all__ = [
    "ACCEPTED",
    "SINGLE",
    "arranged",
    "check_parameters",
    "check_shape",
    "described",
    "evaluate",
    "evaluate_drawing",
    "evaluate_lying",
    "label_of",
    "quantities_of",
    "takes_one_path",
]

SINGLE = "value"  # the name of a quantity that is returned as a bare array
_COUNTS = ("steps", "paths")  # what a kernel that draws for itself has to be told
ACCEPTED = "accepted: an array of shape (paths,), or a mapping of names to such arrays"
_MOST_CONSTANTS = 16  # of one quantity, among the plain numbers that single paths return
_ACCEPTED_ONE = (
    "accepted: a number, or a mapping of names to numbers, since neither layout nor arguments of the kernel name paths"
)


def arranged(draws: Floats, layout: str) -> Floats:
    """Return (steps, factors, paths) draws in the order that `layout` names, in their own memory if that is theirs.

    A layout without "factors" drops that axis, which has length one; where it names no paths they come last. The
    result is C-contiguous.
    """
    axes = axes_of(layout)
    axes += ["paths"] if "paths" not in axes else []
    source = draws if "factors" in axes else draws[:, 0, :]
    names = ["steps", "factors", "paths"] if "factors" in axes else ["steps", "paths"]
    return np.ascontiguousarray(source.transpose([names.index(name) for name in axes]))


def takes_one_path(function: Callable[..., object], file: AuditFile) -> bool:
    """Whether a kernel is called once for each path."""
    if file.kernel.takes == "rng":
        return "paths" not in _accepted(function)
    return "paths" not in file.kernel.layout


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
        _check_counts(file)
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
    copy: PrivateCopy, draws: Floats, step: float, keywords: Mapping[str, object], layout: str, *, singly: bool = False
) -> dict[str, npt.NDArray[np.float64]]:
    """Call a kernel on (steps, factors, paths) carriers and return its quantities, float64 arrays of shape (paths,).

    `singly`: one path a call. The kernel may write into the draws. Raises EscapeError or RefusedError for what happened
    inside, also where the kernel swallowed it; KernelError for a result of the wrong kind or shape; and whatever the
    kernel raises.
    """
    block = arranged(draws, layout)
    if not singly:
        owned = _owned(copy, keywords)
        return _called(copy, lambda: copy.function(copy.own(block), step, **owned), draws.shape[-1])

    def one(path: int) -> Any:
        return copy.function(copy.own(np.array(block[..., path])), step, **_owned(copy, keywords))

    return _called_singly(copy, one, draws.shape[-1])


def evaluate_lying(
    copy: PrivateCopy, block: Floats, step: float, keywords: Mapping[str, object], paths: int, *, over_paths: bool
) -> dict[str, npt.NDArray[np.float64]]:
    """Call a kernel on carriers as they lie in memory, in the order of its layout; returns as `evaluate` does.

    Without `over_paths` no axis counts as that of the paths, which can be as many as steps where they are few.
    """
    owned = _owned(copy, keywords)
    return _called(copy, lambda: copy.function(copy.own(block), step, **owned), paths, over_paths=over_paths)


def evaluate_drawing(
    copy: PrivateCopy,
    feed: Feed,
    reader: Reader,
    *,
    step: float,
    counts: tuple[int, int],
    keywords: Mapping[str, object],
    row: bool = False,
) -> dict[str, npt.NDArray[np.float64]]:
    """Call a kernel that draws for itself, from `reader`; `counts` are steps and paths. Returns as `evaluate` does.

    A kernel that takes one path a call is called once for each, or once with a `row` of them. Raises KernelError
    besides, where the kernel asks for other random numbers than the run it is compared with, also where it swallowed
    that.
    """
    given = dict(zip(_COUNTS, counts, strict=True))
    asked = _accepted(copy.function)
    named = {name: given[name] for name in _COUNTS if name in asked}
    singly = "paths" not in asked and not row
    rows = Columns(reader, counts[1]) if singly else None

    def one(path: int | None) -> Any:
        if rows is not None and path is not None:
            rows.begin(path)
        with feed.run(rows or reader, counts[1] if row else None):
            return copy.function(generator(feed), step, **_owned(copy, keywords), **named)

    try:
        return _called_singly(copy, one, counts[1]) if singly else _called(copy, lambda: one(None), counts[1])
    except TapeError as problem:
        raise KernelError(str(problem)) from None


def _called(
    copy: PrivateCopy, call: Callable[[], Any], paths: int, *, over_paths: bool = True
) -> dict[str, npt.NDArray[np.float64]]:
    """Return the quantities of one call."""
    setting = copy.setting
    if setting is not None:
        setting.faults.clear()
        setting.paths = paths if over_paths else None
    try:
        with np.errstate(all="ignore"):
            result = call()
    finally:
        if setting is not None and setting.faults:
            raise setting.faults[0]
    return {name: _column(values, name, paths, copy) for name, values in quantities_of(result).items()}


def _called_singly(copy: PrivateCopy, call: Callable[[int], Any], paths: int) -> dict[str, npt.NDArray[np.float64]]:
    """Return the quantities of one call for each path."""
    setting = copy.setting
    if setting is not None:
        setting.faults.clear()
        setting.paths = None  # no axis is that of the paths
    found: dict[str, list[Any]] = {}
    with np.errstate(all="ignore"):
        for path in range(paths):
            try:
                result = quantities_of(call(path))
            finally:
                if setting is not None and setting.faults:
                    raise setting.faults[0]
            if path and result.keys() != found.keys():
                here, before = ", ".join(result), ", ".join(found)
                raise KernelError(f"the kernel returned {here} for path {path}, {before} for those before it")
            for name, value in result.items():
                found.setdefault(name, []).append(_number(value, name, copy))
    return {
        name: _column(np.array(_constants(values, name, copy)), name, paths, copy) for name, values in found.items()
    }


def quantities_of(result: Any) -> Mapping[str, Any]:
    """Return what the kernel returned as a mapping of quantities; KernelError where it is empty or has other names."""
    named = result if isinstance(result, Mapping) else {SINGLE: result}
    if not named:
        raise KernelError(f"the kernel returned an empty mapping; {ACCEPTED}")
    for name in named:
        if not isinstance(name, str) or not name:
            raise KernelError(f"the kernel returned a quantity named {name!r}; accepted: names that are strings")
    return named


def _constants(values: list[Any], name: str, copy: PrivateCopy) -> list[Any]:
    """Return the results of all paths with those that are plain numbers, such as a rebate, rounded as constants are.

    Raises EscapeError where there are too many of them to be constants.
    """
    setting = copy.setting
    if setting is None:
        return values
    plain = {path: value.number for path, value in enumerate(values) if isinstance(value, _Plain)}
    strange = {path: number for path, number in plain.items() if not setting.arithmetic.holds(np.asarray(number))}
    different = len(set(strange.values()))
    if different > _MOST_CONSTANTS:
        code = getattr(copy.function, "__code__", None)
        place = f"{code.co_filename}:{code.co_firstlineno}: " if code else ""
        raise setting.fault(
            EscapeError,
            f"{place}results{label_of(name)} of {len(values)} paths are {different} different plain numbers that "
            f"{setting.arithmetic.format.name} does not have, the first is that of path {next(iter(strange))}: "
            "they did not go through the emulated arithmetic; "
            f"accepted: values of the state, and at most {_MOST_CONSTANTS} constants",
        )
    return [setting.admit(value.number) if isinstance(value, _Plain) else value for value in values]


class _Plain(NamedTuple):
    """One path's result that is no value of the state."""

    number: Any


def _number(value: Any, name: str, copy: PrivateCopy) -> Any:
    """Return the carrier of one path's quantity, a number or an array of one; marked where it is none of the state."""
    carrier = _carrier(value, name, copy)
    if np.size(carrier) != 1 or np.asarray(carrier).dtype.kind not in "biuf":
        what = f"an array of shape {np.shape(carrier)}" if np.ndim(carrier) else described(carrier)
        raise KernelError(f"the kernel returned {what}{label_of(name)}; {_ACCEPTED_ONE}")
    number = carrier.reshape(())[()] if isinstance(carrier, np.ndarray) else carrier
    plain = copy.setting is not None and not isinstance(value, Wrapped)
    return _Plain(number) if plain and np.asarray(number).dtype.kind == "f" else number


def _accepted(function: Callable[..., object]) -> set[str]:
    """Return which of `steps` and `paths` a kernel accepts by keyword; a function that does not tell accepts both."""
    try:
        takes = list(inspect.signature(function).parameters.values())
    except ValueError:
        return set(_COUNTS)
    if any(one.kind is one.VAR_KEYWORD for one in takes):
        return set(_COUNTS)
    return {one.name for one in takes if one.kind in (one.POSITIONAL_OR_KEYWORD, one.KEYWORD_ONLY)} & set(_COUNTS)


def _check_counts(file: AuditFile) -> None:
    """Raise AuditFileError for a parameter that a kernel which draws for itself is given by the audit."""
    for name in _COUNTS:
        if name in file.parameters:
            what = "the audit gives this number itself, by level and block"
            raise AuditFileError(file.source, f"parameters.{name}", what, "a parameter of another name")


def _owned(copy: PrivateCopy, keywords: Mapping[str, object]) -> dict[str, Any]:
    """Return parameters as the kernel gets them: arrays of floats are constants of the state, rounded once."""
    return {name: as_state(value, copy.setting) for name, value in keywords.items()}


def _carrier(values: Any, name: str, copy: PrivateCopy) -> Any:
    if not isinstance(values, Wrapped):
        return values
    if values._setting is not copy.setting:
        what = f"the kernel returned a value of another run{label_of(name)}: a cache of it outlives the run"
        raise SettingsMixedError(what)
    return values._carrier


def label_of(name: str) -> str:
    """Return how a message names a quantity: not at all where it is the only one."""
    return "" if name == SINGLE else f" as {name!r}"


def check_shape(values: npt.NDArray[Any], label: str, paths: int) -> None:
    """Raise KernelError unless a quantity has one value for each path."""
    if values.shape != (paths,):
        raise KernelError(f"the kernel returned an array of shape {values.shape}{label} for {paths} paths; {ACCEPTED}")


def _column(values: Any, name: str, paths: int, copy: PrivateCopy) -> npt.NDArray[np.float64]:
    carrier, label = _carrier(values, name, copy), label_of(name)
    if not isinstance(carrier, np.ndarray):
        raise KernelError(f"the kernel returned {described(carrier)}{label}; {ACCEPTED}")
    check_shape(carrier, label, paths)
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


def described(value: Any) -> str:
    """Return what a message calls a result of the wrong kind."""
    return "nothing (None)" if value is None else f"a {type(value).__name__}"
