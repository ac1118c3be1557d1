"""Kernels with the real numba, each in a process of its own: numba enters modules of its own into Python's table."""

from __future__ import annotations

import subprocess
import sys

import pytest
from private_packages import written

pytest.importorskip("numba")

LOOP = "def value(dW, h):\n    x = 1.0 + 0.0 * dW[0]\n    for w in dW:\n        x = x + 0.1 * w\n    return x\n"
KERNELS = {
    "from numba": f"from numba import njit\n@njit\n{LOOP}",
    "import numba": f"import numba\n@numba.njit\n{LOOP}",
    "through a part": f"import numba.experimental\nimport numba\n@numba.experimental.jitclass([])\nclass Box:\n"
    f"    def __init__(self): pass\n@numba.jit(nopython=True)\n{LOOP}",
    "not at all": LOOP,
}
RUN = """
import sys
from narrowgauge.kernel.auditfile import audit_file_from
from narrowgauge.kernel.loading import find_kernel, private_copy
from narrowgauge.arithmetic.arithmetic import arithmetic_named
file = audit_file_from({"kernel": {"run": sys.argv[1] + ":value", "takes": "increments"},
                        "ladder": {"horizon": 1.0, "finest": 1}})
kernel = find_kernel(file)
for form in (None, "float16", None):
    before = set(sys.modules)
    copy = private_copy(kernel, None if form is None else arithmetic_named(form))
    assert before <= sys.modules.keys()
print(*copy.compiled)
"""


@pytest.mark.parametrize("name", KERNELS)
def test_a_kernel_with_numba_is_copied_in_a_fresh_process(tmp_path, name):
    """Whoever imports numba first, the kernel is not blamed for what numba does to Python's table of modules."""
    written(tmp_path, {"kernel.py": KERNELS[name]})
    command = [sys.executable, "-c", RUN, str(tmp_path / "kernel.py")]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert (done.stdout, done.stderr) == ("\n" if name == "not at all" else "kernel.value\n", "")
