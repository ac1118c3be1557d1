"""Blocks of kernels that draw for themselves: the figures of kernels that get the draws, and what is refused."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from block_cases import PATHS, file_for, runner_for, same, written

from narrowgauge.draws.layout import Layout, StepAxis
from narrowgauge.errors import AuditFileError, KernelError, RefusedError
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.drawplan import DrawPlan, plan_draws, worked_out

RNG = {"takes": "rng"}
BY_STEP = Layout(before=0, period=1, after=0, axes=())

# The time loop on z, shape (steps, paths) or (steps, 2, paths); `SOURCE` makes it or takes it from the argument.
GBM = """
import numpy as np
{top}
def value({head}, *, r=0.05, s=0.2{extra}):
    {make}
    x = np.ones({paths})
    for i in range({steps}):
        x = x + r * h * x + s * np.sqrt(h) * x * {z}
    return {{"up": x > 1.0, "call": np.maximum(x - 1.0, 0.0)}}
"""
HESTON = """
import numpy as np
{top}
def value({head}{extra}):
    {make}
    x, v = np.ones({paths}), np.full({paths}, 0.04)
    for i in range({steps}):
        a, b = {z}
        v = np.maximum(v, 0.0)
        x, v = x + x * np.sqrt(v * h) * a, v + (0.04 - v) * h + 0.3 * np.sqrt(v * h) * (0.6 * b - 0.8 * a)
    return x
"""
OU = """
import numpy as np
{top}
def value({head}{extra}):
    {make}
    x = np.ones({paths})
    for i in range({steps}):
        x = x + 1.5 * (0.2 - x) * h + 0.3 * np.sqrt(h) * {z}
    return x
"""
GIVEN = {"top": "", "head": "z, h", "extra": "", "make": "pass", "paths": "z.shape[-1]", "steps": "len(z)", "z": "z[i]"}
OWN = {"head": "rng, h", "extra": ", steps, paths", "paths": "paths", "steps": "steps"}
STYLES = {  # top of the module, line before the loop, z(i) for one factor, z(i) for two
    "by step": ("", "pass", "rng.standard_normal(paths)", "rng.normal(size=(2, paths))"),
    "ahead": ("", "z = rng.standard_normal(SIZE)", "z[i]", "z[i]"),
    "global": ("", "pass", "np.random.randn(paths)", "(np.random.normal(size=paths), np.random.normal(size=paths))"),
    "inside": ("", "g = np.random.default_rng(1)", "g.normal(0.0, 1.0, paths)", "g.normal(0.0, 1.0, (2, paths))"),
    "state": ("", "g = np.random.RandomState(1)", "g.randn(paths)", "g.randn(2, paths)"),
    "import": ("G = np.random.default_rng(1)", "pass", "G.normal(size=paths)", "G.normal(size=(2, paths))"),
}


def own(process: str, style: str) -> str:
    """A kernel that draws for itself."""
    top, make, one, two = STYLES[style]
    size = "(steps, 2, paths)" if process is HESTON else "(steps, paths)"
    return process.format(top=top, make=make.replace("SIZE", size), z=two if process is HESTON else one, **OWN)


@pytest.mark.parametrize("style", STYLES)
@pytest.mark.parametrize("process", [GBM, OU, HESTON], ids=["gbm", "ou", "heston"])
def test_the_figures_of_a_kernel_that_gets_normals(tmp_path: Path, process: str, style: str) -> None:
    """P, E, D, R of all arms, fine and coarse, are bit by bit those of the kernel that takes the same normals.

    Both run on one stream of uniforms: by step, and (steps, paths) or (steps, factors, paths) ahead, in the same order.
    """
    factors = 2 if process is HESTON else 1
    expected = runner_for(tmp_path, process.format(**GIVEN), kernel={"takes": "normals", "factors": factors})
    tallies = [expected.run(level, 1) for level in (0, 1, 2)]
    found = runner_for(tmp_path, own(process, style), kernel=RNG)
    for level, tally in enumerate(tallies):
        assert same(found.run(level, 1), tally)
    assert tallies[2].quantities[next(iter(tallies[2].quantities))].errors["float16"].events


PLANS = {
    "rng.normal(size=paths)": DrawPlan(factors=1, layout=BY_STEP, remarks=()),
    "rng.normal(size=paths) + rng.poisson(0.1 * h, paths) + rng.random(paths)": DrawPlan(
        factors=3, layout=Layout(before=0, period=3, after=0, axes=()), remarks=()
    ),
    "rng.normal(size=(paths, 3)).sum(axis=1)": DrawPlan(factors=3, layout=BY_STEP, remarks=()),
    "np.concatenate([(z := rng.normal(size=paths // 2)), -z])": DrawPlan(
        factors=1,
        layout=BY_STEP,
        remarks=(
            "paths share draws, or take them in parts: for 1024 paths the kernel asks for normal(), size (512,). "
            "Intervals take paths for independent, which antithetic ones are not",
        ),
    ),
}
PLANNED = "import numpy as np\ndef value(rng, h, *, steps, paths):\n{}    return x\n"
NO_CLOSER = "fine and coarse paths draw no closer as the steps get finer"
LOOP = "    x = np.zeros(paths)\n    for i in range(steps):\n        x = x + {}\n"


def plan_of(folder: Path, body: str, **ladder: object) -> DrawPlan:
    """The plan of a kernel with this body, without what it says of noise that is not scaled by the step."""
    file = file_for(written(folder, PLANNED.format(body)), {"kernel": RNG, "ladder": ladder})
    plan = plan_draws(file, find_kernel(file))
    return replace(plan, remarks=tuple(one for one in plan.remarks if not one.startswith(NO_CLOSER)))


@pytest.mark.parametrize("expression", [e for e in PLANS if "axis" not in e])
def test_plans_by_step(tmp_path: Path, expression: str) -> None:
    """Draws per path and step are counted, rounded up, whatever the distribution."""
    assert plan_of(tmp_path, LOOP.format(expression)) == PLANS[expression]


AHEAD = [
    ("(steps, paths)", "z[i]", 1, [StepAxis(place=0)]),
    ("(paths, steps)", "z[:, i]", 1, [StepAxis(place=1)]),
    ("(steps, 3, paths)", "z[i, 0]", 3, [StepAxis(place=0)]),
    ("(3, steps, paths)", "z[0, i]", 3, [StepAxis(place=1)]),
    ("steps * paths", "z[i * paths : (i + 1) * paths]", 1, [StepAxis(place=0)]),
    ("paths * steps", "z[i::steps]", 1, [StepAxis(place=0, steps_first=False)]),
]


@pytest.mark.parametrize(("size", "z", "factors", "axes"), AHEAD)
def test_plans_ahead(tmp_path: Path, size: str, z: str, factors: int, axes: list[StepAxis]) -> None:
    """The axis of the steps is found in every order; folded into another, by how close it brings the paths."""
    body = (
        f"    z = rng.normal(size={size})\n    x = np.zeros(paths)\n    for i in range(steps):\n        x = x + {z}\n"
    )
    plan = plan_of(tmp_path, body, coarsest_steps=2)
    assert (plan.factors, plan.layout) == (factors, Layout(before=1, period=0, after=0, axes=tuple(axes)))
    folded = [
        "2 layouts of the draws fit the kernel's requests; the one that brings fine and coarse paths closest is taken"
    ]
    assert list(plan.remarks) == (folded if "*" in size else [])


def test_a_draw_before_the_loop_of_the_same_size(tmp_path: Path) -> None:
    """An initial state drawn like the noise is told from a last draw by how close it brings the paths."""
    noise = "np.sqrt(h) * rng.normal(size=paths)"
    first = LOOP.replace("np.zeros(paths)", "rng.normal(size=paths)").format(noise)
    last = LOOP.format(noise) + "    x = x + rng.normal(size=paths)\n"
    assert plan_of(tmp_path, first).layout == Layout(before=1, period=1, after=0, axes=(None,))
    assert plan_of(tmp_path, last).layout == Layout(before=0, period=1, after=1, axes=(None,))


UNCOUPLED = (
    "the levels are not coupled: {}. Each level is measured and judged by itself, without differences between levels"
)


@pytest.mark.parametrize(
    ("body", "reason"),
    [
        (
            "    z = rng.normal(size=(steps + 1, paths))\n    x = z.sum(axis=0) if False else z[0] + z[steps]\n",
            "axis 0 of a size is no multiple of the steps (2 with 1, 3 with 2, 5 with 4)",
        ),
        (
            "    x = np.zeros(paths)\n    for i in range(steps * steps):\n        x = x + rng.normal(size=paths)\n",
            "the number of requests does not grow evenly with the steps (1 with 1, 4 with 2, 16 with 4)",
        ),
        ("    x = rng.normal(size=paths)\n", "no request and no size grows with the steps"),
    ],
)
def test_levels_that_are_not_coupled(tmp_path: Path, body: str, reason: str) -> None:
    """Where the requests show no order of time the levels stand alone, and a remark says why."""
    path = written(tmp_path, PLANNED.format(body))
    file = file_for(path, {"kernel": RNG})
    kernel = find_kernel(file)
    plan = plan_draws(file, kernel)
    assert (plan.layout, plan.remarks) == (None, (UNCOUPLED.format(reason),))
    assert worked_out(file, kernel).kernel.coupling == "none"
    runner = BlockRunner(file, kernel)
    assert not runner.coupled(1)
    assert runner.remarks == plan.remarks
    tally = runner.run(1, 0).quantities["value"]
    assert tally.coarse is None
    assert same(tally.differences["float16"], tally.values["float16"])


def test_a_step_count_beyond_the_ladder(tmp_path: Path) -> None:
    """A kernel that does not run on a finer level than the ladder's is not coupled, since its layout is not checked."""
    body = "    if steps > 2:\n        raise IndexError(steps)\n" + LOOP.format("rng.normal(size=paths)")
    plan = plan_of(tmp_path, body, finest=1)
    reason = "the kernel does not run with 4 steps, which it is tried with"
    assert plan == DrawPlan(factors=1, layout=None, remarks=(UNCOUPLED.format(reason),), steady=False)
    with pytest.raises(KernelError, match="level 2, arm plain NumPy: the kernel raised IndexError: 4"):
        plan_of(tmp_path, body)


def test_factors_and_blocks(tmp_path: Path) -> None:
    """The draws per step decide the size of a block and the ladder's finest level, as `factors` does."""
    path = written(tmp_path, PLANNED.format(LOOP.format("rng.normal(size=(4, paths)).max(axis=0)")))
    tables = {"kernel": RNG, "ladder": {"finest": 10}, "sampling": {"block": 32768}}
    file = file_for(path, tables)
    kernel = find_kernel(file)
    assert worked_out(file, kernel).kernel.factors == 4
    assert BlockRunner(file, kernel).paths(9) == 2**22 // 4 // 512
    deep = file_for(path, {**tables, "ladder": {"finest": 11}})
    with pytest.raises(AuditFileError, match=r"ladder.finest: 11 is too fine, with 4 draws a step"):
        worked_out(deep, kernel)


STATE_DRAWS = """
import numpy as np

def value(rng, h, *, steps, paths):
    x = np.full(paths, 0.1)
    for i in range(steps):
        x = x + 0.1 * rng.normal(size=paths)
    again = int((x * 3 > 0.25).sum())
    y = np.zeros(paths)
    y[: min(again, paths)] = rng.normal(size=again)[:paths]
    return x + y
"""


def test_a_number_of_draws_that_depends_on_the_state(tmp_path: Path) -> None:
    """Draws counted by a decision on the state differ between arms, and are refused with level, arm and request."""
    file = file_for(written(tmp_path, STATE_DRAWS), {"kernel": {**RNG, "coupling": "none"}, "ladder": {"finest": 0}})
    with pytest.raises(KernelError) as caught:
        BlockRunner(file, find_kernel(file)).run(0, 0)
    message = str(caught.value)
    assert message.startswith("level 0, arm bfloat16: ")
    assert "kernel.py:9: request 1 for random numbers is normal(), size (" in message
    assert " where the reference has normal(), size (" in message


@pytest.mark.parametrize(
    ("body", "words"),
    [
        ("    x = np.zeros(paths)\n", "draws no random numbers from rng or numpy.random; accepted: one that does"),
        ("    x = np.zeros(paths) + rng.normal()\n", "draws 1 random numbers for 1024 paths and as many for 2048: its"),
        ("    x = 1 / 0\n", "level 0, arm plain NumPy: the kernel raised ZeroDivisionError: division by zero"),
    ],
)
def test_kernels_without_draws_of_their_own(tmp_path: Path, body: str, words: str) -> None:
    """A kernel that draws nothing, shares its draws between paths, or raises is refused before anything is measured."""
    with pytest.raises(KernelError, match=words):
        plan_of(tmp_path, body)


def test_a_draw_that_all_paths_share(tmp_path: Path) -> None:
    """A single draw beside those of the paths is said."""
    (remark,) = plan_of(tmp_path, "    r = rng.normal()\n" + LOOP.format("rng.normal(size=paths) + r")).remarks
    assert remark == "all paths of a block share a draw (normal(), one): intervals take paths for independent"


@pytest.mark.parametrize(
    ("head", "tables", "message"),
    [
        (
            "rng, h, paths",
            {"parameters": {"paths": 3}},
            "parameters.paths: the audit gives this number itself, by level",
        ),
        (
            "rng, h, paths",
            {"parameters": {"steps": 3}},
            "parameters.steps: the audit gives this number itself, by level",
        ),
        ("rng, h, paths, vol", {}, "parameters.vol: missing, and the kernel has no default; accepted: vol"),
    ],
)
def test_kernels_that_cannot_be_called(
    tmp_path: Path, head: str, tables: dict[str, dict[str, int]], message: str
) -> None:
    """A kernel that draws for itself is given steps and paths by the audit: they are no parameters of the file."""
    file = file_for(
        written(tmp_path, f"def value({head}):\n    return rng.normal(size=paths)\n"), {"kernel": RNG, **tables}
    )
    with pytest.raises(AuditFileError) as caught:
        plan_draws(file, find_kernel(file))
    assert message in str(caught.value)


def test_steps_may_be_left_out(tmp_path: Path) -> None:
    """A kernel that works out its steps from h is called without them; one with **keywords gets both."""
    body = LOOP.replace("range(steps)", "range(round(1 / h))").format("rng.normal(size=paths)") + "    return x\n"
    for head in ("rng, h, *, paths", "_, h, paths, **other"):
        source = f"import numpy as np\ndef value({head}):\n    rng = np.random.default_rng(3)\n{body}"
        found = runner_for(tmp_path, source, kernel=RNG).run(2, 0)
        assert found.paths == PATHS
        assert np.isclose(found.quantities["value"].values["float64"].moments.variance, 4.0, rtol=0.5)


def test_refusals_have_level_and_arm(tmp_path: Path) -> None:
    """What is not offered is refused with file and line, in plain NumPy already."""
    path = written(tmp_path, PLANNED.format(LOOP.format("rng.bytes(paths)")))
    file = file_for(path, {"kernel": RNG})
    with pytest.raises(RefusedError) as caught:
        plan_draws(file, find_kernel(file))
    assert f"{path}:5: Generator.bytes is not offered by this version: bytes are" in str(caught.value)


FACTORS = """    W = {drawn}
    s = np.zeros(({factors}, paths))
    x = np.zeros(paths)
    for i in range(steps):
        s = s + W[:, i]
        x = x + h * s.sum(axis=0) * np.abs(s[0])
"""
PASSES = "np.array([[np.sqrt(h) * rng.standard_normal(paths) for i in range(steps)] for f in range({factors})])"
AT_ONCE = "np.sqrt(h) * rng.standard_normal(({factors}, steps, paths))"


@pytest.mark.parametrize("factors", [2, 5])
def test_draws_made_factor_by_factor(tmp_path: Path, factors: int) -> None:
    """A pass over the steps for each factor is told from that many draws a step, and couples as one block does."""
    plans = {}
    for name, drawn in (("passes", PASSES), ("block", AT_ONCE)):
        folder = tmp_path / name
        folder.mkdir()
        body = FACTORS.format(drawn=drawn.format(factors=factors), factors=factors)
        plans[name] = plan_of(folder, body, finest=3)
        file = file_for(folder / "kernel.py", {"kernel": RNG, "ladder": {"finest": 3}})
        plans[name, "share"] = BlockRunner(file, find_kernel(file)).run(3, 0).quantities["value"]
    found = plans["passes"]
    assert (found.factors, found.layout.period, found.layout.runs) == (factors, factors, factors)
    assert found.remarks == (
        f"the draws are taken as {factors} passes over the steps, which brings fine and coarse paths closest",
    )
    ratio = [plans[name, "share"].differences["float64"].moments.variance for name in ("passes", "block")]
    assert ratio[0] == ratio[1]


def test_blocks_in_mixed_orders(tmp_path: Path) -> None:
    """Two blocks drawn ahead, one with the steps first and one with the paths first, are coupled each in its order."""
    body = """    a = rng.normal(0, np.sqrt(h), steps * paths).reshape(steps, paths)
    b = rng.normal(0, np.sqrt(h), steps * paths).reshape(paths, steps).T
    x = np.zeros(paths)
    for i in range(steps):
        x = x + a[i] + x * b[i]
"""
    layout = plan_of(tmp_path, body, finest=3).layout
    assert layout is not None
    assert [axis.steps_first for axis in layout.axes] == [True, False]


def test_paths_that_no_order_brings_together_are_not_coupled(tmp_path: Path) -> None:
    """Draws whose signs belong to no step belong together in no order that is known: said, not coupled."""
    body = """    z = [rng.normal(size=paths) for i in range(steps)]
    x = np.zeros(paths)
    for i in range(steps):
        x = x + np.sqrt(h) * z[i] * (-1.0) ** (i * 7919 % (steps + 3))
"""
    plan = plan_of(tmp_path, body, finest=3)
    assert plan.layout is None
    assert plan.remarks[0].startswith("the levels are not coupled: in no order of the draws are fine and coarse paths")
