"""An array made of plain numbers gives them to what does not know the emulation, until it can have been changed."""

from __future__ import annotations

import copy

import numpy as np
import pytest
import scipy.interpolate
import scipy.linalg
from kernel_runs import FILE, call, module_of, same, unheld

from narrowgauge.dispatch.array import Array, Constant, as_state
from narrowgauge.errors import EscapeError

HEADER = "import numpy as np\nimport scipy.linalg\nfrom scipy.interpolate import CubicSpline\n"
X = np.array([0.2, 1.375, 0.75])
CORR = [[1.0, 0.3], [0.3, 1.0]]
FORMS = ["float64", "float16", "bfloat16", "float32"]


@pytest.mark.parametrize("form", FORMS)
def test_scipy_gets_the_plain_numbers(form):
    """A factor and a spline of constants are SciPy's own in every format, inside the kernel and outside of it."""
    text = HEADER + (
        "C, T = np.array([[1.0, 0.3], [0.3, 1.0]]), np.asarray([0, 0.1, 2.0])\n"
        "OUTSIDE = CubicSpline(T, np.array([0.1, 0.7, 0.3]))\n"
        "def kernel(x):\n    L = scipy.linalg.cholesky(C, lower=True)\n    return L, OUTSIDE(0.3), L @ x[:2]\n"
    )
    (factor, spline, product), setting, _ = call(text, form, X)
    assert setting.faults == []
    assert factor.tolist() == scipy.linalg.cholesky(np.array(CORR), lower=True).tolist()
    assert spline == scipy.interpolate.CubicSpline([0, 0.1, 2.0], [0.1, 0.7, 0.3])(0.3)
    assert unheld(product, setting) == []
    assert form != "float64" or same(call(text, None, X)[0][2], product)


MAKERS = {
    "np.array([0.3, 0.7])": [0.3, 0.7],
    "np.array([1, 0.7])": [1.0, 0.7],
    "np.asarray((0.3, 0.7), dtype=float)": [0.3, 0.7],
    "np.array(np.linspace(0.1, 0.3, 2))": [0.1, 0.3],
    "np.array(np.array([0.3, 0.7]))": [0.3, 0.7],
    "np.asarray(np.array([0.3, 0.7]), dtype=float)": [0.3, 0.7],
    "np.array([0.3, 0.7]).copy()": [0.3, 0.7],
    "copy.deepcopy(np.array([0.3, 0.7]))": [0.3, 0.7],
    "np.zeros(2)": [0.0, 0.0],
    "np.ones(2)": [1.0, 1.0],
    "np.full(2, 0.3)": [0.3, 0.3],
    "np.array([0.3, np.nan])": [0.3, np.nan],
    "np.array([1e-9, 1e9])": [1e-9, 1e9],
}


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("expression", MAKERS)
def test_what_is_made_of_plain_numbers_knows_them(expression, form):
    """As float64, whatever the format made of them, in memory of their own."""
    module, setting = module_of(f"import copy\nimport numpy as np\nmade = {expression}\n", form)
    plain = np.asarray(module.made)
    assert np.array_equal(plain, MAKERS[expression], equal_nan=True)
    assert plain.dtype == np.float64
    assert setting.faults == []
    plain[:] = 5.0
    assert np.array_equal(np.asarray(module.made), MAKERS[expression], equal_nan=True)
    assert unheld(module.made, setting) == []


# What leaves the numbers as they are, on c = np.array([0.3, 0.7]) and d = np.array([[0.3], [0.7]])
READ = """
c.shape, c.ndim, c.size, len(c), c.dtype
c[0], c[-1], d[0, 0], c[np.array([0, 1])]
[v for v in c], c.tolist(), 0.3 in c
c * x[:2], x[:2] - c, c @ x[:2], c + 1, -c
np.exp(c), np.add(c, x[:2]), np.maximum.reduce(c), np.multiply.outer(c, x)
np.any(np.diff(c) <= 0), c.min(), np.max(c), np.sum(c), c.mean(), np.array_equal(c, [0.3, 0.7])
np.concatenate([c, x]), np.where(x[:2] > 0.3, c, 0.0), np.clip(c, 0.4, 0.6), np.take(c, [0])
np.hstack([c]), np.tile(c, 1), np.repeat(c, 1), np.roll(c, 0), np.unique(c), np.copy(c), np.append([], c), np.stack([c])
np.sort(c), np.searchsorted(c, 0.5), np.interp(x, c, [1.0, 2.0])
x.__setitem__(slice(0, 2), c)
np.array(c), np.asarray(c) is c, copy.copy(c), c.copy(), c.astype(float)
""".strip().splitlines()

# What writes, or may write later; the last word of each is what has to be refused.
WRITTEN = """
c[0] = 0.7; c
c[0] = x[0]; c
c[:] = c[::-1].copy(); c
c += x[:2]; c
c *= 1.0; c
c.fill(0.3); c
c.sort(); c
c.partition(1); c
c.flat[0] = x[0]; c
c.flat = x[:2]; c
v = c[:1]; v[0] = x[0]; c
v = c[::-1]; v *= 1.0; v
v = d.T; v[0, 0] = x[0]; d
v = d.reshape(2); v[0] = x[0]; d
v = d.transpose(); v[:] = 0; d
v = d.ravel(); v[:] = x[:2]; d
v = d.squeeze(); v[0] = x[0]; d
v = next(iter(d)); v[0] = x[0]; d
v = np.reshape(d, 2); v[0] = x[0]; d
v = np.atleast_2d(c); v[0, 0] = x[0]; c
v = np.broadcast_to(c, (2, 2)); v
v, = np.split(c, 1); v[0] = x[0]; c
np.add(x[:2], 0.3, out=c); c
np.greater(x[:2], 0.3, out=c); c
np.multiply(x[:2] > 0.3, 0.3, out=c); c
np.exp(x[:2], c); c
np.add(c, 0.3, c); c
np.exp(x[:2], where=[True, False], out=c); c
np.divmod(x[:2], 0.3, out=(c, c.copy())); c
x[:2].cumsum(out=c); c
np.cumsum(x[:2], out=c); c
np.clip(x[:2], 0.3, 0.7, out=c); c
np.add.reduce(x.reshape(3, 1)[:2], axis=1, out=c); c
np.copyto(c, x[:2]); c
np.put(c, [0], x[0]); c
c.put([0], x[0]); c
np.putmask(c, [True, False], x[:2]); c
np.place(c, np.array([True, False]), 0.7); c
np.fill_diagonal(d, x[0]); d
np.nan_to_num(c, copy=False); c
scipy.special.ndtr(x[:2], out=c); c
c * 2
c[:1]
""".strip().splitlines()
SETUP = (
    "import copy\nimport numpy as np\nimport scipy.special\ndef kernel(x, plainly):\n"
    "    c, d = np.array([0.3, 0.7]), np.array([[0.3], [0.7]])\n"
)


@pytest.mark.parametrize("form", ["float64", "float16"])
@pytest.mark.parametrize("statement", READ)
def test_reading_leaves_the_numbers_known(statement, form):
    """Operations, single values and questions give no way to write."""
    text = f"{SETUP}    _ = {statement}\n    return plainly(c), plainly(d)\n"
    (c, d), setting, _ = call(text, form, X, np.asarray)
    assert (c.tolist(), d.tolist()) == ([0.3, 0.7], [[0.3], [0.7]])
    assert setting.faults == []


@pytest.mark.parametrize("form", ["float64", "float16"])
@pytest.mark.parametrize("statement", WRITTEN)
def test_what_writes_or_gives_a_view_makes_an_array_like_any_other(statement, form):
    """Whatever lies in it afterwards may be of the state: asking for plain numbers is an escape, with its line."""
    *before, last = statement.split("; ")
    text = SETUP + "".join(f"    {line}\n" for line in before) + f"    return plainly({last})\n"
    kinds = []

    def plainly(value):
        kinds.append(type(value))
        return np.asarray(value)

    with pytest.raises(EscapeError, match=f"^{FILE}:{6 + len(before)}: a function or a plain"):
        call(text, form, X, plainly)
    assert kinds == [Array]


def test_numbers_that_were_written_past_every_guard_are_not_given():
    """The carrier is compared with what was rounded, so that a way in that nobody knows is no way out."""
    setting = module_of("", "float16")[1]
    made = as_state(np.array([0.3, 0.7]), setting)
    assert np.asarray(made).tolist() == [0.3, 0.7]
    made._carrier[0] = 5.0
    with pytest.raises(EscapeError):
        np.asarray(made)


def test_a_constant_that_is_written_to_costs_nothing_more():
    """It becomes an Array in place, under all its names."""
    module, _ = module_of("import numpy as np\nbuffer = np.zeros(3)\nother = buffer\n", "float16")
    assert type(module.buffer) is Constant
    module.buffer[0] = 1.0
    assert type(module.other) is Array
    assert module.other is module.buffer
    module.buffer += 1.0
    assert module.other.tolist() == [2.0, 1.0, 1.0]


def test_parameters_and_copies_of_them():
    """A parameter that is an array is a constant, too; what pickle read is not known to be one."""
    for form in FORMS:
        module, setting = module_of("import pickle\n", form)
        plain = np.array([0.3, 0.7])
        made = as_state(plain, setting)
        plain[0] = 9.0
        for value in (made, copy.deepcopy(made), np.array([made])[0]):
            assert np.asarray(value).tolist() == [0.3, 0.7]
        again = module.pickle.loads(module.pickle.dumps(made))
        assert again.tolist() == made.tolist()
        with pytest.raises(EscapeError):
            np.asarray(again)
