"""The table of formats against the standard, and against what NumPy and ml_dtypes say of their own types."""

from __future__ import annotations

from dataclasses import FrozenInstanceError, asdict
from typing import Any

import ml_dtypes
import mpfr_oracle as oracle
import numpy as np
import pytest

from narrowgauge.arithmetic.elementary import decode, encode
from narrowgauge.arithmetic.formats import FORMATS, Format, format_named

# IEEE 754-2019, table 3.5 (binary16, binary32, binary64), recalled from memory; bfloat16 is a vendor format,
# binary32's exponents with 8 bits of precision, recalled from memory. The decimals are the shortest possible. TF32 is a
# vendor format, E4M3 and E5M2 are those of the OCP 8-bit Floating Point Specification 1.0, recalled from memory.
PUBLISHED = {
    "float16": {
        "precision": 11,
        "emax": 15,
        "emin": -14,
        "bits": 16,
        "max_finite": 65504.0,
        "min_normal": 2.0**-14,
        "min_subnormal": 2.0**-24,
        "unit_roundoff": 2.0**-11,
    },
    "bfloat16": {
        "precision": 8,
        "emax": 127,
        "emin": -126,
        "bits": 16,
        "max_finite": 3.3895313892515355e38,
        "min_normal": 2.0**-126,
        "min_subnormal": 2.0**-133,
        "unit_roundoff": 2.0**-8,
    },
    "float32": {
        "precision": 24,
        "emax": 127,
        "emin": -126,
        "bits": 32,
        "max_finite": 3.4028234663852886e38,
        "min_normal": 2.0**-126,
        "min_subnormal": 2.0**-149,
        "unit_roundoff": 2.0**-24,
    },
    "float64": {
        "precision": 53,
        "emax": 1023,
        "emin": -1022,
        "bits": 64,
        "max_finite": 1.7976931348623157e308,
        "min_normal": 2.0**-1022,
        "min_subnormal": 2.0**-1074,
        "unit_roundoff": 2.0**-53,
    },
    "tf32": {
        "precision": 11,
        "emax": 127,
        "emin": -126,
        "bits": 32,
        "max_finite": 3.4011621342146535e38,
        "min_normal": 2.0**-126,
        "min_subnormal": 2.0**-136,
        "unit_roundoff": 2.0**-11,
    },
    "e4m3": {
        "precision": 4,
        "emax": 8,
        "emin": -6,
        "bits": 8,
        "max_finite": 448.0,
        "min_normal": 2.0**-6,
        "min_subnormal": 2.0**-9,
        "unit_roundoff": 2.0**-4,
    },
    "e5m2": {
        "precision": 3,
        "emax": 15,
        "emin": -14,
        "bits": 8,
        "max_finite": 57344.0,
        "min_normal": 2.0**-14,
        "min_subnormal": 2.0**-16,
        "unit_roundoff": 2.0**-3,
    },
}
STORAGE = {
    "float16": (np.float32, np.float16),
    "bfloat16": (np.float32, ml_dtypes.bfloat16),
    "float32": (np.float32, np.float32),
    "float64": (np.float64, np.float64),
    "tf32": (np.float32, np.float32),
    "e4m3": (np.float32, ml_dtypes.float8_e4m3fn),
    "e5m2": (np.float32, ml_dtypes.float8_e5m2),
}


def test_the_formats_are_these_seven_in_this_order() -> None:
    """The table holds binary16, bfloat16, binary32, binary64, TF32, E4M3 and E5M2, each under its own name."""
    assert list(FORMATS) == list(PUBLISHED)
    assert [row.name for row in FORMATS.values()] == list(PUBLISHED)


@pytest.mark.parametrize("figure", list(PUBLISHED["float16"]))
@pytest.mark.parametrize("name", oracle.ALL)
def test_every_figure_is_the_published_one(name: str, figure: str) -> None:
    """Given or derived, each figure of each format equals the standard's."""
    assert getattr(FORMATS[name], figure) == PUBLISHED[name][figure]


@pytest.mark.parametrize("name", [name for name in oracle.ALL if name != "tf32"])
def test_figures_agree_with_the_storage_types_own(name: str) -> None:
    """NumPy and ml_dtypes report the same limits, precision and width for the storage type."""
    row = FORMATS[name]
    types: Any = np if name.startswith("float") else ml_dtypes
    theirs = types.finfo(row.storage)
    assert float(theirs.max) == row.max_finite
    assert float(theirs.smallest_normal) == row.min_normal
    assert float(theirs.smallest_subnormal) == row.min_subnormal
    assert float(theirs.eps) == 2 * row.unit_roundoff
    assert theirs.nmant == row.precision - 1
    assert theirs.bits == row.bits == 8 * row.storage.itemsize


@pytest.mark.parametrize("name", oracle.ALL)
def test_carriers_and_storage_types(name: str) -> None:
    """Formats narrower than float32 travel in it; the others in their own type, and only those are native."""
    row = FORMATS[name]
    carrier, storage = STORAGE[name]
    assert row.carrier == carrier
    assert row.storage == storage
    assert row.native == (name in ("float32", "float64"))


def test_16_bit_formats_meet_the_bound_for_two_roundings() -> None:
    """The carrier has 2 p + 2 bits or more, the condition under which round_carrier's two roundings are one.

    "Innocuous Double Rounding of Basic Arithmetic Operations", Journal of Formalized Reasoning 7(1), 2014,
    doi 10.6092/issn.1972-5787/4359, table I: 2 p + 2 for the square root, less for the other four.
    """
    carriers = {np.dtype(np.float32): 24, np.dtype(np.float64): 53}
    for name in oracle.SIXTEEN_BITS:
        assert carriers[FORMATS[name].carrier] >= 2 * FORMATS[name].precision + 2
    assert 2 * FORMATS["float32"].precision + 2 > 24  # the bound is not empty: binary32 itself fails it


def test_a_format_is_found_by_its_name() -> None:
    """format_named returns the table's own row."""
    for name, row in FORMATS.items():
        assert format_named(name) is row


def test_an_unknown_format_is_refused_by_name() -> None:
    """The error names what was asked for and everything that is known."""
    with pytest.raises(KeyError) as caught:
        format_named("float8")
    assert caught.value.args == (
        "'float8' is not a format; accepted: float16, bfloat16, float32, float64, tf32, e4m3, e5m2",
    )


def test_formats_cannot_be_changed() -> None:
    """A row is frozen and two equal rows are one key, so that tables of functions can be kept by format."""
    row = FORMATS["float16"]
    with pytest.raises(FrozenInstanceError):
        row.emax = 16  # type: ignore[misc]  # the assignment is what must fail
    assert hash(Format(**asdict(row))) == hash(row)


@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_decoding_follows_the_definition_of_the_encoding(name: str) -> None:
    """All 65,536 patterns decode to sign, exponent and fraction as defined; every NaN becomes the one NaN."""
    values = decode(FORMATS[name])
    assert values.dtype == np.float64
    assert oracle.differ(values, oracle.all_values(name)).size == 0


@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_encoding_undoes_decoding(name: str) -> None:
    """Every pattern that is not a NaN comes back; every NaN is encoded as some NaN."""
    values = decode(FORMATS[name])
    codes = encode(values.astype(np.float32), FORMATS[name])
    number = ~np.isnan(values)
    assert np.array_equal(codes[number], np.flatnonzero(number))
    assert np.isnan(values[codes[~number]]).all()


@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
@pytest.mark.parametrize("bits", [0x7FC00000, 0xFFC00000, 0x7FFFFFFF, 0xFFFFFFFF])
def test_quiet_nans_of_any_payload_are_encoded_as_nans(name: str, bits: int) -> None:
    """A carrier's NaN may have either sign and any payload, also all ones, and stays one."""
    carrier = np.array([bits], np.uint32).view(np.float32)
    assert np.isnan(decode(FORMATS[name])[encode(carrier, FORMATS[name])]).all()
