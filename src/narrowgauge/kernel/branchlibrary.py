"""A correction branch in a shared library, one C function for each pair of formats.

    int NAME_NARROW_WIDE(const N *low, const W *high, size_t steps, size_t factors, size_t paths, double h,
                         const double *parameters, size_t count, W *out, size_t outputs)

with N and W the types of the two formats. `low` and `high` are the same draws rounded to each, `out` is (outputs,
paths) and holds the quantities of the low part, then those of the high part, all in the wide type, which has every
number of the narrow one. The rest is as for a kernel in `library.py`.
"""

from __future__ import annotations

import ctypes
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.formats import Format
from narrowgauge.errors import AuditFileError, KernelError
from narrowgauge.kernel.library import Library

__all__ = ["PairLibrary"]

_POINTER, _SIZE = ctypes.c_void_p, ctypes.c_size_t
_ARGUMENTS = (_POINTER, _POINTER, _SIZE, _SIZE, _SIZE, ctypes.c_double, _POINTER, _SIZE, _POINTER, _SIZE)
Columns = dict[str, npt.NDArray[Any]]


class PairLibrary(Library):
    """The library of a correction branch, whose `table` has its path, its symbol and the kernel's names."""

    def check_pairs(self, pairs: Sequence[tuple[str, str]]) -> None:
        """Load the library; raise AuditFileError naming all symbols that are looked for unless all are there."""
        library = self._opened()
        symbols = [f"{self._table.symbol}_{narrow}_{wide}" for narrow, wide in pairs]
        missing = [symbol for symbol in symbols if not hasattr(library, symbol)]
        if missing:
            what = f"{self.path} has no function {' or '.join(missing)}; looked for {', '.join(symbols)}"
            accepted = "a library with a function for each pair of formats that a split could use"
            raise AuditFileError(self._source, "branches.symbol", what, accepted)

    def pair(self, narrow: Format, wide: Format) -> Callable[..., tuple[Columns, Columns]]:
        """Return the library's function for two formats as one of ((low, high), h, **parameters).

        It returns the quantities of the low and of the high part by name, in the wide type. Raises KernelError where
        the library reports an error.
        """
        symbol, names = f"{self._table.symbol}_{narrow.name}_{wide.name}", self._table.outputs
        called = getattr(self._opened(), symbol)
        called.restype, called.argtypes = ctypes.c_int, _ARGUMENTS

        def correction(draws: tuple[Any, Any], h: float, **parameters: Any) -> tuple[Columns, Columns]:
            low, high = draws
            sizes = dict(zip(self._axes, low.shape, strict=True))
            numbers = [np.ravel(parameters[name]) for name in self._table.parameters]
            given = np.concatenate([np.empty(0), *numbers]).astype(np.float64)
            out = np.full((2 * len(names), sizes["paths"]), np.nan, high.dtype)
            code = called(
                *(low.ctypes.data, high.ctypes.data, sizes["steps"], sizes.get("factors", 1), sizes["paths"], h),
                *(given.ctypes.data, given.size, out.ctypes.data, 2 * len(names)),
            )
            if code != 0:
                raise KernelError(f"{self.path}: {symbol} returned {code}; accepted: 0, for success")
            return dict(zip(names, out, strict=False)), dict(zip(names, out[len(names) :], strict=True))

        # In the stack of a crash this stands for the C function, which has no place in it.
        correction.__code__ = correction.__code__.replace(co_filename=str(self.path), co_name=symbol)
        return correction
