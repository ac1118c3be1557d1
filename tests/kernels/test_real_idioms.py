"""Idioms of kernels as people write them: rounded operation by operation, or refused; never silently wrong."""

from __future__ import annotations

import re
import subprocess
import sys
import types
from pathlib import Path

import numpy as np
import pytest
from escapes import CLOSED, ESCAPES, FOREIGN, HEAD
from idiom_runs import Bench, Count, drawn, rounding
from idioms import IDIOMS
from scipy import stats

from narrowgauge.api import try_out
from narrowgauge.draws.tape import TapeError
from narrowgauge.kernel.auditfile import audit_file_from

STEPWISE = "[rng.standard_normal(48) for _ in range(4)]"


@pytest.mark.parametrize("form", ["float64", "float16", "bfloat16"])
@pytest.mark.parametrize("name", IDIOMS)
def test_an_idiom_is_rounded_operation_by_operation(tmp_path: Path, name: str, form: str) -> None:
    """In 16 bits each value is the one of an independent rounding after every operation; float64 has plain bits."""
    bench, r = Bench(tmp_path, IDIOMS[name].text), rounding(form)
    plain, found = bench.run(None), bench.run(form)
    block, steps = (r(drawn(tmp_path, asked)) for asked in ("rng.standard_normal((4, 48))", STEPWISE))
    expected = IDIOMS[name].expected(r, block, steps)
    assert np.array_equal(found, expected)
    assert (found.tobytes() == plain.tobytes()) == (form == "float64")


@pytest.fixture
def foreign(tmp_path, monkeypatch):
    """A module that is not listed, on Python's path; forgotten afterwards."""
    folder = tmp_path / "apart"
    folder.mkdir()
    (folder / "unlisted_tools.py").write_text(FOREIGN, encoding="utf-8")
    monkeypatch.syspath_prepend(folder)
    yield folder
    sys.modules.pop("unlisted_tools", None)


@pytest.mark.parametrize("form", ["float16", "bfloat16"])
@pytest.mark.parametrize("name", ESCAPES)
def test_a_way_out_is_caught(tmp_path: Path, foreign: Path, name: str, form: str) -> None:
    """What would leave the arithmetic, or cannot be rounded, is an error with file, line and reason, word for word."""
    case = ESCAPES[name]
    bench = Bench(tmp_path, f"{HEAD}{case.statement}\n    return x\n")
    with pytest.raises(case.kind) as raised:
        bench.run(form)
    file, line = case.place.split(":")
    assert str(raised.value) == f"{tmp_path / file}:{line}: {case.words.format(form=form)}"


@pytest.mark.parametrize("form", ["float16", "bfloat16", "float64"])
@pytest.mark.parametrize("statement", CLOSED)
def test_a_way_that_is_closed_by_itself(tmp_path: Path, foreign: Path, statement: str, form: str) -> None:
    """It raises in every format, while plain NumPy goes on: the identity run says so."""
    kind, words = CLOSED[statement]
    bench = Bench(tmp_path, f"{HEAD}{statement}\n    return x\n")
    with pytest.raises(kind, match="^" + re.escape(words)):
        bench.run(form)


SOUND = "import numpy as np\ndef kernel(rng, h):\n    x = rng.standard_normal(48)\n"


def test_the_number_of_draws_depends_on_the_state(tmp_path: Path) -> None:
    """A format that asks for other draws than plain NumPy did is an error that says how they differ."""
    body = "    for i in range(40):\n        x = x + 1e-3 * rng.standard_normal(48)\n        if x[0] == x[1]:\n"
    bench = Bench(tmp_path, SOUND + "    x = 100 + 0 * x + 1e-3 * x\n" + body + "            break\n    return x\n")
    bench.run(None)
    assert bench.run("float64").shape == (48,)
    with pytest.raises(TapeError, match=r"the kernel asked \d+ times for random numbers where the reference asked 41"):
        bench.run("bfloat16")


def test_decisions_on_the_state_are_counted(tmp_path: Path) -> None:
    """Each branch that asks a value of the state is one decision; a test of the time grid is none."""
    text = IDIOMS["a branch on the state"].text
    for source, expected in ((text, 8), (IDIOMS["time that adds up to a test on the grid"].text, 0)):
        count = Count()
        Bench(tmp_path, source).run("float16", count)
        assert count.decisions == expected


def test_a_constant_that_is_nothing_in_a_format(tmp_path: Path) -> None:
    """A guard of 1e-8 rounds to zero in float16, so that a quotient it protects is infinite; bfloat16 keeps it."""
    text = SOUND + "    x[0] = 0.0\n    return 1.0 / (np.abs(x) + 1e-8)\n"
    assert np.isinf(Bench(tmp_path, text).run("float16")[0])
    r = rounding("bfloat16")
    assert Bench(tmp_path, text).run("bfloat16")[0] == r(1 / r(1e-8))


def test_a_difference_quotient_cancels(tmp_path: Path) -> None:
    """With a step of 1e-3 in float16 a derivative of x * x is wrong by a tenth or more: that is the finding.

    Half a unit in the last place of values up to 4 is 2^-10; two of them over 2e-3 are about 1.
    """
    text = SOUND + "    x = 1.0 + np.abs(np.sin(x))\n    return ((x + 1e-3) * (x + 1e-3) - x * x) / 1e-3\n"
    plain, found = Bench(tmp_path, text).run(None), Bench(tmp_path, text).run("float16")
    assert 0.1 < np.abs(found - plain).max() < 4


TYPED = "import numpy as np\ndef kernel(dW, h):\n    x = dW.sum(axis=0)\n    return x * 0.1 if {asked} else x * 0.2\n"


@pytest.mark.parametrize(
    "asked", ["type(x) == np.ndarray", "type(x) is np.ndarray", "type(x[0]) in (float, np.float64)", "type(x) is list"]
)
def test_a_question_by_type_is_answered_as_in_plain_numpy(tmp_path: Path, asked: str) -> None:
    """type() of a value of the state gives the type of the plain one, so that the same branch is taken."""
    (tmp_path / "kernel.py").write_text(TYPED.format(asked=asked), encoding="utf-8")
    table = {"run": f"{tmp_path / 'kernel.py'}:kernel", "takes": "increments"}
    assert try_out(audit_file_from({"kernel": table, "ladder": {"horizon": 1.0, "finest": 1}})).identical


STANDS_FOR_NUMBA = """
class Dispatcher:
    def __init__(self, f): self.py_func = f
    def __call__(self, *given): raise AssertionError("compiled code was called")
def njit(f=None, **options): return Dispatcher(f) if f else Dispatcher
"""


def test_numba_runs_through_the_function_underneath(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A kernel under a decorator of numba is rounded as the same kernel without it; its compiled code is not called."""
    loop = "def walk(z):\n    x = np.ones(48)\n    for i in range(4):\n        x = x + 0.1 * z[i]\n    return x\n"
    last = "def kernel(rng, h):\n    return walk(rng.standard_normal((4, 48)))\n"
    stands = types.ModuleType("numba")
    exec(STANDS_FOR_NUMBA, vars(stands))
    monkeypatch.setitem(sys.modules, "numba", stands)
    decorated = Bench(tmp_path, "import numpy as np\nfrom numba import njit\n@njit(cache=True)\n" + loop + last)
    found = decorated.run("float16")
    assert np.array_equal(found, Bench(tmp_path, "import numpy as np\n" + loop + last).run("float16"))


def test_variates_around_the_state_and_vectors(tmp_path: Path) -> None:
    """A centre of the state is rounded like any other sum and remarked on; vectors are those of the generator."""
    head = "import numpy as np\nfrom scipy import stats\ndef kernel(rng, h):\n    x = np.ones(48)\n"
    loop = "    for i in range(4):\n        x = stats.norm.rvs(loc=x + (0.2 - x) * h, scale=0.3, size=48)\n"
    text = head + loop + "    return x\n"
    bench, plainly = Bench(tmp_path, text), IDIOMS["the state inside a draw"].text
    found = bench.run("float16")
    said = "a parameter of scipy.stats.norm.rvs depends on the state: it enters by its value"
    assert [(place.line, words) for place, words in bench.feed.remarks if place] == [(6, said)]
    assert np.array_equal(found, Bench(tmp_path, plainly).run("float16"))
    both = [
        Bench(tmp_path, head + f"    return {call}([0.5, 0.1], [[4.0, 0.0], [0.0, 1.0]], 48)[:, 1] * x\n").run(
            "float16"
        )
        for call in ("stats.multivariate_normal.rvs", "np.random.multivariate_normal")
    ]
    assert np.array_equal(*both)


@pytest.mark.parametrize("form", ["float64", "float16", "bfloat16"])
def test_a_buffer_of_objects_keeps_what_it_holds(tmp_path: Path, form: str) -> None:
    """Arrays of the state in an array of objects stay what they are, and None fills a plain one."""
    body = "    b, none = np.empty(2, dtype=object), np.full(2, None)\n    for i in range(2):\n        b[i] = 0.1 * x\n"
    bench = Bench(tmp_path, SOUND + body + "    return b[0] + b[1] if none[0] is None else x\n")
    plain, r = bench.run(None), rounding(form)
    assert np.array_equal(bench.run(form), 2 * r(r(0.1) * r(drawn(tmp_path, "rng.standard_normal(48)"))))
    assert plain.size == 48


FRESH = """
import sys
from pathlib import Path
sys.path.insert(0, sys.argv[1])
from idiom_runs import Bench
assert "scipy.stats" not in sys.modules and "scipy.ndimage" not in sys.modules
bench = Bench(Path(sys.argv[2]), sys.argv[3])
assert bench.run(None).shape == bench.run("float16").shape == (48,)
"""


@pytest.mark.parametrize(
    "spelled", ["from scipy import stats, ndimage", "import scipy\nstats, _ = scipy.stats, scipy.ndimage"]
)
def test_scipy_is_met_for_the_first_time_by_a_kernel(tmp_path: Path, spelled: str) -> None:
    """What SciPy imports when one of its packages is first looked up is not taken for a change by the kernel."""
    text = f"{spelled}\ndef kernel(rng, h):\n    return stats.norm.rvs(size=48)\n"
    asked = [sys.executable, "-c", FRESH, str(Path(__file__).parent), str(tmp_path), text]
    done = subprocess.run(asked, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def handed(rng, h, *, steps, paths, law=stats.norm):
    """Draws from a distribution that is a default argument, and from one of its module."""
    return law.rvs(size=paths) + 0.1 * stats.expon(scale=h).rvs(paths, random_state=3)


def test_variates_of_a_function_that_is_handed_over() -> None:
    """Distributions that a function reaches from Python draw from the tape too, and SciPy's own stay as they are."""
    before = np.random.get_state()[1].tolist()  # noqa: NPY002  # what must not move
    asked = {"kernel": {"run": handed, "takes": "rng"}, "ladder": {"horizon": 1.0, "finest": 1}}
    tried = try_out(audit_file_from(asked))
    assert tried.identical
    assert tried.faults == []
    assert np.random.get_state()[1].tolist() == before  # noqa: NPY002
