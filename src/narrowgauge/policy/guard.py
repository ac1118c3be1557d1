"""The guard: what running code asks for the scheme of a level, at the parameters that it runs with.

Importing this module imports neither numpy nor pandas nor scipy, and reading a policy runs no code. A question takes a
microsecond or two where no parameter is an array.
"""

from __future__ import annotations

import importlib
import math
import operator
import reprlib
import struct
import threading
from collections.abc import Callable
from functools import cache
from operator import itemgetter
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final, Literal, NoReturn

import msgspec

from narrowgauge.errors import OutsidePolicyError, PolicyError
from narrowgauge.kernel.identity import identity_of
from narrowgauge.record.policy import FormatName, KernelPart, LevelPart, ParameterPart, PolicyDocument, read_policy

if TYPE_CHECKING:
    import numpy as np

__all__ = ["BEYOND", "Policy", "Rule"]

BEYOND: Final = "level"  # the reason of an answer beyond the ladder
_WHOLE = 2**53  # below it every whole number is a double
_SHOWN = reprlib.Repr()
_SHOWN.maxother = _SHOWN.maxstring = 60
_DTYPES: dict[FormatName, tuple[str, str]] = {
    "float64": ("numpy", "float64"),
    "float32": ("numpy", "float32"),
    "float16": ("numpy", "float16"),
    "bfloat16": ("ml_dtypes", "bfloat16"),
    "e4m3": ("ml_dtypes", "float8_e4m3fn"),
    "e5m2": ("ml_dtypes", "float8_e5m2"),
}
_COVERED = {
    "syntax trees": "the syntax trees of the function's file and of {modules}, where formatting does not count",
    "bytes": "the bytes of the library, or of the command's files",
    "code": "the function's code with its defaults, closure and globals, and {modules}",
}


class Rule(msgspec.Struct, frozen=True, kw_only=True):
    """How to estimate one level: `alone` in `narrow`, or `split` between `narrow` and a correction from it to `wide`.

    `paths` are those to plan for the branch in `narrow` (which may be float64), `correction_paths` those for the
    correction branch, None where there is none. `draws` are those of the narrow branch; a wide one has exact draws.

    `outside` is None where the policy covers what was asked, else why it does not: "level", or "parameter" and its
    name. The rule is then the reference, float64 alone with exact draws; `paths` are those that the policy has for the
    level's first branch, planned for what was audited, and None beyond the ladder, for which nobody has planned.
    """

    level: int
    scheme: Literal["alone", "split"]
    narrow: FormatName
    wide: FormatName | None
    draws: Literal["exact", "approximate"]
    rounding: str
    paths: int | None
    correction_paths: int | None
    outside: str | None = None

    @property
    def narrow_dtype(self) -> np.dtype[Any]:
        """The NumPy type of `narrow`; PolicyError for tf32, which has none. Imports numpy, or ml_dtypes."""
        return _dtype(self.narrow)

    @property
    def wide_dtype(self) -> np.dtype[Any] | None:
        """The NumPy type of `wide`, or None where there is no correction branch."""
        return None if self.wide is None else _dtype(self.wide)


class Policy:
    """A policy that running code obeys: `at` answers for a level. One may be asked by any number of threads.

    `outside` says what becomes of a question that the policy does not cover: "raise" an OutsidePolicyError, or answer
    with the "reference" and count it.
    """

    def __init__(
        self, document: PolicyDocument, *, outside: Literal["raise", "reference"] = "raise", source: str = "policy"
    ) -> None:
        if outside not in ("raise", "reference"):
            raise PolicyError(f"outside = {_SHOWN.repr(outside)} is not accepted; accepted: 'raise' or 'reference'")
        self.document = document
        self._source, self._raises = source, outside == "raise"
        self._rules = [_rule(one) for one in document.levels]
        self._parameters = parameters = document.domain.parameters
        self._limits = [(name, part, *_limits(part)) for name, part in parameters.items()]
        # A question whose values pack to these bytes has these numbers, whatever their types.
        packed = {name: part.fixed for name, part in parameters.items() if _packs(part.fixed)}
        self._pack = struct.Struct(f"{len(packed)}d").pack
        self._packed, self._packed_of = self._pack(*packed.values()), _values_of(tuple(packed))
        self._number, self._bits = int.from_bytes(self._packed, "big"), 8 * len(self._packed)
        self._known_by_bytes = list(packed)
        self._left: dict[int, list[tuple[str, ParameterPart, float, float]]] = {}
        self._rest_of = _values_of(tuple(name for name in parameters if name not in packed))
        self._boxes = [(name, low, high) for name, _, low, high in self._limits if low <= high and name not in packed]
        others = {name: part.fixed for name, part, low, high in self._limits if low > high}
        self._others = [(name, type(value), value) for name, value in others.items()]
        # All names are looked up then, so that an unknown one does not pass. Arrays are never compared quickly, nor are
        # whole numbers that may be no double: NumPy's float64 compares with those as doubles.
        slow = any(isinstance(value, list) for value in others.values())
        slow = slow or any(isinstance(low, int) and abs(low) >= _WHOLE for _, _, low, _ in self._limits)
        self._quickly = -1 if slow else len(parameters)
        self._lock = threading.Lock()
        self._reasons = {name: f"parameter {name}" for name in parameters}
        self._fallbacks = dict.fromkeys([BEYOND, *self._reasons.values()], 0)
        self._references = [
            {reason: _reference(rule.level, rule.paths, reason) for reason in self._fallbacks} for rule in self._rules
        ]

    @classmethod
    def load(
        cls,
        path: str | Path,
        kernel: Callable[..., Any] | str | Path | None = None,
        outside: Literal["raise", "reference"] = "raise",
    ) -> Policy:
        """Return the policy in a file, after comparing its fingerprint with that of `kernel`, if one is given.

        `kernel` is the function that is going to run, "file.py:function", or the path of a library. Raises
        DocumentError where the file is no policy, PolicyError where the kernel is another one than was audited, or
        cannot be compared, as a command never can.
        """
        document = read_policy(Path(path))
        if kernel is not None:
            _compare(document.kernel, kernel, str(path))
        return cls(document, outside=outside, source=str(path))

    def at(self, level: int, /, **parameters: object) -> Rule:
        """Return the rule for a level at these parameters, all of which the policy names.

        A number is outside where it is not the one that was audited, not inside the box that was, or NaN; what is of
        another kind than was audited is outside, too. Raises PolicyError where `level` is no whole number from 0, where
        a parameter is missing or unknown, and OutsidePolicyError, one of these, as `outside` says.
        """
        try:
            if type(level) is int and 0 <= level < len(self._rules) and len(parameters) == self._quickly:
                packed = self._pack(*self._packed_of(parameters))
                if packed == self._packed:
                    for name, low, high in self._boxes:
                        value = parameters[name]
                        if not (isinstance(value, float) or type(value) is int) or not low <= value <= high:
                            break
                    else:
                        for name, kind, fixed in self._others:
                            value = parameters[name]
                            if type(value) is not kind or value != fixed:
                                break
                        else:
                            return self._rules[level]
                self._rest_of(parameters)  # a KeyError where another name stands in the place of one
                return self._from_the_first(level, parameters, packed)
        except (KeyError, struct.error):  # a name that is missing, no number
            pass
        return self._examined(level, parameters)

    def fallbacks(self) -> dict[str, int]:
        """Return how often the reference was the answer, by reason: "level", and "parameter" with each name.

        What has several reasons counts for the first: the level, then the parameters in the order of the policy.
        """
        with self._lock:
            return dict(self._fallbacks)

    def _examined(self, level: object, parameters: dict[str, object]) -> Rule:
        """Return what `at` does, for whatever it is asked."""
        number = level if type(level) is int and level >= 0 else self._numbered(level)
        if parameters.keys() != self._parameters.keys():
            self._refuse_names(parameters)
        if number >= len(self._rules):
            return self._answer(number, BEYOND, None)
        return self._looked_at(number, parameters, self._limits)

    def _from_the_first(self, level: int, parameters: dict[str, object], packed: bytes) -> Rule:
        """Return what `_examined` does for a level and names that are known, and values that pack to these bytes.

        The highest bit that differs says up to where they are those of the audit; what they say is not looked at again.
        """
        alike = (self._bits - (int.from_bytes(packed, "big") ^ self._number).bit_length()) // 64
        left = self._left.get(alike)
        if left is None:
            known = set(self._known_by_bytes[:alike])
            left = self._left[alike] = [one for one in self._limits if one[0] not in known]
        return self._looked_at(level, parameters, left)

    def _looked_at(
        self, level: int, parameters: dict[str, object], limits: list[tuple[str, ParameterPart, float, float]]
    ) -> Rule:
        for name, part, low, high in limits:
            value = parameters[name]
            if low <= value <= high if type(value) is float else _inside(value, part):
                continue
            return self._answer(level, self._reasons[name], value)
        return self._rules[level]

    def _numbered(self, level: object) -> int:
        try:
            number = -1 if isinstance(level, bool) else operator.index(level)  # type: ignore[arg-type]
        except TypeError:
            number = -1
        if number < 0:
            self._refuse(f"{_SHOWN.repr(level)} is no level; accepted: a whole number from 0")
        return number

    def _refuse_names(self, parameters: dict[str, object]) -> NoReturn:
        accepted = f"accepted: {', '.join(self._parameters) or 'none'}"
        for name in parameters:
            if name not in self._parameters:
                self._refuse(f"unknown parameter {name!r}; {accepted}")
        missing = next(name for name in self._parameters if name not in parameters)
        self._refuse(f"the parameter {missing!r} is missing; {accepted}")

    def _answer(self, level: int, reason: str, value: object) -> Rule:
        """Answer what the policy does not cover: the level, or the value of a parameter."""
        if self._raises:
            what = self._beyond(level) if reason == BEYOND else self._unaudited(reason, value)
            raise OutsidePolicyError(f"{self._source}: {what}", reason=reason)
        with self._lock:
            self._fallbacks[reason] += 1
        return self._references[level][reason] if level < len(self._rules) else _reference(level, None, reason)

    def _beyond(self, level: int) -> str:
        return f"level {level} is beyond the audited ladder; accepted: 0 to {len(self._rules) - 1}"

    def _unaudited(self, reason: str, value: object) -> str:
        name = next(name for name, known in self._reasons.items() if known == reason)
        part = self._parameters[name]
        accepted = _SHOWN.repr(part.fixed) if part.fixed is not None else f"{part.low!r} to {part.high!r}"
        return f"{name} = {_SHOWN.repr(value)} was not audited; accepted: {accepted}"

    def _refuse(self, problem: str) -> NoReturn:
        raise PolicyError(f"{self._source}: {problem}")


def _rule(one: LevelPart) -> Rule:
    names = [name for name in Rule.__struct_fields__ if name != "outside"]
    return Rule(**{name: getattr(one, name) for name in names})


def _reference(level: int, paths: int | None, reason: str) -> Rule:
    return Rule(
        level=level,
        scheme="alone",
        narrow="float64",
        wide=None,
        draws="exact",
        rounding="nearest",
        paths=paths,
        correction_paths=None,
        outside=reason,
    )


def _values_of(names: tuple[str, ...]) -> Callable[[dict[str, object]], tuple[object, ...]]:
    """Return what takes the values of these names out of a dictionary, as a tuple; a KeyError where one lacks."""
    if not names:
        return lambda given: ()
    if len(names) == 1:
        return lambda given: (given[names[0]],)
    return itemgetter(*names)


@cache
def _dtype(name: FormatName) -> np.dtype[Any]:
    if name not in _DTYPES:
        raise PolicyError(f"{name} has no NumPy type; accepted: {', '.join(_DTYPES)}")
    import numpy as np

    module, kind = _DTYPES[name]
    found: np.dtype[Any] = np.dtype(getattr(importlib.import_module(module), kind))
    return found


def _compare(known: KernelPart, kernel: Callable[..., Any] | str | Path, source: str) -> None:
    """Raise PolicyError where a kernel is not the one that the policy was drawn up for."""
    if _is_command(known):
        raise PolicyError(
            f"{source}: kernel: the policy's kernel is the command {known.run}, which cannot be compared; accepted: no "
            "kernel, and narrowgauge gate to see whether the policy still holds"
        )
    try:
        found = identity_of(kernel, run=known.run, covers=known.covers, modules=known.modules)
    except PolicyError as problem:
        raise PolicyError(f"{source}: kernel: {problem}") from None
    if found != known.fingerprint:
        modules = f"the modules {', '.join(known.modules)}" if known.modules else "no other module"
        covered = _COVERED[known.covers].format(modules=modules)
        raise PolicyError(
            f"{source}: kernel: this is another kernel than {known.run}, which was audited, or it has changed since: "
            f"its fingerprint is {found}, the policy's {known.fingerprint}, of {covered}; accepted: the kernel as it "
            "was audited, or the policy of a new audit"
        )


def _is_command(known: KernelPart) -> bool:
    """Return whether what was audited is a command: known by its bytes, and not as "library:symbol"."""
    _, colon, symbol = known.run.rpartition(":")
    return known.covers == "bytes" and not (colon and symbol.isascii() and symbol.isidentifier())


def _packs(value: object) -> bool:
    """Return whether an audited value is the only one that packs to its bytes, 0 and -0, and booleans, aside."""
    return (
        isinstance(value, int | float) and not isinstance(value, bool) and value not in (0, 1) and abs(value) < _WHOLE
    )


def _limits(part: ParameterPart) -> tuple[float, float]:
    """Return between which floats a parameter is inside; between none where it is no number."""
    if part.low is not None and part.high is not None:
        return part.low, part.high
    if isinstance(part.fixed, int | float) and not isinstance(part.fixed, bool):
        return part.fixed, part.fixed
    return math.inf, -math.inf


def _inside(value: object, part: ParameterPart) -> bool:
    if part.fixed is not None:
        return _same(value, part.fixed)
    found = _exact(value)
    return found is not None and part.low is not None and part.high is not None and part.low <= found <= part.high


def _same(value: object, fixed: object) -> bool:
    """Return whether a value is the one in the policy; its depth is that of the policy's, whatever the value's."""
    if isinstance(fixed, bool):
        return isinstance(value := _listed(value), bool) and value == fixed
    if isinstance(fixed, int | float):
        return _exact(value) == fixed
    if isinstance(fixed, str):
        return isinstance(value, str) and str.__eq__(value, fixed)
    value = _listed(value)
    assert isinstance(fixed, list)  # the last of what a parameter may be
    return isinstance(value, list | tuple) and len(value) == len(fixed) and all(map(_same, value, fixed))


def _exact(value: object) -> int | float | None:
    """Return a number as Python's own, with the value that float() or a whole number gives; a boolean is none."""
    if isinstance(value, float):
        return float(value)
    if not isinstance(value, list):
        value = _listed(value)
        while isinstance(value, list) and len(value) == 1:  # an array of one number, of which float() makes it
            value = value[0]
    if isinstance(value, bool):
        return None
    try:
        if hasattr(value, "__index__"):
            return operator.index(value)
        return float(value) if hasattr(value, "__float__") else None
    except (TypeError, ValueError, OverflowError):
        return None


def _listed(value: object) -> object:
    """Return arrays and scalars of NumPy, and of its like, as lists and scalars of Python."""
    made = getattr(value, "tolist", None)
    return made() if callable(made) and not isinstance(value, type) else value
