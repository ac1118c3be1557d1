"""A kernel in a shared library: what it is given, what it gives, and what is said when it does not."""

from __future__ import annotations

import hashlib

import numpy as np
import pytest

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.errors import AuditFileError, KernelError
from narrowgauge.kernel.auditfile import audit_file_from
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.kernel.owntables import OWN_FORMATS

# Writes what it is given: in the first row the draws of step 1 and factor 1, in the second all of the numbers.
SOURCE = """
#include <stddef.h>
#define GIVEN(NAME, T) \\
int NAME(const T *draws, size_t steps, size_t factors, size_t paths, double h, \\
         const double *parameters, size_t count, T *out, size_t outputs) \\
{ \\
    if (h < 0) return 7; \\
    for (size_t i = 0; i < paths; i++) out[i] = draws[(1 * factors + 1) * paths + i]; \\
    if (h == 0) return 0; \\
    T *row = out + paths; \\
    row[0] = steps; row[1] = factors; row[2] = paths; row[3] = h; row[4] = count; row[5] = outputs; \\
    for (size_t i = 0; i < count; i++) row[6 + i] = parameters[i]; \\
    return 0; \\
}
GIVEN(given_float16, unsigned short)
GIVEN(given_bfloat16, unsigned short)
GIVEN(given_float32, float)
GIVEN(given_float64, double)
"""
MAPPING = {
    "kernel": {"takes": "normals", "factors": 2},
    "library": {"path": "given.so", "symbol": "given", "parameters": ["b", "a"], "outputs": ["draw", "rest"]},
    "parameters": {"a": [[1, 2], [3, 4]], "b": 0.5},
    "ladder": {"horizon": 1.0, "finest": 2},
}


@pytest.fixture
def library(tmp_path, compiled, monkeypatch):
    source = tmp_path / "given.c"
    source.write_text(SOURCE, encoding="utf-8")
    compiled(source, tmp_path / "given.so")
    monkeypatch.chdir(tmp_path)
    return find_kernel(audit_file_from(MAPPING)).foreign


def called(library, name, h=0.25, paths=12):
    form = FORMATS[name]
    draws = np.arange(3 * 2 * paths).reshape(3, 2, paths).astype(form.storage)
    parameters = {"a": np.array([[1.0, 2.0], [3.0, 4.0]]), "b": 0.5}
    return draws, library.function(form)(draws, h, **parameters)


@pytest.mark.parametrize("name", OWN_FORMATS)
def test_draws_and_results_keep_their_bits(library, name):
    """In every format the second draw of the second step comes back as it was, in the type of the draws."""
    draws, found = called(library, name)
    assert list(found) == ["draw", "rest"]
    assert found["draw"].dtype == FORMATS[name].storage
    assert found["draw"].tobytes() == draws[1, 1].tobytes()


def test_numbers_arrive_in_the_order_of_the_table(library):
    """Sizes, step size, and the parameters as library.parameters lists them, arrays one element after the other."""
    _, found = called(library, "float64")
    assert found["rest"][:11].tolist() == [3, 2, 12, 0.25, 5, 2, 0.5, 1, 2, 3, 4]
    assert np.isnan(found["rest"][11])  # is not written


def test_what_is_not_written_is_nan(library):
    """Of a row that the library leaves alone every number is NaN, in the formats of 16 bits as well."""
    for name in OWN_FORMATS:
        _, found = called(library, name, h=0.0)
        assert np.isnan(found["rest"].astype(np.float64)).all()


def test_another_code_than_0_is_an_error(library, tmp_path):
    """The message has path, symbol and code."""
    with pytest.raises(KernelError) as caught:
        called(library, "float32", h=-1.0)
    assert str(caught.value) == f"{tmp_path / 'given.so'}: given_float32 returned 7; accepted: 0, for success"


def test_missing_symbols_are_named_all_at_once(library, tmp_path):
    """Of several formats that are not there each is named, with all that were looked for."""
    library._table = type(library._table)(path="given.so", symbol="gave", outputs=("x",))
    with pytest.raises(AuditFileError) as caught:
        library.check(["float64", "bfloat16"])
    assert str(caught.value) == (
        f"audit: library.symbol: {tmp_path / 'given.so'} has no function gave_float64 or gave_bfloat16; looked for "
        "gave_float64, gave_bfloat16; accepted: a library with a function for each format of [formats] and for "
        "float64, the reference"
    )
    assert library.check([]) is None


def test_a_missing_library_is_refused(tmp_path, monkeypatch):
    """Before anything runs, with the path that was looked at."""
    monkeypatch.chdir(tmp_path)
    with pytest.raises(AuditFileError) as caught:
        find_kernel(audit_file_from(MAPPING))
    assert str(caught.value) == (
        f"audit: library.path: no such file: {tmp_path / 'given.so'}; "
        "accepted: a shared library, relative to the audit file"
    )


def test_a_file_that_is_no_library_is_refused(tmp_path, monkeypatch):
    """In the words of the system's loader."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "given.so").write_text("not a library", encoding="utf-8")
    with pytest.raises(AuditFileError, match=r"library\.path: .*given\.so cannot be loaded: .+; accepted: a shared"):
        find_kernel(audit_file_from(MAPPING)).foreign.check(["float64"])


def test_the_fingerprint_is_that_of_its_bytes(tmp_path, monkeypatch):
    """Another build is another kernel."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "given.so").write_bytes(b"build 1")
    first = find_kernel(audit_file_from(MAPPING)).digest()
    assert first == f"sha256:{hashlib.sha256(b'build 1').hexdigest()}"
    (tmp_path / "given.so").write_bytes(b"build 2")
    assert find_kernel(audit_file_from(MAPPING)).digest() != first
