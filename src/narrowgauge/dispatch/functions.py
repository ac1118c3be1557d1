"""NumPy's other functions on the state: every call goes by its row in tables.py, or by none and is then `whole`.

Where no argument of the state is given, but integers or booleans of it are, NumPy's own function runs on them: what it
gives stays exact, and floats among it are rounded once. Plain numbers beside the state are constants of the format.
"""

from __future__ import annotations

import operator
from collections.abc import Callable, Sequence
from functools import cache
from typing import Any

import numpy as np

from narrowgauge.dispatch.array import Array, Constant, carrier_of, changing, stored, wrap
from narrowgauge.dispatch.exact import Exact, bare, is_exact, settled
from narrowgauge.dispatch.reductions import ACCUMULATED, once
from narrowgauge.dispatch.rows import Row, all_exact, bound, carried, delivered, finished, narrowed, unwrapped, widened
from narrowgauge.dispatch.scalar import State
from narrowgauge.dispatch.setting import Number, Setting, Wrapped, holds
from narrowgauge.dispatch.tables import ABOUT, READING, ROWS, WRITING
from narrowgauge.errors import EscapeError, RefusedError

__all__ = ["call_function", "row_for"]

Handler = Callable[[Setting, Callable[..., Any], Row, dict[str, Any]], Any]
_PADS = ("constant", "edge", "maximum", "minimum", "reflect", "symmetric", "wrap")


@cache
def _name_of(function: Callable[..., Any]) -> str:
    return f"{function.__module__}.{function.__name__}"


def row_for(function: Callable[..., Any]) -> Row | None:
    """Return the row of one of NumPy's functions, or None for one that this version does not know."""
    return ROWS.get(_name_of(function))


def call_function(
    setting: Setting, function: Callable[..., Any], arguments: Sequence[Any], keywords: dict[str, Any]
) -> Any:
    """Run one NumPy function on the state by its row; one without a row is computed in float64 and rounded once.

    RefusedError for a function or an argument that is refused by name; EscapeError where it would write into a plain
    array.
    """
    row = row_for(function)
    if row is None:
        return _unknown(setting, function, arguments, keywords)
    if row.reason:
        raise setting.fault(RefusedError, f"{row.shown} is refused: {row.reason}")
    given = bound(setting, row, arguments, keywords)
    out = given.pop("out", None)
    if out is not None or (row.route == "exact" and row.name not in READING):
        for value in (*arguments, *keywords.values()):
            if type(value) is Constant:
                changing(value)
    if out is not None and not isinstance(out[0] if isinstance(out, tuple) else out, Wrapped):
        raise setting.plain_target(row.shown)
    handler = _HANDLERS.get(row.name) or ACCUMULATED.get(row.name)
    own = [given[name] for name in (*row.placed, *row.named, row.variadic) if name in row.state and name in given]
    if row.variadic:
        own.append(given[row.variadic])
    if not holds(own, State) and row.name not in _FOR_ITSELF and all_exact(own, setting):
        result = _among_exact(setting, function, row, given)
    else:
        if row.name not in _FOR_ITSELF:
            _float64(setting, row, given.pop("dtype", None))
        result = (handler or (_moved if row.route == "exact" else once))(setting, function, row, given)
    return delivered(setting, row.shown, out, result)


def _unknown(setting: Setting, function: Callable[..., Any], arguments: Sequence[Any], keywords: dict[str, Any]) -> Any:
    """Compute what a newer NumPy has added: numbers of the state in float64, rounded once, and said so."""
    name = _name_of(function).partition(".")[2]
    if keywords.get("out") is not None:
        raise setting.fault(RefusedError, f"out= of np.{name} is not offered by this version")
    own = [_opened(argument, setting) for argument in arguments]
    result = function(*own, **{key: _opened(value, setting) for key, value in keywords.items()})
    result = narrowed(setting, result, f"np.{name}")
    return finished(setting, f"{name} (not known to this version)", "whole", own, result)


def _opened(value: Any, setting: Setting) -> Any:
    """Return numbers of the state and float constants beside them in float64, everything else as plain code has it."""
    if isinstance(value, (list, tuple)):
        items = [_opened(item, setting) for item in value]
        return items if isinstance(value, list) else tuple(items)
    if isinstance(value, (Number, float)) or (type(value) is np.ndarray and value.dtype.kind == "f"):
        return widened(value, setting)
    return bare(value, setting)


def _float64(setting: Setting, row: Row, dtype: Any) -> None:
    if setting.float_dtype(dtype) is None:
        wanted = np.dtype(dtype)
        raise setting.fault(RefusedError, f"dtype={wanted} of {row.shown} on the state; accepted: float64 or none")


def _among_exact(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
    """Run a function of booleans and integers as plain code does; numbers among what it gives are rounded once."""
    own = {name: bare(value, setting) for name, value in given.items()}
    result = row.call(function, own)
    if row.name in ABOUT:
        return result
    if not _doubles(result):
        return settled(result, row.shown, setting)
    return finished(setting, row.short, "whole", list(own.values()), narrowed(setting, result, row.shown))


def _doubles(result: Any) -> bool:
    if isinstance(result, (list, tuple)):
        return any(map(_doubles, result))
    return isinstance(result, float) or getattr(result, "dtype", None) == np.float64


def _moved(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
    """Move, select or compare carriers; constants are rounded to the format before."""
    own = {
        name: carried(value, setting) if name in row.state or name == row.variadic else bare(value, setting)
        for name, value in given.items()
    }
    result = row.call(function, own)
    if isinstance(result, np.ndarray) and result.dtype == np.float64:  # of a list without values: np.append([], x)
        result = result.astype(setting.arithmetic.format.carrier, copy=False)
    return wrap(result, setting)


def _about(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
    """Tell what plain code would see: the memory of the carriers, otherwise float64."""
    see = unwrapped if function in (np.may_share_memory, np.shares_memory, np.shape, np.size, np.ndim) else _opened
    return row.call(function, {name: see(value, setting) for name, value in given.items()})


def _written(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
    """Write into the first argument; a plain float array is checked, as in a store."""
    target = given[row.placed[0]]
    if not isinstance(target, (Array, Exact)):
        raise setting.fault(
            EscapeError,
            f"{row.shown} writes into a plain array what depends on the state; "
            "accepted: values[mask] = value on an array that the kernel's own module makes",
        )
    own = {name: bare(value, setting) for name, value in given.items()}
    for name in row.state & given.keys():
        value = given[name]
        own[name] = stored(value, setting) if isinstance(target, Array) else unwrapped(value, setting)
    own[row.placed[0]] = setting.carrier(target)
    return row.call(function, own)


def _like(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
    model = given.pop(row.placed[0])
    dtype = given.pop("dtype", None)
    value = given.pop("fill_value", None)
    floats = not is_exact(model, setting)
    source = np.asarray(carrier_of(model, setting) if holds(model, State) else bare(model, setting))
    if (dtype is None and not floats) or (dtype is not None and setting.float_dtype(dtype) is None):
        filling = (bare(value, setting),) if function is np.full_like else ()
        return wrap(function(source, *filling, dtype=dtype, **given), setting)
    filling = (carrier_of(value, setting),) if function is np.full_like else ()
    made = function(source, *filling, dtype=setting.arithmetic.format.carrier, **given)
    if function is np.empty_like:
        made.fill(np.nan)  # what is read before it is written must not pass for a value of the format
    return Array(made, setting)


def _where(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
    condition, *values = (given[name] for name in row.placed if name in given)
    # a plain condition is not rounded: 1e-30 is true in every format
    chooser = carrier_of(condition, setting) if holds(condition, State) else bare(condition, setting)
    if all(is_exact(value, setting) for value in values):
        return wrap(np.where(chooser, *bare(values, setting)), setting)
    carrier = setting.arithmetic.format.carrier
    return wrap(np.where(chooser, *(np.asarray(carrier_of(value, setting), carrier) for value in values)), setting)


def _clip(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
    result = _moved(setting, function, row, given)
    setting.note("clip", "exact", [carried(value, setting) for value in given.values()], setting.carrier(result))
    return result


def _diff(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
    """Subtract neighbours, `n` times: each time one rounded operation, as the observer sees it."""
    value = wrap(np.asarray(carried(given["a"], setting)), setting)
    times = operator.index(given.get("n", 1))
    if times < 0:
        raise ValueError(f"order must be non-negative but got {times}")  # as NumPy
    if value.ndim == 0:
        raise ValueError("diff requires input that is at least one dimensional")
    axis = operator.index(given.get("axis", -1))
    ends = [np.asarray(carried(given[name], setting)) if name in given else None for name in ("prepend", "append")]
    if times and any(end is not None for end in ends):
        shape = [1 if place == axis % value.ndim else size for place, size in enumerate(value.shape)]
        first, last = (end if end is None or end.ndim else np.broadcast_to(end, shape) for end in ends)
        parts = [part for part in (first, setting.carrier(value), last) if part is not None]
        value = wrap(np.concatenate(parts, axis), setting)
    later: list[Any] = [slice(None)] * value.ndim
    earlier = list(later)
    later[axis], earlier[axis] = slice(1, None), slice(None, -1)
    for _ in range(times):
        value = value[tuple(later)] - value[tuple(earlier)]
    return value


def _astype(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
    return given["x"].astype(given["dtype"], copy=given.get("copy", True))


def _pad(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
    mode = given.get("mode", "constant")
    if mode not in _PADS:
        raise setting.fault(RefusedError, f"mode={mode!r} of np.pad is not offered; accepted: {', '.join(_PADS)}")
    return _moved(setting, function, row, given)


def _nan_to_num(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
    largest = setting.arithmetic.format.max_finite
    return _moved(setting, function, row, {"posinf": largest, "neginf": -largest, **given})


_HANDLERS: dict[str, Handler] = {
    **dict.fromkeys(ABOUT, _about),
    **dict.fromkeys(WRITING, _written),
    **{f"numpy.{name}_like": _like for name in ("empty", "full", "ones", "zeros")},
    "numpy.astype": _astype,
    "numpy.clip": _clip,
    "numpy.diff": _diff,
    "numpy.nan_to_num": _nan_to_num,
    "numpy.pad": _pad,
    "numpy.where": _where,
}
# they tell by themselves what is exact, or take integers of the state for what they are
_FOR_ITSELF = WRITING | {
    "numpy.astype",
    "numpy.where",
    *(f"numpy.{name}_like" for name in ("empty", "full", "ones", "zeros")),
}
