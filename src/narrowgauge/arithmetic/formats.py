"""The floating-point formats as data: one row a format, everything else derived.

Sources: IEEE 754-2019, table 3.5 (binary16, binary32, binary64), recalled from memory; bfloat16 and TF32 are vendor
formats with binary32's exponents and 8 and 11 bits of precision, recalled from memory; E4M3 and E5M2 are those of the
OCP 8-bit Floating Point Specification (OFP8), revision 1.0, recalled from memory.

E4M3 has no infinities: its largest exponent holds numbers, and only the last significand of it is NaN. The
specification offers two conversions for what is too large; this is the one that does not saturate, as in
`ml_dtypes.float8_e4m3fn`: an overflow is NaN, and so is what is infinite.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import inf, nan

import ml_dtypes
import numpy as np

__all__ = ["FORMATS", "Format", "format_named"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Format:
    """A binary floating-point format with subnormals, NaN and, where `infinite` says so, infinities.

    `precision` counts the significand's bits with the hidden one, `emax` is the largest exponent, `bits` the
    width in storage, `carrier` the NumPy type that holds its values during emulation, `storage` the NumPy or
    ml_dtypes type with exactly these values; TF32 has none, it is stored as float32. `shift` is by how much the
    exponents lie higher than in the format of that name proper, `emax` included; see `shifted`.
    """

    name: str
    precision: int
    emax: int
    bits: int
    carrier: np.dtype[np.float32] | np.dtype[np.float64]
    storage: np.dtype[np.generic]
    infinite: bool = True
    shift: int = 0

    @property
    def emin(self) -> int:
        """Smallest exponent of a normal number; without infinities one exponent more is used at the top."""
        return (1 if self.infinite else 2) - self.emax + 2 * self.shift

    @property
    def unit_roundoff(self) -> float:
        """2^-p, the largest relative error of rounding to nearest; the delta of the delta^2/h law."""
        return 2.0**-self.precision

    @property
    def max_finite(self) -> float:
        """Largest finite value."""
        return (2.0 - 2.0 ** ((1 if self.infinite else 2) - self.precision)) * 2.0**self.emax

    @property
    def infinity(self) -> float:
        """What is too large, or infinite: infinity, or NaN in a format without."""
        return inf if self.infinite else nan

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
        """Whether the carrier's own arithmetic already is this format's, to nearest with subnormals kept."""
        return self.precision >= 24 and not self.shift

    def shifted(self, shift: int) -> Format:
        """Return a format of this precision all of whose exponents are `shift` higher: 2^shift times its values.

        Its carrier is float64, no type stores it, and `InDouble` computes in it. ValueError for float64, beyond which
        there is no carrier, for a format that is shifted already, and for a shift past 512 either way.
        """
        if self.precision == 53 or self.shift or abs(shift) > _LARGEST_SHIFT:
            raise ValueError(
                f"{self.name} cannot be shifted by {shift}; accepted: formats below float64, to {_LARGEST_SHIFT}"
            )
        return replace(
            self,
            name=f"{self.name}, exponents {shift:+d}",
            emax=self.emax + shift,
            carrier=_F64,
            storage=_F64,
            shift=shift,
        )

    @property
    def proper(self) -> Format:
        """The format that was shifted; itself if it was not."""
        return FORMATS[self.name.partition(",")[0]]

    def includes(self, other: Format) -> bool:
        """Whether every finite value of the other format is one of this one."""
        return self.precision >= other.precision and self.emax >= other.emax


_LARGEST_SHIFT = 512  # products of shifted float32 stay within float64

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
        Format(name="tf32", precision=11, emax=127, bits=32, carrier=_F32, storage=_F32),
        Format(
            name="e4m3",
            precision=4,
            emax=8,
            bits=8,
            carrier=_F32,
            storage=np.dtype(ml_dtypes.float8_e4m3fn),
            infinite=False,
        ),
        Format(name="e5m2", precision=3, emax=15, bits=8, carrier=_F32, storage=np.dtype(ml_dtypes.float8_e5m2)),
    )
}


def format_named(name: str) -> Format:
    """Return the format of that name; a KeyError names what is known."""
    try:
        return FORMATS[name]
    except KeyError:
        raise KeyError(f"{name!r} is not a format; accepted: {', '.join(FORMATS)}") from None
