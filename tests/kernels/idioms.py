"""Ways in which a kernel's rounding gets lost or its run goes wrong, each as a kernel and as what it must come to.

The second text of each pair is the same computation with `r` around every elementary operation, one after the other;
`z` holds the draws of one request for all steps and `s` those of one request for each step, already rounded.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np


class Idiom(NamedTuple):
    """A kernel's text, and its value under a rounding `r` from draws `z` and `s`."""

    text: str
    expected: Callable[[Any, Any, Any], Any]


def walk(r: Any, draws: Any, scale: Any = 0.1, start: Any = 1.0) -> Any:
    """A value that moves by scale * draw at every step."""
    x = r(np.full(draws.shape[1], start))
    for one in draws:
        x = r(x + r(r(scale) * one))
    return x


def growth(r: Any, draws: Any) -> Any:
    """A value that grows by one factor 1 + 0.1 z at every step."""
    x = r(np.ones(draws.shape[1]))
    for one in draws:
        x = r(x * r(1.0 + r(r(0.1) * one)))
    return x


def sums(r: Any, parts: Any) -> Any:
    """Products and sums one after the other, from the left."""
    total = parts[0]
    for part in parts[1:]:
        total = r(total + part)
    return total


def slope(r: Any, z: Any) -> Any:
    """A difference quotient of x * x * x with a step of 1/64."""
    x, step = walk(r, z), 2.0**-6

    def cube(y: Any) -> Any:
        return r(r(y * y) * y)

    return r(r(cube(r(x + step)) - cube(r(x - step))) / r(2 * step))


def clipped(r: Any, z: Any) -> Any:
    """A mean-reverting value that is cut at zero before its root is taken."""
    v = r(np.full(z.shape[1], 0.04))
    for one in z:
        root = r(np.sqrt(np.maximum(v, 0.0)))
        v = r(r(v + r(r(r(0.04) - v) * 0.25)) + r(r(r(0.3) * root) * one))
    return v


def reverted(r: Any, s: Any) -> Any:
    """A draw around the state: its centre and its width are of the kernel's own arithmetic."""
    x = r(np.ones(s.shape[1]))
    for one in s:
        x = r(r(x + r(r(r(0.2) - x) * 0.25)) + r(r(0.3) * one))
    return x


def turned(r: Any, z: Any) -> Any:
    """Two rows of draws turned by a constant matrix of whole numbers."""
    return r(sums(r, [r(3 * z[0]), r(-1 * z[1])]) + sums(r, [r(1 * z[0]), r(2 * z[1])]))


def centred(r: Any, z: Any) -> Any:
    """Draws less their mean over all paths, which is computed in float64 and rounded once."""
    return r(z[0] - r(z[0].mean()))


def vectors(r: Any, z: Any) -> Any:
    """Rows of two normals times a factor of a covariance, which is computed in float64 and rounded once."""
    factor = r(np.linalg.cholesky(np.array([[4.0, 1.0], [1.0, 1.25]])))
    first, second = z.ravel()[:96].reshape(48, 2).T
    return r(r(factor[0, 0] * first) + sums(r, [r(factor[1, 0] * first), r(factor[1, 1] * second)]))


def scored(r: Any, z: Any) -> Any:
    """The normal distribution function of the draws, computed in float64 and rounded once."""
    from scipy.stats import norm

    return r(norm.cdf(z[0]))


HEAD = "import numpy as np\ndef kernel(rng, h):\n    z = rng.standard_normal((4, 48))\n"
IDIOMS = {
    "a buffer that the next step reads back": Idiom(
        HEAD
        + """
    paths = np.empty((48, 5))
    paths[:, 0] = 1.0
    for i in range(4):
        paths[:, i + 1] = paths[:, i] + 0.1 * z[i]
    return paths[:, -1]
""",
        lambda r, z, s: walk(r, z),
    ),
    "draws of the module-wide functions": Idiom(
        """
import numpy as np
def kernel(rng, h):
    x = np.ones(48)
    for i in range(4):
        x = x + 0.1 * np.random.standard_normal(48)
    return x
""",
        lambda r, z, s: walk(r, s),
    ),
    "a generator made inside from a seed": Idiom(
        """
from numpy.random import RandomState, default_rng
import numpy as np
def kernel(rng, h, seed=3):
    own, x = [default_rng(seed), RandomState(seed)], np.ones(48)
    for i in range(4):
        x = x + 0.1 * own[i % 2].standard_normal(48)
    return x
""",
        lambda r, z, s: walk(r, s),
    ),
    "a generator made at import, a method as a default argument": Idiom(
        """
import numpy as np
OWN = np.random.default_rng(5)
def kernel(rng, h, draw=OWN.standard_normal):
    x = np.ones(48)
    for i in range(4):
        x = x + 0.1 * (draw(48) if i % 2 else OWN.standard_normal(size=48))
    return x
""",
        lambda r, z, s: walk(r, s),
    ),
    "scalar loops": Idiom(
        HEAD
        + """
    out = np.zeros(48)
    for p in range(48):
        x = 1.0
        for i in range(4):
            x = x + 0.1 * z[i, p]
        out[p] = x
    return out
""",
        lambda r, z, s: walk(r, z),
    ),
    "single draws in a scalar loop": Idiom(
        """
import numpy as np
def kernel(rng, h):
    ends = []
    for p in range(48):
        x = 1.0
        for i in range(4):
            x += 0.1 * rng.standard_normal() if i % 2 else 0.1 * np.random.normal()
        ends.append(x)
    return np.array(ends)
""",
        lambda r, z, s: walk(r, z.ravel().reshape(48, 4).T),
    ),
    "a list of one moving value": Idiom(
        HEAD
        + """
    ends = []
    for p in range(48):
        x, path = np.float64(1.0) + 0 * z[0, p], []
        for i in range(4):
            x += 0.1 * z[i, p]
            path.append(x)
        ends.append(path)
    return np.array(ends)[:, 0]
""",
        lambda r, z, s: walk(r, z[:1]),
    ),
    "a NumPy scalar of the step size": Idiom(
        HEAD
        + """
    x = np.ones(48)
    for i in range(4):
        x = x + np.float64(0.4) * np.sqrt(h) * z[i]
    return x
""",
        lambda r, z, s: walk(r, z, 0.4 * np.sqrt(0.25)),
    ),
    "conversions and questions about the type": Idiom(
        HEAD
        + """
    x = np.ones(48)
    for i in range(4):
        assert isinstance(z[i], np.ndarray) and x.dtype == np.float64 and np.issubdtype(x.dtype, np.floating)
        x = np.asarray(x, dtype=float).astype(np.float64) + 0.1 * np.ascontiguousarray(z[i])
    return np.asarray(np.atleast_1d(x), np.float64)
""",
        lambda r, z, s: walk(r, z),
    ),
    "a dtype of 64 bits by name": Idiom(
        HEAD
        + """
    x = np.ones(48, dtype="float64")
    for i in range(4):
        x += 0.1 * z[i].astype("d", copy=False)
    return x
""",
        lambda r, z, s: walk(r, z),
    ),
    "contractions": Idiom(
        HEAD
        + """
    weights = np.array([[0.5, 0.25], [0.5, -0.25]])
    return np.einsum("ij,jp->ip", weights, z[:2])[0] + (weights @ z[:2])[1] + np.dot(weights, z[:2])[0]
""",
        lambda r, z, s: r(
            r(sums(r, [r(0.5 * z[0]), r(0.25 * z[1])]) + sums(r, [r(0.5 * z[0]), r(-0.25 * z[1])]))
            + sums(r, [r(0.5 * z[0]), r(0.25 * z[1])])
        ),
    ),
    "a method of a constant matrix": Idiom(
        HEAD
        + """
    both = np.array([[3.0, -1.0], [1.0, 2.0]]).dot(z[:2])
    return both[0] + both[1]
""",
        lambda r, z, s: turned(r, z),
    ),
    "a list that becomes an array": Idiom(
        HEAD
        + """
    x, path = np.ones(48), []
    for i in range(4):
        x = x + 0.1 * z[i]
        path.append(x)
    return np.array([path[-1], np.array(path)[0]]).T[:, 0]
""",
        lambda r, z, s: walk(r, z),
    ),
    "the state inside a draw": Idiom(
        """
import numpy as np
def kernel(rng, h):
    x = np.ones(48)
    for i in range(4):
        x = rng.normal(loc=x + (0.2 - x) * h, scale=0.3)
    return x
""",
        lambda r, z, s: reverted(r, s),
    ),
    "vectors of correlated normals": Idiom(
        """
import numpy as np
def kernel(rng, h):
    x = rng.multivariate_normal(np.zeros(2), [[4.0, 1.0], [1.0, 1.25]], 48, method="cholesky")
    return x[:, 0] + x[:, 1]
""",
        lambda r, z, s: vectors(r, z),
    ),
    "a distribution function": Idiom(
        HEAD + "    from scipy.stats import norm\n    return norm.cdf(z[0])\n", lambda r, z, s: scored(r, z)
    ),
    "variates of a distribution": Idiom(
        """
import numpy as np
from scipy import stats
NORMAL = stats.norm(0.0, 1.0)
def kernel(rng, h):
    own, x = np.random.RandomState(3), np.ones(48)
    for i, given in enumerate([None, rng, own, 7]):
        x = x + 0.1 * (NORMAL.rvs(48, random_state=given) if i % 2 else stats.norm.rvs(size=48, random_state=given))
    return x
""",
        lambda r, z, s: walk(r, s),
    ),
    "guards that are nothing in 16 bits": Idiom(
        HEAD + "    return (z[0] + 1e-8) + np.maximum(1e-300, z[1])\n",
        lambda r, z, s: r(r(z[0] + r(1e-8)) + np.maximum(r(1e-300), z[1])),
    ),
    "a branch on the state": Idiom(
        HEAD
        + """
    x = np.ones(48)
    for i in range(4):
        step = 0.1 * z[i]
        if (step > 100.0).any() or not np.all(np.isfinite(x)):
            step = 0.0 * step
        x = x + step
    return x
""",
        lambda r, z, s: walk(r, z),
    ),
    "time that adds up to a test on the grid": Idiom(
        HEAD
        + """
    t, i, x, grid = 0.0, 0, np.ones(48), np.linspace(0.0, 1.0, 1001)
    assert np.allclose(np.diff(grid), 1e-3, rtol=1e-9) and np.arange(0.0, 1.0, 1e-3).size == 1000
    while t < grid[-1] - 1e-9:
        x = x + 0.1 * z[i]
        t, i = t + h, i + 1
    return x
""",
        lambda r, z, s: walk(r, z),
    ),
    "a difference quotient": Idiom(
        HEAD
        + """
    x, step = np.ones(48), 2.0**-6
    for i in range(4):
        x = x + 0.1 * z[i]
    cube = lambda y: y * y * y
    return (cube(x + step) - cube(x - step)) / (2 * step)
""",
        lambda r, z, s: slope(r, z),
    ),
    "a mean over the paths": Idiom(HEAD + "    return z[0] - z[0].mean()\n", lambda r, z, s: centred(r, z)),
    "a floor under a root": Idiom(
        HEAD
        + """
    v = np.full(48, 0.04)
    for i in range(4):
        v = v + (0.04 - v) * h + 0.3 * np.sqrt(np.maximum(v, 0.0)) * z[i]
    return v
""",
        lambda r, z, s: clipped(r, z),
    ),
    "in place, into a given target, and through a mask": Idiom(
        HEAD
        + """
    x, move = np.ones(48), np.empty(48)
    for i in range(4):
        np.multiply(0.1, z[i], out=move)
        np.add(move, 1.0, out=move, where=np.ones(48, bool))
        x *= move
        x[x < -1e6] = 0.0
    return x
""",
        lambda r, z, s: growth(r, z),
    ),
}
