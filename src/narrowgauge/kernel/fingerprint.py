"""A fingerprint of what is run: of source texts, or of a function that was handed over from Python.

A function counts with its code, defaults, closure and the globals that it mentions, functions and classes of its own
module likewise; the values of objects of other kinds do not count, only their types. Fingerprints of functions differ
between versions of Python, as its code does.
"""

from __future__ import annotations

import functools
import hashlib
from collections.abc import Callable, Iterator, Mapping
from types import CodeType, FunctionType, ModuleType
from typing import Any

import numpy as np

__all__ = ["fingerprint"]

_CONSTANT = (tuple, frozenset, CodeType, np.generic)  # whether two of these are one object is the compiler's choice
_PLAIN = (type(None), bool, int, float, complex, str, bytes, type(...))


def fingerprint(texts: Mapping[str, bytes], function: Callable[..., Any] | None = None) -> str:
    """Return "sha256:" and the digest of source texts by name of the module, and of a function handed over, if any.

    A single text has the digest of the file that holds it.
    """
    if function is None and len(texts) == 1:
        (text,) = texts.values()
        return f"sha256:{hashlib.sha256(text).hexdigest()}"
    total = hashlib.sha256()
    for name in sorted(texts):
        total.update(f"{name} {hashlib.sha256(texts[name]).hexdigest()}\n".encode())
    if function is not None:
        for word in _Words().of(function):
            total.update(f"{len(word)} {word}\n".encode("utf-8", "surrogatepass"))
    return f"sha256:{total.hexdigest()}"


class _Words:
    """Everything that counts, as words in a fixed order; an object that comes again is named by its number."""

    def __init__(self) -> None:
        self._met: dict[int, tuple[int, Any]] = {}  # with the object, whose id must not be used again

    def of(self, value: Any) -> Iterator[str]:
        if isinstance(value, _PLAIN):
            yield f"{type(value).__name__} {value!r}"
            return
        if id(value) in self._met:
            yield f"again {self._met[id(value)][0]}"
            return
        if not isinstance(value, _CONSTANT):
            self._met[id(value)] = len(self._met), value
        yield type(value).__qualname__
        yield from self._inside(value)

    def _inside(self, value: Any) -> Iterator[str]:
        if isinstance(value, CodeType):
            yield from self._code(value)
        elif isinstance(value, FunctionType):
            yield from self._function(value)
        elif isinstance(value, type):
            yield f"{value.__module__}.{value.__qualname__}"
        elif isinstance(value, ModuleType):
            yield value.__name__
        elif isinstance(value, (np.ndarray, np.generic)) and value.dtype.kind != "O":
            yield f"{value.dtype.str} {value.shape} {hashlib.sha256(value.tobytes()).hexdigest()}"
        elif isinstance(value, functools.partial):
            yield from self._all((value.func, value.args, value.keywords))
        elif isinstance(value, (list, tuple)):
            yield from self._all(value)
        elif isinstance(value, dict):
            for key, item in value.items():
                yield from self._all((key, item))
        elif isinstance(value, (set, frozenset)):
            yield from sorted("\n".join(_Words().of(item)) for item in value)  # their order changes from run to run
        elif isinstance(getattr(value, "py_func", None), FunctionType):
            yield from self.of(value.py_func)

    def _all(self, values: Any) -> Iterator[str]:
        yield str(len(values))
        for value in values:
            yield from self.of(value)

    def _code(self, code: CodeType) -> Iterator[str]:
        yield from (code.co_name, code.co_code.hex(), str(code.co_flags))
        counts = (code.co_argcount, code.co_posonlyargcount, code.co_kwonlyargcount)
        yield from self._all((counts, code.co_names, code.co_varnames, code.co_freevars, code.co_cellvars))
        yield from self._all(code.co_consts)

    def _function(self, function: FunctionType) -> Iterator[str]:
        yield from self.of(function.__code__)
        yield from self.of(function.__defaults__)
        yield from self.of(function.__kwdefaults__)
        for cell in function.__closure__ or ():
            try:
                yield from self.of(cell.cell_contents)
            except ValueError:  # not assigned yet
                yield "empty"
        home = function.__globals__
        for name in sorted(_names(function.__code__) & home.keys()):
            yield name
            yield from self._global(home[name], home)

    def _global(self, value: Any, home: dict[str, Any]) -> Iterator[str]:
        """Describe a global: functions and classes of the function's own module with their code, others by name."""
        if isinstance(value, FunctionType) and value.__globals__ is not home:
            yield f"{value.__module__}.{value.__qualname__}"
            return
        yield from self.of(value)
        if isinstance(value, type) and value.__module__ == home.get("__name__"):
            for name, item in vars(value).items():
                if isinstance(item, FunctionType):
                    yield name
                    yield from self.of(item)


def _names(code: CodeType) -> set[str]:
    """Return the global names that a code object and the code inside it mention."""
    inner = (constant for constant in code.co_consts if isinstance(constant, CodeType))
    return set(code.co_names).union(*map(_names, inner))
