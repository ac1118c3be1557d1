"""NumPy's ufuncs on the state: the call with its keywords, and the methods that have a stated order.

`out=` takes an array of the state; `where=` leaves the other places of it as they are, or NaN where there is none. Of
the methods `outer` is the call on all pairs, `reduce` and `accumulate` are the route `accumulated` or, for selections
and logic, exact; `at` and `reduceat` are refused.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from narrowgauge.dispatch.array import changing, wrap
from narrowgauge.dispatch.contractions import PLANS
from narrowgauge.dispatch.exact import Exact, bare, compute, is_exact, settled
from narrowgauge.dispatch.reductions import contracted, reduced
from narrowgauge.dispatch.routes import INTEGERS, NEITHER, ROUTES
from narrowgauge.dispatch.rows import all_exact, carried, delivered, finished, narrowed, unwrapped, widened
from narrowgauge.dispatch.scalar import State
from narrowgauge.dispatch.setting import Number, Setting, Wrapped
from narrowgauge.errors import RefusedError

__all__ = ["call_ufunc"]

_REFUSED_METHODS = {
    "at": "it changes places one after the other, which has no rounded counterpart here; "
    "accepted: values[places] = values[places] + increments where no place comes twice",
    "reduceat": "accepted: reduce on each slice",
}
_DEFAULTS = {"casting": ("same_kind",), "order": ("K",), "subok": (True, False)}
_KEYWORDS = {"reduce": {"axis", "keepdims", "initial", "where"}, "accumulate": {"axis"}}


def call_ufunc(setting: Setting, ufunc: np.ufunc, method: str, inputs: Sequence[Any], keywords: dict[str, Any]) -> Any:
    """Compute a ufunc on the state, rounded by its route.

    Exact values among themselves are computed as they are. Raises RefusedError for a ufunc, a method or a keyword that
    is refused by name; EscapeError where the target is a plain array.
    """
    for operand in inputs:
        if isinstance(operand, State):
            break
    else:
        if not keywords and method == "__call__":
            return compute(setting, ufunc, inputs)
        values = (*inputs[:1], *inputs[2:]) if method == "at" else inputs  # the second is a place, of any kind
        values = (*values, *(target for target in keywords.get("out", ()) if isinstance(target, State)))
        if all(is_exact(value, setting) for value in values):
            return _among_exact(setting, ufunc, method, inputs, keywords)
    if keywords or method != "__call__":
        return _with_keywords(setting, ufunc, method, inputs, keywords)
    route = ROUTES.get(ufunc)
    return _by_itself(setting, ufunc, inputs) if route is None else setting.operate(ufunc, route, inputs)


def _with_keywords(
    setting: Setting, ufunc: np.ufunc, method: str, inputs: Sequence[Any], keywords: dict[str, Any]
) -> Any:
    """Take `out=` and `where=`, check the others, and compute by the call or the method."""
    shown = f"np.{ufunc.__name__}" + ("" if method == "__call__" else f".{method}")
    if method in _REFUSED_METHODS:
        raise setting.fault(RefusedError, f"{shown} is refused: {_REFUSED_METHODS[method]}")
    given = {name: value for name, value in keywords.items() if name != "out"}
    if given.get("dtype") is not None and setting.float_dtype(given["dtype"]) is None:
        wanted = np.dtype(given["dtype"])
        raise setting.fault(RefusedError, f"dtype={wanted} of {shown} on the state; accepted: float64 or none")
    given.pop("dtype", None)
    for name, accepted in _DEFAULTS.items():
        if given.pop(name, accepted[0]) not in accepted:
            raise setting.fault(RefusedError, f"{name}= of {shown} is not offered by this version")
    targets = keywords.get("out") or (None,) * ufunc.nout
    for target in targets:
        changing(target)
    # an array of its own makes room at once; everything else is computed first, and copied
    own = targets[0] if len(targets) == 1 and given.get("where", True) is True else None
    if own is not None and method == "__call__" and ufunc in ROUTES and _is_array(own) and not given.keys() - {"where"}:
        done = setting.operate(ufunc, ROUTES[ufunc], inputs, out=setting.admit(own))
        return done if done is NotImplemented else own
    for target in targets:
        if target is not None and not isinstance(target, Wrapped) and target.dtype.kind == "f":
            raise setting.plain_target(shown)
    chosen = given.pop("where", True) if method in ("__call__", "outer") else True
    unknown = given.keys() - _KEYWORDS.get(method, set())
    if unknown:
        raise setting.fault(RefusedError, f"{min(unknown)}= of {shown} is not offered by this version")
    result = _method(setting, ufunc, method, inputs, given)
    if result is NotImplemented:
        return result
    if ufunc.nout == 1:
        return _chosen(setting, shown, targets[0], result, bare(chosen, setting))
    pairs = zip(targets, result, strict=True)
    return tuple(_chosen(setting, shown, target, part, bare(chosen, setting)) for target, part in pairs)


def _is_array(target: Any) -> bool:
    return isinstance(target, Number) and isinstance(target, np.ndarray)


def _chosen(setting: Setting, shown: str, target: Any, result: Any, chosen: Any) -> Any:
    """Store where `chosen` is true; without a target the other places are NaN, or False."""
    if chosen is True:
        return delivered(setting, shown, target, result)
    if isinstance(chosen, State):
        raise setting.fault(RefusedError, f"where= of {shown} is of the state; accepted: booleans")
    carrier = setting.carrier(result)
    if target is None:
        shape = np.broadcast_shapes(np.shape(carrier), np.shape(chosen))
        blank: Any = np.nan if isinstance(result, Number) else 0
        into = np.full(shape, blank, np.asarray(carrier).dtype)
        target = setting.wrap(into)
    elif not isinstance(target, Wrapped):
        raise setting.plain_target(shown)
    source = setting.admit(result) if isinstance(target, Number) else carrier
    np.copyto(setting.carrier(target), source, casting="same_kind", where=chosen)
    return target if np.ndim(setting.carrier(target)) else setting.wrap(setting.carrier(target)[()])


def _method(setting: Setting, ufunc: np.ufunc, method: str, inputs: Sequence[Any], given: dict[str, Any]) -> Any:
    if method == "__call__":
        route = ROUTES.get(ufunc)
        return _by_itself(setting, ufunc, inputs) if route is None else setting.operate(ufunc, route, inputs)
    name = f"np.{ufunc.__name__}.{method}"
    route = ROUTES.get(ufunc)
    if route is None or ufunc.nin != 2:
        raise setting.fault(RefusedError, f"{name} is refused: it is no elementary operation of two numbers")
    if method == "outer":
        first, second = (wrap(np.asarray(carried(value, setting)), setting) for value in inputs)
        spread = first.reshape(first.shape + (1,) * second.ndim)
        return setting.operate(ufunc, route, (spread, second))
    if route == "rounded":
        return reduced(setting, ufunc, method, inputs[0], given)
    if ufunc.identity is None and ufunc not in (np.maximum, np.minimum, np.fmax, np.fmin):
        raise setting.fault(RefusedError, f"{name} is refused: a comparison of a comparison")
    further = {key: carried(value, setting) if key == "initial" else bare(value, setting)
               for key, value in given.items()}  # fmt: skip
    return wrap(getattr(ufunc, method)(carried(inputs[0], setting), **further), setting)


def _by_itself(setting: Setting, ufunc: np.ufunc, inputs: Sequence[Any]) -> Any:
    """Compute what is not one elementary operation."""
    name = ufunc.__name__
    if name in NEITHER:
        raise setting.fault(RefusedError, f"np.{name} is refused: {NEITHER[name]}")
    if name in INTEGERS:
        return ufunc(*(unwrapped(value, setting) for value in inputs))  # NumPy's own TypeError
    if name in PLANS:
        return contracted(setting, name, PLANS[name], inputs, ufunc)
    by_name = _WAYS.get(name)
    return _unknown(setting, ufunc, inputs) if by_name is None else by_name(setting, ufunc, inputs)


def _unknown(setting: Setting, ufunc: np.ufunc, inputs: Sequence[Any]) -> Any:
    """Compute what a newer NumPy has added in float64, round it once, and say so."""
    name = ufunc.__name__
    if not isinstance(ufunc, np.ufunc) or not _of_numpy(ufunc):
        raise setting.fault(RefusedError, f"{name} is no function of NumPy, so that it cannot be rounded")
    wide = [widened(value, setting) for value in inputs]
    result = narrowed(setting, ufunc(*wide), f"np.{name}")
    return finished(setting, f"{name} (not known to this version)", "whole", wide, result)


def _of_numpy(ufunc: np.ufunc) -> bool:
    return any(getattr(home, ufunc.__name__, None) is ufunc for home in (np, np.linalg, np.strings, np.fft))


def _divmod(setting: Setting, ufunc: np.ufunc, inputs: Sequence[Any]) -> Any:
    """Two operations, as the observer sees them; in a native format NumPy's own two results."""
    if not setting.arithmetic.native:
        parts = (np.floor_divide, np.remainder)
        return tuple(setting.operate(part, "rounded", inputs) for part in parts)
    own = [setting.admit(value) for value in inputs]
    if any(carrier is NotImplemented for carrier in own):
        return NotImplemented
    return finished(setting, "divmod", "rounded", own, ufunc(*own))


def _parted(setting: Setting, ufunc: np.ufunc, inputs: Sequence[Any]) -> Any:
    """Fraction and integral part, or fraction and exponent: values of the format both."""
    (own,) = (carried(value, setting) for value in inputs)
    return finished(setting, ufunc.__name__, "exact", [own], ufunc(own))


def _neighbour(setting: Setting, ufunc: np.ufunc, inputs: Sequence[Any]) -> Any:
    """Ask the storage type, which has just the values of the format, for the next one or the distance to it."""
    form = setting.arithmetic.format
    if form.name == "tf32" or form.shift:
        raise setting.fault(
            RefusedError, f"np.{ufunc.__name__} is refused in {form.name}, which has no type of its own"
        )
    own = [carried(value, setting) for value in inputs]
    if form.native:
        return finished(setting, ufunc.__name__, "exact", own, ufunc(*own))
    found = ufunc(*(np.asarray(value).astype(form.storage) for value in own))
    return finished(setting, ufunc.__name__, "exact", own, np.asarray(found).astype(form.carrier)[()])


def _ldexp(setting: Setting, ufunc: np.ufunc, inputs: Sequence[Any]) -> Any:
    value, exponent = inputs
    if not all_exact(exponent, setting):
        raise setting.fault(RefusedError, "np.ldexp takes integers as its exponents; accepted: x * 2.0**n")
    native = setting.arithmetic.native
    own = (carried if native else widened)(value, setting)
    result = ufunc(own, bare(exponent, setting))
    return finished(setting, "ldexp", "rounded", [own], result if native else narrowed(setting, result, "np.ldexp"))


def _itself(setting: Setting, ufunc: np.ufunc, inputs: Sequence[Any]) -> Any:
    (own,) = (carried(value, setting) for value in inputs)
    return wrap(ufunc(own), setting)


def _clipped(setting: Setting, ufunc: np.ufunc, inputs: Sequence[Any]) -> Any:
    return setting.function(setting, np.clip, tuple(inputs), {})


_WAYS: dict[str, Callable[[Setting, np.ufunc, Sequence[Any]], Any]] = {
    "clip": _clipped,
    "conjugate": _itself,
    "divmod": _divmod,
    "frexp": _parted,
    "ldexp": _ldexp,
    "modf": _parted,
    "nextafter": _neighbour,
    "spacing": _neighbour,
}


def _among_exact(
    setting: Setting, ufunc: np.ufunc, method: str, inputs: Sequence[Any], keywords: dict[str, Any]
) -> Any:
    """Compute on exact values as plain code does, with its keywords and by its methods; floats are refused by name."""
    name = f"np.{ufunc.__name__}" + ("" if method == "__call__" else f".{method}")
    out = keywords.get("out", ())
    for target in out or (inputs[:1] if method == "at" else ()):
        if target is not None and not isinstance(target, Exact):
            raise setting.plain_target(name)
    result = getattr(ufunc, method)(*bare(list(inputs), setting), **bare(keywords, setting))
    if out:
        return out[0] if len(out) == 1 else out
    return settled(result, name, setting)
