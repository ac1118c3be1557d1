"""Draws of several numbers at a time: their laws against SciPy's, NumPy's own bits of vectors, orders, single paths."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from generator_runs import Run, bare, drawn, tape_for
from scipy import stats
from test_generator_draws import DRAWS, FALSE_ALARM, chi_square

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.randoms import generator
from narrowgauge.draws.columns import Columns
from narrowgauge.draws.normals import exact_normals
from narrowgauge.draws.streams import Purpose, UniformStream, uniforms
from narrowgauge.draws.tape import ArmDraws, Tape
from narrowgauge.errors import RefusedError

FORMS = ("float64", "float32", "float16", "bfloat16")
KERNEL = "import numpy as np\ndef kernel(rng, n):\n    return {expression}\n"
MEAN, COVARIANCE = [0.5, -1.0, 2.0], [[2.0, 0.6, -0.4], [0.6, 1.0, 0.1], [-0.4, 0.1, 0.5]]
VECTORS = {
    "svd": "rng.multivariate_normal({mean}, {cov}, {size})",
    "eigh": "rng.multivariate_normal({mean}, {cov}, {size}, method='eigh')",
    "cholesky": "rng.multivariate_normal({mean}, {cov}, {size}, method='cholesky')",
    "legacy": "np.random.multivariate_normal({mean}, {cov}, {size})",
}


@pytest.mark.parametrize("size", [None, 7, (3, 5)])
@pytest.mark.parametrize("way", VECTORS)
def test_vectors_of_normals_have_numpys_bits(way, size):
    """In float64 they are what NumPy's own method makes of the same normals, handed to it in a subclass."""
    expression = VECTORS[way].format(mean=MEAN, cov=COVARIANCE, size=size)
    z = exact_normals(uniforms(1, Purpose.TRIAL, 0, 0, (*np.zeros(size or ()).shape, 3)))

    class Fed(np.random.RandomState if way == "legacy" else np.random.Generator):
        def standard_normal(self, size=None, *others):
            return z.reshape(size)

    names = {"rng": Fed(np.random.PCG64(0)) if way != "legacy" else None, "np": np}
    if way == "legacy":
        expression, names["rng"] = expression.replace("np.random", "rng"), Fed(0)
    theirs = eval(expression, names)
    expression = VECTORS[way].format(mean=MEAN, cov=COVARIANCE, size=size)
    for form in (None, "float64"):
        found = drawn(KERNEL.format(expression=expression), form, 0)
        assert (found.shape, found.tobytes()) == (theirs.shape, theirs.tobytes())


@pytest.mark.parametrize("form", ["float16", "bfloat16"])
def test_vectors_of_normals_are_taken_apart(form):
    """mean + factor z: products and sums are rounded one by one, the factor once, in order of the columns."""
    expression = VECTORS["cholesky"].format(mean=MEAN, cov=COVARIANCE, size="n")
    found = drawn(KERNEL.format(expression=expression), form, 300)
    arithmetic = arithmetic_named(form)
    z = arithmetic.cast(exact_normals(uniforms(1, Purpose.TRIAL, 0, 0, (300, 3))))
    factor = arithmetic.cast(np.linalg.cholesky(np.array(COVARIANCE)))
    for row in range(3):
        total = arithmetic.apply(np.multiply, (z[:, 0], factor[row, 0]))
        for column in (1, 2):
            product = arithmetic.apply(np.multiply, (z[:, column], factor[row, column]))
            total = arithmetic.apply(np.add, (total, product))
        expected = arithmetic.apply(np.add, (arithmetic.constant(MEAN[row]), total))
        assert np.array_equal(found[:, row], expected)


@pytest.mark.parametrize("way", VECTORS)
def test_vectors_of_normals_have_their_covariance(way):
    """Whitened by the covariance they are independent standard normals: Kolmogorov's and Kendall's tests, 1e-6 each.

    Negative control: whitened without the correlations they fail.
    """
    expression = VECTORS[way].format(mean=MEAN, cov=COVARIANCE, size="n")
    x = drawn(KERNEL.format(expression=expression), None, DRAWS) - MEAN
    white = np.linalg.solve(np.linalg.cholesky(np.array(COVARIANCE)), x.T)
    grey = (x / np.sqrt(np.diag(COVARIANCE))).T
    for row in range(3):
        assert stats.kstest(white[row], stats.norm.cdf).pvalue > FALSE_ALARM
    for one, other in itertools.combinations(range(3), 2):
        assert stats.kendalltau(white[one], white[other]).pvalue > FALSE_ALARM
        assert stats.kendalltau(grey[one], grey[other]).pvalue < FALSE_ALARM


def test_a_covariance_of_the_state():
    """An array that the kernel makes is factored in float64, which is remarked on; what NumPy refuses is refused."""
    text = "rng.multivariate_normal(np.zeros(2), np.array([[2.0, 0.3], [0.3, 1.0]]), n)"
    run = Run(KERNEL.format(expression=text), "float16")
    assert bare(run(tape_for(), 5)).shape == (5, 2)
    said = "the covariance of multivariate_normal is factored in float64, from its values"
    assert [(place.line, words) for place, words in run.feed.remarks] == [(3, said)]
    for arguments, words in {
        "[[0.0]], [[1.0]]": "mean must be 1 dimensional",
        "[0.0], [1.0]": "cov must be 2 dimensional and square",
        "[0.0, 1.0], [[1.0]]": "mean and cov must have same length",
        "[0.0], [[1.0]], method='qr'": "method must be one of",
        "[0.0], [[1.0]], check_valid='no'": "check_valid must equal",
        "[0.0, 0.0], [[1.0, 2.0], [2.0, 1.0]], check_valid='raise'": "covariance is not symmetric positive-semidef",
    }.items():
        for form in (None, "float16"):
            with pytest.raises(ValueError, match=words):
                drawn(KERNEL.format(expression=f"rng.multivariate_normal({arguments})"), form, 1)
    indefinite = KERNEL.format(expression="rng.multivariate_normal([0.0, 0.0], [[1.0, 2.0], [2.0, 1.0]])")
    with pytest.warns(RuntimeWarning, match="covariance is not symmetric positive-semidefinite"):
        drawn(indefinite, None, 1)
    assert drawn(indefinite, "float16", 1).shape == (2,)


def test_angles_around_another_centre():
    """mu + x is turned back into [-pi, pi]; each operation is rounded.

    In a narrow format the draw, mu + x, pi, the sum with it up to 10, 2 pi and the last difference are off by at most
    2, 4, 2, 8, 4 and 2 units roundoff, which is less than 32 in all.
    """
    plain = drawn(KERNEL.format(expression="rng.vonmises(3.0, 0.8, n)"), None, DRAWS)
    around = drawn(KERNEL.format(expression="rng.vonmises(0.0, 0.8, n)"), None, DRAWS)
    moved = around + 3.0
    inside = np.abs(moved) < np.pi
    assert np.allclose(plain[inside], moved[inside], rtol=0, atol=2.0**-50)
    assert np.allclose(plain[~inside], moved[~inside] - 2 * np.pi, rtol=0, atol=2.0**-50)
    assert (~inside).any()
    assert np.abs(plain).max() <= np.pi
    for form in FORMS:
        found = drawn(KERNEL.format(expression="rng.vonmises(3.0, 0.8, n)"), form, DRAWS)
        assert (found.tobytes() == plain.tobytes()) == (form == "float64")
        assert np.abs(found - plain)[np.abs(plain) < 3].max() <= 32 * 2.0 ** -(arithmetic_named(form).format.precision)


def distance(values, law):
    """Kolmogorov's distance from 1e-290 to 1 - 2^-45: what lies beyond may have been rounded to 0 or 1."""
    ordered, n = np.sort(values), values.size
    at, place = law.cdf(ordered), np.arange(n)
    inside = (ordered > 1e-290) & (ordered < 1 - 2.0**-45)
    return np.maximum(np.abs(at - place / n), np.abs(at - (place + 1) / n))[inside].max()


SHARES = {"ordinary": [1.5, 2.0, 0.5], "small": [0.02, 0.01, 0.03], "tiny": [0.002, 0.001, 0.003]}


@pytest.mark.parametrize("name", SHARES)
def test_shares_have_their_distribution(name):
    """Each share is a beta draw and so is the sum of two; they add up to 1 (Kolmogorov's test, 1e-6; control)."""
    alpha = np.array(SHARES[name])
    kernel = KERNEL.format(expression=f"rng.dirichlet({SHARES[name]}, n)")
    x = drawn(kernel, None, DRAWS)
    assert x.tobytes() == drawn(kernel, "float64", DRAWS).tobytes()
    assert np.abs(x.sum(axis=1) - 1).max() < 4 * 2.0**-53
    for share, a in [(x[:, 0], alpha[0]), (x[:, 1], alpha[1]), (x[:, 0] + x[:, 2], alpha[0] + alpha[2])]:
        most = stats.kstwo.isf(FALSE_ALARM, DRAWS)
        assert distance(share, stats.beta(a, alpha.sum() - a)) < most
        assert distance(share, stats.beta(1.3 * a, alpha.sum() - a)) > most
    for form in ("float16", "bfloat16"):
        assert np.array_equal(drawn(kernel, form, DRAWS), arithmetic_named(form).cast(x))
    nothing = drawn(KERNEL.format(expression="rng.dirichlet([0.0, 2.0, 0.0], n)"), None, 4)
    assert nothing.tolist() == [[0.0, 1.0, 0.0]] * 4


COUNTS = {
    "rng.multinomial(9, [0.2, 0.3, 0.5], n)": (9, lambda k: stats.binom(9, [0.2, 0.5, 0.7][k])),
    "rng.multinomial(np.full(n, 9), [0.2, 0.3, 0.5])": (9, lambda k: stats.binom(9, [0.2, 0.5, 0.7][k])),
    "np.random.multinomial(9, [0.2, 0.3, 0.5], n)": (9, lambda k: stats.binom(9, [0.2, 0.5, 0.7][k])),
    "rng.multivariate_hypergeometric([6, 9, 15], 9, n)": (9, lambda k: stats.hypergeom(30, [6, 15, 21][k], 9)),
}


@pytest.mark.parametrize("expression", COUNTS)
def test_counts_of_categories_have_their_distribution(expression):
    """One category, the last, and two together: Pearson's test, 1e-6 each; exact in every format, and of one sum.

    Negative control: counts of which every fourth is one more fail.
    """
    total, law = COUNTS[expression]
    kernel = KERNEL.format(expression=expression)
    x = drawn(kernel, None, DRAWS)
    assert x.dtype == np.int64
    assert set(x.sum(axis=1)) == {total}
    for form in ("float64", "float16"):
        assert np.array_equal(drawn(kernel, form, DRAWS), x)
    for counts, which in [(x[:, 0], 0), (x[:, 2], 1), (x[:, 0] + x[:, 2], 2)]:
        assert chi_square(counts, law(which)) > FALSE_ALARM
        off = counts.copy()
        off[::4] += 1
        assert chi_square(off, law(which)) < FALSE_ALARM


def test_what_cannot_be_counted():
    """More than there is, and chances that are none, are NumPy's ValueError."""
    for call in (
        "hypergeometric(3, 2, 6)",
        "hypergeometric(2.5, 2, 1)",
        "multivariate_hypergeometric([1, 2], 4)",
        "multinomial(3, [0.7, 0.7, 0.1])",
        "multinomial(3, [-0.1, 0.7])",
        "negative_binomial(0, 0.5)",
        "negative_binomial(1, 0.0)",
        "logseries(1.0)",
        "zipf(1.0)",
        "triangular(0.0, 2.0, 1.0)",
        "wald(0.0, 1.0)",
        "vonmises(0.0, -1.0)",
        "dirichlet([-1.0, 1.0])",
        "choice(3, 4, replace=False)",
        "choice(3, 2, replace=False, p=[1.0, 0.0, 0.0])",
    ):
        with pytest.raises(ValueError, match=r"."):
            drawn(KERNEL.format(expression=f"rng.{call}"), "float16", 1)


@pytest.mark.parametrize(
    ("call", "weights"),
    [
        ("rng.choice(4, 2, replace=False)", [0.25, 0.25, 0.25, 0.25]),
        ("rng.choice(4, 2, replace=False, p=[0.1, 0.2, 0.3, 0.4])", [0.1, 0.2, 0.3, 0.4]),
        ("np.random.choice([0, 1, 2, 3], (2,), False, [0.1, 0.2, 0.3, 0.4])", [0.1, 0.2, 0.3, 0.4]),
        ("rng.permutation(4)[:2]", [0.25, 0.25, 0.25, 0.25]),
    ],
)
def test_without_replacement(call, weights):
    """An ordered pair (i, j) comes up with a chance of p_i p_j / (1 - p_i): Pearson's test over all pairs, 1e-6.

    Negative control: another set of weights fails.
    """
    pairs = np.array(drawn(KERNEL.format(expression=f"[list({call}) for _ in range(n)]"), None, 2**12))
    assert np.array_equal(
        pairs, np.array(drawn(KERNEL.format(expression=f"[list({call}) for _ in range(n)]"), "float16", 2**12))
    )
    seen = [np.count_nonzero((pairs == pair).all(axis=1)) for pair in itertools.permutations(range(4), 2)]
    assert sum(seen) == 2**12
    for p, is_law in ((weights, True), ([0.15, 0.15, 0.3, 0.4], False)):
        expected = [2**12 * p[i] * p[j] / (1 - p[i]) for i, j in itertools.permutations(range(4), 2)]
        assert (stats.chisquare(seen, expected).pvalue > FALSE_ALARM) == is_law


def test_orders_along_axes():
    """permutation, shuffle and choice move whole slices along an axis; permuted gives each line an order of its own."""
    kernel = """
    import numpy as np
    def kernel(rng, n):
        x = np.zeros((n, 3)) + np.arange(3 * n).reshape(n, 3) * 0.25
        y = x.copy()
        rng.shuffle(y, axis=1)
        z = np.zeros((n, 3))
        same = rng.permuted(x, axis=0, out=z) is z
        picked = rng.choice(x, 2, replace=False, axis=1)
        return rng.permutation(x, axis=1), y, z, rng.permuted(x), rng.permuted([0.5, 0.25]), picked, x, same
    """
    plain = drawn(kernel, None, 32)
    for form in ("float64", "float16"):
        found = drawn(kernel, form, 32)
        assert all(np.array_equal(one, other) for one, other in zip(found, plain, strict=True))
    columns, shuffled, each, whole, pair, picked, x, same = plain
    assert same
    for moved in (columns, shuffled):
        places = [int(4 * value) for value in moved[0]]
        assert sorted(places) == [0, 1, 2]
        assert np.array_equal(moved, x[:, places])
    assert np.array_equal(np.sort(each, axis=0), x)
    assert len({tuple(each[:, column] - x[0, column]) for column in range(3)}) == 3
    assert np.array_equal(np.sort(whole, axis=None).reshape(x.shape), x)
    assert sorted(pair) == [0.25, 0.5]
    assert picked.shape == (32, 2)
    assert (picked[:, 0] != picked[:, 1]).all()


@pytest.mark.parametrize("form", ["float64", "float16"])
def test_one_path_a_call(form):
    """Where a call is one path, the numbers that belong together are those of the path, with parameters of its own."""
    kernel = """
    import numpy as np
    def kernel(rng, n):
        first = rng.permutation(5)
        weights = np.ones(3) + first[:3]
        return first, rng.dirichlet(weights), rng.multinomial(6 + first[0], [0.5, 0.25, 0.25]), rng.choice(4, 3, False)
    """
    run, paths = Run(kernel, form), 200
    tape = Tape(UniformStream(1, Purpose.TRIAL, 0, 0), paths=paths, steps=1, singly=True)
    rows = Columns(ArmDraws(tape, arithmetic_named(form)).fine(), paths)
    found = []
    for path in range(paths):
        rows.begin(path)
        with run.feed.run(rows):
            found.append(bare(run.module.kernel(generator(run.feed), 1)))
    for order, shares, counts, chosen in found:
        assert sorted(order.tolist()) == [0, 1, 2, 3, 4]
        assert abs(shares.sum() - 1) < 4 * 2.0**-11
        assert counts.sum() == 6 + order[0]
        assert len(set(chosen.tolist())) == 3
    assert len({tuple(order) for order, *_ in found}) > 60  # of 120
    ranks = np.array([[order[0], shares[0]] for order, shares, *_ in found])
    assert stats.kendalltau(*ranks.T).pvalue < FALSE_ALARM  # a share's own weight


def test_what_remains_refused_says_so():
    """Chances in more than one row are refused with the line, in plain NumPy's run too."""
    for form in (None, "float16"):
        with pytest.raises(RefusedError, match=r"kernel\.py:3: multinomial takes one row of parameters"):
            drawn(KERNEL.format(expression="rng.multinomial(3, [[0.5, 0.5], [0.1, 0.9]])"), form, 1)
