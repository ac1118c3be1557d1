"""Python's modules of numbers as a copy meets them: math and statistics compute, cmath and fractions are refused.

A function of `math` that NumPy has as an elementary one is that one. The others, `statistics` and its normal
distribution compute in float64 from values of the format and are rounded once; in float64 they are Python's own. What
is about integers stays exact.
"""

from __future__ import annotations

import cmath
import fractions
import math
import statistics
from collections.abc import Callable, Iterator, Sequence
from typing import Any

import numpy as np

from narrowgauge.dispatch.array import Array, Constant
from narrowgauge.dispatch.exact import Exact, bare
from narrowgauge.dispatch.namespaces import Exchanging, Namespace
from narrowgauge.dispatch.routes import ROUTES
from narrowgauge.dispatch.rows import finished, narrowed, widened
from narrowgauge.dispatch.scalar import State, Text
from narrowgauge.dispatch.setting import Route, Setting, Wrapped, holds
from narrowgauge.errors import RefusedError

__all__ = ["cmath_namespace", "exchanged", "fractions_namespace", "math_namespace", "statistics_namespace"]

_UFUNCS: dict[str, np.ufunc] = {
    "acos": np.arccos, "acosh": np.arccosh, "asin": np.arcsin, "asinh": np.arcsinh, "atan": np.arctan,
    "atan2": np.arctan2, "atanh": np.arctanh, "cbrt": np.cbrt, "ceil": np.ceil, "copysign": np.copysign,
    "cos": np.cos, "cosh": np.cosh, "degrees": np.degrees, "exp": np.exp, "exp2": np.exp2, "expm1": np.expm1,
    "fabs": np.fabs, "floor": np.floor, "fmod": np.fmod, "hypot": np.hypot, "isfinite": np.isfinite,
    "isinf": np.isinf, "isnan": np.isnan, "log": np.log, "log10": np.log10, "log1p": np.log1p, "log2": np.log2,
    "pow": np.power, "radians": np.radians, "sin": np.sin, "sinh": np.sinh, "sqrt": np.sqrt, "tan": np.tan,
    "tanh": np.tanh, "trunc": np.trunc,
}  # fmt: skip  # a table reads by row
_TO_INTEGER = frozenset({"ceil", "floor", "trunc"})
# with another number of arguments than NumPy's: the logarithm to a base, the length of a vector
_ALSO_ONCE = frozenset({"hypot", "log"})
_ONCE: dict[str, Route] = {
    "dist": "whole", "erf": "rounded", "erfc": "rounded", "fma": "rounded", "frexp": "exact", "fsum": "whole",
    "gamma": "rounded", "hypot": "whole", "isclose": "exact", "ldexp": "rounded", "lgamma": "rounded",
    "log": "rounded", "modf": "exact", "remainder": "exact", "sumprod": "whole",
}  # fmt: skip
_OF_SEQUENCES = frozenset({"dist", "fsum", "sumprod"})
_OF_INTEGERS = frozenset({"comb", "factorial", "gcd", "isqrt", "lcm", "perm"})
_BY_OPERATORS = frozenset({"prod"})  # Python multiplies one by one, so that each product is rounded
_REFUSED = {
    "nextafter": "its neighbours are those of float64; accepted: np.nextafter",
    "ulp": "it is the distance to float64's next value; accepted: np.spacing(abs(x))",
}


def math_namespace(setting: Setting) -> Namespace:
    """Return a stand-in for `math` whose functions also take 0-d values of the state; integral parts are exact values.

    In a narrower format than float64 a value outside a function's domain gives NumPy's NaN or infinity.
    """
    functions = [name for name in dir(math) if name[0] != "_" and callable(getattr(math, name))]
    return Namespace(math, {name: _of_math(name, setting) for name in functions})


def _of_math(name: str, setting: Setting) -> Callable[..., Any]:
    plain: Callable[..., Any] = getattr(math, name)
    if name in _UFUNCS:
        return _elementary(name, plain, setting)
    if name in _ONCE:
        return _once(name, plain, setting)
    if name in _OF_INTEGERS:
        return _of_integers(plain, setting)
    if name in _BY_OPERATORS:
        return plain
    reason = _REFUSED.get(name, "this version does not know it")
    return _refused(f"math.{name}", plain, f"is refused: {reason}", setting)


def _elementary(name: str, plain: Callable[..., Any], setting: Setting) -> Callable[..., Any]:
    ufunc = _UFUNCS[name]
    # float64 gives the bits of math's own function; a narrower format rounds NumPy's once
    call = plain if setting.arithmetic.format.name == "float64" else None
    route = ROUTES[ufunc]
    other = _once(name, plain, setting) if name in _ALSO_ONCE else None

    def function(*arguments: Any) -> Any:
        if not any(isinstance(argument, Wrapped) for argument in arguments):
            return plain(*arguments)
        if len(arguments) != ufunc.nin and other is not None:
            return other(*arguments)
        if any(isinstance(argument, np.ndarray) for argument in arguments) or len(arguments) != ufunc.nin:
            raise setting.fault(RefusedError, f"math.{name} takes {ufunc.nin} scalar(s); accepted: np.{ufunc.__name__}")
        if name in _TO_INTEGER and isinstance(arguments[0], Exact):
            return setting.wrap(plain(setting.carrier(arguments[0])))
        result = setting.operate(ufunc, route, arguments, call=call)
        return setting.wrap(int(setting.carrier(result))) if name in _TO_INTEGER else result

    return function


def _once(name: str, plain: Callable[..., Any], setting: Setting) -> Callable[..., Any]:
    """Return the stand-in for a function that computes in float64 and is rounded once."""
    as_it_is = setting.arithmetic.format.name == "float64"
    compute = plain if as_it_is else _COMPUTED.get(name, plain)

    def function(*arguments: Any, **keywords: Any) -> Any:
        if name in _OF_SEQUENCES:
            arguments = tuple(map(_listed, arguments))
        if not holds([*arguments, keywords], Wrapped):
            return plain(*arguments, **keywords)
        if any(isinstance(argument, np.ndarray) for argument in arguments):
            raise setting.fault(RefusedError, f"math.{name} takes scalars; accepted: a function of NumPy or SciPy")
        if name == "ldexp":
            own = [widened(arguments[0], setting), *bare(arguments[1:], setting)]
        else:
            own = [widened(argument, setting) for argument in arguments]
        further = {key: widened(value, setting) if isinstance(value, Wrapped) else value
                   for key, value in keywords.items()}  # fmt: skip
        try:
            result = compute(*own, **further)
        except (OverflowError, ValueError, ZeroDivisionError):
            if as_it_is or name not in _BEYOND:
                raise
            result = _BEYOND[name](*own)
        return finished(setting, f"math.{name}", _ONCE[name], own, narrowed(setting, result, f"math.{name}"))

    return function


def _of_integers(plain: Callable[..., Any], setting: Setting) -> Callable[..., Any]:
    """Return the stand-in for a function of integers; Python's own error for a float of the state."""

    def function(*arguments: Any) -> Any:
        result = plain(*bare(arguments, setting))
        return setting.wrap(result) if holds(list(arguments), Wrapped) else result

    return function


def _refused(name: str, plain: Callable[..., Any], reason: str, setting: Setting) -> Callable[..., Any]:
    def function(*arguments: Any, **keywords: Any) -> Any:
        if holds([*arguments, keywords], Wrapped):
            raise setting.fault(RefusedError, f"{name} of the state {reason}")
        return plain(*arguments, **keywords)

    return function


def _listed(value: Any) -> Any:
    """Return the items of an iterator or an array of the state, so that they are seen, and met once."""
    return list(value) if isinstance(value, Iterator) or type(value) in (Array, Constant) else value


def _sum(values: Sequence[float]) -> float:
    """Return the exact sum, rounded to odd, so that one more rounding to a narrower format is that of the exact sum.

    Boldo and Melquiond, "Emulation of FMA and correctly rounded sums: proved algorithms using rounding to odd",
    IEEE Transactions on Computers 57(4), 2008, doi:10.1109/TC.2007.70819 (recalled from memory).
    """
    total = math.fsum(values)
    left = math.fsum([*values, -total]) if math.isfinite(total) else 0.0
    if left == 0 or int(np.float64(total).view(np.int64)) & 1:
        return total
    return math.nextafter(total, math.copysign(math.inf, left))


def _products(one: Sequence[float], other: Sequence[float]) -> float:
    """Return the exact sum of products, rounded to odd; products of values of 24 bits are exact in float64."""
    return _sum([x * y for x, y in zip(one, other, strict=True)])


def _logarithm(value: float, base: float) -> float:
    with np.errstate(all="ignore"):
        return float(np.log(np.float64(value)) / np.log(np.float64(base)))


def _at_pole(value: float) -> float:
    return math.copysign(math.inf, value) if value == 0 else math.inf if value > 0 else math.nan


_COMPUTED: dict[str, Callable[..., Any]] = {
    "fma": lambda x, y, z: _sum([x * y, z]),
    "fsum": _sum,
    "sumprod": _products,
}
# outside the domain, or past the largest number of float64
_BEYOND: dict[str, Callable[..., float]] = {
    "fma": lambda x, y, z: math.nan,
    "fsum": lambda values: math.nan,
    "gamma": _at_pole,
    "ldexp": lambda value, exponent: math.copysign(math.inf, value),
    "lgamma": lambda value: math.inf,
    "log": _logarithm,
    "remainder": lambda value, divisor: math.nan,
}


def statistics_namespace(setting: Setting) -> Exchanging:
    """Return a stand-in for `statistics`, computed in float64 and rounded once on the state."""

    def exchange(name: str, value: Any) -> Any:
        return _of_statistics(name, value, setting) if name in statistics.__all__ else value

    return Exchanging(statistics, exchange)


def _of_statistics(name: str, value: Any, setting: Setting) -> Any:
    if value is statistics.NormalDist:
        return _normal(setting)
    if isinstance(value, type):  # an exception
        return value

    def function(*arguments: Any, **keywords: Any) -> Any:
        arguments = tuple(map(_listed, arguments))
        return _asked(setting, value, f"statistics.{name}", arguments, keywords)

    return function


def _asked(
    setting: Setting,
    plain: Callable[..., Any],
    name: str,
    arguments: Sequence[Any],
    keywords: dict[str, Any],
    *,
    route: Route = "whole",
) -> Any:
    """Call a function of statistics: on the state in float64, rounded once."""
    if not holds([*arguments, keywords], Wrapped):
        return plain(*arguments, **keywords)
    own = [widened(argument, setting) for argument in arguments]
    given = {key: widened(value, setting) if holds(value, Wrapped) else value for key, value in keywords.items()}
    return finished(setting, name, route, own, narrowed(setting, plain(*own, **given), name))


def _normal(setting: Setting) -> type:
    """Return the stand-in for statistics.NormalDist: parameters are plain, what it is asked may be of the state."""

    def method(name: str, route: Route) -> Callable[..., Any]:
        plain: Callable[..., Any] = getattr(statistics.NormalDist, name)

        def asked(self: Any, x: Any) -> Any:
            return _asked(setting, lambda value: plain(self, value), f"NormalDist.{name}", (x,), {}, route=route)

        return asked

    class NormalDist(statistics.NormalDist):
        __slots__ = ()

        def __init__(self, mu: Any = 0.0, sigma: Any = 1.0) -> None:
            if holds([mu, sigma], Wrapped):
                raise setting.fault(
                    RefusedError, "statistics.NormalDist with parameters of the state; accepted: scipy.stats.norm"
                )
            super().__init__(mu, sigma)

        cdf = method("cdf", "rounded")
        pdf = method("pdf", "rounded")
        inv_cdf = method("inv_cdf", "rounded")
        zscore = method("zscore", "whole")

        @classmethod
        def from_samples(cls, data: Any) -> Any:
            data = _listed(data)
            if holds(data, Wrapped):
                raise setting.fault(
                    RefusedError, "statistics.NormalDist.from_samples of the state; accepted: np.mean and np.std"
                )
            return super().from_samples(data)

        def samples(self, n: Any, *, seed: Any = None) -> Any:
            raise setting.fault(
                RefusedError, "statistics.NormalDist.samples is refused: it draws for itself; accepted: rng.normal"
            )

    return NormalDist


def cmath_namespace(setting: Setting) -> Namespace:
    """Return a stand-in for `cmath` whose functions refuse the state."""
    reason = "gives complex numbers, which no format holds; accepted: a kernel of real numbers"
    found = {name: value for name, value in vars(cmath).items() if callable(value) and name[0] != "_"}
    return Namespace(cmath, {name: _refused(f"cmath.{name}", found[name], reason, setting) for name in found})


def fractions_namespace(setting: Setting) -> Namespace:
    """Return a stand-in for `fractions` whose Fraction refuses values of the state, and texts made of them."""

    class Kind(type):
        """The type of what stands for the class: no class below it, which fractions itself would ask about."""

        def __call__(cls, numerator: Any = 0, denominator: Any = None, **options: Any) -> Any:
            return fractions.Fraction(admitted(numerator), admitted(denominator), **options)

        def __instancecheck__(cls, value: Any) -> bool:
            return isinstance(value, fractions.Fraction)

        def __subclasscheck__(cls, kind: type) -> bool:
            return kind is cls or issubclass(kind, fractions.Fraction)

        def __getattr__(cls, name: str) -> Any:
            return getattr(fractions.Fraction, name)

    class Fraction(metaclass=Kind):
        @staticmethod
        def from_float(f: Any) -> Any:
            return fractions.Fraction.from_float(admitted(f))

    def admitted(value: Any) -> Any:
        if not isinstance(value, (State, Exact, Text)):
            return value
        setting.escape("fractions.Fraction takes a value out of the emulated arithmetic; accepted: leave it as it is")
        if isinstance(value, Text):
            return str.__str__(value)
        carrier = setting.carrier(value)
        return int(carrier) if isinstance(value, Exact) else float(carrier)

    return Namespace(fractions, {"Fraction": Fraction})


def exchanged(value: Any, setting: Setting) -> Any:
    """Return the stand-in for what a function handed over from Python has of these modules, or the value itself."""
    name, home = getattr(value, "__name__", ""), getattr(value, "__module__", "")
    if type(value) is statistics.NormalDist:
        return _normal(setting)(value.mean, value.stdev)
    for module, make in (
        (statistics, statistics_namespace),
        (cmath, cmath_namespace),
        (fractions, fractions_namespace),
    ):
        if home == module.__name__ and getattr(module, name, None) is value:
            return getattr(make(setting), name)
    return value
