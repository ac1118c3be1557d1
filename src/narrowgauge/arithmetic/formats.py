"""The floating-point formats as data: one row a format, everything else derived.

Sources: IEEE 754-2019, table 3.5 (binary16, binary32, binary64), recalled from memory; bfloat16 is a vendor
format with binary32's exponents and 8 bits of precision, recalled from memory.
"""

from __future__ import annotations

from dataclasses import dataclass

import ml_dtypes
import numpy as np

__all__ = ["FORMATS", "Format", "format_named"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Format:
    """A binary floating-point format with subnormals, infinities and NaN.

    `precision` counts the significand's bits with the hidden one, `emax` is the largest exponent, `bits` the
    width in storage, `carrier` the NumPy type that holds its values during emulation, `storage` the NumPy or
    ml_dtypes type with exactly these values.
    """

    name: str
    precision: int
    emax: int
    bits: int
    carrier: np.dtype[np.float32] | np.dtype[np.float64]
    storage: np.dtype[np.generic]

    @property
    def emin(self) -> int:
        """Smallest exponent of a normal number."""
        return 1 - self.emax

    @property
    def unit_roundoff(self) -> float:
        """2^-p, the largest relative error of rounding to nearest; the delta of the delta^2/h law."""
        return 2.0**-self.precision

    @property
    def max_finite(self) -> float:
        """Largest finite value."""
        return (2.0 - 2.0 ** (1 - self.precision)) * 2.0**self.emax

    @property
    def min_normal(self) -> float:
        """Smallest positive normal value."""
        return 2.0**self.emin

    @property
    def min_subnormal(self) -> float:
        """Smallest positive value, also the spacing of the subnormals."""
        return 2.0 ** (self.emin - self.precision + 1)

    @property
    def native(self) -> bool:
        """Whether the carrier's own arithmetic already is this format's."""
        return self.carrier == self.storage


_F32, _F64 = np.dtype(np.float32), np.dtype(np.float64)

FORMATS: dict[str, Format] = {
    row.name: row
    for row in (
        Format(name="float16", precision=11, emax=15, bits=16, carrier=_F32, storage=np.dtype(np.float16)),
        Format(
            name="bfloat16",
            precision=8,
            emax=127,
            bits=16,
            carrier=_F32,
            storage=np.dtype(ml_dtypes.bfloat16),
        ),
        Format(name="float32", precision=24, emax=127, bits=32, carrier=_F32, storage=_F32),
        Format(name="float64", precision=53, emax=1023, bits=64, carrier=_F64, storage=_F64),
    )
}


def format_named(name: str) -> Format:
    """Return the format of that name; a KeyError names what is known."""
    try:
        return FORMATS[name]
    except KeyError:
        raise KeyError(f"{name!r} is not a format; accepted: {', '.join(FORMATS)}") from None
