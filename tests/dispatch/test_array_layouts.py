"""Arrays of the state in every layout against arrays of a 16-bit type, whose own arithmetic rounds one by one.

Each kernel runs twice on the same text: on arrays of the state, and on arrays of NumPy's float16 or of ml_dtypes'
bfloat16, in which a Python number is weak as it is here.
"""

from __future__ import annotations

import ml_dtypes
import numpy as np
import pytest
from kernel_runs import module_of, owned, values_of

from narrowgauge.dispatch.setting import Wrapped

TYPES = {"float16": np.float16, "bfloat16": ml_dtypes.bfloat16}
# The body of `kernel(x, y)`, x of shape (4, 3) in C or Fortran order, y of shape (3,).
LAYOUTS = {
    "views": "v = x.T[1:]; v += 0.1; w = x[1:3]; w *= 1.1; x[0][1] = 0.3; return [x, v, w, x.T, w[0], v[:, None]]",
    "broadcasting": "return [x[:, None, :] * y[None, :, None] + x[0], x + y, y - x, x * x[:, :1], 0.1 * y[:, None]]",
    "zero-size": "return [x[:0] + y, x[:, :0] * 0.3, np.zeros_like(x[:0]) + 1, np.concatenate([x[:0], x]), x[:0].T]",
    "0-d": "z = np.zeros_like(y[:1]).reshape(()); z += 0.1; z[...] = z * 3.3; a = y[0, ...]; a *= 0.7\n"
    "    return [z, z[()], a, y, z + x, z[...] / 3, np.sqrt(np.abs(z))]",
    "Fortran order": "f = np.asfortranarray(x); g = f / 3; g[1] = 0.1; return [f, g, g.T * 0.1, g + f, g.copy('C')]",
    "non-contiguous": "w = x[::2, 1:]; z = w / 3; x[::2, ::2] *= 0.3; return [x, w, z, x[:, 1] * 0.7, w.copy(), w - z]",
    "negative strides": "b = x[::-1, ::-1]; b[0] += 0.1; return [x, b, b * 0.3 + x, y[::-1] / 3, x[::-2] - 0.1, b.T]",
    "masked stores": "x[x > 0.5] = 0.1; x[x < 0] *= 0.3; x[:, y > 0.5] += 0.7; x[1][y < 0.5] = y[y < 0.5]; return [x]",
    "out=": "np.multiply(x, 0.3, out=x); np.add(x.T, 0.1, out=x.T); z = np.zeros_like(x)\n"
    "    np.sqrt(np.abs(x), out=z[::-1]); np.subtract(x[1:], x[:-1], out=x[1:]); return [x, z]",
    "where=": "np.divide(x, 3.0, out=x, where=x > 0.5); m = np.array([True, False, True])\n"
    "    np.add(x[1:3], 0.1, out=x[1:3], where=m); np.negative(y, out=y, where=y > 0.6); return [x, y]",
    "in-place on slices": "x[1:] += x[:-1]; x[:, 0] *= y[0]; x[0:2, ...] -= 0.1; x[:2] /= 3\n"
    "    x[[0, 2]] *= 1.1; x[-1] += y; return [x]",
    "object lists": "b = np.empty(2, dtype=object); b[0] = x * 0.1; b[1] = x / 3; rows = [x[0] * 0.3, x[1] / 3]\n"
    "    return [b[0] + b[1], np.array([*rows, y]), np.array([y[0] * 0.3, y[1] / 3]), np.stack(list(x * 0.1))]",
}


@pytest.mark.parametrize("order", ["C", "F"])
@pytest.mark.parametrize("form", TYPES)
@pytest.mark.parametrize("name", LAYOUTS)
def test_a_layout_rounds_as_the_type_does(name, form, order):
    """Every value is the type's own, in the shape and with the strides, in values, that plain code has."""
    text = f"import numpy as np\ndef kernel(x, y):\n    {LAYOUTS[name]}\n"
    rng = np.random.Generator(np.random.PCG64DXSM(7))
    x, y = np.array(rng.standard_normal((4, 3)), order=order), np.array([0.25, 0.7, 1.4])
    oracle = module_of(text)[0].kernel(x.astype(TYPES[form]), y.astype(TYPES[form]))
    module, setting = module_of(text, form)
    found = module.kernel(owned(x, setting), owned(y, setting))
    assert setting.faults == []
    for one, other in zip(values_of(found), values_of(oracle), strict=True):
        assert isinstance(one, Wrapped)
        carrier, wide = np.asarray(one._carrier), np.asarray(other)
        assert carrier.shape == wide.shape
        if carrier.size and carrier.ndim:
            strides = [step // carrier.itemsize for step in carrier.strides]
            assert strides == [step // wide.itemsize for step in wide.strides]
        assert np.array_equal(carrier.astype(float), wide.astype(float))


def test_an_unrounded_layout_would_be_found():
    """Negative control: the same kernels in float32 give other values than in the 16-bit type, empty ones apart."""
    for name, body in LAYOUTS.items():
        text = f"import numpy as np\ndef kernel(x, y):\n    {body}\n"
        x, y = (
            np.linspace(-1.2, 1.7, 12).reshape(4, 3).astype(np.float16),
            np.array([0.25, 0.7, 1.4]).astype(np.float16),
        )
        narrow = module_of(text)[0].kernel(x.copy(), y.copy())
        wide = module_of(text)[0].kernel(x.astype(np.float32), y.astype(np.float32))
        same = all(np.array_equal(one, other) for one, other in zip(narrow, wide, strict=True))
        assert same == (name == "zero-size"), name
