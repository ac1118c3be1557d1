"""The loops of `kernels.py` and `onepass.py` compiled by numba where the extra `fast` is installed.

The bits are those of NumPy's code.

numba is imported when the first arithmetic that is not native is made, never by an import of this package. What is
compiled is kept on disk where numba keeps it (beside the source, or in the user's cache folder), so that compiling is
paid once per installation. Where neither can be written a temporary folder serves this process alone; where what is
kept there cannot be read, or nothing more be written, a loop is compiled for this process; where it cannot be compiled
NumPy computes. `note` says so. NARROWGAUGE_COMPILED=0 in the environment leaves numba alone.
"""

from __future__ import annotations

import atexit
import ctypes
import importlib
import os
import shutil
import tempfile
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import cache as once
from types import ModuleType
from typing import Any

import numpy as np

from narrowgauge.arithmetic.kernels import LOOPS

__all__ = ["kernel", "note"]

_INNER = "void(CPointer(CPointer(float32)), CPointer(intp), CPointer(intp), voidptr)"  # NumPy's inner loops
_KEPT: list[Any] = []  # what the ufuncs made here point to
_NOTES: list[str] = []
_LOCK = threading.Lock()


def kernel(name: str) -> Callable[..., Any] | None:
    """Return a compiled loop, or None where NumPy has to do it.

    Named by a row of `kernels.LOOPS`, or by one of `onepass.PASSES`: that is a ufunc of float32 arrays.
    """
    return _compiled(name)


def note() -> str | None:
    """Return what a reader of the results should know about compiling in this process so far, None if all is as usual.

    It says nothing about the bits, and the same in all processes that have the same trouble.
    """
    return "; ".join(_NOTES) or None


@once
def _numba() -> ModuleType | None:
    if os.environ.get("NARROWGAUGE_COMPILED") == "0":
        _NOTES.append("NARROWGAUGE_COMPILED=0: roundings were not compiled")
        return None
    try:
        return importlib.import_module("numba")
    except ImportError:
        why = "numba is not installed, or does not go with this NumPy"
        _NOTES.append(f"{why}: roundings were not compiled (extra: fast)")
        return None


@once
def _usual() -> str | None:
    """Return the folder where numba keeps what it compiles of these loops; None if it finds none."""
    numba = _numba()
    assert numba is not None
    try:
        return str(numba.njit(cache=True)(LOOPS["words"][0]).stats.cache_path)
    except (RuntimeError, OSError):  # numba's "no locator available"
        return None


@once
def _temporary() -> str:
    """Return the folder that serves where numba has none; it goes when the process ends."""
    folder = tempfile.mkdtemp(prefix="narrowgauge-")
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    _NOTES.append("numba's usual folder cannot be written: each process compiled anew, into a temporary folder")
    return folder


@contextmanager
def _kept(numba: ModuleType, folder: str | None) -> Iterator[None]:
    """Have what is declared in this context kept in `folder`, numba's own, or a temporary one; the user's as ever."""
    if folder is not None:
        yield
        return
    usual, numba.config.CACHE_DIR = numba.config.CACHE_DIR, _temporary()
    try:
        yield
    finally:
        numba.config.CACHE_DIR = usual


@once
def _compiled(name: str) -> Callable[..., Any] | None:
    numba = _numba()
    if numba is None:
        return None
    row, folder = _row(name), None
    with _LOCK:
        try:
            folder = _usual()
            with _kept(numba, folder):
                return _compile(numba, name, row, cache=True)
        except Exception as problem:  # a file of numba's cache that was cut short: whatever its reader raises
            first = problem
        try:
            found = _compile(numba, name, row, cache=False)
        except Exception as problem:  # nothing in a compiler may stop an audit that NumPy can do
            _add(f"numba cannot compile here ({type(problem).__name__}): NumPy did some of the roundings")
            return None
        trouble = f"numba's cache cannot be used ({type(first).__name__}): each process compiled anew"
        _add(f"{trouble}; empty {folder}" if folder else trouble)
        return found


def _add(text: str) -> None:
    if text not in _NOTES:
        _NOTES.append(text)


def _row(name: str) -> tuple[Any, Any]:
    """Return a loop and its signature, or the number of its operands where it becomes a ufunc."""
    row: tuple[Any, Any]
    row = importlib.import_module("narrowgauge.arithmetic.onepass").PASSES[name] if " " in name else LOOPS[name]
    return row


def _compile(numba: ModuleType, name: str, row: tuple[Any, Any], *, cache: bool) -> Callable[..., Any]:
    found: Callable[..., Any]
    loop, kind = row
    if " " in name:
        compiled = numba.cfunc(_INNER, cache=cache, error_model="numpy")(loop)
        _KEPT.append(compiled)
        return _ufunc(compiled.address, kind, name)
    if name == "odd":
        found = numba.vectorize([kind], cache=cache)(loop)
    else:
        found = numba.njit(kind, nogil=True, cache=cache, error_model="numpy")(loop)
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
