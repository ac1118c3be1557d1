"""Casts to formats of the kernel's own choice: refused as ever, or ignored and counted by line where that is asked."""

from __future__ import annotations

from functools import partial
from typing import Any

import numpy as np
import pytest

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.array import Array
from narrowgauge.dispatch.copies import copy_module, new_setting
from narrowgauge.errors import RefusedError

CASTS = {
    "astype": "x.astype(np.float32) + 0.1",
    "type": "np.float32(x) + np.float16(0.1)",
    "scalar": "x + np.float32(x[0])",
    "zeros": "np.zeros(x.shape, dtype=np.float32) + x",
    "array": "np.array([0.1, 0.2, 0.3], dtype='float16') + x",
    "like": "np.zeros_like(x, dtype=np.half) + x",
    "sum": "x + x.sum(dtype=np.float32)",
}


def run(expression: str, *, ignored: bool) -> tuple[Any, Any]:
    """The carrier of an expression of three numbers in bfloat16, and its setting."""
    source = f"import numpy as np\n\ndef value(x):\n    return {expression}\n"
    made = partial(new_setting, casts=ignored)
    setting = made(arithmetic_named("bfloat16"))
    module = copy_module(compile(source, "casting_kernel.py", "exec"), "casting_kernel", setting)
    setting.files.add("casting_kernel.py")
    x = arithmetic_named("bfloat16").cast(np.array([1.1, -2.3, 3.7]))
    return module.value(Array(x, setting))._carrier, setting


@pytest.mark.parametrize("name", CASTS)
def test_a_cast_that_is_ignored_changes_nothing(name: str) -> None:
    """The result is that of the expression without it, and its line is counted."""
    plain = {
        "astype": "x + 0.1",
        "type": "x + 0.1",
        "scalar": "x + x[0]",
        "zeros": "np.zeros(x.shape) + x",
        "array": "np.array([0.1, 0.2, 0.3]) + x",
        "like": "np.zeros_like(x) + x",
        "sum": "x + x.sum()",
    }[name]
    found, setting = run(CASTS[name], ignored=True)
    expected, _ = run(plain, ignored=False)
    assert np.array_equal(found, expected)
    assert setting.casts is not None
    assert {(place.file, place.line) for place in setting.casts if place} == {("casting_kernel.py", 4)}


@pytest.mark.parametrize("name", ["astype", "zeros", "like", "sum"])
def test_without_that_it_is_refused(name: str) -> None:
    """As the audit chooses the format."""
    with pytest.raises(RefusedError, match=r"the kernel fixes dtype float"):
        run(CASTS[name], ignored=False)


def test_the_types_stay_types() -> None:
    """As a dtype, and for isinstance() and issubclass()."""
    found, _ = run("x * isinstance(1.0, np.float64) * issubclass(np.float32, np.floating)", ignored=True)
    expected, _ = run("x * isinstance(1.0, np.float64) * issubclass(np.float32, np.floating)", ignored=False)
    assert np.array_equal(found, expected)
