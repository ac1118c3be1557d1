"""Kernels that take one path a call: with rows or path by path they give what a kernel of whole blocks gives."""

from __future__ import annotations

from functools import partial
from pathlib import Path

import pytest
from block_cases import PATHS, runner_for, same

from narrowgauge.errors import EscapeError, KernelError
from narrowgauge.measure.block import BlockRunner

ARRAY = {"takes": "increments", "layout": "steps"}
RNG = {"takes": "rng"}
BLOCKS = {"takes": "increments", "layout": "steps, paths"}

# name: the kernel of one path, the same kernel of whole blocks, and whether rows can be taken
GIVEN = {
    "numbers": (
        "S = 1.0\nfor d in dW:\n    S = S + (0.05 * h * S + 0.2 * S * d)\nreturn np.maximum(S - 1.0, 0.0)",
        "S = np.ones(dW.shape[1])\nfor d in dW:\n    S = S + (0.05 * h * S + 0.2 * S * d)\n"
        "return np.maximum(S - 1.0, 0.0)",
        "",
    ),
    "a buffer": (
        "S = np.zeros(len(dW) + 1)\nS[0] = 1.0\nfor i in range(len(dW)):\n    S[i + 1] = S[i] + 0.2 * S[i] * dW[i]\n"
        "return {'end': S[-1], 'top': S.max(), 'up': S[-1] > 1.0}",
        "S = np.zeros((len(dW) + 1, dW.shape[1]))\nS[0] = 1.0\nfor i in range(len(dW)):\n"
        "    S[i + 1] = S[i] + 0.2 * S[i] * dW[i]\nreturn {'end': S[-1], 'top': S.max(axis=0), 'up': S[-1] > 1.0}",
        "kernel.py:7: with a row of paths it raises ValueError: setting an array element with a sequence.",
    ),
    "an early exit": (
        "S = 1.0\nfor d in dW:\n    S = S + 0.3 * S * d\n    if S < 0.8:\n        return 0.0\nreturn max(S - 1.0, 0)",
        "S, alive = np.ones(dW.shape[1]), np.ones(dW.shape[1], dtype=bool)\nfor d in dW:\n    S = S + 0.3 * S * d\n"
        "    alive = alive & (S >= 0.8)\nreturn np.where(alive, np.maximum(S - 1.0, 0), 0.0)",
        "kernel.py:7: with a row of paths it raises ValueError: The truth value of an array",
    ),
    "any of one": (
        "S = 1.0\nfor d in dW:\n    S = S + 0.3 * S * d\n    if np.any(S > 1.2):\n        S = S - 0.1\nreturn S",
        "S = np.ones(dW.shape[1])\nfor d in dW:\n    S = S + 0.3 * S * d\n    S = np.where(S > 1.2, S - 0.1, S)\n"
        "return S",
        "kernel.py:7: a decision depends on the state",
    ),
    "a maximum over everything": (
        "S = 1.0\nfor d in dW:\n    S = S + 0.3 * S * d\nreturn S + 0.25 * np.max(dW)",
        "S = np.ones(dW.shape[1])\nfor d in dW:\n    S = S + 0.3 * S * d\nreturn S + 0.25 * np.max(dW, axis=0)",
        "with a row of paths it gives path 0 the value",
    ),
    "math": (
        "x = 0.0\nfor d in dW:\n    x = x + 0.2 * d\nreturn math.exp(x)",
        "x = np.zeros(dW.shape[1])\nfor d in dW:\n    x = x + 0.2 * d\nreturn np.exp(x)",
        "slow: with a row of paths: kernel.py:7: math.exp takes 1 scalar(s)",
    ),
}
DRAWN = {
    "a draw a step": (
        "S = 1.0\nfor _ in range(steps):\n    S = S + 0.2 * np.sqrt(h) * (S * rng.standard_normal())\nreturn S",
        "S = np.ones(paths)\nfor _ in range(steps):\n    S = S + 0.2 * np.sqrt(h) * (S * rng.standard_normal(paths))\n"
        "return S",
        "",
    ),
    "location and scale of the state": (
        "S = 1.0\nfor _ in range(steps):\n    S = rng.normal(S, 0.2 * np.sqrt(h))\nreturn S",
        "S = np.ones(paths)\nfor _ in range(steps):\n    S = rng.normal(S, 0.2 * np.sqrt(h))\nreturn S",
        "",
    ),
    "all draws ahead": (
        "S = 1.0\nfor z in rng.normal(0.0, np.sqrt(h), steps):\n    S = S + 0.2 * S * z\nreturn S",
        "S = np.ones(paths)\nfor z in rng.normal(0.0, np.sqrt(h), (steps, paths)):\n    S = S + 0.2 * S * z\nreturn S",
        "",
    ),
    "counts": (
        "S = 0.0\nfor _ in range(steps):\n    S = S + rng.poisson(3.0 * h)\nreturn S",
        "S = np.zeros(paths)\nfor _ in range(steps):\n    S = S + rng.poisson(3.0 * h, paths)\nreturn S",
        "",
    ),
    "a table": (
        "S = 0.0\nfor _ in range(steps):\n    S = S + h * rng.choice([-1.0, 0.5, 2.0], p=[0.2, 0.3, 0.5])\nreturn S",
        "S = np.zeros(paths)\nfor _ in range(steps):\n"
        "    S = S + h * rng.choice([-1.0, 0.5, 2.0], p=[0.2, 0.3, 0.5], size=paths)\nreturn S",
        "",
    ),
    "parameters of the state, and a decision": (
        "S = 1.0\nfor _ in range(steps):\n"
        "    S = max(S + 0.2 * (rng.poisson(2.0 * S * h) - 2.0 * S * h), 0.01)\nreturn S",
        "S = np.ones(paths)\nfor _ in range(steps):\n"
        "    S = np.maximum(S + 0.2 * (rng.poisson(2.0 * S * h) - 2.0 * S * h), 0.01)\nreturn S",
        "The truth value of an array",
    ),
    "an early exit": (
        "S = 1.0\nfor _ in range(steps):\n    S = S + S * rng.normal(0.05 * h, 0.3 * np.sqrt(h))\n"
        "    if S < 0.8:\n        return 0.0\nreturn S",
        "S, alive = np.ones(paths), np.ones(paths, dtype=bool)\nfor _ in range(steps):\n"
        "    S = S + S * rng.normal(0.05 * h, 0.3 * np.sqrt(h), paths)\n    alive = alive & (S >= 0.8)\n"
        "return np.where(alive, S, 0.0)",
        "The truth value of an array",
    ),
}


def source(head: str, body: str) -> str:
    return f"import math\nimport numpy as np\ndef value({head}):\n    " + body.replace("\n", "\n    ") + "\n"


def runner(folder: Path, body: str, kernel: dict[str, str], head: str) -> BlockRunner:
    return runner_for(folder, source(head, body), kernel=kernel, ladder={"finest": 3})


def agree(one: BlockRunner, block: BlockRunner) -> None:
    """Each level's tally has the same bits: fine and coarse paths, in every arm."""
    for level in range(4):
        assert one.coupled(level) == block.coupled(level)
        assert same(one.run(level, 1), block.run(level, 1))


@pytest.mark.parametrize("name", GIVEN)
def test_one_path_of_given_draws(tmp_path: Path, name: str) -> None:
    """A kernel of one path gives the bits of the same kernel of whole blocks; rows where nothing stands against."""
    single, whole, reason = GIVEN[name]
    one = runner(tmp_path, single, ARRAY, "dW, h")
    assert one.singly == bool(reason)
    assert reason in one.remarks[0]
    block = runner(tmp_path, whole, BLOCKS, "dW, h")
    assert block.remarks == ()
    if name == "math":  # the exponential of a Python float and of an array are two functions in float32 and float64
        return
    agree(one, block)


@pytest.mark.parametrize("name", DRAWN)
def test_one_path_that_draws_for_itself(tmp_path: Path, name: str) -> None:
    """Path by path and with rows the draws are those of the kernel that asks for all paths at once."""
    single, whole, reason = DRAWN[name]
    one = runner(tmp_path, single, RNG, "rng, h, *, steps")
    assert one.singly == bool(reason)
    assert reason in one.remarks[0]
    block = runner(tmp_path, whole, RNG, "rng, h, *, steps, paths")
    assert one.coupled(2) == (name != "a table")  # the table's steps bring fine and coarse paths no closer
    agree(one, block)


def test_factors_come_with_one_path(tmp_path: Path) -> None:
    """Two factors in the order that the layout names, without an axis of paths."""
    body = "x = 0.0\nfor {} in {}:\n    x = x + 0.5 * a * b + a\nreturn x"
    one = runner_for(
        tmp_path,
        source("z, h", body.format("a, b", "zip(*z)")),
        kernel={"takes": "normals", "factors": 2, "layout": "factors, steps"},
    )
    assert not one.singly
    tally = one.run(2, 0)
    block = runner_for(
        tmp_path,
        source("z, h", body.format("a, b", "z").replace("x = 0.0", "x = np.zeros(z.shape[2])")),
        kernel={"takes": "normals", "factors": 2},
    )
    assert same(tally, block.run(2, 0))


@pytest.mark.parametrize(
    ("body", "message"),
    [
        ("return None", "returned nothing (None); accepted: a number, or a mapping of names to numbers, since neither"),
        ("return dW", "returned an array of shape (4,); accepted: a number"),
        ("return {'a': 'high'}", "returned a str as 'a'; accepted: a number"),
        ("return {}", "returned an empty mapping"),
        ("return {'a' if dW[0] > 0 else 'b': dW[0]}", "returned b for path"),
    ],
)
def test_results_that_are_no_number(tmp_path: Path, body: str, message: str) -> None:
    """One path's result is a number, or a mapping with the same names for every path."""
    with pytest.raises(KernelError) as caught:
        runner(tmp_path, body, ARRAY, "dW, h").run(2, 0)
    assert message in str(caught.value).replace("returned a for path", "returned b for path")


def test_an_escape_of_one_path_is_caught(tmp_path: Path) -> None:
    """A plain float that the format lacks is an escape also where it is one path's."""
    body = "return int(dW[0] * 1e6) / 3.0 if dW[0] > 0 else dW[0]"
    words = r"kernel.py:3: .* of 1024 paths are \d+ different plain numbers that bfloat16 does not have, .* path \d+"
    with pytest.raises(EscapeError, match=words):
        runner(tmp_path, body, ARRAY, "dW, h").run(0, 0)


@pytest.mark.parametrize("rebate", ["0.1", "np.float64(0.1)", "[0.1, 0.3][0]"])
def test_a_constant_may_be_a_result(tmp_path: Path, rebate: str) -> None:
    """A rebate that some paths give is a constant, rounded once, as where it is selected for an array."""
    one = runner(tmp_path, f"S = 1.0 + dW[0]\nif S < 0.9:\n    return {rebate}\nreturn S", ARRAY, "dW, h")
    block = runner(tmp_path, "S = 1.0 + dW[0]\nreturn np.where(S < 0.9, 0.1, S)", BLOCKS, "dW, h")
    assert same(one.run(1, 0), block.run(1, 0))


def test_an_array_of_one_is_a_number(tmp_path: Path) -> None:
    """A library that holds one path as an array of length one needs no other adapter."""
    one = runner(tmp_path, "return 1.0 + dW[:1] * 0.5 if dW[0] > 0 else dW[:1] * 0.5", ARRAY, "dW, h")
    block = runner(tmp_path, "return np.where(dW[0] > 0, 1.0 + dW[0] * 0.5, dW[0] * 0.5)", BLOCKS, "dW, h")
    assert same(one.run(1, 0), block.run(1, 0))


def test_requests_that_differ_by_path_are_refused_with_their_line(tmp_path: Path) -> None:
    """A jump drawn only when it happens shifts the draws of that path: its formats would fall out of step."""
    body = (
        "S = 1.0\nfor _ in range(steps):\n    S = S + 0.1 * rng.standard_normal()\n"
        "    if rng.uniform() < 0.3:\n        S = S + rng.standard_normal()\nreturn S"
    )
    with pytest.raises(KernelError, match=r"kernel.py:\d: request \d+ for random numbers is .* where another path has"):
        runner(tmp_path, body, RNG, "rng, h, *, steps").run(2, 0)


POLAR = """
S = 1.0
for _ in range(steps):
    while True:
        u, v = 2.0 * rng.random() - 1.0, 2.0 * rng.random() - 1.0
        q = u * u + v * v
        if 0.0 < q < 1.0:
            break
    S = S + 0.2 * S * np.sqrt(h) * u * np.sqrt(-2.0 * np.log(q) / q)
return S
"""


@pytest.mark.parametrize("finest", [0, 2])
def test_a_path_that_draws_once_more_in_a_format_is_an_error(tmp_path: Path, finest: int) -> None:
    """By rejection a changed decision shifts the later draws of its path: the format would be blamed for it."""
    one = runner_for(
        tmp_path,
        source("rng, h, *, steps", POLAR.strip()),
        kernel=RNG,
        ladder={"coarsest_steps": 16, "finest": finest},
    )
    assert one.singly
    words = (
        r"arm bfloat16: path \d+ asked \d+ times for random numbers where the reference asked \d+ times, which shifts"
    )
    with pytest.raises(KernelError, match=words):
        list(map(partial(one.run, finest), range(4)))


def test_on_one_level_paths_may_stop_early(tmp_path: Path) -> None:
    """Without a ladder, too, the requests are known to belong to steps: an early exit is none that shifts draws."""
    single, whole, _ = DRAWN["an early exit"]
    ladder = {"coarsest_steps": 8, "finest": 0}
    one = runner_for(tmp_path, source("rng, h, *, steps", single), kernel=RNG, ladder=ladder)
    block = runner_for(tmp_path, source("rng, h, *, steps, paths", whole), kernel=RNG, ladder=ladder)
    assert same(one.run(0, 0), block.run(0, 0))


def test_a_few_paths_can_be_timed(tmp_path: Path) -> None:
    """The time of a kernel that runs path by path is known before a block of it is run."""
    one = runner(tmp_path, GIVEN["a buffer"][0], ARRAY, "dW, h")
    assert one.singly
    assert 0 < one.seconds(2, 8) < one.seconds(2, PATHS)
