"""A correction in a shared library: one C function for a pair of formats, held against the kernel of another one."""

from __future__ import annotations

import shutil
import subprocess
from pathlib import Path

import pytest
from branch_cases import entry_for

from narrowgauge.errors import AuditFileError, KernelError
from narrowgauge.kernel.auditfile import AuditFile, read_audit_file

needs_gcc = pytest.mark.skipif(shutil.which("gcc") is None, reason="gcc is not installed")

SOURCE = """
#include <stddef.h>
#define ARGUMENTS size_t steps, size_t factors, size_t paths, double h, const double *p, size_t count
#define PATHS(T, W, dW, out, LINE)                                                                          \\
    for (size_t i = 0; i < paths; i++) {                                                                    \\
        const T rate = p[0], volatility = p[1], dt = h;                                                     \\
        T s = 1;                                                                                            \\
        for (size_t n = 0; n < steps; n++) {                                                                \\
            const T drift = rate * s * dt, noise = volatility * s * dW[n * paths + i];                      \\
            s = LINE;                                                                                       \\
        }                                                                                                   \\
        (out)[i] = s;                                                                                       \\
    }
int value_float32(const float *dW, ARGUMENTS, float *out, size_t outputs)
{ PATHS(float, float, dW, out, s + (drift + noise)) return 0; }
int value_float64(const double *dW, ARGUMENTS, double *out, size_t outputs)
{ PATHS(double, double, dW, out, s + (drift + noise)) return 0; }
int pair_float32_float64(const float *low, const double *high, ARGUMENTS, double *out, size_t outputs)
{
    if (outputs != 2) return 7;
    PATHS(float, double, low, out, s + (drift + noise))
    PATHS(double, double, high, out + paths, s + (drift + noise))
    return 0;
}
int swapped_float32_float64(const float *low, const double *high, ARGUMENTS, double *out, size_t outputs)
{
    PATHS(float, double, low, out, (s + drift) + noise)
    PATHS(double, double, high, out + paths, s + (drift + noise))
    return 0;
}
int failing_float32_float64(const float *low, const double *high, ARGUMENTS, double *out, size_t outputs)
{ return 3; }
"""
AUDIT = """
[kernel]
takes = "increments"
[library]
path = "kernel.so"
symbol = "value"
parameters = ["rate", "volatility"]
outputs = ["end"]
[parameters]
rate = 0.05
volatility = 0.2
[ladder]
horizon = 1.0
finest = 3
[target]
rmse = 0.002
[formats]
narrow = ["float32"]
wide = ["float64"]
[branches]
symbol = "{symbol}"
{more}
[sampling]
block = 1024
paths = 1024
most_paths = 1024
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    made = tmp_path_factory.mktemp("library")
    (made / "kernel.c").write_text(SOURCE, encoding="utf-8")
    command = ["gcc", "-O2", "-ffp-contract=off", "-shared", "-fPIC", "-o", "kernel.so", "kernel.c"]
    subprocess.run(command, cwd=made, check=True)
    shutil.copy(made / "kernel.so", made / "other.so")
    return made


def asked(folder: Path, symbol: str, more: str = "") -> AuditFile:
    path = folder / f"{symbol}.toml"
    path.write_text(AUDIT.format(symbol=symbol, more=more), encoding="utf-8")
    return read_audit_file(path)


@needs_gcc
@pytest.mark.parametrize("more", ["", 'library = "other.so"'])
def test_a_pair_that_cancels(folder: Path, more: str) -> None:
    """In the kernel's own library by default, and in another one."""
    file = asked(folder, "pair", more)
    assert file.branches is not None
    assert file.branches.library == ("other.so" if more else "kernel.so")
    entry = entry_for(file)
    assert (entry.mismatches, entry.remarks) == ([], [])
    assert entry.correction == f"{file.branches.library}:pair"
    assert [one.orders for one in entry.tried if one.varied] == [[], []]


@needs_gcc
def test_a_pair_that_does_not(folder: Path) -> None:
    """Where they part cannot be seen in a library; how much they differ can."""
    found = entry_for(asked(folder, "swapped")).mismatches
    assert {(one.arm, one.wide, one.condition) for one in found} == {("float32", "float64", "branches")}
    assert all(one.differing > 0 and one.bias is not None and one.where is None for one in found)


@needs_gcc
def test_a_function_that_is_not_there_and_one_that_fails(folder: Path) -> None:
    """The symbols that are looked for, and the code that was returned."""
    with pytest.raises(AuditFileError, match=r"branches\.symbol: .* has no function absent_float32_float64"):
        entry_for(asked(folder, "absent"))
    with pytest.raises(KernelError, match=r"failing_float32_float64 returned 3; accepted: 0, for success"):
        entry_for(asked(folder, "failing"))
    with pytest.raises(AuditFileError, match=r"branches\.library: no such file"):
        entry_for(asked(folder, "pair", 'library = "missing.so"'))
