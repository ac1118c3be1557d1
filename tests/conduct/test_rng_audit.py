"""Audits of kernels that draw for themselves: sound ladders, remarks, and what stands in the record."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from audit_cases import audited, file_for, written
from scipy.stats import binom, chi2, norm

from narrowgauge.api import audit, run_audit, try_out
from narrowgauge.draws.layout import Layout, StepAxis
from narrowgauge.errors import KernelError, RefusedError
from narrowgauge.record.audit import TelescopingEntry

FALSE_ALARM = 1e-6
RNG = {"kernel": {"takes": '"rng"'}}
HEAD = "import numpy as np\n\ndef value(rng, h, *, steps, paths):\n"
KERNELS = {
    "gbm, np.random": """    x = np.ones(paths)
    for i in range(steps):
        x = x + x * np.random.normal(0.05 * h, 0.2 * np.sqrt(h), size=paths)
    return x
""",
    "mean reversion, the state in the draw": """    x = np.ones(paths)
    for i in range(steps):
        x = rng.normal(loc=x + 1.5 * (0.2 - x) * h, scale=0.3 * np.sqrt(h))
    return x
""",
    "two factors, ahead": """    z = np.random.default_rng(7).standard_normal((steps, 2, paths))
    x, v = np.ones(paths), np.full(paths, 0.04)
    for a, b in z:
        v = np.maximum(v, 0.0)
        x, v = x + x * np.sqrt(v * h) * a, v + (0.04 - v) * h + 0.3 * np.sqrt(v * h) * (0.6 * b - 0.8 * a)
    return x
""",
    "compound jumps": """    x = np.zeros(paths)
    for i in range(steps):
        n = rng.poisson(2.0 * h, size=paths)
        x = x + 0.05 * n + 0.1 * np.sqrt(n) * rng.standard_normal(paths) - 0.1 * h
    return np.exp(x)
""",
    "variance gamma": """    g = rng.gamma(h / 0.2, 0.2, size=(steps, paths))
    z = rng.standard_normal((steps, paths))
    x = np.zeros(paths)
    for i in range(steps):
        x = x - 0.1 * g[i] + 0.2 * np.sqrt(g[i]) * z[i]
    return np.exp(x)
""",
    "uniforms and exponentials": """    x = np.ones(paths)
    for i in range(steps):
        x = x + 0.1 * np.sqrt(h) * (rng.uniform(-1.0, 1.0, paths) + rng.exponential(1.0, paths) - 1.0)
    return x
""",
}


def levels_of(folder: Path, body: str, seed: int) -> list[TelescopingEntry]:
    """How the levels of a small audit telescope."""
    result = run_audit(file_for(folder, HEAD + body, **RNG, ladder={"finest": "3"}, sampling={"seed": str(seed)}), None)
    entries = [level.telescoping for level in result.record.quantities["value"].levels]
    return [entry for entry in entries if entry is not None]


@pytest.mark.parametrize("body", KERNELS.values(), ids=list(KERNELS))
def test_the_ladder_telescopes(tmp_path: Path, body: str) -> None:
    """Each coarse path has the law of the fine path below: no audit is flagged oftener than at 3.3 standard errors.

    Levels 1 to 3 of 6 audits, levels 2 and 3 of independent means: difference / se has mean square 1 by the normal
    approximation, so that the sum of squares of 18 stays below the chi-square bound of false alarm 1e-6 times 3, as at
    most three of one audit can move together. Negative control: the scores with three standard errors added fail.
    """
    found = [entry for seed in range(6) for entry in levels_of(tmp_path, body, seed)]
    scores = np.array([(one.difference or 0.0) / (one.se or math.nan) for one in found])
    high = 3 * chi2.isf(FALSE_ALARM, 6)
    assert float(scores @ scores) < high
    assert float((scores + 3) @ (scores + 3)) > high
    assert sum(not one.sound for one in found) <= binom.isf(FALSE_ALARM, scores.size, 2 * norm.sf(3.3))


def test_a_coarse_path_on_repeated_draws_is_found(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Negative control of the coupling: one fine draw taken M times for a coarse one doubles the coarse variance.

    The mean of x^2 is 1 and 2, of standard deviation 2.8 at most in 1,024 paths or more: 11 standard errors.
    """
    body = """    x = np.zeros(paths)
    for i in range(steps):
        x = x + np.sqrt(h) * rng.normal(size=paths)
    return x * x
"""
    assert all(one.sound for one in levels_of(tmp_path, body, 1))
    right = Layout.sources

    def repeated(layout: Layout, place: int, steps: int, refinement: int) -> tuple[list[int], StepAxis | None]:
        places, axis = right(layout, place, steps, refinement)
        return [places[0]] * len(places), axis

    monkeypatch.setattr(Layout, "sources", repeated)
    assert not any(one.sound for one in levels_of(tmp_path, body, 1))


def test_the_record(tmp_path: Path) -> None:
    """A record holds the factors that were worked out, and reads back; levels are coupled and differences small."""
    result = audited(tmp_path, HEAD + KERNELS["two factors, ahead"], **RNG)
    record = result.record
    assert record.asked["kernel"]["takes"] == "rng"
    assert record.asked["kernel"]["factors"] == 2
    assert record.asked["kernel"]["coupling"] == "sum"
    assert record.verdict.sound
    assert record.reach.remarks == []
    assert record.reach.rounded > 0
    levels = record.quantities["value"].levels
    variances = [level.arms["float64"].level_variance for level in levels]
    assert all(variance is not None for variance in variances)
    assert max(variances[1:]) < variances[0] / 4


def test_the_same_figures_as_a_kernel_that_gets_normals(tmp_path: Path) -> None:
    """The audit of a kernel that draws a step's normals says what the audit of one that takes them says, bit by bit."""
    loop = "        x = x + 0.05 * h * x + 0.2 * np.sqrt(h) * x * {}\n    return x\n"
    own = HEAD + "    x = np.ones(paths)\n    for i in range(steps):\n" + loop.format("rng.standard_normal(paths)")
    given = "import numpy as np\n\ndef value(z, h):\n    x = np.ones(z.shape[1])\n    for w in z:\n" + loop.format("w")
    found, expected = (
        audited(tmp_path, source, kernel={"takes": takes}).record
        for source, takes in ((own, '"rng"'), (given, '"normals"'))
    )
    assert found.quantities == expected.quantities
    assert found.verdict == expected.verdict


def test_levels_that_are_not_coupled(tmp_path: Path) -> None:
    """Where time cannot be told the audit goes on level by level, and the record says so and why."""
    body = """    z = rng.normal(size=(steps + 1, paths))
    x = z[0]
    for i in range(steps):
        x = x + np.sqrt(h) * z[i + 1]
    return x
"""
    record = audited(tmp_path, HEAD + body, **RNG).record
    assert record.asked["kernel"]["coupling"] == "none"
    assert record.reach.remarks == [
        "the levels are not coupled: axis 0 of a size is no multiple of the steps (2 with 1, 3 with 2, 5 with 4). Each "
        "level is measured and judged by itself, without differences between levels"
    ]
    assert all(level.telescoping is None for level in record.quantities["value"].levels)
    again = run_audit(file_for(tmp_path, HEAD + body, **RNG), tmp_path / "out", replace=False)
    assert again.record.quantities == record.quantities  # the folder is known again


def test_remarks_have_file_and_line(tmp_path: Path) -> None:
    """Draws that depend on the state, and seeds, are said with the line, also by `try`."""
    body = """    np.random.seed(3)
    x = np.ones(paths)
    for i in range(steps):
        x = x + 0.1 * rng.poisson(x * h) - 0.1 * h
    return x
"""
    expected = [
        "kernel.py:4: a seed of np.random is ignored: the draws are those of the audit's own streams",
        "kernel.py:7: a parameter of poisson depends on the state: the draw is computed in float64 from its value",
    ]
    record = audited(tmp_path, HEAD + body, **RNG).record
    assert record.reach.remarks[1:] == expected  # the first: jumps of a rate that depends on the state draw no closer
    assert record.verdict.sound
    tried = try_out(file_for(tmp_path, HEAD + body, **RNG))
    assert tried.identical
    assert tried.faults == []
    assert tried.reach.remarks[1:] == expected


def test_a_narrow_arm_that_draws_otherwise(tmp_path: Path) -> None:
    """A number of draws that depends on a rounded value ends `try` and the audit with level, arm and line."""
    body = """    x = np.full(paths, 1.0)
    for i in range(steps):
        x = x + 0.001 * rng.normal(size=paths)
    if x[0] != 1.0:
        x = x + rng.normal(size=paths)
    return x
"""
    file = file_for(tmp_path, HEAD + body, kernel={"takes": '"rng"', "coupling": '"none"'})
    words = r"level 2, arm bfloat16: the kernel asked 4 times for random numbers where the reference asked 5 times"
    with pytest.raises(KernelError, match=words):
        try_out(file)
    with pytest.raises(KernelError, match=r"arm bfloat16: the kernel asked \d times for random numbers where"):
        run_audit(file, None)


GENERATOR = np.random.default_rng(3)


def handed_over(rng, h, *, steps, paths, draw=GENERATOR.standard_normal):  # type: ignore[no-untyped-def]
    """Uses a generator of its module, a bound method, and a function of np.random."""
    x = np.ones(paths)
    for _ in range(steps):
        x = x + 0.1 * np.sqrt(h) * (draw(paths) + GENERATOR.normal(size=paths) + np.random.rand(paths))  # noqa: NPY002  # as users do
    return x


def test_a_function_handed_over() -> None:
    """A function from Python draws from the tape, whatever generator it reaches; NumPy's own stay as they are."""
    before = GENERATOR.bit_generator.state, np.random.get_state()[1].tolist()  # noqa: NPY002  # what must not move
    asked = {
        "kernel": {"run": handed_over, "takes": "rng"},
        "ladder": {"horizon": 1.0, "finest": 2},
        "sampling": {"block": 1024, "paths": 1024, "most_paths": 1024},
    }
    record = audit(asked, quiet=True).record
    assert record.asked["kernel"]["factors"] == 3
    assert record.verdict.sound
    assert record.quantities["value"].levels[2].arms["float16"].error_variance
    assert (GENERATOR.bit_generator.state, np.random.get_state()[1].tolist()) == before  # noqa: NPY002


def test_draws_in_a_listed_module(tmp_path: Path) -> None:
    """A module of the kernel's that draws for itself is on the tape when it is listed."""
    (tmp_path / "noise.py").write_text(
        "import numpy as np\n_RNG = np.random.RandomState(1)\ndef noise(n):\n    return _RNG.normal(size=n)\n",
        encoding="utf-8",
    )
    source = (
        "import numpy as np\nfrom noise import noise\n\ndef value(_, h, *, steps, paths):\n    x = np.ones(paths)\n"
        "    for i in range(steps):\n        x = x + 0.2 * np.sqrt(h) * noise(paths)\n    return x\n"
    )
    record = audited(tmp_path, source, kernel={"takes": '"rng"', "modules": '["noise"]'}).record
    assert record.verdict.sound
    assert record.quantities["value"].levels[2].arms["float16"].error_variance


def test_other_takes_refuse_numpy_random(tmp_path: Path) -> None:
    """A kernel that takes an array of draws has no random numbers of its own."""
    source = "import numpy as np\n\ndef value(dW, h):\n    return dW[0] + np.random.normal(0.0, 0.0, dW.shape[1])\n"
    with pytest.raises(RefusedError, match=r"numpy.random.normal is not offered by this version: the kernel takes its"):
        run_audit(file_for(tmp_path, source), None)


def test_pythons_own_random_is_refused(tmp_path: Path) -> None:
    """Python's `random` is refused with file and line whatever the kernel takes."""
    body = "    import random\n    return rng.normal(size=(steps, paths)).max(axis=0) + random.gauss(0.0, 0.0)\n"
    with pytest.raises(RefusedError, match=r"kernel.py:5: random.gauss is not offered by this version"):
        run_audit(file_for(tmp_path, HEAD + body, **RNG), None)
    assert written(tmp_path, "x = 1\n").name == "kernel.py"
