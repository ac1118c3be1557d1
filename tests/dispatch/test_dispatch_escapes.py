"""What would leave the emulated arithmetic, or cannot be rounded, raises, is recorded with its line, and says why."""

from __future__ import annotations

import numpy as np
import pytest
from kernel_runs import FILE, NARROW, call, module_of, owned

from narrowgauge.errors import DispatchError, EscapeError, RefusedError, SettingsMixedError

FLOAT = (
    "float(), or a store into a plain array, takes a value out of the emulated arithmetic; "
    "accepted: leave it as it is, arrays that the kernel's own module makes, and f-strings or %s for a text"
)
ARRAY = (
    "a function or a plain array that does not know the emulated arithmetic asked for plain numbers; "
    "accepted: NumPy functions called, and arrays made, in the kernel's own module, np.array(values) for a list "
    "of the state, a list for constants, and a @ x for a.dot(x) of a plain array a"
)
NO_DRAWS = (
    "is not offered by this version: the kernel takes its random numbers as its first argument, "
    "so that every format sees the same"
)
DTYPE = "the kernel fixes dtype float32; accepted: float64 or none, since the audit chooses the format"

# one statement of a kernel, the class and the words of what it raises
REAL = "real = REAL_NUMPY; "
CASES = {
    "float(x[0])": (EscapeError, FLOAT),
    "float(x[:1])": (EscapeError, FLOAT),
    "complex(x[0])": (EscapeError, FLOAT),
    "operator.mod('%.2f', x[0])": (EscapeError, FLOAT),
    "real = REAL_NUMPY; real.exp([x[0], 0.3])": (EscapeError, ARRAY),
    "math.ulp(x[0])": (
        RefusedError,
        "math.ulp of the state is refused: it is the distance to float64's next value; accepted: np.spacing(abs(x))",
    ),
    "scipy.linalg.norm(x)": (EscapeError, ARRAY),
    "scipy.stats.gaussian_kde(x)": (EscapeError, ARRAY),
    "np.arange(0.0, x[0], 0.1)": (EscapeError, ARRAY),
    "np.ma.array([0.1, 0.2, 0.3]) * x": (EscapeError, ARRAY),
    "np.linspace(0, 1, 3).dot(x)": (EscapeError, ARRAY),
    "np.linspace(0, 1, 3)[x[0]]": (EscapeError, ARRAY),
    "v = np.linspace(0, 1, 3); v[0] = x[0]": (EscapeError, FLOAT),
    "v = np.linspace(0, 1, 3); v[:] = x": (EscapeError, ARRAY),
    "v = np.linspace(0, 1, 3); v[:2] = [x[0], x[1]]": (EscapeError, ARRAY),
    "v = np.linspace(0, 1, 3); v.fill(x[0])": (EscapeError, FLOAT),
    "v = np.arange(3) * 0.3; v += x": (
        EscapeError,
        "out= of np.add is a plain array; accepted: an array of the state",
    ),
    "v = np.eye(3); v[0] *= x": (EscapeError, "out= of np.multiply is a plain array; accepted: an array of the state"),
    "np.exp(x, out=np.linspace(0, 1, 3))": (
        EscapeError,
        "out= of np.exp is a plain array; accepted: an array of the state",
    ),
    "OUTSIDE[:] = x": (EscapeError, ARRAY),
    "OUTSIDE[1] = x[1]": (EscapeError, FLOAT),
    REAL + "real.zeros(3)[:] = x": (EscapeError, ARRAY),
    REAL + "real.array([x[0], x[1]])": (EscapeError, ARRAY),
    REAL + "real.asarray(x)": (EscapeError, ARRAY),
    REAL + "real.full(3, x[0])": (EscapeError, ARRAY),
    "x[:] = np.linspace(0.1, 0.3, 3)": (
        EscapeError,
        "a plain float array is stored whose values float16 does not have; "
        "accepted: np.asarray(values), which rounds constants",
    ),
    "np.random.normal(size=3)": (RefusedError, f"numpy.random.normal {NO_DRAWS}"),
    "np.random.default_rng(1).normal()": (RefusedError, f"Generator.normal {NO_DRAWS}"),
    "np.random.seed(1); np.random.rand()": (RefusedError, f"numpy.random.rand {NO_DRAWS}"),
    "np.random.set_bit_generator(np.random.PCG64(3))": (RefusedError, f"numpy.random.set_bit_generator {NO_DRAWS}"),
    "from numpy.random import standard_normal as f; f(3)": (RefusedError, f"numpy.random.standard_normal {NO_DRAWS}"),
    "from numpy import random as r; r.RandomState(3).rand(2)": (RefusedError, f"RandomState.rand {NO_DRAWS}"),
    "import random; random.gauss(0, 1)": (RefusedError, f"random.gauss {NO_DRAWS}"),
    "from random import random as f; f()": (RefusedError, f"random.random {NO_DRAWS}"),
    "import secrets; secrets.randbits(8)": (RefusedError, f"secrets.randbits {NO_DRAWS}"),
    "np.fft.fft(x)": (
        RefusedError,
        "np.fft.fft is refused: it gives complex numbers, which no format holds; accepted: a kernel of real numbers",
    ),
    "np.roots(x[0] * np.array([1.0, 0.0, 4.0]))": (
        RefusedError,
        "np.roots of the state gives complex numbers, which no format holds",
    ),
    "np.piecewise(x, [x > 1], [0.1, 0.2])": (
        RefusedError,
        "np.piecewise is refused: it calls back for each piece; accepted: a loop, np.where or np.select",
    ),
    "np.save('x.npy', x)": (
        RefusedError,
        "np.save is refused: it writes the state to a file; accepted: return it",
    ),
    "np.copyto(OUTSIDE, x)": (
        EscapeError,
        "np.copyto writes into a plain array what depends on the state; "
        "accepted: values[mask] = value on an array that the kernel's own module makes",
    ),
    "np.sum(x, out=np.array(0.3)[()])": (
        EscapeError, "out= of np.sum is a plain array; accepted: an array of the state",
    ),
    "np.sum(np.stack([x, x]), axis=0, out=OUTSIDE)": (
        EscapeError, "out= of np.sum is a plain array; accepted: an array of the state",
    ),
    "np.add(x, x, out=OUTSIDE, where=x > 0)": (
        EscapeError, "out= of np.add is a plain array; accepted: an array of the state",
    ),
    "np.add.reduce(x, out=OUTSIDE)": (
        EscapeError, "out= of np.add.reduce is a plain array; accepted: an array of the state",
    ),
    "np.sqrt(x, where=x)": (RefusedError, "where= of np.sqrt is of the state; accepted: booleans"),
    "np.add.at(x, [0], 0.3)": (
        RefusedError,
        "np.add.at is refused: it changes places one after the other, which has no rounded counterpart here; "
        "accepted: values[places] = values[places] + increments where no place comes twice",
    ),
    "np.add.reduceat(x, [0, 2])": (RefusedError, "np.add.reduceat is refused: accepted: reduce on each slice"),
    "np.less.reduce(x)": (RefusedError, "np.less.reduce is refused: a comparison of a comparison"),
    "np.divmod.outer(x, x)": (
        RefusedError, "np.divmod.outer is refused: it is no elementary operation of two numbers",
    ),
    "np.add(x, x, dtype=np.float32)": (RefusedError, DTYPE),
    "np.add(x, x, dtype=int)": (RefusedError, "dtype=int64 of np.add on the state; accepted: float64 or none"),
    "np.sum(x, dtype=int)": (RefusedError, "dtype=int64 of np.sum on the state; accepted: float64 or none"),
    "np.sum(x, dtype=np.float32)": (RefusedError, DTYPE),
    "np.add(x, x, casting='unsafe')": (RefusedError, "casting= of np.add is not offered by this version"),
    "np.add(x, x, order='F')": (RefusedError, "order= of np.add is not offered by this version"),
    "np.add(x, x, signature='dd->d')": (RefusedError, "signature= of np.add is not offered by this version"),
    "np.std(x, where=x > 0)": (RefusedError, "where= of np.std is not offered by this version"),
    "np.sort(x, order='a')": (RefusedError, "order= of np.sort is not offered by this version"),
    "np.pad(x, 1, mode='mean')": (
        RefusedError,
        "mode='mean' of np.pad is not offered; accepted: constant, edge, maximum, minimum, reflect, symmetric, wrap",
    ),
    "np.ldexp(x, x)": (RefusedError, "np.ldexp takes integers as its exponents; accepted: x * 2.0**n"),
    "np.strings.upper(x)": (RefusedError, "np.strings.upper is refused: the state is no text"),
    "np.isnat(x)": (RefusedError, "np.isnat is refused: the state is no date"),
    "np.repeat(x, 2, x[0])": (RefusedError, "axis= of np.repeat may not be of the state; accepted: plain data"),
    "scipy.stats.norm.rvs(size=3)": (RefusedError, f"scipy.stats.norm.rvs {NO_DRAWS}"),
    "scipy.stats.lognorm(0.3).rvs(3)": (RefusedError, f"scipy.stats.lognorm.rvs {NO_DRAWS}"),
    "scipy.stats.qmc.Sobol(2)": (RefusedError, f"scipy.stats.qmc.Sobol {NO_DRAWS}"),
    "scipy.stats.linregress(x, [0.1, 0.2, 0.4])": (
        RefusedError,
        "scipy.stats.linregress of the state gives a LinregressResult that cannot be rounded",
    ),
    "scipy.special.wofz(x)": (
        RefusedError,
        "scipy.special.wofz of the state gives a ndarray that cannot be rounded",
    ),
    "scipy.special.expit(x, where=[True, False, True])": (
        RefusedError,
        "scipy.special.expit on the state takes no keyword but out",
    ),
    "scipy.special.expit(x, out=np.linspace(0, 1, 3))": (
        EscapeError,
        "out= of scipy.special.expit is a plain array; accepted: an array of the state",
    ),
    "x.view(complex)": (RefusedError, ".view is not offered by this version on a value of the state"),
    "x.data": (RefusedError, ".data is not offered by this version on a value of the state"),
    "x[0].hex()": (RefusedError, ".hex is not offered by this version on a value of the state"),
    "np.take(np.eye(3), x)": (EscapeError, ARRAY),
    "np.zeros_like(x, device='cpu')": (RefusedError, "device= of np.zeros_like is not offered by this version"),
    "np.zeros(3, like=x)": (RefusedError, "like= of np.zeros is not offered by this version"),
    "np.array(x, subok=True)": (RefusedError, "subok= of np.array is not offered by this version"),
    "np.zeros(3, dtype=np.float32)": (RefusedError, DTYPE),
    "np.array([0.1], dtype='f4')": (RefusedError, DTYPE),
    "np.full(3, 0.3, np.float32)": (RefusedError, DTYPE),
    "np.zeros_like(x, dtype=np.float32)": (RefusedError, DTYPE),
    "x.astype(np.float32)": (RefusedError, DTYPE),
    "x[0].astype(np.float32)": (RefusedError, DTYPE),
    "(x > 0).astype(np.float32)": (RefusedError, DTYPE),
    "np.asarray(x, np.float32)": (RefusedError, DTYPE),
    "np.zeros(3, dtype=object)": (RefusedError, DTYPE.replace("float32", "object")),
    "np.zeros(3, dtype=complex)": (RefusedError, DTYPE.replace("float32", "complex128")),
    "np.array(x, dtype='i8')": (RefusedError, "np.array of the state with dtype int64; accepted: .astype('int64')"),
    "x[x[0]]": (RefusedError, "a value of the state as an index; accepted: integers, booleans"),
    "x[x]": (RefusedError, "a value of the state as an index; accepted: integers, booleans"),
    "np.zeros((3, 3))[0, x[0]] = 0.3": (
        RefusedError,
        "a value of the state as an index; accepted: integers, booleans",
    ),
    "x + [x[0], 0.1, 0.2]": (RefusedError, "a list of values of the state as an operand; accepted: np.array(list)"),
    "x * 1j": (RefusedError, "a complex number met the state; accepted: real numbers"),
    "np.complex128(1j) * x": (RefusedError, "a complex number met the state; accepted: real numbers"),
    "x * np.longdouble(0.3)": (RefusedError, "a long double met the state; accepted: floats to 64 bits"),
    "x * np.arange(3).astype('g')": (
        RefusedError,
        f"a plain array met the state: dtype {np.dtype('g')} cannot be rounded; "
        "accepted: booleans, integers, floats to 64 bits",
    ),
    "x * (np.arange(3) + 2**60)": (
        RefusedError,
        "a plain array met the state: integers beyond 2**53 cannot be rounded once; accepted: up to 2**53",
    ),
    "x * np.arange(3).astype(object)": (
        RefusedError,
        "an array of Python objects met the state; accepted: plain arrays of numbers",
    ),
    "x * np.matrix([[0.1, 0.2, 0.3]])": (RefusedError, "a matrix met the state; accepted: plain arrays of numbers"),
    "x * np.ma.array([0.1])": (RefusedError, "a MaskedArray met the state; accepted: plain arrays of numbers"),
    "np.matrix([[0.1]]) * x": (RefusedError, ".view is not offered by this version on a value of the state"),
    "x[0] = None": (RefusedError, "a NoneType met the state; accepted: numbers and arrays"),
    "np.where(x > 0, None, x)": (RefusedError, "a NoneType met the state; accepted: numbers and arrays"),
    "math.exp(x)": (RefusedError, "math.exp takes 1 scalar(s); accepted: np.exp"),
    "math.log(x)": (RefusedError, "math.log takes 1 scalar(s); accepted: np.log"),
    "math.erf(x)": (RefusedError, "math.erf takes scalars; accepted: a function of NumPy or SciPy"),
    "np.exp(x > 0)": (RefusedError, "np.exp of booleans or integers gives numbers that this version cannot round"),
}  # fmt: skip
if np.dtype("g").itemsize == 8:  # a long double that is a double
    del CASES["x * np.arange(3).astype('g')"]
HEADER = "import math, operator\nimport numpy as np\nimport scipy.linalg, scipy.special, scipy.stats\n"


def kernel(statement, swallow=False):
    """A kernel that does one thing; its line in the file is known."""
    if not swallow:
        return f"{HEADER}def kernel(x):\n    {statement}\n", 5
    lines = f"    try:\n        {statement}\n    except Exception:\n        pass\n    return x * 0.3\n"
    return f"{HEADER}def kernel(x):\n{lines}", 6


def prepared(text):
    module, setting = module_of(text, "float16")
    module.OUTSIDE, module.REAL_NUMPY = np.zeros(3), np
    return module.kernel, setting, owned(np.array([0.2, 1.4, 0.75]), setting)


@pytest.mark.filterwarnings("ignore:the matrix subclass is not the recommended way")
@pytest.mark.parametrize("statement", CASES)
def test_a_fault_says_where_and_why(statement):
    """The error is of the stated class and in the stated words, with file and line, and the run keeps it.

    NumPy makes a ValueError of what the store of a single value raises, since that could be a sequence.
    """
    kind, words = CASES[statement]
    text, line = kernel(statement)
    function, setting, x = prepared(text)
    with pytest.raises((kind, ValueError)) as raised:
        function(x)
    error = raised.value.__cause__ if type(raised.value) is ValueError else raised.value
    assert type(error) is kind
    assert str(error) == f"{FILE}:{line}: {words}"
    assert setting.faults[0] is error


@pytest.mark.filterwarnings("ignore:the matrix subclass is not the recommended way")
@pytest.mark.parametrize("statement", CASES)
def test_a_swallowed_fault_is_kept(statement):
    """A kernel that catches everything goes on, and the run still knows the first thing that went wrong, and where."""
    kind, words = CASES[statement]
    text, line = kernel(statement, swallow=True)
    function, setting, x = prepared(text)
    function(x)
    assert type(setting.faults[0]) is kind
    assert str(setting.faults[0]) == f"{FILE}:{line}: {words}"


def test_two_runs_may_not_meet():
    """A value of another run, in an operator, a ufunc, a store, a list or a mask, is an error of its own."""
    words = "arrays of two runs met in one operation; a cache or a global of the kernel outlives the run"
    _, other = module_of("", "bfloat16")
    left = owned(np.array([0.2, 1.4, 0.75]), other)
    for statement in ("x + y", "y + x", "np.maximum(x, y)", "x[0] * y[0]", "x[:] = y", "x[0] = y[0]",
                      "np.array([x, y])",
                      "np.where(x > 0, x, y)", "x[y > 0]", "(x > 0) & (y > 0)", "x * (y > 0)", "np.concatenate([x, y])",
                      "np.add(x, x, out=y)", "x += y"):  # fmt: skip
        module, setting = module_of(f"import numpy as np\ndef kernel(x, y):\n    {statement}\n", "float16")
        with pytest.raises(SettingsMixedError):
            module.kernel(owned(np.array([0.2, 1.4, 0.75]), setting), left)
        faults = setting.faults or other.faults
        assert str(faults[0]) in (f"{FILE}:3: {words}", words)
        other.faults.clear()


def test_a_function_of_another_module_is_where_the_kernel_called_it():
    """The place of a fault is the innermost line of the kernel's own file, also when foreign code raises it."""
    text = "from scipy.linalg import *\ndef f(x):\n    return norm(x)\ndef kernel(x):\n    return f(x[0])\n"
    _, setting, _ = swallowed(text)
    assert str(setting.faults[0]) == f"{FILE}:3: {ARRAY}"


def swallowed(text):
    function, setting, x = prepared(text)
    with pytest.raises((DispatchError, ValueError)):
        function(x)
    return function, setting, x


@pytest.mark.parametrize("kind", ["np.float64", "np.float32", "np.float16", "np.longdouble"])
def test_numpys_own_types_are_no_way_out(kind):
    """A call of a NumPy type on a 0-d value or an array is an escape, by whichever protocol NumPy asks first."""
    for value in ("x[0]", "x"):
        _, setting, _ = swallowed(kernel(f"{kind}({value})")[0])
        assert all(str(fault) in (f"{FILE}:5: {FLOAT}", f"{FILE}:5: {ARRAY}") for fault in setting.faults)


def test_outside_the_kernel_a_fault_has_no_place():
    """Where no line of the user's module is being executed the message starts with the reason."""
    _, setting = module_of("", "float16")
    with pytest.raises(EscapeError) as raised:
        float(owned(np.array([0.3]), setting)[0])
    assert str(raised.value) == FLOAT


def test_names_of_generators_may_be_imported_for_annotations():
    """Types of numpy.random serve in annotations and isinstance, and other names are NumPy's own absences."""
    text = """
        import numpy as np
        from numpy.random import Generator, default_rng
        def kernel(x, rng: np.random.Generator | None = None, other: "Generator" = None):
            is_one = isinstance(rng, (np.random.Generator, Generator))
            return is_one, hasattr(np.random, "normal"), hasattr(np.random, "no")
    """
    result, setting, _ = call(text, "float16", np.zeros(3))
    assert result == (False, True, False)
    assert setting.faults == []


@pytest.mark.parametrize("form", NARROW)
def test_a_plain_array_of_values_of_the_format_may_be_stored(form):
    """The check of a store is of values, not of types: what the format has, integers and booleans go in."""
    text = """
        import numpy as np
        def kernel(x):
            x[:2] = np.linspace(0.25, 0.75, 2)
            x[2:3] = np.array([3]) > 1
            x[3:] = np.arange(2) + 4097
            return x
    """
    result, setting, _ = call(text, form, np.zeros(5))
    assert setting.faults == []
    expected = setting.arithmetic.cast(np.array([0.25, 0.75, 1.0, 4097.0, 4098.0]))
    assert np.array_equal(result._carrier, expected)
