"""Stand-ins for NumPy's generators: every style of drawing gives the same bits, and a draw's arithmetic is rounded."""

from __future__ import annotations

import copy
import gc
import math
import pickle
import subprocess
import sys

import numpy as np
import pytest
from generator_runs import PATHS, STEPS, Run, bare, drawn, tape_for

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.array import Array
from narrowgauge.dispatch.exact import Exact
from narrowgauge.dispatch.scalar import Scalar
from narrowgauge.draws.coarsen import inside
from narrowgauge.draws.normals import exact_normals
from narrowgauge.draws.streams import Purpose, uniforms
from narrowgauge.draws.tape import TapeError
from narrowgauge.errors import RefusedError

FORMS = ("float64", "float32", "float16", "bfloat16")
H = 1.0 / STEPS

# Lines at the top of the module, and lines that leave `z(i)`, the normals of step i, shape (paths,) or (2, paths).
STYLES = {
    "argument, by step": ("", "z = lambda i: rng.standard_normal(SIZE)"),
    "argument, ahead": ("", "Z = rng.standard_normal((steps, *SIZE)); z = lambda i: Z[i]"),
    "argument, out=": ("", "Z = np.empty(SIZE)\n    z = lambda i: rng.standard_normal(out=Z)"),
    "np.random.normal": ("", "np.random.seed(5); z = lambda i: np.random.normal(size=SIZE)"),
    "from numpy.random import": ("from numpy.random import standard_normal", "z = lambda i: standard_normal(SIZE)"),
    "randn": ("import numpy.random as nr", "z = lambda i: nr.randn(*SIZE)"),
    "default_rng inside": ("", "g = np.random.default_rng(42); z = lambda i: g.normal(0.0, 1.0, SIZE)"),
    "Generator inside": ("", "g = np.random.Generator(np.random.PCG64(1)); z = lambda i: g.normal(0.0, 1.0, SIZE)"),
    "RandomState inside": ("", "g = np.random.RandomState(42); z = lambda i: g.randn(*SIZE)"),
    "at import": ("G = np.random.default_rng(7)", "z = lambda i: G.standard_normal(SIZE)"),
    "at import, bound method": ("draw = np.random.RandomState(7).normal", "z = lambda i: draw(size=SIZE)"),
    "default argument": (
        "def draw(size, g=np.random.default_rng(3)):\n    return g.standard_normal(size)",
        "z = lambda i: draw(SIZE)",
    ),
    "in a class": (
        "class Source:\n    g = np.random.default_rng(3)\n    def draw(self, n): return self.g.standard_normal(n)",
        "z = lambda i: Source().draw(SIZE)",
    ),
    "check_random_state": ("", "g = np.random.mtrand._rand; z = lambda i: g.standard_normal(SIZE)"),
}
PROCESSES = {
    "ou": "x = x + 1.5 * (0.2 - x) * h + 0.3 * np.sqrt(h) * z(i)",
    "gbm": "x = x + 0.05 * h * x + 0.2 * np.sqrt(h) * x * z(i)",
    "heston": (
        "a, b = z(i)\n        v, w = np.maximum(v, 0.0), 0.6 * b - 0.8 * a\n"
        "        x = x + x * np.sqrt(v * h) * a; v = v + (0.04 - v) * h + 0.3 * np.sqrt(v * h) * w"
    ),
}
KERNEL = """
import numpy as np
{top}
def kernel(rng, h, steps, paths):
    {make}
    x, v = np.ones(paths), np.full(paths, 0.04)
    for i in range(steps):
        {step}
    return x
"""


def source(style, process):
    """The text of a kernel."""
    top, make = STYLES[style]
    size = "(2, paths)" if process == "heston" else "(paths,)"
    return KERNEL.format(top=top, make=make.replace("SIZE", size), step=PROCESSES[process])


@pytest.mark.parametrize("process", PROCESSES)
@pytest.mark.parametrize("style", STYLES)
def test_every_style_gives_the_same_bits(style, process):
    """Whoever draws, in whichever spelling, gets the tape's draws in order: same bits, and float64 is plain NumPy."""
    for form in FORMS:
        expected = drawn(source("argument, by step", process), form, H, STEPS, PATHS)
        found = drawn(source(style, process), form, H, STEPS, PATHS)
        assert found.tobytes() == expected.tobytes()
        if form == "float64":
            assert drawn(source(style, process), None, H, STEPS, PATHS).tobytes() == expected.tobytes()
    assert np.std(expected) > 0.05  # it draws indeed


@pytest.mark.parametrize("process", ["ou", "gbm"])
def test_the_paths_axis_first(process):
    """Draws made ahead as (paths, steps) reach the kernel in that order: those of a tape that is filled row by row."""
    ahead = KERNEL.format(
        top="", make="Z = rng.normal(size=(paths, steps)); z = lambda i: Z[:, i]", step=PROCESSES[process]
    )
    u = uniforms(1, Purpose.TRIAL, 0, 0, (PATHS, STEPS))
    x = np.ones(PATHS)
    for z in exact_normals(u).T:
        if process == "ou":
            x = x + 1.5 * (0.2 - x) * H + 0.3 * np.sqrt(H) * z
        else:
            x = x + 0.05 * H * x + 0.2 * np.sqrt(H) * x * z
    for form in (None, "float64"):
        assert drawn(ahead, form, H, STEPS, PATHS).tobytes() == x.tobytes()


@pytest.mark.parametrize("form", FORMS)
def test_normal_is_taken_apart(form):
    """normal(loc, scale) with the state in both is round(loc + round(scale * round(z))), wherever the draw is made."""
    kernel = """
    def kernel(rng, x, n):
        x = x + rng.standard_normal(n)
        return x, rng.normal(loc=x, scale=0.3 + x * x)
    """
    x, found = drawn(kernel, form, 1.0, PATHS)
    arithmetic = arithmetic_named(form)

    def apply(ufunc, *operands):
        return arithmetic.apply(ufunc, operands)

    z = arithmetic.cast(exact_normals(uniforms(1, Purpose.TRIAL, 0, 0, (2, PATHS))[1]))
    scale = apply(np.add, apply(np.multiply, x, x), arithmetic.constant(0.3))
    expected = apply(np.add, x, apply(np.multiply, scale, z))
    assert found.tobytes() == expected.tobytes()
    if form == "float64":
        assert found.tobytes() == (x + (0.3 + x * x) * z).tobytes()
    else:  # negative control: added up in float64 and rounded once it is something else
        once = arithmetic.cast(x.astype(np.float64) + scale.astype(np.float64) * z.astype(np.float64))
        assert (found != once).any()


@pytest.mark.parametrize("form", FORMS)
def test_uniform_exponential_lognormal_are_taken_apart(form):
    """uniform is low + (high - low) * u, exponential scale * e, lognormal exp(mean + sigma * z), rounded one by one."""
    kernel = """
    def kernel(rng, n):
        return rng.uniform(0.1, 0.7, n), rng.exponential(0.3, n), rng.lognormal(0.1, 0.2, n), rng.uniform(size=n)
    """
    a, b, c, d = drawn(kernel, form, PATHS)
    arithmetic = arithmetic_named(form)
    u = uniforms(1, Purpose.TRIAL, 0, 0, (4, PATHS))

    def constant(number):
        return arithmetic.constant(number)

    def apply(ufunc, *operands):
        return arithmetic.apply(ufunc, operands)

    unit = inside(arithmetic.cast(u[0]), arithmetic)
    assert a.tobytes() == apply(np.add, apply(np.multiply, unit, constant(0.7 - 0.1)), constant(0.1)).tobytes()
    assert b.tobytes() == apply(np.multiply, arithmetic.cast(-np.log1p(-u[1])), constant(0.3)).tobytes()
    moved = apply(np.add, apply(np.multiply, arithmetic.cast(exact_normals(u[2])), constant(0.2)), constant(0.1))
    assert c.tobytes() == apply(np.exp, moved).tobytes()
    assert d.min() > 0
    assert d.max() < 1


def test_what_a_draw_is():
    """Arrays are arrays of the state, single draws 0-d values, counts exact; plain NumPy's run has its own types."""
    kernel = """
    def kernel(rng):
        return (rng.normal(size=3), rng.normal(), rng.normal(0.1, 2.0), rng.random(), rng.poisson(2.0), rng.lognormal(),
                rng.poisson(2.0, 3), rng.integers(5), rng.gamma(2.0), rng.integers(5, size=2, dtype="int32"))
    """
    plain = Run(kernel, None)(tape_for())
    generator = np.random.default_rng(0)
    theirs = [type(value) for value in (
        generator.normal(size=3), generator.normal(), generator.normal(0.1, 2.0), generator.random(),
        generator.poisson(2.0), generator.lognormal(), generator.poisson(2.0, 3), generator.integers(5),
        generator.gamma(2.0), generator.integers(5, size=2, dtype="int32"),
    )]  # fmt: skip
    assert [type(value) for value in plain] == theirs
    for form in FORMS:
        found = Run(kernel, form)(tape_for())
        kinds = [Array, Scalar, Scalar, Scalar, Exact, Scalar, Exact, Exact, Scalar, Exact]
        assert [type(value) for value in found] == kinds
        assert bare(found[9]).dtype == np.int32
        if form == "float64":
            assert all(np.array_equal(one, other) for one, other in zip(bare(found), plain, strict=True))
            assert type(bare(found[1])) is float


def test_one_draw_for_many_parameters():
    """Without a size the parameters decide how many are drawn; a size that does not fit is NumPy's error."""
    kernel = """
    import numpy as np
    def kernel(rng, n):
        x = np.ones(n)
        return rng.normal(x, 0.5), rng.poisson(x + 1)
    """
    for form in (None, "float16"):
        values, counts = drawn(kernel, form, 6)
        assert values.shape == counts.shape == (6,)
        assert len(set(values.tolist())) > 1
        with pytest.raises(ValueError, match=r"Output size \(3,\) is not compatible with broadcast dimensions"):
            drawn("import numpy as np\ndef kernel(rng):\n    return rng.normal(np.ones((2, 3)), 1.0, 3)\n", form)
        with pytest.raises(ValueError, match="scale < 0"):
            drawn("def kernel(rng):\n    return rng.normal(0.0, -1.0)\n", form)
        with pytest.raises(ValueError, match="lam < 0 or lam is NaN"):
            drawn("def kernel(rng):\n    return rng.poisson(-1.0)\n", form)


COPIED = """
import copy, pickle
import numpy as np
def kernel(rng, how):
    first = rng.standard_normal(4)
    other = {"deepcopy": copy.deepcopy, "copy": copy.copy, "pickle": lambda g: pickle.loads(pickle.dumps(g)),
             "spawn": lambda g: g.spawn(2)[1], "default_rng": np.random.default_rng}[how](rng)
    return isinstance(other, np.random.Generator), first, other.standard_normal(4)
"""


@pytest.mark.parametrize("form", [None, "float64", "float16"])
@pytest.mark.parametrize("how", ["deepcopy", "copy", "pickle", "spawn", "default_rng"])
def test_copies_go_on_along_the_tape(how, form):
    """A copied, unpickled or spawned generator is one, draws what comes next on the tape, and a remark says so."""
    run = Run(COPIED, form)
    is_generator, first, second = run(tape_for(), how)
    assert is_generator
    z = exact_normals(uniforms(1, Purpose.TRIAL, 0, 0, (2, 4)))
    expected = z if form is None else arithmetic_named(form).cast(z)
    assert np.array_equal(bare([first, second]), expected)
    said = [text for _, text in run.feed.remarks]
    assert said == (
        ["a generator is copied: the copy draws further numbers of the same tape"]
        if how[0] in "cdp" and how != "default_rng"
        else []
    )


def test_they_are_what_numpy_says_they_are():
    """isinstance, NumPy's own classes and the namespace's, hasattr and repr answer as for NumPy's generators."""
    kernel = """
    import numpy as np
    def kernel(rng, plain):
        state = np.random.RandomState(3)
        bits = np.random.MT19937(3)
        return [isinstance(rng, plain.Generator), isinstance(rng, np.random.Generator),
                isinstance(state, plain.RandomState), isinstance(state, np.random.RandomState),
                isinstance(bits, plain.BitGenerator), isinstance(rng, np.random.RandomState),
                hasattr(rng, "standard_normal"), hasattr(rng, "randn"), hasattr(state, "randn"),
                hasattr(rng, "nothing"), isinstance(np.random.default_rng(state), np.random.Generator),
                type(rng) is np.random.Generator]
    """
    for form in (None, "float16"):
        found = Run(kernel, form)(tape_for(), np.random)
        assert found == [True, True, True, True, True, False, True, False, True, False, True, True]


REPEATS = {
    "one seed": "a, b = np.random.default_rng(1), np.random.default_rng(1)",
    "one sequence": "a, b = (np.random.default_rng(np.random.SeedSequence(1)) for _ in range(2))",
    "a copy": "a = np.random.default_rng(1); b = copy.deepcopy(a)",
    "an unpickled one": "a = np.random.default_rng(1); b = pickle.loads(pickle.dumps(a))",
    "bit generators": "a, b = (np.random.Generator(np.random.PCG64(9)) for _ in range(2))",
    "states": "a, b = np.random.RandomState(1), np.random.RandomState(1)",
}


@pytest.mark.parametrize("form", [None, "float16"])
@pytest.mark.parametrize("made", REPEATS.values(), ids=list(REPEATS))
def test_numbers_that_plain_numpy_repeats_are_refused(made, form):
    """Two generators that NumPy lets draw the same numbers are refused, with the line, if both draw."""
    kernel = (
        f"import copy, pickle\nimport numpy as np\ndef kernel(rng):\n    {made}\n"
        "    a.normal(size=3)\n    b.normal(size=3)\n"
    )
    with pytest.raises(
        RefusedError, match=r"nowhere/kernel.py:6: two generators of one seed, or a generator and its copy"
    ):
        drawn(kernel, form)
    drawn(kernel.replace("    a.normal(size=3)\n", ""), form)


@pytest.mark.parametrize("form", [None, "float16"])
def test_seeds_that_plain_numpy_repeats(form):
    """np.random.seed with one seed before each draw repeats the numbers, and is refused; other seeds are not."""
    kernel = (
        "import numpy as np\ndef kernel(rng):\n"
        "    for i in range(2):\n        np.random.seed(SEED)\n        np.random.normal()\n"
    )
    with pytest.raises(RefusedError, match=r"kernel.py:5: two generators of one seed"):
        drawn(kernel.replace("SEED", "3"), form)
    run = Run(kernel.replace("SEED", "i"), form)
    run(tape_for())
    ((place, text),) = run.feed.remarks
    assert (place.line, text) == (4, "a seed of np.random is ignored: the draws are those of the audit's own streams")


def test_states_are_ignored():
    """get_state and set_state around a run are accepted, with a remark."""
    kernel = """
    import numpy as np
    def kernel(rng):
        state = np.random.get_state()
        x = np.random.normal(size=2)
        np.random.set_state(state)
        return x, np.random.normal(size=2)
    """
    run = Run(kernel, "float16")
    first, second = bare(run(tape_for()))
    assert (first != second).all()
    assert [text for _, text in run.feed.remarks] == ["set_state of np.random is ignored: no draws are repeated"]


def test_draws_at_import_are_refused():
    """A draw made while the module is executed belongs to no path."""
    for form in (None, "float16"):
        with pytest.raises(RefusedError, match="normal is drawn while the module is executed, before a path begins"):
            Run("import numpy as np\nZ = np.random.normal(size=3)\n", form)


def test_a_generator_of_a_run_that_is_over():
    """A pickled generator is refused in another process, and when its run is gone."""
    run = Run("import pickle\ndef kernel(rng):\n    return pickle.dumps(rng)\n", None)
    text = run(tape_for())
    code = f"import pickle; pickle.loads({text!r})"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert "RefusedError: a pickled generator is loaded in another process, or after its run" in done.stderr
    assert isinstance(pickle.loads(text), np.random.Generator)
    del run
    gc.collect()
    with pytest.raises(RefusedError, match="or after its run"):
        pickle.loads(text)


COUNTED = "def kernel(rng, n):\n    for _ in range(n):\n        rng.normal(size=3)\n    return rng.{last}\n"


@pytest.mark.parametrize("form", [None, "float64", "float16"])
def test_other_requests_than_the_reference(form):
    """A run that asks more often, less often, or for something else than the first one on the tape is told so."""
    tape, run = tape_for(), Run(COUNTED.format(last="normal(size=2)"), form)
    run(tape, 2)
    with pytest.raises(TapeError, match=r"request 2 for random numbers is normal\(\), size \(3,\) where the ref"):
        run(tape, 3)
    with pytest.raises(TapeError, match=r"request 1 for random numbers is normal\(\), size \(2,\) where the reference"):
        run(tape, 1)
    other = Run(COUNTED.format(last="uniform(size=2)"), form)
    with pytest.raises(
        TapeError, match=r"request 2 for random numbers is uniform\(\), size \(2,\) where the reference has"
    ):
        other(tape, 2)
    swallowed = "def kernel(rng, n):\n    try:\n        rng.normal(size=5)\n    except Exception:\n        return 0.0\n"
    with pytest.raises(TapeError, match=r"kernel.py:3: request 0 for random numbers is normal\(\), size \(5,\)"):
        Run(swallowed, form)(tape, 2)
    short = "def kernel(rng, n):\n    rng.normal(size=3)\n"
    with pytest.raises(TapeError, match="asked 1 times for random numbers where the reference asked 3 times"):
        Run(short, form)(tape, 2)
    run(tape, 2)
    longer = Run("def kernel(rng, n):\n    [rng.normal(size=3 - k // 2) for k in range(4)]\n", form)
    with pytest.raises(TapeError, match="more often than the reference, which asked 3 times"):
        longer(tape, 2)


def test_copies_are_of_one_run():
    """Two copies of a kernel draw from their own tapes, and a generator at import follows its copy's run."""
    kernel = "import numpy as np\nG = np.random.default_rng(1)\ndef kernel(rng):\n    return G.normal(size=4)\n"
    one, other = Run(kernel, "float64"), Run(kernel, "float64")
    first, second = bare(one(tape_for(1))), bare(other(tape_for(2)))
    assert (first != second).all()
    assert np.array_equal(bare(one(tape_for(2))), second)
    assert copy.deepcopy(first).dtype == np.float64
    assert math.isfinite(first.sum())
