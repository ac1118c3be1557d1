"""Integers and booleans of the state stay in sight: exact among themselves, rounded as soon as a float is met."""

from __future__ import annotations

import numbers

import corpus
import ml_dtypes
import numpy as np
import pytest
from exact_kernels import EXACT_SYMBOLS, exact_in_place, exact_operators
from kernel_runs import FILE, NARROW, call, module_of, owned, same, unheld, values_of
from test_dispatch_observer import logged

from narrowgauge.dispatch.array import Array, as_state, wrap
from narrowgauge.dispatch.exact import Exact
from narrowgauge.dispatch.scalar import Scalar
from narrowgauge.dispatch.setting import Wrapped
from narrowgauge.errors import EscapeError, RefusedError, SettingsMixedError

TYPES = {"float16": np.float16, "bfloat16": ml_dtypes.bfloat16}
DRAWS = np.array([0.2, 1.4, 0.75])
ARRAY = (
    "a plain array, or a function that does not know the emulated arithmetic, asked for integers or booleans of the "
    "state; accepted: np.asarray(table)[key] or np.take(table, key) for a table of constants, np.array(values) for a "
    "list, and buffers that the kernel's own module makes with np.zeros"
)
STORED = (
    "an integer of the state is stored into a plain array; accepted: buffers that the kernel's own module makes with "
    "np.zeros(n, dtype=int)"
)
FLOAT = (
    "float(), or a store into a plain array, takes a value out of the emulated arithmetic; "
    "accepted: leave it as it is, arrays that the kernel's own module makes, and f-strings or %s for a text"
)
PLAIN = "is a plain array; accepted: an array of the state"
WRITES = (
    "writes into a plain array what depends on the state; accepted: values[mask] = value on an array that the "
    "kernel's own module makes"
)
NUMBERS = "of booleans or integers gives numbers that this version cannot round"
DTYPE = "the kernel fixes dtype float32; accepted: float64 or none, since the audit chooses the format"

# one statement on x, m = x > 1, k = integers, w = a plain float array, i = a plain integer array
CASES = {
    "w[k]": (EscapeError, ARRAY),
    "w[m]": (EscapeError, ARRAY),
    "w[m[0]]": (EscapeError, ARRAY),
    "w[[k[0], k[1]]]": (EscapeError, ARRAY),
    "i[k]": (EscapeError, ARRAY),
    "w[m] = 0.3": (EscapeError, ARRAY),
    "w[k] *= 0.3": (EscapeError, ARRAY),
    "i[m] += 1": (EscapeError, ARRAY),
    "i[:] = k": (EscapeError, ARRAY),
    "i[0] = k[0]": (EscapeError, STORED),
    "i[0] = x[0]": (EscapeError, STORED),
    "w[0] = k[0]": (EscapeError, FLOAT),
    "w.take(k)": (EscapeError, ARRAY),
    "w.dot(m)": (EscapeError, ARRAY),
    "w.put(k, 0.3)": (EscapeError, ARRAY),
    "np.repeat(w, k)": (EscapeError, ARRAY),
    "np.nditer(k)": (EscapeError, ARRAY),
    "np.int64(k[0])": (EscapeError, ARRAY),
    "float(k[0])": (EscapeError, FLOAT),
    "float(m[0])": (EscapeError, FLOAT),
    "w *= k": (EscapeError, f"out= of np.multiply {PLAIN}"),
    "i += m": (EscapeError, f"out= of np.add {PLAIN}"),
    "b = i > 1; b &= m": (EscapeError, f"out= of np.bitwise_and {PLAIN}"),
    "np.greater(x, 0.3, out=i > 1)": (EscapeError, f"out= of np.greater {PLAIN}"),
    "np.add.at(i, k, 1)": (EscapeError, f"out= of np.add.at {PLAIN}"),
    "np.add.reduce(k, out=np.array(3))": (EscapeError, f"out= of np.add.reduce {PLAIN}"),
    "np.cumsum(k, out=i)": (EscapeError, f"out= of np.cumsum {PLAIN}"),
    "k.cumsum(0, None, i)": (EscapeError, f"out= of np.cumsum {PLAIN}"),
    "np.putmask(w, m, 0.3)": (EscapeError, f"np.putmask {WRITES}"),
    "np.copyto(w, 0.7, where=m)": (EscapeError, f"np.copyto {WRITES}"),
    "np.put(i, k, 3)": (EscapeError, f"np.put {WRITES}"),
    "k.view(float)": (RefusedError, f".view {NUMBERS}"),
    "k.choose([0.1, 0.2, 0.3, 0.4, 0.5])": (RefusedError, f".choose {NUMBERS}"),
    "np.sqrt(m)": (RefusedError, f"np.sqrt {NUMBERS}"),  # float16 in plain code
    "k.data": (RefusedError, ".data of booleans or integers gives a memoryview that this version cannot round"),
    "k.tobytes()": (RefusedError, ".tobytes of booleans or integers gives a bytes that this version cannot round"),
    "k * np.float32(0.3)": (RefusedError, DTYPE),
    "np.modf(k)": (RefusedError, f"np.modf {NUMBERS}"),
    "k.astype(np.float32)": (RefusedError, DTYPE),
    "k * 2**60 * 0.3": (
        RefusedError,
        "a plain array met the state: integers beyond 2**53 cannot be rounded once; accepted: up to 2**53",
    ),
}
HEADER = (
    "import math\nimport numpy as np\ndef kernel(x):\n"
    "    m, k, w, i = x > 1, (x * 3).astype(int), np.linspace(0.1, 0.9, 3), np.arange(3)\n"
)


@pytest.mark.parametrize("statement", CASES)
def test_a_way_out_is_closed_with_its_line(statement):
    """What would make plain numbers of integers of the state raises, in the stated words, and the run keeps it."""
    kind, words = CASES[statement]
    module, setting = module_of(f"{HEADER}    {statement}\n", "float16")
    with pytest.raises((kind, ValueError)):  # NumPy makes a ValueError of what a store into one place raises
        module.kernel(owned(DRAWS, setting))
    assert type(setting.faults[0]) is kind
    assert str(setting.faults[0]) == f"{FILE}:5: {words}"


@pytest.mark.parametrize("statement", CASES)
def test_a_swallowed_way_out_is_kept(statement):
    """A kernel that catches everything goes on, and the run still knows what went wrong, and where."""
    kind, words = CASES[statement]
    text = f"{HEADER}    try:\n        {statement}\n    except Exception:\n        pass\n    return x\n"
    _, setting, _ = call(text, "float16", DRAWS)
    assert type(setting.faults[0]) is kind
    assert str(setting.faults[0]) == f"{FILE}:6: {words}"


@pytest.mark.parametrize("form", [*NARROW, "float64"])
@pytest.mark.parametrize("symbol", EXACT_SYMBOLS)
def test_no_operator_gives_a_plain_number(symbol, form):
    """Whatever an integer of the state meets, either way round or in place, what comes out is of the state."""
    for text in [exact_operators(symbol), *([exact_in_place(symbol)] if symbol in EXACT_SYMBOLS[:12] else [])]:
        result, setting, _ = call("import numpy as np\n" + text, form, *corpus.draws())
        found = [value for value in values_of(result) if not isinstance(value, str)]  # the name of an error
        assert len(found) > 50
        assert all(isinstance(value, Wrapped) for value in found)
        assert unheld(result, setting) == []


ACTS = [
    (lambda v: v + v, lambda v: v * 3, lambda v: v // 7, lambda v: v % 1000, lambda v: 2 + v, lambda v: v & 255,
     lambda v: v ^ (v > 3), abs, lambda v: v == 2049, lambda v: np.maximum(v, 4), np.sum),
    (lambda v: v + v, lambda v: v * 3, lambda v: v // 7, lambda v: v % 1000, lambda v: 5 - v, lambda v: v & 255,
     lambda v: v**3, lambda v: v << 70, abs, lambda v: v == 2049, lambda v: max(v, 4), lambda v: sum([v, v])),
]  # fmt: skip
INTEGERS = np.array([0, 1, -7, 2049, 123456789, -(2**62), 2**63 - 1, 2**53 + 1])


@pytest.mark.parametrize("form", NARROW)
def test_among_themselves_they_are_exact_in_every_format(form):
    """Values that no narrow format has, overflow, floor division and bits: NumPy's own integers, and Python's."""
    _, setting = module_of("", form)
    for plain in (INTEGERS, INTEGERS[3:5].astype(np.int32), INTEGERS[4], np.int32(2**31 - 1), 3**50, INTEGERS > 5):
        ours = wrap(plain, setting)
        with np.errstate(all="ignore"):
            for act in ACTS[isinstance(plain, int)]:
                result = act(ours)
                assert type(result) is Exact
                assert same(act(plain), result)
    assert setting.faults == []


@pytest.mark.parametrize("form", TYPES)
def test_a_count_meets_a_float_as_the_types_own_arithmetic_has_it(form):
    """Counts to 5000 divided and multiplied: NumPy's float16, ml_dtypes' bfloat16, counts rounded where they lack."""
    kind = TYPES[form]
    _, setting = module_of("", form)
    counts = np.arange(5000)
    share = wrap(counts, setting) / 7 * 0.3 + wrap(counts, setting)
    mine = counts.astype(np.float64).astype(kind)
    expected = mine / kind(7) * kind(0.3) + mine
    assert expected.dtype == kind
    assert type(share) is Array
    assert np.array_equal(share._carrier.astype(float), expected.astype(float))
    for count in (3, 2049, 4999):
        one = wrap(count, setting) / 7 * 0.3 + wrap(np.int64(count), setting)
        assert type(one) is Scalar
        assert float(one._carrier) == float(expected[count])


def test_an_integer_that_the_format_lacks_is_rounded_as_a_constant():
    """float16 has no 2049 and nothing beyond 65504; Python's integers of any size round too."""
    _, setting = module_of("", "float16")
    assert (wrap(np.array([2049, 70000, -70000]), setting) * 1.0)._carrier.tolist() == [2048, np.inf, -np.inf]
    assert (wrap(2049, setting) * 1.0)._carrier == 2048
    assert (wrap(3**200, setting) * 1.0)._carrier == np.inf
    assert wrap(np.array([2049]), setting).astype(float)._carrier.tolist() == [2048]
    assert wrap(2049, setting) == 2049
    assert setting.faults == []


def test_what_int_takes_out_is_not_rounded():
    """Negative control: an integer by way of int() is plain, and its quotient is found not to be the format's."""
    text = "def kernel(x):\n    n = (x > 0.1).sum()\n    return n / 7 * 0.3, int(n) / 7 * 0.3\n"
    (inside, outside), setting, _ = call(text, "float16", DRAWS)
    assert unheld([inside], setting) == []
    assert unheld([outside], setting) == [3 / 7 * 0.3]
    assert not setting.arithmetic.holds(np.array(outside))


@pytest.mark.parametrize(
    ("body", "decisions"),
    [
        ("n = int((x > 1).sum())", 1),
        ("n = int(x[1] * 3)", 1),
        ("for _ in range((x > 1).sum()): pass", 1),
        ("v = [0.1, 0.2][(x > 1).sum()]", 1),
        ("v = np.linspace(0, 1, 5)[(x > 1).sum()]", 1),
        ("v = x[:(x > 1).sum()]", 1),
        ("v = [0.1] * (x > 1).sum()", 1),
        ("if (x > 1).sum() > 2: x += 1", 1),
        ("if round(x[1]) == 1: x += 1", 1),
        ("v = {1: 0.1}[(x > 1).sum()]", 1),
        ("v = x[(x > 1).sum()] + x[np.argmax(x > 1)] + x[x > 1]", 0),
        ("v = (x > 1).sum() / 3 + math.floor(x[1]) + round(x[1]) + (x * 3).astype(int)", 0),
        ("v = np.take(np.linspace(0, 1, 5), (x > 1).sum()); w = np.zeros(3, int); w[x > 1] += 2", 0),
    ],
)
def test_integers_that_leave_are_counted_as_decisions(body, decisions):
    """Loops, lists and int() take integers out and are counted; arithmetic and selections of the state are not."""
    assert logged(body)[0].decisions == decisions


def test_an_exact_value_passes_for_what_it_holds():
    """isinstance, hash, equality, dtype, text and protocols are those of the plain value; arrays are not hashable."""
    x = owned(DRAWS, module_of("", "float16")[1])
    k = (x * 3).astype(int)
    assert isinstance(k, np.ndarray)
    assert (k.dtype, k.shape, k.size, k.ndim, len(k)) == (np.int64, (3,), 3, 1, 3)
    assert all(type(v) is int for v in (*k.shape, k.size, k.ndim))
    assert isinstance(k[1], np.int64)
    assert isinstance(k[1], numbers.Integral)
    assert isinstance(round(x[1]), int)
    assert not isinstance(round(x[1]), (float, np.integer))
    assert type(k) is type(k[1]) is type(round(x[1])) is Exact
    assert {4: "a"}[k[1]] == "a"
    assert hash(k[1]) == hash(4)
    assert k[1] != "4"
    assert k[1] != None  # noqa: E711  # the comparison is what is tested
    assert (str(k), repr(k[1]), f"{k[1]:3d}") == ("[0 4 2]", "np.int64(4)", "  4")
    assert list(range(k[1])) == [0, 1, 2, 3]
    with pytest.raises(TypeError, match="unhashable"):
        hash(k)
    with pytest.raises(TypeError, match="only integer scalar arrays can be converted"):
        range(k)
    with pytest.raises(TypeError):
        [1, 2][k[1] > 3]
    with pytest.raises(TypeError, match="not iterable"):
        iter(k[1])
    with pytest.raises(TypeError, match="not iterable"):
        3 in round(x[1])  # noqa: B015  # the attempt is what is tested
    with pytest.raises(TypeError, match="Cannot cast"):
        k += 0.5
    with pytest.raises(TypeError, match="Cannot cast"):
        k += x
    with pytest.raises(AttributeError, match=r"has no attribute 'iloc'$"):
        k.iloc  # noqa: B018  # the attempt is what is tested
    assert x._setting.faults == []


def test_integers_of_two_runs_may_not_meet():
    """Operators, indices, stores and functions of integers of another run are an error of their own."""
    left, right = (wrap(np.array([1, 2]), module_of("", form)[1]) for form in ("float16", "bfloat16"))
    for act in (lambda: left + right, lambda: left[right], lambda: np.maximum(left, right), lambda: left[:1] / right,
                lambda: np.concatenate([left, right]), lambda: left.__setitem__(0, right[0]),
                lambda: left.__iadd__(right)):  # fmt: skip
        with pytest.raises(SettingsMixedError):
            act()


@pytest.mark.parametrize("form", NARROW)
def test_a_parameter_table_is_of_the_state(form):
    """A float array parameter becomes an array of the state, rounded once, so that its places give rounded values."""
    table = np.linspace(0.1, 0.9, 9)
    text = "def kernel(x, v):\n    s = v[(x * 3).astype(int)]\n    return s, s * s, v[:3][x > 1] * v[round(x[1])]\n"
    module, setting = module_of(text, form)
    own = as_state(table, setting)
    result = module.kernel(owned(DRAWS, setting), own)
    assert unheld(result, setting) == []
    assert np.array_equal(own._carrier, setting.arithmetic.cast(table))
    assert not np.shares_memory(as_state(table, module_of("", "float64")[1])._carrier, table)
    for other in (3, 0.3, "a", np.arange(3), np.array([True]), [0.1], own):
        assert as_state(other, setting) is other
    assert as_state(table, None) is table


def test_constant_integers_and_grids_stay_plain():
    """What np.arange, np.linspace and np.array of given integers make is plain data; buffers are of the state."""
    text = """
        import numpy as np
        def kernel(x):
            plain = [np.arange(3), np.linspace(0, 1, 3), np.array([1, 2]) * 0.1, np.asarray([1, 2]),
                     np.take([0.1, 0.2], [1]), np.arange(3) * 0.1]
            own = [np.zeros(3, int), np.ones(3, bool), np.full(3, 7), np.zeros_like(np.arange(3)), np.empty(2, int),
                   np.array([True]), np.arange((x > 1).sum()), np.arange((x > 1).sum()) * 0.1]
            return plain, own
    """
    (plain, own), setting, _ = call(text, "bfloat16", DRAWS)
    assert not any(isinstance(value, Wrapped) for value in plain)
    assert all(isinstance(value, Wrapped) for value in own)
    assert setting.faults == []


def test_max_and_min_give_what_they_chose():
    """A plain integer that is chosen over the state is of the state; a tuple is the one that was given."""
    text = """
        def kernel(x):
            n = (x > 1).sum()
            pairs = [(x[0], n), (x[1], 2)]
            least = min(pairs, key=lambda pair: pair[0])
            return max(n, 3), min(3, x[1] * 9), max(n, 1.3), max(2, 3), max(pairs) is pairs[1], least
    """
    (three, also, real, plain, given, first), setting, _ = call(text, "bfloat16", DRAWS)
    assert [type(value) for value in (three, also, real, plain)] == [Exact, Exact, Scalar, int]
    assert (three, also, plain) == (3, 3, 3)
    assert unheld([real], setting) == []
    assert given
    assert [type(value) for value in first] == [Scalar, Exact]
    assert type(first[0]._carrier) is np.float32
