"""Python's math, statistics, cmath and fractions on 0-d values of the state."""

from __future__ import annotations

import cmath
import fractions
import math
import statistics
import types
from fractions import Fraction

import ml_dtypes
import numpy as np
import pytest
from kernel_runs import FILE, call, module_of, owned, same, unheld
from test_dispatch_observer import Log

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.copies import copy_function, new_setting
from narrowgauge.dispatch.exact import Exact
from narrowgauge.dispatch.mathematics import math_namespace
from narrowgauge.dispatch.scalar import Scalar
from narrowgauge.errors import EscapeError, RefusedError

X = np.array([0.2, 1.375, 0.75, -2.5])
HEADER = "import math, statistics\nimport numpy as np\n"
NARROW = ["float16", "bfloat16", "float32"]
TYPES = {"float16": np.float16, "bfloat16": ml_dtypes.bfloat16, "float32": np.float32}
NORMAL = statistics.NormalDist(0.5, 2.0)

# What the kernel says, and what plain Python makes of values s, t, u, v of the format: rounded once after that.
# 0.25 and 0.5 are constants of every format; 0.3 is not, and is rounded when it meets the state: c(0.3).
ONCE = {
    "math.erf(s)": lambda s, t, u, v, c: math.erf(s),
    "math.erfc(t)": lambda s, t, u, v, c: math.erfc(t),
    "math.gamma(s)": lambda s, t, u, v, c: math.gamma(s),
    "math.gamma(v)": lambda s, t, u, v, c: math.gamma(v),
    "math.lgamma(s)": lambda s, t, u, v, c: math.lgamma(s),
    "math.log(t, 2)": lambda s, t, u, v, c: math.log(t, 2),
    "math.log(t, 0.3)": lambda s, t, u, v, c: math.log(t, c(0.3)),
    "math.log(2.0, t)": lambda s, t, u, v, c: math.log(2.0, t),
    "math.hypot(s, t, u)": lambda s, t, u, v, c: math.hypot(s, t, u),
    "math.hypot(s)": lambda s, t, u, v, c: math.hypot(s),
    "math.dist([s, t], [u, 0.3])": lambda s, t, u, v, c: math.dist([s, t], [u, c(0.3)]),
    "math.dist(x[:2], x[2:])": lambda s, t, u, v, c: math.dist([s, t], [u, v]),
    "math.remainder(t, s)": lambda s, t, u, v, c: math.remainder(t, s),
    "math.ldexp(s, -3)": lambda s, t, u, v, c: math.ldexp(s, -3),
    "math.frexp(t)[0]": lambda s, t, u, v, c: math.frexp(t)[0],
    "math.modf(v)[0]": lambda s, t, u, v, c: math.modf(v)[0],
    "math.modf(v)[1]": lambda s, t, u, v, c: math.modf(v)[1],
    "math.pow(t, 0.3)": lambda s, t, u, v, c: math.pow(t, c(0.3)),
    "math.copysign(s, v)": lambda s, t, u, v, c: math.copysign(s, v),
    "math.fmod(v, s)": lambda s, t, u, v, c: math.fmod(v, s),
    "N.cdf(s)": lambda s, t, u, v, c: NORMAL.cdf(s),
    "N.pdf(s)": lambda s, t, u, v, c: NORMAL.pdf(s),
    "N.inv_cdf(u)": lambda s, t, u, v, c: NORMAL.inv_cdf(u),
    "N.zscore(s)": lambda s, t, u, v, c: NORMAL.zscore(s),
    "statistics.mean([s, t, u])": lambda s, t, u, v, c: statistics.mean([s, t, u]),
    "statistics.mean(p for p in x)": lambda s, t, u, v, c: statistics.mean([s, t, u, v]),
    "statistics.fmean([s, 0.3], weights=[t, u])": lambda s, t, u, v, c: statistics.fmean([s, c(0.3)], [t, u]),
    "statistics.stdev(list(x))": lambda s, t, u, v, c: statistics.stdev([s, t, u, v]),
    "statistics.pvariance(x)": lambda s, t, u, v, c: statistics.pvariance([s, t, u, v]),
    "statistics.median([s, t])": lambda s, t, u, v, c: statistics.median([s, t]),
    "statistics.quantiles([s, t, u])[0]": lambda s, t, u, v, c: statistics.quantiles([s, t, u])[0],
    "statistics.linear_regression([s, t], [u, v]).slope": lambda s, t, u, v, c: statistics.linear_regression(
        [s, t], [u, v]).slope,
    "statistics.NormalDist().cdf(s)": lambda s, t, u, v, c: statistics.NormalDist().cdf(s),
}  # fmt: skip


def kernel(expression):
    return f"{HEADER}N = statistics.NormalDist(0.5, 2.0)\ndef kernel(x):\n    s, t, u, v = x\n    return {expression}\n"


@pytest.mark.parametrize("expression", [*ONCE, "math.fsum(x)", "math.fsum([s, t])", "math.fsum(p for p in x)"])
def test_float64_has_plain_pythons_bits(expression):
    """In float64 each is the function itself, in type and bits."""
    result, setting, _ = call(kernel(expression), "float64", X)
    assert setting.faults == []
    assert same(call(kernel(expression), None, X)[0], result)


@pytest.mark.parametrize("form", NARROW)
@pytest.mark.parametrize("expression", ONCE)
def test_a_narrow_format_rounds_once_what_python_computes_of_its_values(expression, form):
    """Against the format's own NumPy type: values of it in, Python's float64 result cast to it once."""
    result, setting, _ = call(kernel(expression), form, X)
    kind = TYPES[form]
    expected = ONCE[expression](*(float(value) for value in X.astype(kind)), lambda number: float(kind(number)))
    assert setting.faults == []
    assert unheld(result, setting) == []
    assert float(result._carrier) == float(kind(expected))


@pytest.mark.parametrize("form", NARROW)
def test_fsum_is_the_exact_sum_rounded_once(form):
    """Against rational arithmetic."""
    kind = TYPES[form]
    for values in ([2048.0, 1.0, 2.0**-24], [1.0, 2.0**-8, 2.0**-24], [0.1, 0.7, -0.3], [1e4, 0.3, -1e4]):
        own = np.array(values).astype(kind)
        exact = sum(map(Fraction, own.astype(float).tolist()))
        result, _, _ = call(kernel("math.fsum(x)").replace("    s, t, u, v = x\n", ""), form, np.array(values))
        nearest = min(
            neighbours(kind, float(exact)), key=lambda value: (abs(Fraction(value) - exact), odd(kind, value))
        )
        assert float(result._carrier) == nearest


def neighbours(kind, value):
    """The values of a type about a number."""
    middle = kind(value)
    return [float(np.nextafter(middle, kind(way))) for way in (-np.inf, np.inf)] + [float(middle)]


def odd(kind, value):
    bits = np.array([value], kind).view(np.uint32 if kind is np.float32 else np.uint16)
    return int(bits[0]) & 1


def test_a_sum_that_float64_rounds_to_a_tie_is_not_rounded_twice():
    """2^40 + 2^32 lies in the middle of two values of bfloat16; float64 loses the 2^-100 that says which is nearer."""
    wide = np.array([2.0**40, 2.0**32, 2.0**-100])
    result, _, _ = call("import math\ndef kernel(x):\n    return math.fsum(x)\n", "bfloat16", wide)
    assert math.fsum(wide) == 2.0**40 + 2.0**32
    assert float(ml_dtypes.bfloat16(math.fsum(wide))) == 2.0**40
    assert float(result._carrier) == 2.0**40 + 2.0**33


# What each function of math is called with, on x of float64; every one is there, so that none is forgotten.
CALLS = {
    **dict.fromkeys("acos asin atan atanh erf".split(), "(x[0])"),  # noqa: SIM905
    **dict.fromkeys("acosh asinh cbrt cos cosh degrees erfc exp exp2 expm1 fabs gamma lgamma".split(), "(x[1])"),  # noqa: SIM905
    **dict.fromkeys("log log10 log1p log2 radians sin sinh sqrt tan tanh".split(), "(x[1])"),  # noqa: SIM905
    **dict.fromkeys("ceil floor frexp isfinite isinf isnan modf trunc".split(), "(x[1])"),  # noqa: SIM905
    **dict.fromkeys("atan2 copysign fmod hypot isclose pow remainder".split(), "(x[1], x[0])"),  # noqa: SIM905
    **dict.fromkeys("fsum prod".split(), "([x[0], x[1], 0.3])"),  # noqa: SIM905
    **dict.fromkeys("dist sumprod".split(), "([x[0], x[1]], [0.3, x[2]])"),  # noqa: SIM905
    **dict.fromkeys("comb gcd lcm perm".split(), "(k[1], k[0])"),  # noqa: SIM905
    **dict.fromkeys("factorial isqrt".split(), "(k[0])"),  # noqa: SIM905
    "fma": "(x[0], x[1], x[2])", "ldexp": "(x[0], len(k))",
}  # fmt: skip
REFUSED = {"nextafter": "(x[0], 1.0)", "ulp": "(x[0])"}


@pytest.mark.parametrize("name", [name for name in dir(math) if callable(getattr(math, name)) and name[0] != "_"])
def test_every_function_of_math_is_emulated_or_refused_by_name(name):
    """Nothing of math asks a value of the state for a plain float: it gives values of the run, or its name."""
    text = f"{HEADER}def kernel(x):\n    k = np.array([2, 5]) + (x[:2] > 9)\n    return math.{name}"
    if name in REFUSED:
        for form in ("float64", "float16"):
            with pytest.raises(
                RefusedError, match=rf"^{FILE}:5: math\.{name} of the state is refused: .*; accepted: np\."
            ):
                call(text + REFUSED[name], form, X)
        return
    plain, _, _ = call(text + CALLS[name], None, X)
    for form in ("float64", "float16", "bfloat16"):
        result, setting, _ = call(text + CALLS[name], form, X)
        assert setting.faults == []
        assert unheld(result, setting) == []
        assert all(type(part) in (Scalar, Exact) for part in (result if isinstance(result, tuple) else [result]))
        assert form != "float64" or same(plain, result)


def test_a_function_of_a_newer_python_is_refused_by_name():
    """What this version does not know runs on plain numbers and says its name on the state."""
    newer = types.ModuleType("math")
    newer.__dict__.update({**vars(math), "later": abs})
    setting = module_of("", "float16")[1]
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("narrowgauge.dispatch.mathematics.math", newer)
        later = math_namespace(setting).later
    assert later(-3) == 3
    with pytest.raises(RefusedError, match=r"math\.later of the state is refused: this version does not know it"):
        later(owned(X, setting)[0])


def test_outside_the_domain():
    """float64 raises as plain Python; a narrower format gives NaN or infinity, as an operation of it would."""
    cases = {
        "math.gamma(x[0] - x[0])": math.inf,
        "math.gamma(x[3] * 0.4)": math.nan,
        "math.gamma(x[1] * 500)": math.inf,
        "math.lgamma(x[0] - x[0])": math.inf,
        "math.log(x[0] - x[0], 2)": -math.inf,
        "math.log(x[3], 2)": math.nan,
        "math.log(x[1], 1)": math.inf,
        "math.ldexp(x[3], 5000)": -math.inf,
        "math.remainder(x[0], 0)": math.nan,
        "math.fsum([1 / (x[0] - x[0]), -1 / (x[0] - x[0])])": math.nan,
    }
    for expression, expected in cases.items():
        text = f"{HEADER}def kernel(x):\n    return {expression}\n"
        result, setting, _ = call(text, "float16", X)
        assert setting.faults == []
        assert np.array_equal(float(result._carrier), expected, equal_nan=True)
        with pytest.raises((ValueError, OverflowError, ZeroDivisionError)):
            call(text, "float64", X)


def test_isclose_is_a_decision():
    """It gives a boolean of the state, which an `if` counts; its tolerances are not rounded to the format."""
    text = (
        "import math\ndef kernel(x):\n    near = math.isclose(x[0], 1.0, rel_tol=1e-9)\n"
        "    far = math.isclose(x[0], x[1], abs_tol=2.0)\n    return near, far, 1.0 if near else 2.0\n"
    )
    for form in ("float64", "float16"):
        log = Log()
        (near, far, chosen), _, _ = call(text, form, np.array([1.0 + 2.0**-9, 2.5]), observer=log)
        assert [type(near), type(far), chosen] == [Exact, Exact, 2.0]
        assert not near._carrier
        assert far._carrier
        assert log.answers == [False]


def test_isqrt_and_its_like_stay_exact():
    """Integers of the state give integers of it; a float of it is Python's own error, as in plain code."""
    lines = "    k = (x > 0).sum()\n    return math.comb(k, 2), math.factorial(k), math.isqrt(k)\n"
    text = f"import math\ndef kernel(x):\n{lines}"
    result, _, _ = call(text, "float16", X)
    assert [type(value) for value in result] == [Exact] * 3
    assert [value._carrier for value in result] == [3, 6, 1]
    with pytest.raises(TypeError, match="cannot be interpreted as an integer"):
        call("import math\ndef kernel(x):\n    return math.factorial(x[0])\n", "float16", X)


@pytest.mark.parametrize(
    ("statement", "kind", "words"),
    [
        ("cmath.exp(x[0])", RefusedError, "cmath.exp of the state gives complex numbers, which no format holds"),
        ("cmath.phase(x[0])", RefusedError, "cmath.phase of the state gives complex numbers"),
        ("fractions.Fraction(x[0])", EscapeError, "fractions.Fraction takes a value out of the emulated arithmetic"),
        ("fractions.Fraction(f'{x[0]}')", EscapeError, "fractions.Fraction takes a value out of the emulated"),
        ("fractions.Fraction.from_float(x[0])", EscapeError, "fractions.Fraction takes a value out of the emulated"),
        ("statistics.NormalDist(x[0], 1.0)", RefusedError, "statistics.NormalDist with parameters of the state"),
        ("statistics.NormalDist.from_samples(list(x))", RefusedError, "statistics.NormalDist.from_samples of"),
        ("statistics.NormalDist().samples(3)", RefusedError, "statistics.NormalDist.samples is refused"),
    ],
)  # fmt: skip
def test_what_is_no_real_number_or_draws_is_refused_by_name(statement, kind, words):
    """With the line, and what is accepted."""
    text = f"import cmath, fractions, statistics\ndef kernel(x):\n    return {statement}\n"
    for form in ("float64", "float16"):
        with pytest.raises(kind, match=f"^{FILE}:3: {words}.*; accepted: "):
            call(text, form, X)


def test_plain_numbers_go_to_pythons_own():
    """Constants, classes and errors are what they are in plain code."""
    text = (
        "import cmath, fractions, math, statistics\nfrom fractions import Fraction\nfrom statistics import NormalDist\n"
        "def kernel(x):\n    n = NormalDist(1, 2)\n    assert isinstance(n, statistics.NormalDist)\n"
        "    assert isinstance(Fraction(1, 3), Fraction) and issubclass(Fraction, fractions.Fraction)\n"
        "    return [math.erf(0.3), math.fsum([0.1] * 3), cmath.sqrt(-1), n.cdf(0.3),\n"
        "            float(Fraction(1, 3) + Fraction('0.5')),\n"
        "            (n + n).stdev, n.mean, statistics.mean([1, 2, 4]), math.isclose(1, 1), math.log(8, 2), math.tau,\n"
        "            NormalDist.from_samples([1.0, 2.0, 4.0]).mean, Fraction.from_float(0.25).denominator]\n"
    )
    result, setting, _ = call(text, "float16", X)
    assert setting.faults == []
    assert result == call(text, None, X)[0]
    with pytest.raises(statistics.StatisticsError):
        call("import statistics\ndef kernel(x):\n    return statistics.mean([])\n", "float16", X)


def test_a_function_handed_over_meets_them_too():
    """Functions, classes and normal distributions among the globals of a function from Python are exchanged."""
    normal, mean, exp, kind = statistics.NormalDist(0.5, 2.0), statistics.mean, cmath.exp, fractions.Fraction

    def cdf(x):
        return [normal.cdf(x[0]), mean(list(x)), statistics.NormalDist().cdf(x[0]), math.erf(x[0])]

    setting = new_setting(arithmetic_named("float16"))
    result = copy_function(cdf, setting)(owned(X, setting))
    assert setting.faults == []
    assert unheld(result, setting) == []
    for refused in (lambda x: exp(x[0]), lambda x: kind(x[0])):
        with pytest.raises((RefusedError, EscapeError)):
            copy_function(refused, setting)(owned(X, setting))
