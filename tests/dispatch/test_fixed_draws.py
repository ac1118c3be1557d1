"""Generators in the modules of a kernel that is handed its draws: constants at import, refused at a draw in a run."""

from __future__ import annotations

import random

import numpy as np
import pytest
from kernel_runs import FILE, module_of, owned, same, unheld
from private_packages import copied, written

from narrowgauge.dispatch.setting import Wrapped
from narrowgauge.errors import RefusedError

DRAWS = np.array([0.2, 1.4, 0.75])
NO_DRAWS = (
    "is not offered by this version: the kernel takes its random numbers as its first argument, "
    "so that every format sees the same"
)
# What modules do with generators that their kernel never draws from.
UNUSED = [
    "np.random.seed(0)",
    "RNG = np.random.default_rng(1)",
    "RNG = np.random.default_rng()",
    "import random; random.seed(1)",
    "def other(n, rng=np.random.default_rng(1)): return rng.normal(size=n)",
    "from numpy.random import RandomState; draw = RandomState(3).normal",
    "from random import Random; R = Random()",
    "RNG = np.random.Generator(np.random.Philox(3)).spawn(2)[0]",
    "import copy; RNG = copy.deepcopy(np.random.default_rng(1))",
    "class Model:\n    def __init__(self, seed=3): self.rng = np.random.default_rng(seed)\nMADE = Model()",
    "draw = np.random.normal",
]
# What a module draws at import from a seeded generator: every copy gets the numbers that plain NumPy gets.
SEEDED = {
    "a generator": "np.random.default_rng(1).normal(size=3)",
    "a number": "np.random.default_rng(1).normal()",
    "all of NumPy": "(np.random.seed(3), np.random.rand(3))[1]",
    "another name": "(np.random.seed(3), np.random.ranf(3))[1]",
    "a state": "np.random.RandomState(3).standard_normal(3)",
    "bits": "np.random.Generator(np.random.PCG64(3)).uniform(size=3)",
    "a sequence": "np.random.default_rng(np.random.SeedSequence(5).spawn(2)[1]).random(3)",
    "a child": "np.random.default_rng(3).spawn(2)[1].random(3)",
    "a jump": "np.random.Generator(np.random.MT19937(3).jumped()).random(3)",
    "a copy": "copy.deepcopy(np.random.default_rng(3)).random(3)",
    "a generator handed on": "np.random.default_rng(np.random.default_rng(3)).random(3)",
    "a generator of a generator": "np.random.Generator(np.random.default_rng(3).bit_generator).random(3)",
    "Python's": "(random.seed(3), [random.gauss(0, 1) for _ in range(3)])[1]",
    "one of Python's": "[random.Random(3).gauss(0, 1), 0.1, 0.2]",
    "integers": "np.random.default_rng(3).integers(0, 9, 3)",
}
UNSEEDED = {
    "np.random.default_rng().normal()": "Generator.normal",
    "np.random.default_rng(None).normal()": "Generator.normal",
    "np.random.RandomState().rand()": "RandomState.rand",
    "np.random.rand(3)": "numpy.random.rand",
    "(np.random.seed(1), np.random.seed(), np.random.rand(3))": "numpy.random.rand",
    "np.random.Generator(np.random.PCG64()).random()": "Generator.random",
    "np.random.default_rng(np.random.SeedSequence()).random()": "Generator.random",
    "np.random.default_rng(np.random.SeedSequence().spawn(1)[0]).random()": "Generator.random",
    "np.random.default_rng().spawn(1)[0].random()": "Generator.random",
    "random.random()": "random.random",
    "random.Random().random()": "Random.random",
}


@pytest.mark.parametrize("text", UNUSED)
def test_a_generator_that_the_kernel_never_draws_from_is_no_matter(text):
    """Made, seeded or handed on at import, and made in a run, in plain NumPy and in a format."""
    inside = "\n    ".join(text.split("\n")) if "import" not in text else "pass"
    source = f"import numpy as np\n{text}\ndef kernel(x):\n    {inside}\n    return x * 0.3\n"
    for form in (None, "float16"):
        module, setting = module_of(source, form)
        result = module.kernel(owned(DRAWS, setting))
        assert setting is None or (setting.faults == [] and unheld(result, setting) == [])


@pytest.mark.parametrize("name", SEEDED)
def test_numbers_of_a_seeded_generator_at_import_are_constants(name):
    """Each copy has the numbers of plain NumPy, rounded where they meet the state; float64 gives plain bits."""
    source = f"import copy, random\nimport numpy as np\nA = {SEEDED[name]}\ndef kernel(x): return np.asarray(A) * x\n"
    plain = module_of(source)[0].kernel(DRAWS)
    for form in ("float64", "float16"):
        module, setting = module_of(source, form)
        assert isinstance(module.A, (float, list, Wrapped, np.ndarray))
        result = module.kernel(owned(DRAWS, setting))
        assert setting.faults == []
        assert unheld(result, setting) == []
        assert form != "float64" or same(plain, result)


@pytest.mark.parametrize("text", UNSEEDED)
def test_numbers_without_a_seed_at_import_are_refused(text):
    """They would differ from copy to copy; in a run they are refused like all others."""
    with pytest.raises(RefusedError) as raised:
        module_of(f"import random\nimport numpy as np\nA = {text}\n", "float16")
    assert str(raised.value) == (
        f"{FILE}:3: {UNSEEDED[text]} draws while the module is executed, without a seed: "
        "each format would get other numbers; accepted: a generator with a seed"
    )


def test_a_draw_in_a_run_is_refused_where_it_happens(tmp_path):
    """Also through a listed module's generator, one handed in by default, and after the kernel seeded it."""
    helper = "import numpy as np\nRNG = np.random.default_rng(3)\ndef noise(rng=RNG): return rng.normal()\n"
    text = """
        import numpy as np
        import helper
        A = helper.noise()
        def listed(x):
            return helper.noise() * x
        def seeded(x):
            np.random.seed(1)
            return np.random.normal() * x
    """
    written(tmp_path, {"helper.py": helper, "kernel.py": text})
    module, copies = copied(tmp_path, "float16", ["helper"])
    plain, _ = copied(tmp_path, None, ["helper"])
    assert module.A == plain.A
    x = owned(DRAWS, copies.setting)
    for function, words in (
        (module.listed, f"{tmp_path.resolve() / 'helper.py'}:3: Generator.normal {NO_DRAWS}"),
        (module.seeded, f"{tmp_path.resolve() / 'kernel.py'}:9: numpy.random.normal {NO_DRAWS}"),
    ):
        with pytest.raises(RefusedError) as raised:
            function(x)
        assert str(raised.value) == words
    assert len(copies.setting.faults) == 2


def test_a_held_generator_passes_for_a_generator():
    """isinstance, type and the checks of libraries answer as in plain code, its state can be read and set."""
    text = """
        import numpy as np, random
        RNG, OLD, PY = np.random.default_rng(3), np.random.RandomState(3), random.Random(3)
        ANSWERS = [isinstance(RNG, np.random.Generator), type(RNG) is np.random.Generator, hasattr(RNG, "nothing"),
                   isinstance(OLD, np.random.RandomState), isinstance(PY, random.Random), type(PY) is random.Random,
                   isinstance(RNG.bit_generator, np.random.BitGenerator), np.random.default_rng(RNG) is RNG,
                   np.random.mtrand._rand is not None, RNG.normal.__name__]
        FRESH = np.random.default_rng()
        FRESH.bit_generator.state = RNG.bit_generator.state
        OTHER = np.random.RandomState()
        OTHER.set_state(OLD.get_state())
        A = OTHER.normal()
        PY.setstate(random.Random(4).getstate())
        B = PY.random()
    """
    plain, emulated = module_of(text)[0], module_of(text, "float16")[0]
    assert emulated.ANSWERS == plain.ANSWERS
    assert (emulated.A, emulated.B) == (plain.A, plain.B)


def test_the_users_own_generators_do_not_move():
    """Seeds and draws of a module at import, and in plain NumPy's run, are those of generators of its own."""
    before = np.random.get_state()[1].tolist(), random.getstate()  # noqa: NPY002  # what must not move
    text = (
        "import random\nimport numpy as np\nnp.random.seed(0)\nrandom.seed(0)\nA = np.random.rand(), random.random()\n"
    )
    drawn = [module_of(text, form)[0].A for form in (None, "float16", None)]
    assert drawn[0] == drawn[1] == drawn[2]
    module_of("import numpy as np\ndef kernel(x): return x + np.random.rand()\n")[0].kernel(DRAWS)
    assert (np.random.get_state()[1].tolist(), random.getstate()) == before  # noqa: NPY002
