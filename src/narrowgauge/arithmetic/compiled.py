"""The loops of `kernels.py` and `onepass.py` compiled by numba where the extra `fast` is installed.

The bits are those of NumPy's code.

numba is imported when the first rounding asks for it, never by an import of this package. What is compiled is kept on
disk where numba keeps it (beside the source, or in the user's cache folder), so that compiling is paid once per
installation. Where neither can be written a temporary folder serves this process alone, and `note` says so.
NARROWGAUGE_COMPILED=0 in the environment leaves numba alone.
"""

from __future__ import annotations

import atexit
import ctypes
import importlib
import os
import shutil
import tempfile
from collections.abc import Callable
from functools import cache as once
from types import ModuleType
from typing import Any

import numpy as np

from narrowgauge.arithmetic.kernels import LOOPS

__all__ = ["kernel", "note"]

_INNER = "void(CPointer(CPointer(float32)), CPointer(intp), CPointer(intp), voidptr)"  # NumPy's inner loops
_KEPT: list[Any] = []  # what the ufuncs made here point to


def kernel(name: str) -> Callable[..., Any] | None:
    """Return a compiled loop, or None where NumPy has to do it.

    Named by a row of `kernels.LOOPS`, or by one of `onepass.PASSES`: that is a ufunc of float32 arrays.
    """
    return _compiled(name)


def note() -> str | None:
    """Return what a reader of the results should know about compiling here, or None if all is as usual."""
    if _numba() is None:
        return _reason()
    folder = _temporary()
    if folder is None:
        return None
    return f"compiled code was kept in a temporary folder ({folder}), since numba's usual one cannot be written"


@once
def _numba() -> ModuleType | None:
    if os.environ.get("NARROWGAUGE_COMPILED") == "0":
        return None
    try:
        return importlib.import_module("numba")
    except ImportError:
        return None


def _reason() -> str:
    if os.environ.get("NARROWGAUGE_COMPILED") == "0":
        return "NARROWGAUGE_COMPILED=0: roundings were not compiled"
    return "numba is not installed, or does not go with this NumPy: roundings were not compiled (extra: fast)"


@once
def _temporary() -> str | None:
    """Return the folder that serves where numba finds no place for its cache; it goes when the process ends."""
    numba = _numba()
    if numba is None:
        return None
    try:
        numba.njit(cache=True)(LOOPS["words"][0])
    except RuntimeError:  # numba's "no locator available"
        folder = tempfile.mkdtemp(prefix="narrowgauge-")
        atexit.register(shutil.rmtree, folder, ignore_errors=True)
        numba.config.CACHE_DIR = folder
        return folder
    return None


@once
def _compiled(name: str) -> Callable[..., Any] | None:
    numba = _numba()
    if numba is None:
        return None
    _temporary()
    try:
        return _compile(numba, name, cache=True)
    except OSError:  # a full disk: for this process alone
        return _compile(numba, name, cache=False)


def _compile(numba: ModuleType, name: str, *, cache: bool) -> Callable[..., Any]:
    found: Callable[..., Any]
    if " " in name:
        loop, operands = importlib.import_module("narrowgauge.arithmetic.onepass").PASSES[name]
        compiled = numba.cfunc(_INNER, cache=cache, error_model="numpy")(loop)
        _KEPT.append(compiled)
        return _ufunc(compiled.address, operands, name)
    loop, signature = LOOPS[name]
    if name == "odd":
        found = numba.vectorize([signature], cache=cache)(loop)
    else:
        found = numba.njit(signature, nogil=True, cache=cache, error_model="numpy")(loop)
    return found


def _ufunc(address: int, operands: int, name: str) -> np.ufunc:
    """Return the ufunc of float32 operands whose inner loop is at an address, made by NumPy's C interface.

    PyUFunc_FromFuncAndData is the second entry of the table that every extension module with a ufunc reads.
    """
    pointer = ctypes.pythonapi.PyCapsule_GetPointer
    pointer.restype, pointer.argtypes = ctypes.c_void_p, [ctypes.py_object, ctypes.c_char_p]
    capsule = importlib.import_module("numpy._core._multiarray_umath")._UFUNC_API
    table = ctypes.cast(pointer(capsule, None), ctypes.POINTER(ctypes.c_void_p))
    numbers, text = [ctypes.c_int] * 4, ctypes.c_char_p
    make = ctypes.PYFUNCTYPE(
        ctypes.py_object, ctypes.c_void_p, ctypes.c_void_p, ctypes.c_void_p, *numbers, text, text, ctypes.c_int
    )(table[1])
    loops, data = (ctypes.c_void_p * 1)(address), (ctypes.c_void_p * 1)(None)
    kinds = ctypes.create_string_buffer(bytes([np.dtype(np.float32).num] * (operands + 1)))
    title, blank = ctypes.create_string_buffer(name.encode()), ctypes.create_string_buffer(b"")
    _KEPT.append((loops, data, kinds, title, blank))
    where = [ctypes.addressof(part) for part in (loops, data, kinds)]
    found: np.ufunc = make(*where, 1, operands, 1, -1, ctypes.cast(title, text), ctypes.cast(blank, text), 0)
    return found
