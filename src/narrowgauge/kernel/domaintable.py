"""The table `[domain]` of an audit file: the box of parameters in which the verdict is tried, and how often."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from typing import ClassVar, Literal, NoReturn

import msgspec

from narrowgauge.kernel.rules import RULES, Table, TableError, dotted, kind_of, shown

__all__ = ["AxisTable", "DomainTable", "checked_box", "domain_lines", "scales_assumed"]

_BOX = "domain.parameters"
_KEYS = ("low", "high", "scale")
_SCALES = ("linear", "log")
_NUMBER = "a finite number"


class AxisTable(msgspec.Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """One side of the box: a parameter from `low` to `high`, both included, on a scale of its own."""

    low: float
    high: float
    scale: Literal["linear", "log"] = "linear"

    def value(self, place: float) -> float:
        """Return the parameter at a coordinate from 0 (`low`) to 1 (`high`)."""
        if place in (0.0, 1.0):
            return self.high if place else self.low  # whatever a logarithm makes of them
        if self.scale == "log":
            found = math.exp((1.0 - place) * math.log(self.low) + place * math.log(self.high))
        else:
            found = (1.0 - place) * self.low + place * self.high
        return min(max(found, self.low), self.high)

    def place(self, value: float) -> float:
        """Return the coordinate of a parameter inside the box, from 0 to 1."""
        if self.scale == "log":
            return (math.log(value) - math.log(self.low)) / (math.log(self.high) - math.log(self.low))
        # Halved, since high - low may be past float64.
        return (value / 2 - self.low / 2) / (self.high / 2 - self.low / 2)


class DomainTable(Table, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """`[domain]`: a box of `parameters`, `scenarios` points of it beside its corners, and the paths of each.

    `paths` are those of a level at a scenario's first look, `most_paths` those at which looking ends.
    """

    table: ClassVar[str] = "domain"
    parameters: dict[str, AxisTable]
    scenarios: int = 32
    paths: int = 1024
    most_paths: int = 16384

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.scenarios.bit_count() != 1:
            self.refuse("scenarios", f"{self.scenarios} is not a power of two")
        if self.paths % 1024:
            self.refuse("paths", f"{self.paths} is not a multiple of 1024")
        if self.most_paths < self.paths:
            self.refuse("most_paths", f"{self.most_paths} is below domain.paths", f"an integer of {self.paths} or more")


def checked_box(raw: Mapping[str, object]) -> object:
    """Return the plain table `[domain]` of a file; raises TableError where its box is none.

    Each side needs a parameter of the file that is a number and lies between the ends. What else may be wrong with the
    table is left to its record.
    """
    domain, parameters = raw.get("domain"), raw.get("parameters")
    box = domain.get("parameters") if isinstance(domain, dict) else None
    if isinstance(box, dict):
        for name, axis in box.items():
            _check_axis(name, axis, parameters if isinstance(parameters, dict) else {})
    return domain


def _check_axis(name: str, axis: object, parameters: Mapping[str, object]) -> None:
    key = dotted("domain", "parameters", name)
    numbers = [one for one, value in parameters.items() if _is_number(value)]
    if name not in parameters:
        problem = f"{shown(name)} is no key of [parameters]"
        raise TableError(key, problem, ", ".join(numbers) or "a number in [parameters]")
    audited = parameters[name]
    if not isinstance(audited, int | float) or isinstance(audited, bool):
        problem = f"{shown(name)} in [parameters] is {kind_of(audited)}"
        raise TableError(key, problem, ", ".join(numbers) or "a number in [parameters]")
    if not isinstance(axis, dict):
        raise TableError(key, f"{shown(axis)} is {kind_of(axis)}", RULES[_BOX].accepted)
    for one in axis:
        if one not in _KEYS:
            raise TableError(dotted("domain", "parameters", name, one), "unknown key", ", ".join(_KEYS))
    low, high = (_end(axis, one, key) for one in ("low", "high"))
    scale = axis.get("scale", "linear")
    if scale not in _SCALES:
        raise TableError(f"{key}.scale", f"{shown(scale)} is not accepted", '"linear" or "log"')
    if scale == "log" and low <= 0:
        raise TableError(f"{key}.low", f"{shown(low)} has no logarithm", 'a finite number above 0, or scale = "linear"')
    if not low < high:
        raise TableError(f"{key}.high", f"{shown(high)} is not above low", f"a finite number above {shown(low)}")
    if not low <= audited <= high:
        _refuse_outside(key, audited, low, high)


def _refuse_outside(key: str, audited: float, low: float, high: float) -> NoReturn:
    end, which, side = (low, "low", "below") if audited < low else (high, "high", "above")
    at = "or less" if which == "low" else "or more"
    problem = f"the audited point, {shown(audited)}, is {side} {shown(end)}"
    raise TableError(f"{key}.{which}", problem, f"a box that it lies in, so {shown(audited)} {at}")


def _end(axis: Mapping[str, object], name: str, key: str) -> float:
    """Return one end of a side as a float64."""
    if name not in axis:
        raise TableError(f"{key}.{name}", "missing", _NUMBER)
    value = axis[name]
    if not isinstance(value, int | float) or isinstance(value, bool):
        raise TableError(f"{key}.{name}", f"{shown(value)} is {kind_of(value)}", _NUMBER)
    if not _is_number(value):
        raise TableError(f"{key}.{name}", f"{shown(value)} is not finite, or beyond float64", _NUMBER)
    return float(value)


def _is_number(value: object) -> bool:
    try:
        return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(float(value))
    except OverflowError:
        return False


def scales_assumed(domain: object) -> Iterator[str]:
    """Yield the keys of the scales that a plain table `[domain]` leaves out, below the table."""
    box = domain.get("parameters") if isinstance(domain, dict) else None
    for name, axis in box.items() if isinstance(box, dict) else ():
        if isinstance(axis, dict) and "scale" not in axis:
            yield f"parameters.{name}.scale"


def domain_lines(parameters: Mapping[str, float]) -> list[str]:
    """Return the table as comments of a draft, with a box around the first of the parameters; none without one."""
    if not parameters:
        return []
    name, value = next(iter(parameters.items()))
    low, high = sorted((value / 2, value * 2)) if value else (-1.0, 1.0)
    axis = f'{{ low = {low!r}, high = {high!r}, scale = "linear" }}'
    default = {field.name: field.default for field in msgspec.structs.fields(DomainTable)}
    return [
        "",
        "# [domain]",
        f"# parameters = {{ {dotted(name)} = {axis} }}  # a box around it, in which the verdict is tried",
        f"# scenarios = {default['scenarios']}  # points of the box, a power of two; its corners are tried, too",
        f"# paths = {default['paths']}  # of a level at the first look at a scenario",
        f"# most_paths = {default['most_paths']}  # of a level at which looking at a scenario ends",
    ]
