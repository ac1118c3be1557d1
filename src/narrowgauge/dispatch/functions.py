"""NumPy's other functions on the state, a row each; what has no row is refused by name.

Contract of the groups, stated once. `MOVED` takes one array first and moves or selects its values; `JOINED` takes a
sequence of arrays first. Their rows name the further arguments that are handled: those before the bar also by place,
every other one is refused by name. The rest are handlers of their own: (setting, arguments, keywords) -> result.
"""

from __future__ import annotations

import operator
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from narrowgauge.dispatch.array import Array, carrier_of, wrap
from narrowgauge.dispatch.mask import bare, is_exact, settled
from narrowgauge.dispatch.scalar import State
from narrowgauge.dispatch.setting import Setting, holds
from narrowgauge.errors import RefusedError

__all__ = ["FUNCTIONS", "JOINED", "MOVED", "call_function"]

MOVED: dict[Callable[..., Any], str] = {
    np.all: "axis | keepdims",
    np.amax: "axis | keepdims",
    np.amin: "axis | keepdims",
    np.any: "axis | keepdims",
    np.array_split: "indices_or_sections axis",
    np.atleast_1d: "",
    np.atleast_2d: "",
    np.broadcast_to: "shape subok",
    np.copy: "order subok",
    np.count_nonzero: "axis | keepdims",
    np.expand_dims: "axis",
    np.flatnonzero: "",
    np.flip: "axis",
    np.max: "axis | keepdims",
    np.min: "axis | keepdims",
    np.moveaxis: "source destination",
    np.ndim: "",
    np.nonzero: "",
    np.ravel: "order",
    np.real: "",
    np.repeat: "repeats axis",
    np.reshape: "shape order | copy",
    np.roll: "shift axis",
    np.shape: "",
    np.size: "axis",
    np.split: "indices_or_sections axis",
    np.squeeze: "axis",
    np.swapaxes: "axis1 axis2",
    np.take: "indices axis | mode",
    np.tile: "reps",
    np.transpose: "axes",
}
JOINED: dict[Callable[..., Any], str] = {
    np.column_stack: "",
    np.concatenate: "axis",
    np.hstack: "",
    np.stack: "axis",
    np.vstack: "",
}

Handler = Callable[[Setting, Sequence[Any], dict[str, Any]], Any]


def call_function(
    setting: Setting, function: Callable[..., Any], arguments: Sequence[Any], keywords: dict[str, Any]
) -> Any:
    """Run one NumPy function on the state by its row; RefusedError names a function that has none.

    A function of masks alone runs as it is if booleans or integers come out.
    """
    handler = FUNCTIONS.get(function)
    if handler is not None:
        return handler(setting, arguments, keywords)
    name = f"{function.__module__}.{function.__name__}".replace("numpy", "np", 1)
    if holds([*arguments, keywords], State):
        raise setting.fault(RefusedError, f"{name} is in no route of this version, so that it cannot be rounded")
    return settled(function(*bare(list(arguments), setting), **bare(keywords, setting)), name, setting)


def _further(
    setting: Setting, function: Callable[..., Any], row: str, further: Sequence[Any], keywords: dict[str, Any]
) -> dict[str, Any]:
    """Return the arguments after the first by name; refuse what the row does not name, and values of the state."""
    placed, _, named = row.partition("|")
    names = placed.split()
    if len(further) > len(names):
        raise setting.fault(
            RefusedError,
            f"np.{function.__name__} takes {len(names)} arguments after the state by place in this version",
        )
    given = dict(zip(names, further, strict=False))
    for name, value in keywords.items():
        if name in names or name in named.split():
            given[name] = value
        elif value is not None:
            raise setting.fault(RefusedError, f"{name}= of np.{function.__name__} is not offered by this version")
    if holds(given, State):
        raise setting.fault(
            RefusedError,
            f"np.{function.__name__} takes the state as its first argument only in this version",
        )
    return {name: bare(value, setting) for name, value in given.items()}


def _moved(function: Callable[..., Any], row: str) -> Handler:
    def handler(setting: Setting, arguments: Sequence[Any], keywords: dict[str, Any]) -> Any:
        given = _further(setting, function, row, arguments[1:], keywords)
        if not arguments or not holds(arguments[0], State):
            plain = function(*bare(list(arguments[:1]), setting), **given)
            return settled(plain, f"np.{function.__name__}", setting)
        result = function(carrier_of(arguments[0], setting), **given)
        if isinstance(result, (list, tuple)):
            return type(result)(wrap(part, setting) for part in result)
        return wrap(result, setting)

    return handler


def _joined(function: Callable[..., Any], row: str) -> Handler:
    def handler(setting: Setting, arguments: Sequence[Any], keywords: dict[str, Any]) -> Any:
        given = _further(setting, function, row, arguments[1:], keywords)
        parts = list(arguments[0]) if arguments else []
        if not holds(parts, State) and all(is_exact(part, setting) for part in parts):
            return wrap(function(bare(parts, setting), **given), setting)
        carrier = setting.arithmetic.format.carrier
        joined = function([np.asarray(carrier_of(part, setting), carrier) for part in parts], **given)
        return wrap(joined, setting)

    return handler


def _like(function: Callable[..., Any], fills: bool) -> Handler:
    def handler(setting: Setting, arguments: Sequence[Any], keywords: dict[str, Any]) -> Any:
        model, *rest = arguments
        given = dict(keywords)
        value = given.pop("fill_value") if fills and not rest else rest.pop(0) if fills else None
        given |= zip(("dtype", "order", "subok", "shape"), rest, strict=False)
        unknown = set(given) - {"dtype", "order", "subok", "shape"}
        if unknown:
            raise setting.fault(
                RefusedError, f"{min(unknown)}= of np.{function.__name__} is not offered by this version"
            )
        dtype = given.pop("dtype", None)
        floats = holds(model, State) or not is_exact(model, setting)
        source = np.asarray(carrier_of(model, setting) if holds(model, State) else bare(model, setting))
        if (dtype is None and not floats) or (dtype is not None and setting.float_dtype(dtype) is None):
            filling = (bare(value, setting),) if fills else ()
            return wrap(function(source, *filling, dtype=dtype, **given), setting)
        filling = (carrier_of(value, setting),) if fills else ()
        made = function(source, *filling, dtype=setting.arithmetic.format.carrier, **given)
        if function is np.empty_like:
            made.fill(np.nan)  # what is read before it is written must not pass for a value of the format
        return Array(made, setting)

    return handler


def _where(setting: Setting, arguments: Sequence[Any], keywords: dict[str, Any]) -> Any:
    if keywords:
        raise setting.fault(RefusedError, f"{next(iter(keywords))}= of np.where is not offered by this version")
    condition, *values = arguments
    # a plain condition is not rounded: 1e-30 is true in every format
    chooser = carrier_of(condition, setting) if holds(condition, State) else bare(condition, setting)
    if not holds(values, State) and all(is_exact(value, setting) for value in values):
        return wrap(np.where(chooser, *bare(values, setting)), setting)
    carrier = setting.arithmetic.format.carrier
    return wrap(np.where(chooser, *(np.asarray(carrier_of(value, setting), carrier) for value in values)), setting)


def _clip(setting: Setting, arguments: Sequence[Any], keywords: dict[str, Any]) -> Any:
    value, *placed = arguments
    given = dict(zip(("a_min", "a_max", "out"), placed, strict=False)) | keywords
    bounds: dict[str, Any] = {
        name: None if bound is None else carrier_of(bound, setting)
        for name, bound in given.items()
        if name in ("a_min", "a_max", "min", "max")
    }
    for name in given.keys() - bounds.keys():
        if given[name] is not None:
            raise setting.fault(RefusedError, f"{name}= of np.clip is not offered by this version")
    carrier = carrier_of(value, setting)
    if not isinstance(value, State):
        carrier = np.asarray(carrier, setting.arithmetic.format.carrier)
    result = np.clip(carrier, **bounds)
    setting.note("clip", "exact", (carrier, *bounds.values()), result)
    return wrap(result, setting)


def _diff(setting: Setting, arguments: Sequence[Any], keywords: dict[str, Any]) -> Any:
    value, *placed = arguments
    given = dict(zip(("n", "axis"), placed, strict=False)) | keywords
    unknown = set(given) - {"n", "axis"}
    if not holds([*arguments, keywords], State):
        return settled(np.diff(*bare(list(arguments), setting), **bare(keywords, setting)), "np.diff", setting)
    if unknown or not isinstance(value, Array):
        what = f"{min(unknown)}= of np.diff" if unknown else "np.diff of anything but an array of the state"
        raise setting.fault(RefusedError, f"{what} is not offered by this version")
    axis, times = operator.index(given.get("axis", -1)), operator.index(given.get("n", 1))
    if times < 0:
        raise ValueError(f"order must be non-negative but got {times}")  # as NumPy
    later: list[Any] = [slice(None)] * value.ndim
    earlier = list(later)
    later[axis], earlier[axis] = slice(1, None), slice(None, -1)
    for _ in range(times):
        value = value[tuple(later)] - value[tuple(earlier)]
    return value


FUNCTIONS: dict[Callable[..., Any], Handler] = {
    **{function: _moved(function, row) for function, row in MOVED.items()},
    **{function: _joined(function, row) for function, row in JOINED.items()},
    **{function: _like(function, fills=False) for function in (np.empty_like, np.ones_like, np.zeros_like)},
    np.full_like: _like(np.full_like, fills=True),
    np.where: _where,
    np.clip: _clip,
    np.diff: _diff,
}
