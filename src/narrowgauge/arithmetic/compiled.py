"""The loops of `kernels.py` compiled by numba where the extra `fast` is installed; the bits are those of NumPy's code.

numba is imported when the first rounding asks for it, never by an import of this package. What is compiled is kept on
disk where numba keeps it (beside the source, or in the user's cache folder), so that compiling is paid once per
installation. Where neither can be written a temporary folder serves this process alone, and `note` says so.
NARROWGAUGE_COMPILED=0 in the environment leaves numba alone.
"""

from __future__ import annotations

import atexit
import importlib
import os
import shutil
import tempfile
from collections.abc import Callable
from functools import cache as once
from types import ModuleType
from typing import Any

from narrowgauge.arithmetic.kernels import LOOPS

__all__ = ["kernel", "note"]


def kernel(name: str) -> Callable[..., Any] | None:
    """Return a compiled loop, or None where NumPy has to do it."""
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
    loop, signature = LOOPS[name]
    try:
        return _compile(numba, name, loop, signature, cache=True)
    except OSError:  # a full disk: for this process alone
        return _compile(numba, name, loop, signature, cache=False)


def _compile(numba: ModuleType, name: str, loop: Any, signature: str, *, cache: bool) -> Callable[..., Any]:
    found: Callable[..., Any]
    if name == "odd":
        found = numba.vectorize([signature], cache=cache)(loop)
    else:
        found = numba.njit(signature, nogil=True, cache=cache, error_model="numpy")(loop)
    return found
