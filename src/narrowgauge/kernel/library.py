"""A kernel in a shared library, one C function for each format.

    int NAME_FORMAT(const T *draws, size_t steps, size_t factors, size_t paths, double h,
                    const double *parameters, size_t count, T *out, size_t outputs)

with T the format's own type (for float16 and bfloat16 what 16 bits of storage hold, for the others float and double).
`draws` are in the order of `kernel.layout`, `out` is (outputs, paths) in C's order; both are contiguous. `parameters`
holds `count` numbers in the order of `library.parameters`, the elements of an array one after the other. 0 is success.

Only worker processes load a library: what it does to its process it does to them.
"""

from __future__ import annotations

import ctypes
import hashlib
from collections.abc import Callable, Sequence
from typing import Any, ClassVar

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.formats import Format
from narrowgauge.errors import AuditFileError, KernelError
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.audittables import axes_of
from narrowgauge.kernel.owntables import LibraryTable

__all__ = ["Library"]

_POINTER, _SIZE = ctypes.c_void_p, ctypes.c_size_t
_ARGUMENTS = (_POINTER, _SIZE, _SIZE, _SIZE, ctypes.c_double, _POINTER, _SIZE, _POINTER, _SIZE)


class Library:
    """The library that `[library]` names, loaded only when it is needed.

    Raises AuditFileError where there is no such file.
    """

    nan: ClassVar[str] = "an output that is not written looks the same"

    def __init__(self, file: AuditFile, table: LibraryTable) -> None:
        self._table, self._source = table, file.source
        self._axes = axes_of(file.kernel.layout)
        self.path = (file.folder / table.path).resolve()
        if not self.path.is_file():
            what = f"no such file: {self.path}"
            raise AuditFileError(self._source, "library.path", what, "a shared library, relative to the audit file")
        self._loaded: ctypes.CDLL | None = None

    def digest(self) -> str:
        """Return the fingerprint of the library's bytes."""
        try:
            return f"sha256:{hashlib.sha256(self.path.read_bytes()).hexdigest()}"
        except OSError as problem:
            what = f"{self.path} cannot be read: {problem.strerror}"
            raise AuditFileError(self._source, "library.path", what, "a shared library") from None

    def check(self, formats: Sequence[str]) -> None:
        """Load the library; raise AuditFileError naming all symbols that are looked for unless all are there."""
        library = self._opened()
        symbols = [self._symbol(name) for name in formats]
        missing = [symbol for symbol in symbols if not hasattr(library, symbol)]
        if missing:
            what = f"{self.path} has no function {' or '.join(missing)}; looked for {', '.join(symbols)}"
            accepted = "a library with a function for each format of [formats] and for float64, the reference"
            raise AuditFileError(self._source, "library.symbol", what, accepted)

    def function(self, form: Format) -> Callable[..., dict[str, npt.NDArray[Any]]]:
        """Return the library's function for one format as one of (draws, h, **parameters).

        It returns the quantities by name, in the type of the draws, which lie in the order of kernel.layout. Raises
        KernelError where the library reports an error.
        """
        symbol = self._symbol(form.name)
        self.check([form.name])
        called = getattr(self._opened(), symbol)
        called.restype, called.argtypes = ctypes.c_int, _ARGUMENTS
        names = self._table.outputs

        def kernel(draws: npt.NDArray[Any], h: float, **parameters: Any) -> dict[str, npt.NDArray[Any]]:
            sizes = dict(zip(self._axes, draws.shape, strict=True))
            numbers = [np.ravel(parameters[name]) for name in self._table.parameters]
            given = np.concatenate([np.empty(0), *numbers]).astype(np.float64)
            # What the library does not write stays NaN.
            out = np.full((len(names), sizes["paths"]), np.nan, draws.dtype)
            code = called(
                *(draws.ctypes.data, sizes["steps"], sizes.get("factors", 1), sizes["paths"], h),
                *(given.ctypes.data, given.size, out.ctypes.data, len(names)),
            )
            if code != 0:
                raise KernelError(f"{self.path}: {symbol} returned {code}; accepted: 0, for success")
            return dict(zip(names, out, strict=True))

        # In the stack of a crash this stands for the C function, which has no place in it.
        kernel.__code__ = kernel.__code__.replace(co_filename=str(self.path), co_name=symbol)
        return kernel

    def _symbol(self, name: str) -> str:
        return f"{self._table.symbol}_{name}"

    def _opened(self) -> ctypes.CDLL:
        if self._loaded is None:
            try:
                self._loaded = ctypes.CDLL(str(self.path))
            except OSError as problem:
                what = f"{self.path} cannot be loaded: {problem}"
                raise AuditFileError(self._source, "library.path", what, "a shared library of this machine") from None
        return self._loaded
