"""NumPy's ufuncs on the state: the call with its keywords; every other method is refused by name."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from narrowgauge.dispatch.array import Array
from narrowgauge.dispatch.mask import as_number, bare, is_exact, settled
from narrowgauge.dispatch.routes import ROUTES
from narrowgauge.dispatch.scalar import State
from narrowgauge.dispatch.setting import Route, Setting
from narrowgauge.errors import EscapeError, RefusedError

__all__ = ["call_ufunc"]


def call_ufunc(setting: Setting, ufunc: np.ufunc, method: str, inputs: Sequence[Any], keywords: dict[str, Any]) -> Any:
    """Compute a ufunc on the state, rounded once; `out=` takes an array of the state.

    Masks and integers among themselves are computed as they are. Raises RefusedError for a ufunc in no route, a
    method other than the call, or a keyword other than `out` and the default `where`; EscapeError where `out` is
    a plain array of floats.
    """
    for operand in inputs:
        if isinstance(operand, State):
            break
    else:
        if not any(isinstance(target, State) for target in keywords.get("out", ())):
            numbers, exact = _among_exact(setting, ufunc, method, inputs, keywords)
            if numbers is None:
                return exact
            inputs = numbers
    route = ROUTES.get(ufunc)
    if keywords or method != "__call__" or route is None:
        return _with_keywords(setting, ufunc, inputs, keywords, method=method, route=route)
    return setting.operate(ufunc, route, inputs)


def _with_keywords(
    setting: Setting,
    ufunc: np.ufunc,
    inputs: Sequence[Any],
    keywords: dict[str, Any],
    *,
    method: str,
    route: Route | None,
) -> Any:
    """Compute with `out=`, or refuse by name."""
    name = ufunc.__name__
    if method != "__call__":
        raise setting.fault(
            RefusedError, f"np.{name}.{method} is not offered by this version; accepted: np.{name}(...)"
        )
    if route is None:
        raise setting.fault(RefusedError, f"{name} is in no route of this version, so that it cannot be rounded")
    out = keywords.pop("out", None)
    if keywords.pop("where", True) is not True:
        raise setting.fault(RefusedError, f"where= of np.{name} is not offered by this version; accepted: np.where")
    if keywords:
        raise setting.fault(RefusedError, f"{next(iter(keywords))}= of np.{name} is not offered; accepted: out")
    if out is None:
        return setting.operate(ufunc, route, inputs)
    return _into(setting, ufunc, route, inputs, out[0])


def _among_exact(
    setting: Setting, ufunc: np.ufunc, method: str, inputs: Sequence[Any], keywords: dict[str, Any]
) -> tuple[Sequence[Any] | None, Any]:
    """Compute on masks and integers as plain code does: no inputs are left, and the result.

    Where numbers are among the inputs, or come out, return the inputs with the masks as numbers of the state.
    """
    if all(is_exact(operand, setting) for operand in inputs):
        out = keywords.get("out", ())
        plain = bare(keywords, setting)
        if any(not isinstance(target, np.ndarray) for target in plain.get("out", ())):
            out = ()  # an in-place operator on one boolean gives a new one
            del plain["out"]
        result = getattr(ufunc, method)(*bare(list(inputs), setting), **plain)
        if out:
            return None, out[0] if len(out) == 1 else out
        if method != "__call__" or getattr(result, "dtype", None) != np.float64:
            return None, settled(result, f"np.{ufunc.__name__}", setting)
    return [as_number(operand, setting) for operand in inputs], None


def _into(setting: Setting, ufunc: np.ufunc, route: Route, inputs: Sequence[Any], target: Any) -> Any:
    """Compute into `target`, an array of the state; booleans also into a mask or a plain array of booleans."""
    if isinstance(target, Array):
        done = setting.operate(ufunc, route, inputs, out=setting.admit(target))
        return done if done is NotImplemented else target
    plain = bare(target, setting)
    if plain is target and plain.dtype.kind == "f":
        raise setting.fault(
            EscapeError, f"out= of np.{ufunc.__name__} is a plain array; accepted: an array of the state"
        )
    result = setting.operate(ufunc, route, inputs)
    if result is NotImplemented or not isinstance(plain, np.ndarray):
        return result
    np.copyto(plain, setting.admit(result), casting="same_kind")  # NumPy's own error for floats
    return target
