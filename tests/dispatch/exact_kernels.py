"""Kernels on booleans and integers of the state: operators among themselves and with all else, functions, buffers."""

from __future__ import annotations

from operator_kernels import ATTEMPT

__all__ = ["EXACT_SYMBOLS", "FUNCTIONS_OF_INTEGERS", "IDIOMS", "exact_in_place", "exact_operators"]

EXACT_SYMBOLS = (
    "+", "-", "*", "/", "//", "%", "**", "&", "|", "^", "<<", ">>", "<", "<=", ">", ">=", "==", "!=", "@",
)  # fmt: skip

# integers and booleans of the state: arrays, NumPy scalars, Python integers, narrower types, buffers
SETUP = """
    k, c, m = (y * 3).astype(int), (a > 0).sum(axis=0), x > 1.0
    s, p, b, q = k[1], round(x[1] * 7), m[1], np.count_nonzero(m)
    n, z = k.astype(np.int32), np.zeros(5, dtype=int)
    z[m] = 4
    z[:2] += k[:2]
"""
EXACTS = ("k", "s", "p", "b", "m", "q", "n", "z", "k[::-1]", "k.reshape(5, 1)")
EXACT_OTHERS = (
    "2", "0", "-3", "True", "np.int64(3)", "np.int32(-2)", "np.bool_(True)", "np.arange(5)", "np.arange(5) > 2",
    "[1, 2, 3, 4, 5]", "k", "s", "p", "b", "m", "n",
)  # fmt: skip
FLOAT_OTHERS = (
    "0.3", "0.5", "-1.0", "np.float64(0.3)", "np.linspace(0.1, 0.9, 5)", "[0.1, 0.2, 0.3, 0.4, 0.5]", "x", "y",
    "x[1]", "np.array(0.7)", "x.item(1)",
)  # fmt: skip
_WITHOUT_FLOATS = frozenset({"&", "|", "^", "<<", ">>", "@"})


def exact_operators(symbol):
    """A kernel that applies one operator to integers of the state and everything else, either way round."""
    others = EXACT_OTHERS if symbol in _WITHOUT_FLOATS else EXACT_OTHERS + FLOAT_OTHERS
    pairs = [f"({one}) {symbol} ({other})" for one in EXACTS for other in others]
    pairs += [f"({other}) {symbol} ({one})" for one in EXACTS for other in others]
    # one value meets a list as Python's own would only where that is no arithmetic
    pairs = [pair for pair in pairs if "([" not in pair or not any(f"({one})" in pair for one in "spbq")]
    if symbol == "//":
        pairs += [f"divmod({one}, {other})" for one in EXACTS for other in EXACT_OTHERS[:8]]
    lines = "".join(f"        attempt(lambda: {pair}),\n" for pair in pairs)
    return f"{ATTEMPT}\ndef kernel(x, y, a):{SETUP}    return [\n{lines}    ]\n"


def exact_in_place(symbol):
    """A kernel that changes buffers, views and single integers in place, keeping each under two names."""
    lines = []
    for target in ("k.copy()", "m.copy()", "n.copy()", "s", "p", "b", "np.zeros((5, 2), dtype=int)[:, 0]"):
        for other in ("2", "True", "np.int64(3)", "np.arange(5)", "k", "m", "s", "p", "b", "0.3", "x", "x[1]"):
            if other in ("0.3", "x", "x[1]") and (symbol in _WITHOUT_FLOATS or target in ("s", "p", "b")):
                continue
            lines += [
                f"v = w = {target}", "try:", f"    w {symbol}= {other}", "    out.append((v, w))",
                "except (ArithmeticError, TypeError, ValueError) as problem:",
                "    out.append(type(problem).__name__)",
            ]  # fmt: skip
    for place in ("1", "1:", "[0, 2]", "m", "k % 2", "..."):
        if symbol != "/":
            lines += ["v = k.copy()", f"v[{place}] {symbol}= 2", "out.append(v)"]
    body = "".join(f"    {line}\n" for line in lines)
    return f"def kernel(x, y, a):{SETUP}    out = []\n{body}    return out\n"


FUNCTIONS_OF_INTEGERS = f"""
    import math

    def kernel(x, y, a):
        {SETUP.strip().replace(chr(10), chr(10) + "    ")}
        out = [np.maximum(k, 0), np.minimum(k, s), np.abs(k), np.sign(k), np.square(k), np.negative(k), np.mod(k, 3),
               np.sqrt(np.abs(k)), np.exp(k), np.sqrt(abs(s)), np.exp(p), np.log1p(abs(n)), np.sin(k[1:]),
               np.isnan(k),
               np.isfinite(s), np.power(k, 2), np.power(2.0, k), np.hypot(k, 3), np.float_power(abs(k), 0.5),
               np.clip(k, 0, 2), np.clip(k, 0.5, 2), np.clip(s, 0, None), k.clip(0, 2), np.sum(k), k.sum(),
               k.sum(axis=0),
               k.max(), k.min(), np.max(k), np.cumsum(k), k.cumsum(), np.prod(k + 1), k.argmax(), np.argmin(k),
               np.argsort(k),
               np.sort(k), np.unique(k), np.diff(k), np.concatenate([k, z]), np.concatenate([k, x]),
               np.concatenate([k, [1, 2]]),
               np.stack([k, m]), np.where(m, k, 0), np.where(m, k, 0.3), np.where(m, 1, 0), np.where(m, s, p),
               np.where(k, 0.3, x),
               np.take(k, [0, 1]), np.take(np.arange(9) * 2, abs(k)), np.take(np.linspace(0, 1, 9), abs(k)),
               np.take(x, abs(k) % 5), np.bincount(abs(k)), np.isin(k, [1, 2]), np.searchsorted(np.arange(5), k),
               np.zeros_like(k), np.full_like(k, 3), np.full_like(k, 0.7, dtype=float), np.full(3, s),
               np.full(3, s, dtype=float),
               np.array([s, p]), np.array([s, 0.3]), np.array([s, x[0]]), np.array(k), np.array(k, dtype=float),
               np.asarray(k),
               np.repeat(k, 2), np.repeat(x, 2), np.roll(k, 1), np.flip(k), np.tile(k, 2), np.any(k > 1), np.all(k),
               np.add.reduce(k), np.maximum.accumulate(k), np.multiply.outer(k, k), np.add(k, 1, out=z) is z, z,
               np.array_equal(k, k), np.arange(abs(s)), np.arange(0, abs(p), 2), np.arange(0.0, abs(p), 0.5)]
        out += [k.shape, k.size, k.ndim, len(k), k.dtype, n.dtype, k.T, k.real, k.item(0), k.tolist(), s.item(),
                s.dtype,
                k.copy(), k.astype(float), k.astype(float) * 0.3, k.astype(bool), k.astype(np.int16), s.astype(float),
                k.reshape(1, 5), k[1:], k[m], k[[0, 2]], k[k % 5], k[s], x[k % 5], x[abs(s)], x[abs(p) % 5], x[b],
                x[m, None],
                a[abs(k[:4]) % 4, 0], np.ndim(k), np.shape(k), np.size(k), [v for v in k], [*reversed(k)], s in k,
                0.3 in k,
                list(range(abs(s))), [15, 25, 35, 45][abs(s) % 4], "abc"[abs(p) % 3], {{s: 1}}[s],
                {{int(s): 2}}[s],
                [0, 7] * abs(s), abs(p) * [7], hash(s) == hash(s), int(s), int(p), str(s), f"{{p:4d}}", str(k),
                bool(s), not p,
                -s, +p, ~s, abs(s), round(s), round(p), round(p, -1), pow(p, 2), p.bit_length(), s if s else p,
                max(s, 2),
                min(p, 1), max(s, 0.5), max(1, p), sorted([p, 3, 1]), sum(k), sum([p, p]), sum(m), isinstance(p, int),
                isinstance(s, np.int64), isinstance(s, np.integer), isinstance(k, np.ndarray), isinstance(b, np.bool_),
                np.isscalar(s), p is round, "no" if s == 99 else "yes", s == None, p == "a", k == 1]
        out += [math.sqrt(abs(s)), math.exp(p / 9), math.floor(s), math.ceil(p), math.trunc(x[1] * 9),
                math.floor(x[1] * 9),
                math.ceil(x[1]), math.floor(x[1] * 9) / 7, math.pow(s, 2), math.fabs(p), math.isnan(s),
                math.atan2(p, 3),
                math.gcd(p, 4), math.factorial(abs(s)), math.copysign(p, -1.0), math.hypot(s, x[1])]
        view = k[1:3]
        view[0] = 9
        view += 1
        k[k > 5] = s
        k[0] = x[1]
        k[3] = 2.7
        z[1:] = m[1:]
        rows = np.zeros((2, 5), dtype=int)
        rows[0] = k
        rows[1, 1] = p
        rows[:, 2] = [s, 7]
        flags = np.zeros(5, dtype=bool)
        flags[0] = s
        flags[1:] = k[1:] > 2
        np.putmask(rows, rows > 3, 1)
        np.copyto(z, k, where=flags)
        np.add.at(rows, (0, np.array([s % 5, 1])), 2)
        grid = np.linspace(0, 1, 5) * s + np.arange(5) * 0.1 * p
        return out, view, k, z, rows, flags, grid
"""

# what a review found to leave the arithmetic; `kernel` returns values that a plain integer would have made plain
IDIOMS = """
    import math

    TABLE = np.array([0.1, 0.15, 0.2, 0.25, 0.3, 0.35, 0.4, 0.45])

    def kernel(x, y, a):
        days = np.zeros(3, dtype=int)
        for row in a:
            days = days + (row > 0)
        other = np.zeros(3, dtype=int)
        for row in a:
            other[row > 0] += 1
        one = 0
        for value in x:
            one += value > 1
        k = np.clip(np.floor(x * 3), 0, 7).astype(int)
        v, f, w = TABLE[k], (x * 1000).astype(int) / 1000, np.linspace(0.1, 0.9, 5)
        s = x[1]
        share = (a > 0).sum(axis=0) / len(a)
        picked = np.asarray(w)[x > 1]
        filled = np.asarray(w) * 1
        filled[x > 1] = 0.3
        j = np.minimum((x * 3).astype(int), 7)
        r, q, t = round(s * 100) / 100, math.floor(s * 1000) / 1000, int(s) + 0.5 * s
        last = np.argmax(np.array([x[0] > 1, x[1] > 1])) * 0.1
        return [np.exp(-0.07 * days / len(a)) * a[0], a[0] * np.exp(-0.07 * other / 4), one * 0.3 / 7, v * v,
                v[0] * v[1], f * f * 0.3 - 0.1 * f, share * 0.3 * a[-1], share * share / 7, picked * picked,
                np.sqrt(filled * 1.7),
                np.exp(np.take(w, j % 5) * 0.1), np.exp(np.take(TABLE, j) * 0.1), r * r * q * 0.3, t,
                np.count_nonzero(x > 1) / 3 * 0.1, np.where(x > 1, 1, 0) * 0.1 + 0.2, last + 0.1,
                np.trunc(x * 100).astype(int) * 0.01, (x > 1).cumsum() * 0.1 / 3, days.max() / 7 * 0.1,
                TABLE[min(k[0], 7)] * TABLE[k[1]] * 0.3, (x > 1) @ (y > 0) / 3, k * w * 0.1, 0.1 ** k / 3,
                np.array([k[0], k[1]]) / 7 * 0.3, np.sqrt(k) * np.sqrt(k), np.full(3, k[0]) / 7 * 0.1]
"""
