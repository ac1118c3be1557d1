"""np.r_, np.c_, fromiter, ndenumerate, vectorize, .flat and .tolist on values of the state."""

from __future__ import annotations

import ml_dtypes
import numpy as np
import pytest
from kernel_runs import FILE, call, module_of, same, unheld

from narrowgauge.dispatch.array import Array
from narrowgauge.dispatch.exact import Exact
from narrowgauge.dispatch.scalar import Scalar
from narrowgauge.errors import EscapeError, RefusedError

A = np.array([[0.2, 1.375, 0.75], [0.5, -0.3125, 2.5]])
TYPES = {"float16": np.float16, "bfloat16": ml_dtypes.bfloat16}
HEADER = "import numpy as np\n"

# On x (3,), y (3,) and a (2, 3): bits of plain NumPy in float64, of the format's own arrays in 16 bits.
EXPRESSIONS = """
np.r_[x, y]
np.r_[x[0], x]
np.r_[x, x[0], x[1]]
np.r_[a, a]
np.r_[x[0], x[1]]
np.r_[[x[0], x[1]], y]
np.r_[x]
np.c_[x, y]
np.c_[a, x[:2]]
np.c_[x]
np.c_[x[0], x[1]]
np.c_[[x[0], x[1]], y[:2]]
np.c_[x, y].sum(axis=1)
np.r_[x > 0.5, y > 0.5]
np.r_['0,2', np.linspace(0, 1, 3)]
np.c_[np.linspace(0, 1, 2), np.array([1, 2])]
[v for _, v in np.ndenumerate(a)]
[p for p, _ in np.ndenumerate(a)]
[v for _, v in np.ndenumerate(x[0])]
[v for _, v in np.ndenumerate(a.T)]
[v for _, v in np.ndenumerate(x > 0.5)]
[v for _, v in np.ndenumerate(np.arange(3))]
np.fromiter((v > 0.5 for v in x), bool)
np.fromiter(range(5), int, 3)
a.tolist()
a.T.tolist()
x.tolist()
x[:0].tolist()
a[:, :0].tolist()
x[0].tolist()
(a > 0.5).tolist()
[v for v in a.flat]
[v for v in a.T.flat]
a.flat[4]
a.T.flat[1:4]
a.flat[[0, 5]]
a.flat[a.ravel() > 0.5]
len(a.flat)
a.flat.copy()
np.array(a.T.flat)
""".strip().splitlines()
# With a numeric constant among them, which a format's own arrays would take for float64.
WITH_CONSTANTS = """
np.r_[0.3, x]
np.r_[0:3, x]
np.r_[0:1:4j, x, [0.3, 0.7], 1]
np.c_[x, [0.3, 0.7, 0.1]]
np.c_[x, 0:3]
np.c_[0.3, x[0]]
np.fromiter((v * 2 for v in x), float)
np.fromiter((v for v in x), float, count=2)
np.fromiter((v for v in (x[0], 0.3)), dtype=np.float64)
""".strip().splitlines()
VECTORIZED = """
np.vectorize(lambda s: max(s - 1.0, 0.0))(x)
np.vectorize(lambda s: s if s > 0.5 else 0)(x)
np.vectorize(lambda s: 0 if s < 0.5 else s * 3)(x)
np.vectorize(lambda s: 0 if s < 0.5 else s * 3, otypes=[float])(x)
np.vectorize(lambda s: s > 0.5)(a)
np.vectorize(lambda s: 1 if s > 0.5 else 0)(a)
np.vectorize(lambda s, t: s * t + 0.3)(a, x)
np.vectorize(lambda s, t: s * t)(x, 0.3)
np.vectorize(lambda s, k: s ** k)(x, 2)
np.vectorize(lambda s, k: s * k)(x, k=np.array([[1], [2]]))
np.vectorize(lambda s, t: (s + t, s > t))(x, y)
np.vectorize(lambda s, p: s * p[1], excluded=[1])(x, [0.25, 0.5])
np.vectorize(lambda s, p: s * p[1], excluded={'p'}, otypes='d')(x, p=[0.25, 0.5])
np.vectorize(abs)([x[0], y[1]])
np.vectorize(np.exp)(x)
np.vectorize(math.sqrt)(a * a)
np.vectorize(lambda s: s * 2, cache=True)(x)
np.vectorize(lambda s: s * 2, otypes=[float])(x[:0])
np.vectorize(lambda s: s * 2)(x[0])
np.vectorize(otypes=[float])(lambda s: s * 2)(x)
np.vectorize(lambda n: n * 2)(np.arange(3))
np.vectorize(lambda m: 1.5 if m else 0.3)(x > 0.5)
""".strip().splitlines()


def source(expression):
    return f"import math\n{HEADER}def kernel(a):\n    x, y = a\n    return {expression}\n"


@pytest.mark.parametrize("expression", [*EXPRESSIONS, *WITH_CONSTANTS, *VECTORIZED])
def test_float64_has_plain_numpys_bits(expression):
    """Types, shapes, layouts and bits."""
    result, setting, _ = call(source(expression), "float64", A)
    assert setting.faults == []
    assert same(call(source(expression), None, A)[0], result)


@pytest.mark.parametrize("form", TYPES)
@pytest.mark.parametrize("expression", [*EXPRESSIONS, *WITH_CONSTANTS, *VECTORIZED])
def test_a_narrow_format_holds_what_comes_out(expression, form):
    """Nothing plain is left; what only moves has the bits of the format's own arrays."""
    result, setting, _ = call(source(expression), form, A)
    assert setting.faults == []
    if "linspace" not in expression:
        assert unheld(result, setting) == []
    if expression in EXPRESSIONS:
        expected, _, _ = call(source(expression), None, A.astype(TYPES[form]))
        for one, other in zip(flat(result), flat(expected), strict=True):
            assert np.array_equal(np.asarray(one, float), np.asarray(other, float))


def flat(value):
    if isinstance(value, (list, tuple)):
        return [item for part in value for item in flat(part)]
    return [getattr(value, "_carrier", value)]


def test_the_elements_are_values_of_the_state():
    """vectorize hands each element over as a 0-d value, so that what its function does is rounded one by one."""
    text = f"{HEADER}def kernel(x):\n    seen = []\n    f = np.vectorize(lambda s: seen.append(s) or s * 0.3)\n"
    (made, seen), setting, _ = call(text + "    return f(x), seen\n", "float16", A[0])
    assert setting.faults == []
    assert type(made) is Array
    assert [type(value) for value in seen] == [Scalar] * 4  # the first one twice, as NumPy does to see its type
    own = A[0].astype(np.float16)
    assert made._carrier.tolist() == (own * np.float16(0.3)).astype(float).tolist()


def test_a_vectorized_function_passes_for_numpys():
    """isinstance, name and documentation are as in plain code; plain arguments go to NumPy's own."""
    text = f'{HEADER}@np.vectorize\ndef double(s):\n    """Twice."""\n    return 2 * s\n'
    module, _ = module_of(text, "float16")
    assert isinstance(module.double, np.vectorize)
    assert isinstance(module.double, module.np.vectorize)
    assert (module.double.__name__, module.double.__doc__) == ("double", "Twice.")
    assert type(module.double(np.array([1.5, 2.5]))) is np.ndarray
    assert type(module.np.vectorize(len)(["ab", "c"])) is np.ndarray


@pytest.mark.parametrize("form", ["float64", "float16"])
def test_flat_writes_into_the_array(form):
    """Single places, slices, masks and all of it, in C order whatever the layout; constants are rounded."""
    text = (
        f"{HEADER}def kernel(a):\n    for i in range(3):\n        a.flat[i] = 0.3 * i\n    a.T.flat[5] = a[0, 1]\n"
        "    b = a.copy('F')\n    b.flat[1:4] = [0.1, 0.7, a[1, 1]]\n    b.flat[b.ravel() > 0.5] = 0.3\n"
        "    c = a.T[::-1].copy()\n    c.flat = [0.3, 0.7]\n    v = a[:, 1:]\n    v.flat[1] = 9.0\n"
        "    return a, b, c, v\n"
    )
    result, setting, _ = call(text, form, A)
    assert setting.faults == []
    assert unheld(result, setting) == []
    plain, _, _ = call(text, None, A)
    if form == "float64":
        assert same(plain, result)
    else:
        for one, other in zip(result, plain, strict=True):
            np.testing.assert_allclose(one._carrier, other, rtol=2**-10)


def test_lists_of_values_decide_and_divide_as_pythons_floats():
    """.tolist() gives what plain code has: in float64 Python floats, whose division by zero is an error."""
    text = f"{HEADER}def kernel(x):\n    return x.tolist()[0] / 0.0\n"
    with pytest.raises(ZeroDivisionError):
        call(text, "float64", A[0])
    with pytest.raises(ZeroDivisionError):
        call(text, None, A[0])


@pytest.mark.parametrize(
    ("statement", "kind", "words"),
    [
        ("np.r_['0,2', x]", RefusedError, "np.r_ with a text or a bound of the state among the arrays is refused"),
        ("np.c_['1', x]", RefusedError, "np.c_ with a text or a bound of the state among the arrays is refused"),
        ("np.r_[x[0]:3]", RefusedError, "np.r_ with a text or a bound of the state among the arrays is refused"),
        ("np.fromiter(x, int)", RefusedError, "np.array of the state with dtype int64; accepted: .astype"),
        ("np.fromiter(x, np.float32)", RefusedError, "the kernel fixes dtype float32"),
        ("np.fromiter(x, float, 5)", ValueError, "iterator too short"),
        ("np.vectorize(abs, signature='()->()')(x)", RefusedError, "signature= of np.vectorize on the state; accepted"),
        ("np.vectorize(abs, otypes=['f'])(x)", RefusedError, "the kernel fixes dtype float32"),
        ("np.vectorize(abs)(x[:0])", ValueError, "cannot call `vectorize` on size 0 inputs"),
        ("plainly(x.flat)", EscapeError, "a function or a plain array that does not know the emulated arithmetic"),
        ("x.flat[x]", RefusedError, "a value of the state as an index; accepted: integers, booleans"),
        ("np.linspace(0, 1, 3)[(x > 0.5).astype(int)]", EscapeError, r".*accepted: np\.asarray\(table\)\[key\]"),
        ("np.eye(3).dot(x)", EscapeError, r".*accepted: .* a @ x for a\.dot\(x\) of a plain array"),
    ],
)
def test_what_is_refused_says_what_is_accepted(statement, kind, words):
    """With the line; NumPy's own errors as they are."""
    text = f"{HEADER}def kernel(x, plainly):\n    return {statement}\n"
    where = "" if kind is ValueError else f"{FILE}:3: "
    with pytest.raises(kind, match=f"^{where}{words}"):
        call(text, "float16", A[0], np.asarray)


@pytest.mark.parametrize("statement", ["np.asarray(np.linspace(0, 1, 3))[k]", "np.take(np.linspace(0, 1, 3), k)",
                                       "np.eye(3) @ x", "np.dot(np.eye(3), x)"])  # fmt: skip
def test_what_the_hints_name_works(statement):
    """The accepted spelling is accepted."""
    text = f"{HEADER}def kernel(x):\n    k = (x > 0.5).astype(int)\n    return {statement}\n"
    result, setting, _ = call(text, "float16", A[0])
    assert setting.faults == []
    assert unheld(result, setting) == []


@pytest.mark.parametrize("form", ["float64", "float16", "bfloat16"])
@pytest.mark.parametrize("name", ["sum", "cumsum", "prod", "cumprod"])
def test_a_sum_of_a_mask_in_floats(name, form):
    """`.sum(dtype=float)` is np.sum(mask, dtype=float): numbers of the state; without a type it stays an integer."""
    text = (
        f"{HEADER}def kernel(a):\n    m = a > 0.3\n    return m.{name}(dtype=float), m.{name}(0, float), m.{name}()\n"
    )
    (first, second, third), setting, _ = call(text, form, A)
    function, _, _ = call(f"{HEADER}def kernel(a):\n    return np.{name}(a > 0.3, dtype=float)\n", form, A)
    assert setting.faults == []
    assert unheld([first, second, third], setting) == []
    assert not isinstance(first, (int, np.integer))
    assert np.array_equal(first._carrier, function._carrier)
    assert second.shape == ((2, 3) if name.startswith("cum") else (3,))
    assert type(third) is Exact
    if form == "float64":
        assert same(call(text, None, A)[0], (first, second, third))
