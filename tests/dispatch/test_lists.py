"""Lists of values of the state as the arguments of NumPy's functions."""

from __future__ import annotations

import copy
import inspect
import pickle
from types import MethodType

import ml_dtypes
import numpy as np
import pytest
from kernel_runs import call, module_of, owned, same, unheld

from narrowgauge.dispatch.exact import Exact
from narrowgauge.dispatch.setting import holds

DRAWS = np.array([[0.2, 1.375, 0.75], [0.5, 0.3125, 2.5]])  # values of every format
TYPES = {"float16": np.float16, "bfloat16": ml_dtypes.bfloat16}

# What a list gives must be what one array gives; r is a list of rows, s a list of scalars, t both as tuples.
EXPRESSIONS = """
np.mean(r, axis=0)
np.mean(s)
np.mean(t, 0)
np.sum(r, axis=0)
np.sum(s)
np.sum(a=s)
np.prod(t, axis=1)
np.max(r, axis=0)
np.min(s)
np.std(s)
np.var(r, axis=0, ddof=1)
np.median(r, axis=0)
np.cumsum(r, axis=0)
np.cumsum(s)
np.diff(np.log(s))
np.exp(s)
np.sqrt(r)
np.abs(s)
np.maximum(s, 0.3)
np.maximum(0.3, s)
np.add(s, s)
np.power(s, 2)
np.add.reduce(s)
np.add.reduce(r, axis=1)
np.maximum.reduce(r)
np.minimum.accumulate(s)
np.add.accumulate(r)
np.multiply.outer(s, s)
np.subtract.outer([0.3, 0.7], s)
np.dot(s, s)
np.dot([0.3, 0.7], r)
np.inner(s, s)
np.einsum('i,i->', s, s)
np.einsum('i,ij->j', [0.3, 0.7], r)
np.average(r, axis=0, weights=[0.3, 0.7])
np.average(r, axis=0, weights=np.array([0.3, 0.7]))
np.average(s, weights=s)
np.convolve(s, [0.5, 0.25])
np.percentile(s, 30)
np.interp(0.3, [0.0, 1.0], s[:2])
np.linalg.norm(s)
np.linalg.solve([[1.0, 0.5], [0.5, 1.0]], s[:2])
np.argmax(s)
np.sort(s)
np.any(k)
np.sum(k)
np.mean(k)
np.maximum.reduce(k)
np.append([], s)
np.stack([s, s])
np.concatenate([[0.3], s])
np.column_stack([s, [0.3, 0.7, 0.1]])
np.select([np.array([True, False, True])], [s], 0.3)
np.broadcast_to(s, (2, 3))
np.atleast_1d(s[0], s)
np.shape(r)
np.mean(deque(s))
""".strip().splitlines()
HEADER = "from collections import deque\nimport numpy as np\n"
AS_LISTS = "    r, s, t = list(x), [v for v in x[0]], tuple(x)\n    k = [v > 0.3 for v in s]\n"
AS_ARRAYS = "    r, s, t = x, x[0], x\n    k = s > 0.3\n"


def source(expression, setup):
    return f"{HEADER}def kernel(x):\n{setup}    return {expression}\n"


@pytest.mark.parametrize("expression", EXPRESSIONS)
def test_a_list_is_what_an_array_of_it_is(expression):
    """In every format a list gives the bits that its array gives, and in float64 those of plain NumPy."""
    for form in ("float64", "float16", "bfloat16", "float32"):
        listed, setting, _ = call(source(expression, AS_LISTS), form, DRAWS)
        arrayed, _, _ = call(source(expression, AS_ARRAYS), form, DRAWS)
        assert setting.faults == []
        assert unheld(listed, setting) == []
        pairs = zip(listed, arrayed, strict=True) if isinstance(listed, tuple) else [(listed, arrayed)]
        for one, other in pairs:
            assert np.array_equal(getattr(one, "_carrier", one), getattr(other, "_carrier", other))
        if form == "float64":
            assert same(call(source(expression, AS_LISTS), None, DRAWS)[0], listed)


@pytest.mark.parametrize("form", TYPES)
@pytest.mark.parametrize(
    "expression",
    [
        "np.exp(s)",
        "np.sqrt(t)",
        "np.maximum(s, s[0])",
        "np.max(r, axis=0)",
        "np.add.accumulate(s)",
        "np.cumsum(r, axis=0)",
        "np.multiply.outer(s, s)",
    ],
)
def test_a_list_has_the_bits_of_the_formats_own_arrays(expression, form):
    """float16 of NumPy and bfloat16 of ml_dtypes, given the same list, compute the same."""
    listed, _, _ = call(source(expression, AS_LISTS), form, DRAWS)
    expected, _, _ = call(source(expression, AS_LISTS), None, DRAWS.astype(TYPES[form]))
    assert expected.dtype == TYPES[form]
    assert np.array_equal(listed._carrier, expected.astype(np.float32))


def test_a_mean_of_scalars_counts_every_rounding():
    """The path of one value a step: s = [1, ...], np.mean(s) is the sum in order, each rounded, over the count."""
    text = "import numpy as np\ndef kernel(w):\n    s = [1.0]\n    for v in w:\n        s.append(s[-1] + v)\n"
    result, _, _ = call(text + "    return np.mean(s)\n", "float16", DRAWS[0])
    path = [np.float16(1.0)]
    for value in DRAWS[0].astype(np.float16):
        path.append(path[-1] + value)
    total = path[0]
    for value in path[1:]:
        total = total + value
    assert float(result._carrier) == float(total / np.float16(4))


def test_names_of_numpy_answer_as_before():
    """A stand-in is one object under all its names, of NumPy's type, equal to the original, and copies as itself."""
    module, _ = module_of("import numpy as np\nfrom numpy import exp, mean\n", "float16")
    stand_in = module.np
    assert stand_in.exp is stand_in.exp is module.exp
    assert stand_in.abs is stand_in.absolute
    assert stand_in.mean is module.mean
    assert isinstance(stand_in.exp, np.ufunc)
    assert isinstance(stand_in.mean, type(np.mean))
    assert stand_in.exp == np.exp
    assert stand_in.exp != np.log
    assert {np.exp: 1, np.mean: 2}[stand_in.exp] == 1
    assert {np.exp: 1, np.mean: 2}[stand_in.mean] == 2
    assert (stand_in.exp.nin, stand_in.exp.__name__, stand_in.mean.__name__) == (1, "exp", "mean")
    assert repr(stand_in.add) == repr(np.add)
    assert inspect.signature(stand_in.mean) == inspect.signature(np.mean)
    assert copy.deepcopy(stand_in.exp) is copy.copy(stand_in.exp) is stand_in.exp
    assert pickle.loads(pickle.dumps(stand_in.exp)) is np.exp
    assert stand_in.linalg.norm is stand_in.linalg.norm
    assert stand_in.linalg.LinAlgError is np.linalg.LinAlgError


def test_plain_arguments_go_to_numpys_own_function():
    """Without a value of the state nothing is wrapped and nothing is different, errors included."""
    module, _ = module_of("import numpy as np\n", "float16")
    numpy = module.np
    for made in (
        numpy.mean([1.5, 2.5]),
        numpy.exp([0.5, 1.5]),
        numpy.add.reduce([0.1, 0.2]),
        numpy.linalg.norm([3, 4]),
    ):
        assert isinstance(made, (np.ndarray, np.float64))
        assert not holds(made, Exact)
    assert numpy.add(np.arange(3.0), [1, 2, 3], out=np.zeros(3)).tolist() == [1.0, 3.0, 5.0]
    assert numpy.min(((3, 1), (2, 5)), axis=(0, 1)) == 1
    with pytest.raises(TypeError, match="takes from 1 to 2 positional arguments but 3 were given"):
        numpy.exp(1.0, 2.0, 3.0)
    with pytest.raises(TypeError, match="missing 1 required positional argument"):
        numpy.mean()


def test_a_function_in_a_class_is_bound_and_a_ufunc_is_not():
    """`f = np.mean` in a class body is a method, as NumPy's own function would be there; `g = np.exp` is not."""
    text = "import numpy as np\nclass Model:\n    mean, grow = np.mean, np.exp\n"
    for form in (None, "float16"):
        model = module_of(text, form)[0].Model()
        assert isinstance(model.mean, MethodType)
        assert model.mean.__self__ is model
        assert isinstance(model.grow, np.ufunc)
        assert type(model).mean([1.0, 2.0]) == 1.5


def test_two_runs_do_not_meet_in_a_list():
    """The arrays of another run stay those of that run, also in a ufunc asked at once."""
    one, other = (module_of("import numpy as np\n", "float16") for _ in range(2))
    x = owned(DRAWS, other[1])
    assert one[0].np.exp(x)._setting is other[1]
