"""Kernels on arrays of the state: elementwise functions, targets, shapes, creators, places and views."""

from __future__ import annotations

__all__ = ["CREATORS", "FUNCTIONS", "INDEXING", "OUT", "SHAPES", "UFUNCS", "VIEWS"]

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
