"""scipy.stats and scipy.special on the state: computed in float64, rounded once; functions that numba compiles."""

from __future__ import annotations

import importlib
import sys

import numpy as np
import pytest
import scipy.special
import scipy.stats
from kernel_runs import call, owned, same, unheld
from private_packages import DRAWS, copied, sources_of, written

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.copies import PrivateCopy, copy_function, new_setting
from narrowgauge.dispatch.importing import Copies
from narrowgauge.errors import RefusedError

HEADER = "import numpy as np\nimport scipy\nimport scipy.special as sc\nfrom scipy import special, stats\n"
X = np.array([0.2, 0.75, 0.4])
# An expression of the state x, and how it is written for plain SciPy on values of the format; c rounds a constant.
STATS = {
    "stats.norm.ppf(x)": lambda x, c: scipy.stats.norm.ppf(x),
    "stats.norm.cdf(x, 0.1, scale=0.3)": lambda x, c: scipy.stats.norm.cdf(x, c(0.1), scale=c(0.3)),
    "scipy.stats.norm.pdf(x)": lambda x, c: scipy.stats.norm.pdf(x),
    "stats.norm.sf(x[0])": lambda x, c: scipy.stats.norm.sf(x[0]),
    "stats.norm(0.1, 0.3).logpdf(x)": lambda x, c: scipy.stats.norm(0.1, 0.3).logpdf(x),
    "stats.norm(x, 0.3).cdf(0.5)": lambda x, c: scipy.stats.norm(x, c(0.3)).cdf(c(0.5)),
    "stats.t.ppf(x, 5)": lambda x, c: scipy.stats.t.ppf(x, 5),
    "stats.t.ppf(x, df=3001)": lambda x, c: scipy.stats.t.ppf(x, df=3001),
    "stats.lognorm.cdf(x, s=x)": lambda x, c: scipy.stats.lognorm.cdf(x, s=x),
    "stats.poisson.pmf(2, x)": lambda x, c: scipy.stats.poisson.pmf(2, x),
    "stats.distributions.norm.ppf(x)": lambda x, c: scipy.stats.norm.ppf(x),
    "stats.norm.stats(loc=x)": lambda x, c: scipy.stats.norm.stats(loc=x),
    "stats.zscore(x)": lambda x, c: scipy.stats.zscore(x),
    "stats.describe(x).mean": lambda x, c: scipy.stats.describe(x).mean,
    "stats.describe(x)[1]": lambda x, c: scipy.stats.describe(x)[1],
}  # fmt: skip
SPECIAL = {
    "sc.ndtri(x)": lambda x, c: scipy.special.ndtri(x),
    "special.ndtr(x[0])": lambda x, c: scipy.special.ndtr(x[0]),
    "scipy.special.erf(x) + 0": lambda x, c: scipy.special.erf(x),
    "special.erfc([x[0], x[1]])": lambda x, c: scipy.special.erfc([x[0], x[1]]),
    "special.expit(x.reshape(1, 3).T)": lambda x, c: scipy.special.expit(x.reshape(1, 3).T),
    "special.gamma(x)": lambda x, c: scipy.special.gamma(x),
    "special.gammainc(0.3, x)": lambda x, c: scipy.special.gammainc(c(0.3), x),
    "special.gammainc(np.array([0.1, 0.3, 0.7]), x)": lambda x, c: scipy.special.gammainc(
        np.array([c(0.1), c(0.3), c(0.7)]), x),
    "special.jv(2, x)": lambda x, c: scipy.special.jv(2, x),
    "special.ellipj(x, 0.3)": lambda x, c: scipy.special.ellipj(x, c(0.3)),
    "special.xlogy(x > 0.3, x)": lambda x, c: scipy.special.xlogy(x > c(0.3), x),
    "special.logsumexp(x)": lambda x, c: scipy.special.logsumexp(x),
    "special.softmax(x)": lambda x, c: scipy.special.softmax(x),
    "(v := np.zeros(3), special.ndtr(x, out=v))[0]": lambda x, c: scipy.special.ndtr(x),
}  # fmt: skip


def flat(value):
    return [item for part in value for item in flat(part)] if isinstance(value, tuple) else [value]


@pytest.mark.parametrize("form", ["float64", "float16", "bfloat16", "float32"])
@pytest.mark.parametrize("expression", [*STATS, *SPECIAL])
def test_scipy_computes_in_float64_and_is_rounded_once(expression, form):
    """On values of the format the result is SciPy's own, rounded once: for float64 its bits, types and layouts."""
    source = f"{HEADER}def kernel(x): return {expression}\n"
    result, setting, _ = call(source, form, X)
    plain, _, _ = call(source, None, X)
    assert setting.faults == []
    assert unheld(result, setting) == []
    if form == "float64":
        assert same(plain, result)
        return
    cast = setting.arithmetic.cast
    x = cast(X).astype(np.float64)
    with np.errstate(all="ignore"):
        expected = {**STATS, **SPECIAL}[expression](x, lambda number: float(cast(np.array(number))))
    if "0.1, 0.3).logpdf" in expression:  # frozen with plain numbers: nothing of the state met them
        assert plain.shape == result.shape
    for one, other in zip(flat(result), flat(expected), strict=True):
        assert np.asarray(one._carrier).tobytes() == cast(np.asarray(other, np.float64)).tobytes()


def test_the_routes_of_scipy():
    """Elementwise functions of scipy.special count as rounded, all others as whole; plain arguments as nothing."""

    class Log:
        seen = []

        def saw(self, setting, operation, route, operands, result):
            self.seen.append((operation, route))

        def met(self, setting, constant):
            pass

        def decided(self, setting, answer):
            raise AssertionError

    lines = "    special.ndtr(0.3), stats.norm.ppf(0.3)\n    return stats.norm.ppf(special.ndtr(x))\n"
    text = f"{HEADER}def kernel(x):\n{lines}"
    call(text, "float16", X, observer=Log())
    assert Log.seen == [("scipy.special.ndtr", "rounded"), ("scipy.stats.norm.ppf", "whole")]


def test_plain_arguments_go_to_the_real_functions():
    """Parameters, constants and classes are SciPy's own, in type and value."""
    text = HEADER + (
        "def kernel(x):\n    frozen = stats.norm(0.1, 2)\n"
        "    assert isinstance(stats.norm, stats.rv_continuous) and stats.norm.name == 'norm'\n"
        "    return [stats.norm.ppf(0.975), special.ndtri(0.3), frozen.cdf(1.0), frozen.mean(), stats.t(5).ppf(0.9)]\n"
    )
    result, _, _ = call(text, "float16", X)
    assert result == call(text, None, X)[0]
    assert all(type(value) is np.float64 for value in result)


def test_functions_of_scipy_in_a_function_handed_over():
    """Names of scipy.stats and scipy.special in globals and closures are exchanged, distributions included."""
    ppf, ndtr, norm, frozen, module = (
        scipy.stats.norm.ppf, scipy.special.ndtr, scipy.stats.norm, scipy.stats.t(5), scipy.special,
    )  # fmt: skip

    def kernel(x):
        return [ndtr(x), norm.cdf(x), frozen.cdf(x), module.erf(x), scipy.stats.norm.sf(x), ppf(x)]

    setting = new_setting(arithmetic_named("float16"))
    assert unheld(copy_function(kernel, setting)(owned(X, setting)), setting) == []


# Stands for numba where it is not installed: its decorators make objects that compute with plain numbers only.
FAKE = {
    "numba/__init__.py": """
        from numba.dispatcher import Dispatcher
        float64 = "a type"
        prange = range
        def jit(*a, **k):
            return Dispatcher(a[0]) if a and callable(a[0]) else Dispatcher
        njit = jit
        def vectorize(*a, **k): return jit(*a, **k)
        def guvectorize(*a, **k): return Dispatcher
    """,
    "numba/dispatcher.py": """
        import numpy as np
        class Dispatcher:
            def __init__(self, py_func):
                self.py_func, self.targetoptions = py_func, {}
            def __call__(self, *a, **k):
                assert all(type(value) in (float, int, np.float64, np.ndarray) for value in a), "no machine code"
                return self.py_func(*a, **k)
    """,
    "numba/experimental.py": "def jitclass(*a): raise AssertionError\n",
}
COMPILED = """
    import math
    import numpy as np
    import numba as nb
    from numba import njit, prange, vectorize, guvectorize, float64
    from numba.experimental import jitclass

    @njit
    def scalar(x):
        return math.sqrt(x) * 0.3

    @nb.jit("float64(float64)", nopython=True, cache=True)
    def typed(x):
        return scalar(x) / 3

    @njit(parallel=True, fastmath=True)
    def loop(x):
        out = np.empty(x.shape[0])
        for i in prange(x.shape[0]):
            out[i] = typed(x[i])
        return out

    @vectorize([float64], nopython=True)
    def larger(a, b):
        if a > b:
            return a * 0.3
        return b * 0.3

    @vectorize
    def simple(a):
        return a / 3

    @guvectorize([], "(n),()->(n),()")
    def spread(row, shift, out, total):
        acc = 0.0
        for i in range(row.shape[0]):
            out[i] = row[i] / 3 + shift
            acc += out[i]
        total[0] = acc

    @jitclass([("x", float64)])
    class Box:
        def __init__(self, x):
            self.x = x

    def kernel(x):
        grid = np.ones((2, 3)) * x
        rows, totals = spread(grid, 0.1)
        return [loop(x), loop.py_func(x), larger(x, 0.5), larger(x[0], x[1]), simple(grid), larger(grid, x), rows,
                totals, spread(x, x[0])[1], Box(x).x]
"""


@pytest.fixture
def numba(tmp_path, monkeypatch):
    """A package of that name on Python's path for one test."""
    for name in [name for name in sys.modules if name.partition(".")[0] == "numba"]:
        monkeypatch.delitem(sys.modules, name)
    folder = tmp_path / "path"
    written(folder, FAKE)
    monkeypatch.syspath_prepend(folder)
    yield folder
    for name in [name for name in sys.modules if name.partition(".")[0] in ("numba", "apart_fast", "apart_user")]:
        del sys.modules[name]


@pytest.mark.parametrize("form", ["float64", "float16", "bfloat16", "float32"])
def test_the_python_original_runs_in_place_of_compiled_code(tmp_path, numba, form):
    """In every copy, plain NumPy's too, so that both compute the same; and it is told which functions these are."""
    written(tmp_path, {"kernel.py": COMPILED})
    module, copies = copied(tmp_path, form)
    result = module.kernel(owned(X, copies.setting))
    plain, others = copied(tmp_path, None)
    assert unheld(result, copies.setting) == []
    assert same(plain.kernel(X.copy()), result) == (form == "float64")
    names = ("larger", "loop", "scalar", "simple", "spread", "typed")
    assert PrivateCopy(len, None, others).compiled == tuple(f"kernel.{name}" for name in names)
    assert copies.compiled == others.compiled


def test_elementwise_functions_agree_with_numpys_own(numba):
    """`vectorize` is np.vectorize of the same function, and `guvectorize` follows NumPy's signature notation."""
    module, _ = copied_of(numba, COMPILED)
    grid = np.linspace(0.1, 0.9, 6).reshape(2, 3)
    assert np.array_equal(module.larger(grid, X), np.vectorize(module.larger.py_func)(grid, X))
    rows, totals = module.spread(grid, [0.1, 0.2])
    assert np.array_equal(rows, grid / 3 + np.array([[0.1], [0.2]]))
    assert np.allclose(totals, rows.sum(axis=1), rtol=3 * np.finfo(float).eps)  # sums of three numbers
    given = np.zeros((2, 3)), np.zeros((2, 1))
    assert module.spread(grid, 0.1, *given)[0] is given[0]


def copied_of(folder, text):
    written(folder, {"kernel.py": text})
    return copied(folder, None)


def test_without_numba_the_import_fails_as_ever(tmp_path, monkeypatch):
    """A kernel that can do without numba does so."""
    monkeypatch.setitem(sys.modules, "numba", None)
    written(tmp_path, {"kernel.py": "try:\n    import numba\nexcept ImportError:\n    numba = None\n"})
    assert copied(tmp_path, "float16")[0].numba is None


def test_a_function_that_is_compiled_already(numba, tmp_path):
    """Its original's copy runs where that is listed; else it runs on plain numbers and refuses the state."""
    written(numba, {"apart_fast.py": "from numba import njit\n@njit\ndef f(x): return x * 0.3\nRATE = 0.5\n",
                    "apart_user.py": "from apart_fast import f\n"})  # fmt: skip
    text = (
        "import apart_user\nfrom apart_user import f\ndef kernel(x): return f(x), apart_user.f(2.0), f.targetoptions\n"
    )
    written(tmp_path, {"kernel.py": text})
    module, copies = copied(tmp_path, "float16")
    with pytest.raises(RefusedError) as raised:
        module.kernel(owned(X, copies.setting))
    assert str(raised.value) == (
        f"{tmp_path.resolve() / 'kernel.py'}:3: apart_fast.f is compiled by numba and cannot round the state. "
        'Accepted: "apart_fast" in kernel.modules, so that its Python original runs'
    )
    assert module.kernel(1.0) == (0.3, 0.6, {})
    written(tmp_path, {"kernel.py": "from apart_user import f\ndef kernel(x): return f(x)\n"})
    module, copies = copied(tmp_path, "float16", ["apart_fast"])
    assert unheld(module.kernel(owned(X, copies.setting)), copies.setting) == []


def test_compiled_functions_in_a_function_handed_over(numba, tmp_path):
    """One of the function's own module is copied, one of a listed module exchanged, any other refuses the state."""
    fast = "from numba import njit\nSCALE = 0.3\n@njit\ndef f(x): return x * SCALE\n"
    written(numba, {"apart_fast.py": fast, "apart_user.py": fast + "import apart_fast\nfrom apart_fast import f as g\n"
                    "def kernel(x): return f(x), g(x)\ndef alone(x): return f(x)\n"})  # fmt: skip
    user = importlib.import_module("apart_user")
    setting = new_setting(arithmetic_named("float16"))
    copies = Copies(setting, sources_of(tmp_path))
    assert unheld(copy_function(user.alone, setting, copies)(owned(X, setting)), setting) == []
    assert copies.compiled == {"apart_user.f"}
    with pytest.raises(RefusedError, match=r"apart_fast\.f is compiled by numba"):
        copy_function(user.kernel, setting)(owned(X, setting))
    setting = new_setting(arithmetic_named("float16"))
    listed = Copies(setting, sources_of(numba, ["apart_fast"]))
    assert unheld(copy_function(user.kernel, setting, listed)(owned(X, setting)), setting) == []
    assert np.array_equal(user.alone(DRAWS), DRAWS * 0.3)
