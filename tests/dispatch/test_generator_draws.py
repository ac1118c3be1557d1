"""What the stand-in generators draw: distributions against SciPy's, whole numbers, refusals, the table of methods."""

from __future__ import annotations

import inspect

import numpy as np
import pytest
from generator_runs import Run, bare, drawn, tape_for
from scipy import stats

from narrowgauge.dispatch.generator import REFUSED, GeneratorDraws, RandomStateDraws
from narrowgauge.errors import EscapeError, RefusedError

DRAWS = 2**14
FALSE_ALARM = 1e-6  # of each test
OF_REALS = {
    "rng.standard_normal(n)": stats.norm(),
    "rng.normal(0.5, 2.0, n)": stats.norm(0.5, 2.0),
    "rng.random(n)": stats.uniform(),
    "rng.uniform(-1.0, 3.0, n)": stats.uniform(-1.0, 4.0),
    "rng.exponential(2.0, n)": stats.expon(scale=2.0),
    "rng.standard_exponential(n)": stats.expon(),
    "rng.gamma(0.7, 2.0, n)": stats.gamma(0.7, scale=2.0),
    "rng.standard_gamma(0.05, n)": stats.gamma(0.05),
    "rng.beta(2.0, 3.0, n)": stats.beta(2.0, 3.0),
    "rng.chisquare(3.0, n)": stats.chi2(3.0),
    "rng.noncentral_chisquare(2.0, 1.5, n)": stats.ncx2(2.0, 1.5),
    "rng.f(3.0, 5.0, n)": stats.f(3.0, 5.0),
    "rng.standard_t(4.0, n)": stats.t(4.0),
    "rng.standard_cauchy(n)": stats.cauchy(),
    "rng.laplace(1.0, 2.0, n)": stats.laplace(1.0, 2.0),
    "rng.logistic(1.0, 2.0, n)": stats.logistic(1.0, 2.0),
    "rng.gumbel(1.0, 2.0, n)": stats.gumbel_r(1.0, 2.0),
    "rng.rayleigh(2.0, n)": stats.rayleigh(scale=2.0),
    "rng.lognormal(0.1, 0.5, n)": stats.lognorm(0.5, scale=np.exp(0.1)),
    "rng.weibull(1.5, n)": stats.weibull_min(1.5),
    "rng.pareto(3.0, n)": stats.lomax(3.0),
    "rng.power(2.5, n)": stats.powerlaw(2.5),
    "rng.triangular(-1.0, 0.2, 3.0, n)": stats.triang(0.3, -1.0, 4.0),
    "rng.triangular(-1.0, 3.0, np.full(n, 3.0))": stats.triang(1.0, -1.0, 4.0),
    "rng.wald(0.7, 2.0, n)": stats.invgauss(0.35, scale=2.0),
    "rng.wald(0.7, np.full(n, 2.0))": stats.invgauss(0.35, scale=2.0),
    "rng.noncentral_f(3.0, 5.0, 1.5, n)": stats.ncf(3.0, 5.0, 1.5),
    "rng.vonmises(0.0, 0.0, n)": stats.uniform(-np.pi, 2 * np.pi),
    "rng.vonmises(0.0, 0.8, n)": stats.vonmises(0.8),
    "rng.vonmises(0.0, np.full(n, 49.0))": stats.vonmises(49.0),
    "rng.vonmises(0.0, 1e4, n)": stats.vonmises(1e4),
}
OF_COUNTS = {
    "rng.poisson(3.3, n)": stats.poisson(3.3),
    "rng.poisson(np.full(n, 3.25))": stats.poisson(3.25),
    "rng.binomial(7, 0.3, n)": stats.binom(7, 0.3),
    "rng.binomial(np.full(n, 7), 0.3)": stats.binom(7, 0.3),
    "rng.geometric(0.4, n)": stats.geom(0.4),
    "rng.integers(2, 9, n)": stats.randint(2, 9),
    "rng.integers(2, 8, n, endpoint=True)": stats.randint(2, 9),
    "np.random.randint(7, size=n) + 2": stats.randint(2, 9),
    "rng.choice(5, n, p=[0.1, 0.2, 0.3, 0.25, 0.15])": stats.rv_discrete(
        values=([0, 1, 2, 3, 4], [0.1, 0.2, 0.3, 0.25, 0.15])
    ),
    "rng.choice([4, 5, 6], n)": stats.randint(4, 7),
    "rng.negative_binomial(2.5, 0.3, n)": stats.nbinom(2.5, 0.3),
    "rng.negative_binomial(np.full(n, 4), 0.75)": stats.nbinom(4, 0.75),
    "rng.hypergeometric(12, 18, 9, n)": stats.hypergeom(30, 12, 9),
    "rng.hypergeometric(np.full(n, 12), 18, 27)": stats.hypergeom(30, 12, 27),
    "rng.logseries(0.6, n)": stats.logser(0.6),
    "rng.logseries(np.full(n, 0.75))": stats.logser(0.75),
    "rng.zipf(3.0, n)": stats.zipf(3.0),
    "rng.zipf(np.full(n, 2.5))": stats.zipf(2.5),
}
KERNEL = "import numpy as np\ndef kernel(rng, n):\n    return {expression}\n"


def chi_square(counts, law):
    """The p-value of Pearson's statistic over the values with at least five expected, the rest together."""
    values = np.arange(counts.min(), counts.max() + 1)
    expected = law.pmf(values) * counts.size
    seen = np.array([np.count_nonzero(counts == value) for value in values])
    often = expected >= 5
    rest = counts.size - expected[often].sum()
    pairs = [*zip(seen[often], expected[often], strict=True)]
    if rest >= 5:
        pairs.append((counts.size - seen[often].sum(), rest))
    statistic = sum((s - e) ** 2 / e for s, e in pairs)
    return stats.chi2.sf(statistic, len(pairs) - 1)


@pytest.mark.parametrize("expression", OF_REALS)
def test_reals_have_their_distribution(expression):
    """A draw passes Kolmogorov's test against SciPy's distribution function (false alarm 1e-6), plain and in float64.

    Negative control: the same draws, moved by a tenth of the middle half of the distribution, fail.
    """
    law, kernel = OF_REALS[expression], KERNEL.format(expression=expression)
    plain = drawn(kernel, None, DRAWS)
    assert plain.tobytes() == drawn(kernel, "float64", DRAWS).tobytes()
    assert stats.kstest(plain, law.cdf).pvalue > FALSE_ALARM
    assert stats.kstest(plain + 0.1 * (law.ppf(0.75) - law.ppf(0.25)), law.cdf).pvalue < FALSE_ALARM


@pytest.mark.parametrize("expression", OF_COUNTS)
def test_counts_have_their_distribution(expression):
    """Counts pass Pearson's test against SciPy's probabilities (false alarm 1e-6) and are exact in every format.

    Negative control: counts of which every fourth is one more fail.
    """
    law, kernel = OF_COUNTS[expression], KERNEL.format(expression=expression)
    counts = drawn(kernel, None, DRAWS)
    assert counts.dtype == np.int64
    for form in ("float64", "float16"):
        assert np.array_equal(drawn(kernel, form, DRAWS), counts)
    assert chi_square(counts, law) > FALSE_ALARM
    off = counts.copy()
    off[::4] += 1
    assert chi_square(off, law) < FALSE_ALARM


def test_no_pairs_of_draws_are_alike():
    """Distributions of one step use uniforms of their own: the ranks of two requests are uncorrelated.

    Kendall's tau of 2^14 independent pairs is normal of variance 2 (2 n + 5) / (9 n (n - 1)); false alarm 1e-6.
    """
    x, y = drawn(KERNEL.format(expression="(rng.gamma(2.0, size=n), rng.normal(size=n))"), None, DRAWS)
    assert stats.kendalltau(x, y).pvalue > FALSE_ALARM
    assert stats.kendalltau(x, y + x).pvalue < FALSE_ALARM


def test_permutations():
    """Orders are permutations of what they are given, of the state too, the same in every format; lists in place."""
    kernel = """
    import numpy as np
    def kernel(rng, n):
        x = np.zeros(n) + np.arange(n) * 0.25
        words = ["a", "b", "c"]
        y = x.copy()
        rng.shuffle(y)
        rng.shuffle(words)
        return rng.permutation(n), rng.permutation(x), y, rng.permutation([0.1, 0.2]), words
    """
    plain = drawn(kernel, None, 64)
    for form in ("float64", "float16"):
        order, x, y, pair, words = drawn(kernel, form, 64)
        assert np.array_equal(order, plain[0])
        assert np.array_equal(x, plain[1])
        assert np.array_equal(y, plain[2])
        assert words == plain[4]
        assert sorted(order.tolist()) == list(range(64))
        assert not np.array_equal(order, np.arange(64))
        assert sorted(x.tolist()) == sorted(y.tolist()) == [i * 0.25 for i in range(64)]
        rounded = np.array([0.1, 0.2]).astype(form)
        assert sorted(np.asarray(pair, np.float64).tolist()) == rounded.astype(np.float64).tolist()


def test_constants_that_are_drawn_are_of_the_state():
    """Entries of a plain table of floats that choice draws are rounded, and so is what is computed from them."""
    kernel = "def kernel(rng, n):\n    x = rng.choice([0.1, 0.2], n)\n    return x * x\n"
    found = Run(kernel, "float16")(tape_for(), 8)
    expected = (np.array([0.1, 0.2], np.float16) ** 2).astype(np.float32)
    assert set(bare(found).tolist()) == set(expected.tolist())


STATE = "import numpy as np\ndef kernel(rng, n):\n    x = np.ones(n) * 0.7 + 1 / 3\n    return rng.{call}, x\n"


@pytest.mark.parametrize(
    ("call", "law"),
    [
        ("poisson(x)", stats.poisson),
        ("gamma(x)", stats.gamma),
        ("chisquare(x)", stats.chi2),
        ("noncentral_chisquare(2.0, x)", lambda x: stats.ncx2(2.0, x)),
    ],
)
def test_parameters_of_the_state(call, law):
    """A parameter of the state counts with its own value, and is flagged with file and line.

    Kolmogorov's and Pearson's tests as above; in float16 every draw is the quantile, rounded, at the rounded parameter.
    """
    name = call.partition("(")[0]
    for form in ("float64", "float16"):
        run = Run(STATE.format(call=call), form)
        found, x = bare(run(tape_for(), DRAWS))
        ((place, text),) = run.feed.remarks
        assert str(place) == "nowhere/kernel.py:4"
        assert text == f"a parameter of {name} depends on the state: the draw is computed in float64 from its value"
        at = law(float(x[0]))
        if name == "poisson":
            assert chi_square(found, at) > FALSE_ALARM
        else:
            steps = 0.0 if form == "float64" else 2.0**-11  # a rounding moves the empirical law by its density at most
            largest = np.max(np.diff(at.cdf(np.linspace(1e-4, 20, 20001))) / 1e-3) * float(found.max()) * steps
            assert stats.kstest(found, at.cdf).statistic < stats.kstwo.isf(FALSE_ALARM, DRAWS) + largest
    plain = Run(STATE.format(call=call), None)
    plain(tape_for(), DRAWS)
    assert plain.feed.remarks == {}  # plain NumPy does not know the state


@pytest.mark.parametrize("form", [None, "float16"])
@pytest.mark.parametrize("name", sorted(REFUSED))
def test_refused_by_name(name, form):
    """What is not offered is refused by its name, with the line and what is accepted."""
    owner = "rng" if hasattr(np.random.Generator, name) else "np.random.RandomState()"
    call = "" if name == "bit_generator" else "()"
    kernel = f"import numpy as np\ndef kernel(rng):\n    return {owner}.{name}{call}\n"
    with pytest.raises(RefusedError) as caught:
        drawn(kernel, form)
    plain = "Generator" if owner == "rng" else "RandomState"
    assert str(caught.value) == f"nowhere/kernel.py:3: {plain}.{name} is not offered by this version: {REFUSED[name]}"


@pytest.mark.parametrize(
    ("expression", "words"),
    [
        ("np.random.bytes(3)", "numpy.random.bytes is not offered by this version: bytes are no random input"),
        ("rng.dirichlet([[1.0, 2.0]])", "dirichlet takes one row of parameters; accepted: an array of one dimension"),
        ("np.random.PCG64(3).random_raw()", "PCG64.random_raw is not offered by this version: the draws of an audit"),
        ("np.random.get_bit_generator()", "numpy.random.get_bit_generator is not offered by this version"),
        ("rng.standard_normal(3, dtype=np.float32)", "the kernel fixes dtype float32; accepted: float64 or none"),
        ("rng.normal([x[0], x[1]], 1.0)", "a list of values of the state as a parameter of a draw"),
    ],
)
def test_refused_in_these_words(expression, words):
    """Arguments and functions that are not offered are refused where they stand."""
    kernel = f"import numpy as np\ndef kernel(rng):\n    x = np.ones(2)\n    return {expression}\n"
    with pytest.raises(RefusedError, match=r"nowhere/kernel.py:4: " + words):
        drawn(kernel, "float16")


def test_a_draw_does_not_leave_the_arithmetic():
    """A draw of the state is of the state: stored in a plain array it is an escape."""
    kernel = "import numpy as np\ndef kernel(rng, table):\n    table[:] = rng.normal(size=3)\n"
    with pytest.raises(EscapeError):
        drawn(kernel, "float16", np.zeros(3))


@pytest.mark.parametrize(
    ("plain", "stand_in"), [(np.random.Generator, GeneratorDraws), (np.random.RandomState, RandomStateDraws)]
)
def test_every_method_is_offered_or_refused(plain, stand_in):
    """Each public method of NumPy's class is offered with all of its arguments in order, or refused with a reason."""
    public = {name for name in dir(plain) if not name.startswith("_")}
    offered = {name for name in public if hasattr(stand_in, name)}
    assert public - offered <= set(REFUSED)
    assert not offered & set(REFUSED)
    for name in offered:
        theirs = [p for p in inspect.signature(getattr(plain, name)).parameters.values() if p.name != "self"]
        ours = [p for p in inspect.signature(getattr(stand_in, name)).parameters.values() if p.name != "self"]
        if not any(p.kind is p.VAR_POSITIONAL for p in theirs) and name not in ("seed", "set_state"):
            assert [p.name for p in ours[: len(theirs)]] == [p.name for p in theirs], name
            assert [p.default for p in ours[: len(theirs)]] == [p.default for p in theirs], name


def test_every_name_of_the_module_is_a_stand_in():
    """No public name of numpy.random but the seed sequence is NumPy's own in a kernel that draws for itself."""
    module = Run("import numpy as np\nrandom = np.random\n", "float16").module.random
    own = {name for name in dir(np.random) if name[0] != "_" and getattr(module, name) is getattr(np.random, name)}
    assert own == {"SeedSequence", "test"}
