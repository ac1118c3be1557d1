"""Small kernels as source text, each one idiom: `kernel(x, y, a)` with draws of shapes (5,), (5,) and (4, 3).

They run under plain NumPy and in float64, where every bit must agree, and in narrower formats, where every number
that comes out must be one of the format's.
"""

from __future__ import annotations

import textwrap

import numpy as np
from exact_kernels import EXACT_SYMBOLS, FUNCTIONS_OF_INTEGERS, IDIOMS, exact_in_place, exact_operators
from operator_kernels import IN_PLACE, SYMBOLS, in_place, operators

UFUNCS = """
    def kernel(x, y, a):
        out = []
        for f in (np.sqrt, np.exp, np.log, np.log1p, np.expm1, np.sin, np.cos, np.tan, np.tanh, np.abs, np.sign,
                  np.floor,
                  np.ceil, np.rint, np.trunc, np.square, np.reciprocal, np.negative, np.positive, np.isnan,
                  np.isfinite,
                  np.isinf, np.signbit, np.cbrt, np.exp2, np.log2, np.log10, np.fabs, np.arctan, np.logical_not,
                  np.degrees, np.sinh, np.cosh, np.arcsinh, np.absolute):
            out += [f(x), f(x[1]), f(a.T), f(np.array(0.7)), f(x[:0])]
        for f in (np.maximum, np.minimum, np.power, np.add, np.subtract, np.multiply, np.divide, np.fmod, np.hypot,
                  np.arctan2, np.copysign, np.fmax, np.fmin, np.greater, np.less, np.equal, np.not_equal, np.mod,
                  np.remainder, np.floor_divide, np.float_power, np.heaviside, np.logaddexp, np.true_divide,
                  np.logical_and, np.logical_or):
            out += [f(x, y), f(x, 0.3), f(0.3, x), f(x[1], y[1]), f(x, 2), f(2, x), f(np.float64(0.3), x),
                    f(x, x > 1),
                    f(x > 1, x), f(np.linspace(0.1, 0.9, 5), x), f(x, np.arange(5)), f(x[1], 0.3), f(a, a[0]),
                    f(x, [0.1, 0.2, 0.3, 0.4, 0.5])]
        return out
"""

OUT = """
    def kernel(x, y, a):
        v, w = np.zeros(5), np.empty((4, 3))
        done = np.add(x, 0.3, out=v)
        np.multiply(a, 0.3, w)
        np.exp(x, v)
        np.sqrt(x, out=v, where=True)
        np.maximum(v, 0.3, out=v)
        np.power(x, 1.5, out=(v,))
        np.add(0.1, 0.2, out=v[1:3])
        np.multiply(np.arange(5), 0.3, out=x)
        flags = np.zeros(5, dtype=bool)
        np.greater(y, 0.3, out=flags)
        z = np.array(0.7)
        np.add(z, 0.3, out=z)
        np.subtract(v[1:], 0.1, out=v[:-1])
        return done is v, v, w, flags, x, z, np.add(x, y, out=None)
"""

SHAPES = """
    def kernel(x, y, a):
        return [a.T, a.reshape(12), a.reshape(2, 6), a.reshape((3, 4), order="F"), a.ravel(), a.ravel("F"),
                a.flatten(),
                a.transpose(1, 0), a.transpose(), a.swapaxes(0, 1), a[None].squeeze(), a[:, None].squeeze(1),
                a.copy(),
                a.copy("F"), a.take([0, 2]), a.take([1], axis=1), x.repeat(2), a.max(), a.max(0), a.min(axis=1),
                a.max(axis=0, keepdims=True), a.any(), a.all(0), a.any(axis=1), x.nonzero(), x.real, a.shape, a.ndim,
                a.size, len(a), a.dtype, x.astype(float), x.astype(np.float64), x.astype(int), x.astype(bool),
                x.item(2),
                a.item(1, 2), a.item((1, 2)), x[1].item(), x[:1].item(), x[1].copy(), x[1].T, x[1].real,
                x[1].astype(int),
                x[1].astype(float), x[1].shape, x[1].ndim, x[1].size, x.clip(0.3, 1), x.clip(0.3), x.clip(max=0.7),
                x.clip(x[0], None), a.clip(-0.1, [0.1, 0.2, 0.3]), a.flags.f_contiguous, a.T.flags.c_contiguous]
"""

FUNCTIONS = """
    def kernel(x, y, a):
        return [np.reshape(a, (2, 6)), np.reshape(a, -1, "F"), np.ravel(a), np.transpose(a), np.transpose(a, (1, 0)),
                np.swapaxes(a, 0, 1), np.moveaxis(a, 0, 1), np.squeeze(a[None]), np.expand_dims(a, 1),
                np.broadcast_to(x, (2, 5)), np.atleast_1d(x[0]), np.atleast_2d(x), np.roll(x, 2),
                np.roll(a, 1, axis=0),
                np.flip(a), np.flip(x, 0), np.repeat(x, 2), np.tile(x, 2), np.take(x, [0, 1]), np.copy(a),
                np.split(x, 5),
                np.array_split(x, 2), np.max(a), np.min(a, 0), np.amax(a, axis=1), np.amin(a), np.any(a > 0),
                np.all(a),
                np.shape(a), np.ndim(a), np.size(a), np.size(a, 0), np.count_nonzero(y > 0),
                np.count_nonzero(a, axis=0),
                np.flatnonzero(y > 0), np.nonzero(a), np.real(x), np.concatenate([x, y]),
                np.concatenate((x, [0.3], y)),
                np.concatenate([a, a[:1] * 2], axis=0), np.concatenate([[0.1], x]), np.concatenate([x, np.arange(2)]),
                np.concatenate(a), np.stack([x, y]), np.stack((x, y), axis=1), np.vstack([x, np.linspace(0, 1, 5)]),
                np.hstack([x, 0.3, x[0]]), np.column_stack([x, y]), np.where(x > 1, x, y), np.where(x > 1, 0.3, y),
                np.where(x > 1, 0.3, 0.7), np.where(x > 1, 1, 0), np.where(x > 1, x, 0), np.where(x > 1),
                np.where([True, False], 0.3, 0.7), np.where(np.arange(5) > 2, x, 0.1), np.where(x[0] > 1, 0.3, y),
                np.where(x, 0.1, 0.2), np.where(x > 1, True, False), np.where([1e-30, 0.0], x[0], 0.3),
                np.clip(x, 0.3, 1.1), np.clip(x, None, 0.7),
                np.clip(x[0], 0, 1), np.clip(x, y, 2), np.clip(x, a_min=0.1, a_max=0.4), np.clip(-x, -0.0, 0.0),
                np.clip(0.3, x, 0.7), np.clip(np.linspace(0, 1, 5), x, 2), np.diff(x), np.diff(a, axis=0),
                np.diff(x, 2),
                np.diff(a.T, axis=0), np.diff(a), np.diff(x, n=0), np.isscalar(x[0]), np.isscalar(x)]
"""

CREATORS = """
    def kernel(x, y, a):
        out = [np.zeros(3), np.zeros((2, 3), order="F"), np.ones(3), np.ones((2, 2), dtype=float), np.zeros(3, int),
               np.zeros(3, dtype=bool), np.full(3, 0.3), np.full((2, 2), 3), np.full(3, True), np.full(3, x[0]),
               np.full((2, 5), x), np.full(3, 2, dtype=float), np.full((2, 3), [0.1, 0.2, 0.3]),
               np.full(3, np.float64(7)),
               np.full((2, 5), np.linspace(0, 1, 5)), np.full(2, 0.3, dtype=int), np.zeros_like(x),
               np.zeros_like(a.T),
               np.ones_like(x), np.full_like(x, 0.3), np.full_like(x, 2), np.full_like(a.copy("F"), 0.3),
               np.full_like(x, x[0]), np.zeros_like(x, dtype=int), np.zeros_like(x, dtype=bool), np.zeros_like(x > 1),
               np.zeros_like(np.arange(3)), np.full_like(np.arange(3), 0.7),
               np.full_like(np.arange(3), 0.7, dtype=float),
               np.ones_like(np.linspace(0, 1, 3)), np.zeros_like([1, 2]), np.zeros_like([0.1, 2]),
               np.ones_like(x, shape=2),
               np.array([0.1, 0.2]), np.array([1, 2]), np.array([1, 2], dtype=float), np.array([1, 2], float),
               np.array([True, False]), np.array(0.3), np.array(3), np.array([x[0], x[1]]),
               np.array([[x[0], 0.1], [2, x[1]]]),
               np.array([x, y]), np.array([x, np.linspace(0, 1, 5)]), np.array(x), np.array(a.T), np.array(x[0]),
               np.array(a, order="F"), np.array(x, ndmin=2), np.array([x > 1, y > 1]), np.array([x[0] > 1, False]),
               np.array([x[0] > 1, 0.3]), np.array(x > 1, dtype=float), np.asarray(x > 1),
               np.asarray(x > 1, dtype=int),
               np.array((0.1, 0.2)), np.asarray(x), np.asarray(x) is x, np.array(x) is x,
               np.asarray(a.T), np.ascontiguousarray(a.T), np.asfortranarray(a), np.ascontiguousarray(x[0]),
               np.asanyarray(x), np.asarray([0.1, x[0]]), np.asarray(np.linspace(0, 1, 3)), np.asarray([1, 2]),
               np.asarray(x, dtype=float), np.array(range(3)), np.linspace(0, 1, 3).astype(int),
               np.eye(2).astype(int)]
        e = np.empty(4)
        e[:] = 0.3
        f = np.empty_like(a)
        f[...] = a
        return out, e, f
"""

INDEXING = """
    def kernel(x, y, a):
        v = x.copy()
        v[0] = 0.3
        v[1] = y[1]
        v[2:] = y[2:]
        v[-1] = np.float64(0.1)
        v[[0, 1]] = [0.1, 0.2]
        v[v > 1] = 0.3
        v[np.array([True, False, False, False, False])] = x[:1]
        w = np.zeros((5, 3))
        w[0] = x[:3]
        w[1] = [0.1, 0.2, x[0]]
        w[2:4, 1] = 7
        w[:, 2] = np.arange(5)
        w[4, :2] = a[0, :2] > 0
        w[4, 2] = True
        w[..., 0] = -0.3
        view = w[1:3, ::2]
        view[0, 0] = 0.7
        view += 0.1
        back = w[::-1]
        back[0] = 0.9
        w.T[1] *= 3
        z = np.array(0.7)
        z[()] = 0.3
        z[...] = x[0]
        return [v, w, view, back, z, z[()], z[...], x[1], x[-1], x[1:3], x[::-1], x[::2], x[[0, 2]], x[x > 1], x[...],
                x[None], x[:, None], a[0], a[0, 1], a[:, 0], a[1:, :2], a[[0, 1], [1, 2]], a[a > 0], a[a[:, 0] > 0],
                a[np.arange(2)], a[x[:4] > 1, 0], x[np.int64(1)], x[True], x[:0], [i for i in x], [r for r in a],
                list(reversed(x)), np.asarray(np.linspace(0, 1, 5))[x > 1] * x[0], [0.1, 0.2][int(x[0] > 1)] * x]
"""

VIEWS = """
    def kernel(x, y, a):
        # every name shares memory with a, as in NumPy
        flat = a.reshape(-1)
        turned = a.T
        rows = [row for row in a]
        part = np.split(a, 2)[0]
        wide = np.broadcast_to(a[0], (2, 3))
        flat[0] = 0.3
        turned[1, 1] = 0.7
        rows[2][0] = 0.9
        part[1] = 5
        np.squeeze(a[None])[3] = 0.1
        np.asarray(a)[3, 2] = 0.2
        np.ravel(a)[1] = 0.4
        a.real[0, 2] = 0.6
        apart = [a.copy(), a.flatten(), np.array(a), a[[0]], a + 0, a.astype(float), np.ascontiguousarray(a.T)]
        for other in apart:
            other[0] = 9
        alias = a
        alias += 1
        x.fill(0.3)
        return a, flat, turned, rows, part, wide, apart
"""

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
