"""Arrays that a function handed over from Python reaches: constants of the state in its copy, the user's untouched."""

from __future__ import annotations

import textwrap
from types import ModuleType

import numpy as np
import pytest
from kernel_runs import FILE, owned, same, unheld

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.copies import copy_function, new_setting
from narrowgauge.errors import EscapeError

DRAWS = np.array([0.2, 1.4, 0.75])
ARRAYS = """
    import numpy as np
    W = np.asfortranarray([[0.1, 0.2, 0.3], [0.4, 0.5, 0.6], [0.7, 0.8, 0.9]])
    TABLE, BUFFER, COUNTS = np.linspace(0.1, 0.9, 9), np.full(3, 0.1), np.arange(3)
    HELD = {"w": [W]}
    class Model:
        pass
    def outer(v):
        def kernel(x, w=W, *, table=TABLE):
            assert HELD["w"][0] is W is w and not W.flags.c_contiguous
            BUFFER[0] = x[0]
            BUFFER[1:] += x[1:] * 0.1
            nonlocal v
            v *= 1.1
            k = (x * 4).astype(int)
            return [W.dot(x), w @ x, x @ W, W.T.dot(x), table[k], TABLE[:3][x > 1], BUFFER, v + x, COUNTS * x,
                    W[0] * W[1], BUFFER.sum(), np.dot(W, W)]
        return kernel
    kernel = outer(np.array([0.1, 0.7, 0.3]))
"""


@pytest.mark.parametrize("form", ["float64", "float16", "bfloat16", None])
def test_float_arrays_of_a_copied_function_are_constants_of_the_state(form):
    """In globals, defaults, closures and containers: their methods round, they are read by keys of the state and
    written into, and the user's own stay as they are; float64 gives plain bits.
    """
    module = ModuleType("users")
    exec(compile(textwrap.dedent(ARRAYS), FILE, "exec", dont_inherit=True), module.__dict__)
    held = [module.W, module.TABLE, module.BUFFER, module.kernel.__closure__[0].cell_contents]
    before = [array.copy() for array in held]
    setting = None if form is None else new_setting(arithmetic_named(form))
    result = copy_function(module.kernel, setting)(owned(DRAWS, setting))
    assert held[0] is module.W is module.kernel.__defaults__[0]
    assert held[3] is module.kernel.__closure__[0].cell_contents
    assert all(np.array_equal(array, old) for array, old in zip(held, before, strict=True))
    if setting is not None:
        assert setting.faults == []
        assert unheld(result, setting) == []
    assert same(module.kernel(DRAWS.copy()), result) == (form in ("float64", None))


def test_other_arrays_of_a_copied_function_stay_plain():
    """Integers are exact until they meet the state; other floats are an escape where they would round."""
    module = ModuleType("users")
    text = "import numpy as np\nK, F = np.arange(3), np.ones(3, np.float32)\ndef kernel(x, f):\n    return f(K, F, x)\n"
    exec(compile(text, FILE, "exec", dont_inherit=True), module.__dict__)
    setting = new_setting(arithmetic_named("float16"))
    made, x = copy_function(module.kernel, setting), owned(DRAWS, setting)
    assert type(made.__globals__["K"]) is type(made.__globals__["F"]) is np.ndarray
    assert made.__globals__["K"] is not module.K
    with pytest.raises(EscapeError, match=f"^{FILE}:4: a function or a plain array"):
        made(x, lambda k, f, x: f.dot(x))
