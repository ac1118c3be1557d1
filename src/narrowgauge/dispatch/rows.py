"""A row of the table of NumPy's functions: the route, every argument by name, and what becomes of each.

A row's text lists the arguments in NumPy's order, those after a bar by keyword only: `a*` may be of the state, `axis`
is plain data and is handed on, `order!` is refused by name, `*arrays*` takes any number by place.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from narrowgauge.dispatch.array import Array
from narrowgauge.dispatch.exact import Exact, bare, is_exact
from narrowgauge.dispatch.scalar import State
from narrowgauge.dispatch.setting import Number, Route, Setting, Wrapped, holds
from narrowgauge.errors import RefusedError

__all__ = [
    "Row",
    "all_exact",
    "bound",
    "carried",
    "delivered",
    "finished",
    "narrowed",
    "row_of",
    "unwrapped",
    "widened",
]

_NOT_GIVEN = getattr(np, "_NoValue")  # noqa: B009  # NumPy's mark for an argument that was left out


@dataclass(frozen=True, slots=True, kw_only=True)
class Row:
    """One function of NumPy; `reason` says why it is refused, else it is empty."""

    name: str
    route: Route | Literal["refused"]
    placed: tuple[str, ...] = ()
    named: tuple[str, ...] = ()
    state: frozenset[str] = frozenset()
    refused: frozenset[str] = frozenset()
    variadic: str | None = None
    reason: str = ""

    @property
    def shown(self) -> str:
        """The function as a user writes it."""
        return self.name.replace("numpy", "np", 1)

    @property
    def short(self) -> str:
        """The function as the observer sees it: without `numpy.`."""
        return self.name.partition(".")[2]

    def call(self, function: Callable[..., Any], given: Mapping[str, Any]) -> Any:
        """Call NumPy's function: by place as far as it goes without a gap, the rest by keyword."""
        rest = dict(given)
        placed = list(rest.pop(self.variadic, ())) if self.variadic else []
        for name in self.placed:
            if name not in rest:
                break
            placed.append(rest.pop(name))
        return function(*placed, **rest)


def row_of(name: str, route: Route | Literal["refused"], text: str, reason: str = "") -> Row:
    """Return the row that a text describes."""
    placed, _, named = (part.split() for part in text.partition("|"))
    variadic = next((word.strip("*") for word in placed if word.startswith("*")), None)
    words = [*placed, *named]
    return Row(
        name=name,
        route=route,
        placed=tuple(word.strip("*!") for word in placed if not word.startswith("*")),
        named=tuple(word.strip("*!") for word in named),
        state=frozenset(word.strip("*") for word in words if word.endswith("*")),
        refused=frozenset(word.strip("!") for word in words if word.endswith("!")),
        variadic=variadic,
        reason=reason,
    )


def bound(setting: Setting, row: Row, arguments: Sequence[Any], keywords: Mapping[str, Any]) -> dict[str, Any]:
    """Return the arguments of a call by name.

    RefusedError names an argument that the row refuses or does not know, and one that is of the state but may not be.
    """
    if row.variadic:
        given: dict[str, Any] = {row.variadic: tuple(arguments), **keywords}
    else:
        if len(arguments) > len(row.placed):
            count = len(row.placed)
            raise setting.fault(RefusedError, f"{row.shown} takes {count} arguments by place in this version")
        given = {**dict(zip(row.placed, arguments, strict=False)), **keywords}
    known = {*row.placed, *row.named, row.variadic} - row.refused
    for name, value in list(given.items()):
        if value is _NOT_GIVEN or (name not in known and value is None):
            del given[name]
        elif name not in known:
            raise setting.fault(RefusedError, f"{name}= of {row.shown} is not offered by this version")
        elif name not in row.state and name != "out" and holds(value, State):
            raise setting.fault(RefusedError, f"{name}= of {row.shown} may not be of the state; accepted: plain data")
    return given


def all_exact(value: Any, setting: Setting) -> bool:
    """Whether a value, or every item of a nest of lists, is of booleans or integers; None and text do not count."""
    if value is None or isinstance(value, str):
        return True
    if isinstance(value, (list, tuple)) and not _numbers(value):
        return all(all_exact(item, setting) for item in value)
    return is_exact(value, setting)


def _numbers(value: Sequence[Any]) -> bool:
    return len(value) > 0 and all(type(item) in (int, float, bool) for item in value)


def unwrapped(value: Any, setting: Setting) -> Any:
    """Return what plain code would hold: carriers in place of wrapped values, anywhere in a nest."""
    if isinstance(value, Wrapped):
        return setting.carrier(value)
    if isinstance(value, (list, tuple)):
        items = [unwrapped(item, setting) for item in value]
        return items if isinstance(value, list) else tuple(items)
    return value


def carried(value: Any, setting: Setting) -> Any:
    """Return an argument of the state as carriers, constants rounded; lists item by item, None and text as they are.

    float64 gets what plain code would hold. RefusedError for a foreign type.
    """
    if setting.arithmetic.format.name == "float64":
        _check(value, setting)
        return unwrapped(value, setting)
    return _converted(value, setting, setting.arithmetic.format.carrier)


def widened(value: Any, setting: Setting) -> Any:
    """Return an argument of the state in float64, rounded to the format before that; plain integers as they are."""
    if setting.arithmetic.format.name == "float64":
        return carried(value, setting)
    return _converted(value, setting, np.dtype(np.float64))


def _converted(value: Any, setting: Setting, kind: np.dtype[Any]) -> Any:
    if value is None or isinstance(value, str):
        return value
    if isinstance(value, (list, tuple)):
        items = [_converted(item, setting, kind) for item in value]
        return items if isinstance(value, list) else tuple(items)
    if isinstance(value, (int, np.integer)) and not isinstance(value, Wrapped) and kind == np.float64:
        return value  # a number of bins or a power
    carrier = setting.admit(value)
    if carrier is NotImplemented:
        raise setting.strange(value)
    if isinstance(carrier, np.ndarray):
        return carrier if carrier.dtype == kind else np.asarray(carrier).astype(kind)
    return kind.type(carrier)


def _check(value: Any, setting: Setting) -> None:
    """Refuse in float64 what the narrower formats refuse."""
    if isinstance(value, (list, tuple)):
        if not _numbers(value):
            for item in value:
                _check(item, setting)
    elif value is not None and not isinstance(value, str) and setting.admit(value) is NotImplemented:
        raise setting.strange(value)


def narrowed(setting: Setting, result: Any, shown: str) -> Any:
    """Return what float64 code gave as carriers, each number rounded once; integers, booleans and text as they are.

    RefusedError for complex numbers and for objects.
    """
    if isinstance(result, (list, tuple)):
        items = [narrowed(setting, item, shown) for item in result]
        return _alike(result, items)
    if result is None or isinstance(result, (bool, int, str, np.dtype)):
        return result
    kind = getattr(getattr(result, "dtype", None), "kind", "f" if isinstance(result, float) else "O")
    if kind in "biu":
        return result
    if kind != "f":
        what = "complex numbers" if kind == "c" else f"a {type(result).__name__}"
        raise setting.fault(RefusedError, f"{shown} of the state gives {what}, which no format holds")
    if setting.arithmetic.format.name == "float64":
        return result
    carrier = setting.arithmetic.cast(np.asarray(result))
    return np.asarray(carrier) if isinstance(result, np.ndarray) else carrier[()]


def _alike(model: Sequence[Any], items: list[Any]) -> Any:
    """Return items in the kind of sequence that NumPy gave: a list, a tuple, or one of its tuples with names."""
    if isinstance(model, list):
        return items
    return model._make(items) if hasattr(model, "_make") else tuple(items)


def finished(setting: Setting, operation: str, route: Route, operands: Any, result: Any) -> Any:
    """Let the observer see an operation, and return its result wrapped."""
    setting.note(operation, route, list(_leaves(operands)), result)
    return setting.wrap(result)


def _leaves(value: Any) -> Iterator[Any]:
    if isinstance(value, (list, tuple)):
        for item in value:
            yield from _leaves(item)
    elif isinstance(value, (np.ndarray, np.generic, float, int)):
        yield value


def delivered(setting: Setting, shown: str, target: Any, result: Any) -> Any:
    """Store a result into `out=` and return that object; None stands for no target.

    EscapeError where it is a plain array; NumPy's own errors for another shape and for floats among integers.
    """
    if target is None:
        return result
    if isinstance(target, tuple) and len(target) == 1:
        (target,) = target
    if not isinstance(target, (Array, Exact)):
        if isinstance(result, Number) and target.dtype.kind in "biu":
            np.copyto(target, setting.carrier(result), casting="same_kind")  # NumPy's own TypeError
        raise setting.plain_target(shown)
    carrier = setting.carrier(result) if isinstance(result, Wrapped) else result
    into = setting.carrier(target)
    if isinstance(target, Array) and not isinstance(result, Number):
        carrier = setting.admit(result)
    if np.shape(carrier) != into.shape:
        raise ValueError(f"output array has shape {into.shape}, the result {np.shape(carrier)}")
    np.copyto(into, bare(carrier, setting), casting="same_kind")
    return target
