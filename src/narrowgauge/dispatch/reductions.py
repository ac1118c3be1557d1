"""The routes `accumulated` and `whole` on the state: who computes, in which format, and what the observer is told.

float32 and float64 run NumPy's own function on the carriers; the 16-bit formats run folds.py and contractions.py. A
reduction over an axis as long as the run has paths is no part of a path's arithmetic: it is computed in float64,
rounded once, and told the observer as `whole`. Where other axes have that length too it cannot be told, and is refused.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from functools import partial
from typing import Any

import numpy as np

from narrowgauge.dispatch import contractions, folds
from narrowgauge.dispatch.contractions import Contraction
from narrowgauge.dispatch.exact import bare
from narrowgauge.dispatch.rows import Row, carried, finished, narrowed, widened
from narrowgauge.dispatch.setting import Route, Setting
from narrowgauge.errors import RefusedError

__all__ = ["ACCUMULATED", "contracted", "once", "over_paths", "reduced"]

Given = Mapping[str, Any]
Handler = Callable[[Setting, Callable[..., Any], Row, dict[str, Any]], Any]


def once(setting: Setting, function: Callable[..., Any], row: Row, given: Given, *, operation: str = "") -> Any:
    """Compute in float64 and round once: the route `whole`, and elementwise functions for which it is `rounded`."""
    wide = _arguments(setting, row, given, widened)
    result = narrowed(setting, row.call(function, wide), row.shown)
    route: Route = "rounded" if row.route == "rounded" and not operation else "whole"
    return finished(setting, operation or row.short, route, [wide[name] for name in wide if name in row.state], result)


def _arguments(setting: Setting, row: Row, given: Given, convert: Callable[[Any, Setting], Any]) -> dict[str, Any]:
    return {
        name: convert(value, setting) if name in row.state or name == row.variadic else bare(value, setting)
        for name, value in given.items()
    }


def _as_array(setting: Setting, values: Any) -> Any:
    """Return a list of numbers or arrays as one array of the state, anything else as it is."""
    if not isinstance(values, (list, tuple)):
        return values
    return setting.wrap(np.asarray(carried(values, setting), setting.arithmetic.format.carrier))


def over_paths(setting: Setting, name: str, reduced_lengths: Sequence[int], all_lengths: Sequence[int]) -> str:
    """Return what the observer is told of a reduction over paths, empty for every other one.

    Raises RefusedError where an axis of another kind is as long.
    """
    if setting.paths is None or setting.paths not in reduced_lengths:
        return ""
    if list(all_lengths).count(setting.paths) > 1:
        raise setting.fault(
            RefusedError,
            f"several axes have the length of the paths, {setting.paths}: whether {name} is over paths cannot be told; "
            "accepted: another sampling.block",
        )
    return f"{name} over paths"


def _native(setting: Setting, result: Any) -> Any:
    """Return what a native format computed in its carrier; what NumPy widened to float64 is rounded."""
    form = setting.arithmetic.format
    if isinstance(result, tuple):
        return tuple(_native(setting, part) for part in result)
    if getattr(result, "dtype", form.carrier) == form.carrier and not isinstance(result, float):
        return result
    if form.name == "float64":
        return result
    return np.asarray(setting.arithmetic.cast(np.asarray(result)))[()]


def _accumulated(sequence: Callable[..., Any], *, reduces: bool = False, cleaned: float | None = None) -> Handler:
    """Return the handler of a function whose order folds.py states; `cleaned` is what stands in for NaN."""

    def handler(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
        first = row.placed[0]
        given[first] = values = _as_array(setting, given[first])
        shape = np.shape(setting.admit(values))
        if reduces:
            axes = folds.axes_of(len(shape), given.get("axis"))
            operation = over_paths(setting, row.short, [shape[axis] for axis in axes], shape)
            if operation:
                return once(setting, function, row, given, operation=operation)
        own = _arguments(setting, row, given, carried)
        operands = [own[name] for name in own if name in row.state]
        if setting.arithmetic.native:
            result = _native(setting, row.call(function, own))
        else:
            values = np.asarray(own.pop(first))
            if cleaned is not None:
                values = np.where(np.isnan(values), np.float32(cleaned), values)
            result = sequence(setting.arithmetic, values, **own)
        return finished(setting, row.short, "accumulated", operands, result)

    return handler


def contracted(
    setting: Setting,
    name: str,
    plan: Callable[..., Contraction],
    operands: Sequence[Any],
    plainly: Callable[..., Any],
) -> Any:
    """Return a product of arrays of the state summed over shared axes; `plainly` is what NumPy does on carriers."""
    own = [carried(operand, setting) for operand in operands]
    native = setting.arithmetic.native
    if setting.paths is None and native:
        return finished(setting, name, "accumulated", own, _native(setting, plainly(*own)))
    stated = plan(*map(np.asarray, own))
    lengths = [stated.length(label) for label in dict.fromkeys(label for part in stated.labels for label in part)]
    operation = over_paths(setting, name, [stated.length(label) for label in stated.summed], lengths)
    if operation:
        wide = [np.asarray(widened(operand, setting)) for operand in operands]
        return finished(setting, operation, "whole", wide, narrowed(setting, plainly(*wide), f"np.{name}"))
    result = _native(setting, plainly(*own)) if native else contractions.contract(setting.arithmetic, stated)
    route: Route = "accumulated" if stated.summed else "rounded"
    return finished(setting, name, route, own, result)


def _product(plan: str) -> Handler:
    def handler(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
        one, other, *_ = (given.pop(name) for name in row.placed if name in row.state)
        return contracted(
            setting,
            row.short,
            lambda a, b: contractions.PLANS[plan](a, b, **given),
            (one, other),
            lambda a, b: function(a, b, **given),
        )

    return handler


def _vecdot(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
    one, other, axis = given["x1"], given["x2"], given.get("axis", -1)

    def plan(a: Any, b: Any) -> Contraction:
        return contractions.PLANS["vecdot"](np.moveaxis(a, axis, -1), np.moveaxis(b, axis, -1))

    return contracted(setting, row.short, plan, (one, other), lambda a, b: function(a, b, axis=axis))


def _einsum(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
    text, *operands = given["operands"]
    further = {"optimize": given["optimize"]} if "optimize" in given else {}
    if not isinstance(text, str):  # labels as lists of integers: NumPy's order
        return once(setting, function, row, given, operation="einsum by lists of labels")
    return contracted(
        setting,
        "einsum",
        lambda *own: contractions.einsum(text, own),
        operands,
        lambda *own: function(text, *own, **further),
    )


def _factored(sequence: Callable[..., Any]) -> Handler:
    def handler(setting: Setting, function: Callable[..., Any], row: Row, given: dict[str, Any]) -> Any:
        own = _arguments(setting, row, given, carried)
        operands = [own[name] for name in row.placed]
        if setting.arithmetic.native:
            result = _native(setting, row.call(function, own))
        else:
            named = {name: value for name, value in own.items() if name not in row.placed}
            result = sequence(setting.arithmetic, *operands, **named)
        return finished(setting, row.short, "accumulated", operands, result)

    return handler


def reduced(setting: Setting, ufunc: np.ufunc, method: str, values: Any, given: Given) -> Any:
    """Return `reduce` or `accumulate` of a binary ufunc of the route `rounded` on the state.

    `given` may have axis, keepdims, initial and where; the axis is 0 if it is left out.
    """
    axis = given.get("axis", 0)
    name = f"{ufunc.__name__}.{method}"
    values = _as_array(setting, values)
    shape = np.shape(setting.admit(values))
    plainly = getattr(ufunc, method)
    own = carried(values, setting)
    further = {key: carried(value, setting) if key == "initial" else bare(value, setting)
               for key, value in given.items()}  # fmt: skip
    if method == "reduce":
        reduced_lengths = [shape[place] for place in folds.axes_of(len(shape), axis)]
        operation = over_paths(setting, name, reduced_lengths, shape)
        if operation:
            wide = widened(values, setting)
            return finished(setting, operation, "whole", [wide], narrowed(setting, plainly(wide, **further), name))
    if setting.arithmetic.native:
        result = _native(setting, plainly(own, **further))
    elif method == "reduce":
        result = folds.sequential(setting.arithmetic, ufunc, own, **{"axis": 0, **further})
    else:
        result = folds.cumulative(setting.arithmetic, ufunc, own, axis=axis)
    return finished(setting, name, "accumulated", [own], result)


def _sum(ufunc: np.ufunc) -> Callable[..., Any]:
    return lambda arithmetic, values, **given: folds.sequential(arithmetic, ufunc, values, **given)


def _running(ufunc: np.ufunc) -> Callable[..., Any]:
    return lambda arithmetic, values, **given: folds.cumulative(arithmetic, ufunc, values, **given)


ACCUMULATED: dict[str, Handler] = {
    f"numpy.{name}": handler
    for name, handler in {
        "sum": _accumulated(_sum(np.add), reduces=True),
        "prod": _accumulated(_sum(np.multiply), reduces=True),
        "nansum": _accumulated(_sum(np.add), reduces=True, cleaned=0.0),
        "nanprod": _accumulated(_sum(np.multiply), reduces=True, cleaned=1.0),
        "mean": _accumulated(folds.mean, reduces=True),
        "var": _accumulated(folds.variance, reduces=True),
        "std": _accumulated(partial(folds.variance, root=True), reduces=True),
        "average": _accumulated(folds.average, reduces=True),
        "cumsum": _accumulated(_running(np.add)),
        "cumprod": _accumulated(_running(np.multiply)),
        "nancumsum": _accumulated(_running(np.add), cleaned=0.0),
        "nancumprod": _accumulated(_running(np.multiply), cleaned=1.0),
        "cumulative_sum": _accumulated(_running(np.add)),
        "cumulative_prod": _accumulated(_running(np.multiply)),
        "trace": _accumulated(folds.trace),
        "linalg.trace": _accumulated(partial(folds.trace, axis1=-2, axis2=-1)),
        "convolve": _accumulated(folds.convolve),
        "correlate": _accumulated(folds.correlate),
        "trapezoid": _accumulated(folds.trapezoid),
        "dot": _product("dot"),
        "inner": _product("inner"),
        "vdot": _product("vdot"),
        "tensordot": _product("tensordot"),
        "linalg.tensordot": _product("tensordot"),
        "linalg.matmul": _product("matmul"),
        "linalg.vecdot": _vecdot,
        "einsum": _einsum,
        "linalg.cholesky": _factored(contractions.cholesky),
        "linalg.solve": _factored(contractions.solve),
    }.items()
}
