"""Small kernels as source text, each one idiom: `kernel(x, y, a)` with draws of shapes (5,), (5,) and (4, 3).

They run under plain NumPy and in float64, where every bit must agree, and in narrower formats, where every number
that comes out must be one of the format's.
"""

from __future__ import annotations

import textwrap

import numpy as np
from array_kernels import CREATORS, FUNCTIONS, INDEXING, OUT, SHAPES, UFUNCS, VIEWS
from exact_kernels import EXACT_SYMBOLS, FUNCTIONS_OF_INTEGERS, IDIOMS, exact_in_place, exact_operators
from operator_kernels import IN_PLACE, SYMBOLS, in_place, operators

SCALARS = """
    import math

    def kernel(x, y, a):
        s, t = x[0], x[1]
        out = [math.sqrt(s), math.exp(s), math.log(t), math.floor(s * 7.3), math.ceil(s), math.trunc(t * 9),
               math.pow(s, 2),
               math.fabs(-s), math.hypot(s, t), math.atan2(s, t), math.isnan(s), math.isfinite(s),
               math.copysign(s, -1.0),
               math.fmod(t, 0.3), math.sqrt(2.0) * s, math.pi * s, math.sin(s), math.cos(s), math.tan(s),
               math.tanh(s), math.cbrt(t),
               math.log1p(s), math.expm1(s), math.log2(t), math.log10(t), math.degrees(s), math.sqrt(s) * x,
               2 ** math.exp(s),
               math.exp(s) ** 0.5, math.exp(s) * np.float64(0.3), math.exp(s) * 0.3, 0.3 / math.exp(s), -math.exp(s),
               math.sqrt(s) // 0.3, math.sqrt(s) > 0.5, s * math.erf(0.3), s * math.gamma(3), math.isclose(0.3, 0.3),
               s * math.sqrt(x[0] > 0), s * math.log(8, 2)]
        out += [abs(s), -s, +s, s ** 2, s ** 0.5, 2 ** s, s ** s, max(s, t), min(s, 0.3), max(0.3, s), sum([s, t]),
                sum(x),
                int(t * 9.7), round(t * 9.7), s < t, s == s, not s, bool(s), 0.1 < s < 0.3, s in [0.1, s],
                sorted([t, s]),
                sum(x[:3]) / 3, pow(s, 2), s.item() * 0.3, x.item(0) / 3, f"{s:.1f}", isinstance(s, float),
                hash(s) == hash(s),
                isinstance(s, np.floating), isinstance(s, np.ndarray)]
        u = s
        u += t
        u *= 0.3
        u -= 1
        u /= 3
        u **= 2
        u //= 0.1
        u %= 0.7
        path = [s]
        for dx in x:
            s = s + 0.1 * dx
            path.append(s)
        while s > 0.5:
            s -= 0.25
        return out, u, path, np.array(path), s, t
"""

MASKS = """
    def kernel(x, y, a):
        m, k = x > 1, y > 0
        alive = np.ones(5, dtype=bool)
        alive &= x > 0.2
        alive |= k
        alive ^= m
        alive[0] = False
        alive[1:2] = k[1:2]
        alive[k] = m[k]
        hits = np.zeros(5, dtype=int)
        hits += m
        hits[m] += 1
        hits += k & ~m
        total = np.zeros(5)
        total += m
        total[0] += m[0]
        down = np.full(5, True)
        down *= m
        down = down & (y < 9)
        flag = False
        flag |= x[0] > 1
        flag = flag or (y[0] > 0)
        count = 0
        for one in m:
            count += one
        return [m, k, m & k, m | k, m ^ k, ~m, m * k, m + k, m * 0.3, 0.3 * m, np.float64(0.3) * m,
                m * np.float64(0.3),
                0.95 * m + 0.1 * k, m * 2, 2 - m, 1 - m * 0.3, m / 2, m / 3.0, m * x, x * m, m * x[0], x[0] * m,
                m == k,
                m != True, m < k, m.any(), m.all(), m.sum(), m.sum(0), m.astype(int), m.astype(float),
                m.astype(float) * 0.3,
                m.astype(bool), m.copy(), m[0], m[1:], m[::-1], m.reshape(5, 1), m.T, m.shape, m.size, len(m), m.ndim,
                m.dtype, m.nonzero(), m.argmax(), m.cumsum(), np.any(m), np.all(m), np.sum(m), np.sum(a > 0, axis=0),
                np.cumsum(m), np.argmax(m), np.logical_and(m, k), np.logical_not(m), np.logical_or.reduce(m),
                np.logical_and.reduce(np.array([m, k])), np.concatenate([m, k]), np.stack([m, k]), np.roll(m, 1),
                np.diff(m), alive,
                hits, total, down, flag, count, np.array([m, k]), np.where(m & k, 0.3, 0.7), x[m & k], x[~m],
                np.invert(m),
                m[0] * 0.3, 0.3 * m[0], m[0] + m[1], m[0] & True, m[0] * x, m[0] * x[0], 1 - m[0],
                x * m[0].astype(float), int(m[0]),
                m[0] if m[0] else k[0], not m[0], bool(m[1]), "yes" if m.any() else "no", np.maximum(m, k), m ** 0.5,
                m & np.array([True] * 5), np.array([True] * 5) & m, np.linspace(0, 1, 5) * m, m * np.arange(5),
                np.isnan(x) | (x < 0), np.isclose(0.3, 0.3), np.multiply(m, 0.3), np.add(m, 1), np.flatnonzero(m),
                np.count_nonzero(m), np.ravel(a > 0), np.broadcast_to(m, (2, 5)), m.tolist(), m.item(0),
                isinstance(m, np.ndarray),
                isinstance(m[0], np.bool_), str(m), f"{m[0]}", True in m, [int(v) for v in m], np.ones_like(m),
                m > 0.5,
                0.5 < m, abs(m), m % 2, np.maximum(m, 0.3), np.exp(m * 1.0), m @ k, x[m] * 0.3, np.take(m, [0, 1])]
"""

IMPORTS = """
    from numpy import *
    from math import *
    import numpy
    import numpy as other
    import numpy.linalg as la
    from numpy import exp as e1, zeros as make
    import math as m
    import importlib

    TABLE = {"exp": numpy.exp, "make": numpy.zeros, "root": m.sqrt}
    LIST = [numpy.full, numpy.array]
    GRID = numpy.linspace(0.0, 1.0, 5)
    WEIGHTS = numpy.array([0.1, 0.2, 0.3, 0.4, 0.5])

    def helper(v, _exp=numpy.exp, *, _make=numpy.zeros, root=m.sqrt):
        made = _make(5)
        made[:] = _exp(v) * root(v[0])
        return made

    def closure():
        sq, z, arrays = numpy.sqrt, numpy.ones, [numpy.array]
        def inner(v):
            w = z(5)
            w *= sq(v)
            return arrays[0]([w[0], w[1]])
        return inner

    inner = closure()
    later = lambda v: other.where(v > 1, v, 0.3)

    class Step:
        rate = 0.3
        def __init__(self, size):
            self.state = other.zeros(size)
        def go(self, v):
            self.state += self.rate * v
            return self.state

    def generate(v):
        s = full(5, 0.1)
        for _ in range(3):
            s = s + v * 0.3
            yield s

    def kernel(x, y, a):
        import numpy as inside
        from math import exp as scalar_exp
        from numpy import full as fill
        b = inside.zeros(5)
        b[:] = x
        out = [b, e1(x), make(2), sqrt(4.0) * x, pi * x, TABLE["exp"](x), TABLE["make"](2), TABLE["root"](x[0]),
               LIST[0](2, 0.3),
               LIST[1]([x[0], 0.1]), helper(x), inner(x), later(x), Step(5).go(x), list(generate(x)),
               scalar_exp(x[0]),
               fill(2, 0.3), GRID * x, WEIGHTS * x, GRID[1] * x, la.__name__, numpy.random.__name__, x * other.pi,
               numpy.float64(0.3) * x, x + inside.finfo(x.dtype).eps, maximum(x, 0.3), array([0.1]), ones(2)]
        with numpy.errstate(all="ignore"):
            out.append(numpy.log(-x))
        return out
"""

SUMS = """
    def kernel(x, y, a):
        # a: 4 steps of 3 paths; an average over time, moment matching, correlated factors, a path summed up
        asian = a.mean(axis=0)
        matched = (a - a.mean(axis=1, keepdims=True)) / a.std(axis=1, ddof=1, keepdims=True)
        correlation = np.array([[1.0, 0.3, 0.1, 0.2], [0.3, 1.0, 0.4, 0.1], [0.1, 0.4, 1.0, 0.2], [0.2, 0.1, 0.2, 1.0]])
        root = np.linalg.cholesky(correlation)
        raw = np.linalg.cholesky(np.eye(4) + np.arange(16).reshape(4, 4) % 3 * 0.0)
        path = np.cumsum(a, axis=0)
        bridge = np.concatenate([np.zeros((1, 3)), path])
        weights = np.linspace(0.1, 0.4, 4)
        out = [asian, matched, root, raw @ a, a.T @ raw.T, root @ a, a.T @ root, path, bridge, np.diff(bridge, axis=0),
               np.dot(raw, a), np.dot(root, a), root.dot(a), weights @ a, np.dot(weights, a), a.T.dot(weights),
               np.einsum("ij,jk->ik", root, a), np.einsum("sp,s->p", a, weights), np.einsum("ij,ij->j", a, a),
               np.add.reduce(a, axis=0), np.add.reduce(x), np.add.accumulate(a, axis=1), np.multiply.reduce(x),
               np.sum(a), np.sum(a, axis=0), np.sum(a, axis=1, keepdims=True), a.sum(), np.prod(x),
               np.cumprod(1 + a, axis=0),
               np.var(a, axis=0), np.std(x), np.average(a, axis=0, weights=weights), np.mean(x > 1),
               (a > 0).mean(axis=0),
               np.trapezoid(a, dx=0.25, axis=0), np.convolve(x, y), np.linalg.solve(correlation, a),
               np.linalg.inv(root),
               np.linalg.norm(x), np.outer(x, y), np.inner(x, y), np.vdot(x, y), x @ y, np.tensordot(root, a, 1),
               np.trace(root), np.linalg.det(root), np.median(a, axis=0), np.percentile(x, 30), np.interp(x,
               [0, 1, 2], [3, 1, 2]),
               np.sort(a, axis=0), np.argsort(x), np.searchsorted([0.1, 0.5, 1.5], x), np.round(x, 2), round(x[1], 2),
               np.linspace(0.0, x[1], 4), np.ptp(a, axis=1), divmod(x, 0.3), np.modf(y), np.nextafter(x, 9.0)]
        held = np.zeros(5)
        np.divide(1.0, y, out=held, where=y > 0)
        np.sqrt(x, out=held, where=x > 1)
        np.cumsum(x, out=x)
        np.sum(a, axis=1, out=y[:4])
        np.copyto(held[:2], [0.5, 0.25])
        a @= np.eye(3)
        return out, held
"""

SOURCES = {
    **{f"operator {symbol}": operators(symbol) for symbol in SYMBOLS},
    **{f"in place {symbol}=": in_place(symbol) for symbol in IN_PLACE},
    **{f"integers {symbol}": exact_operators(symbol) for symbol in EXACT_SYMBOLS},
    **{f"integers {symbol}=": exact_in_place(symbol) for symbol in EXACT_SYMBOLS[:12]},
    "integers": FUNCTIONS_OF_INTEGERS,
    "idioms of integers": IDIOMS,
    "ufuncs": UFUNCS,
    "out=": OUT,
    "shapes and methods": SHAPES,
    "functions": FUNCTIONS,
    "creators": CREATORS,
    "indexing": INDEXING,
    "views": VIEWS,
    "scalars": SCALARS,
    "masks": MASKS,
    "sums": SUMS,
    "imports": IMPORTS,
}


def source(name):
    """The text of one kernel, with numpy imported in front."""
    return "import numpy as np\n" + textwrap.dedent(SOURCES[name])


def draws(layout="C"):
    """The arguments: away from the domain's borders in x, both signs in y and a; Fortran order on request."""
    rng = np.random.Generator(np.random.PCG64DXSM(20250101))
    x = np.array([0.2, 1.4, 0.75, 2.1, 0.05]) + rng.uniform(0.0, 0.01, 5)
    y = np.array([-0.6, 1.2, 0.3, -2.5, 0.9]) + rng.uniform(0.0, 0.01, 5)
    return x, y, np.array(rng.standard_normal((4, 3)), order=layout)
