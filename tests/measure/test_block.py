"""One block through every arm: what P, E, D and R are, and what is dropped, counted or recorded."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from block_cases import GEOMETRIC, PATHS, runner_for, same

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.conduct.observers import Notes
from narrowgauge.draws.coarsen import coarse_draws, fine_draws
from narrowgauge.kernel.contract import arranged
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.moments import Moments, Series
from narrowgauge.measure.tally import LevelTally, Raised

Doubles = npt.NDArray[np.float64]
Values = dict[str, Doubles]

ARMS = ("float16", "bfloat16", "float32", "float64")  # those of an audit that names none
RS = {"r": 0.05, "s": 0.2}


def native(dW: npt.NDArray[Any], h: float) -> Values:
    """The same paths in NumPy's or ml_dtypes' own arithmetic of the draws' type, its constants rounded to that type."""
    drift, volatility, one = (dW.dtype.type(number) for number in (RS["r"] * h, RS["s"], 1.0))
    x = np.ones(dW.shape[1], dW.dtype)
    for dx in dW:
        x = x + drift * x + volatility * x * dx
    assert x.dtype == dW.dtype
    call = np.maximum(x - one, dW.dtype.type(0.0))
    return {"up": (x > one).astype(np.float64), "call": call.astype(np.float64)}


def by_hand(runner: BlockRunner, level: int, block: int, name: str) -> tuple[Values, Values]:
    """Fine and coarse quantities of one arm."""
    draws, arithmetic, storage = runner.draws(level, block), arithmetic_named(name), FORMATS[name].storage
    fine = fine_draws(draws, arithmetic)
    coarse = coarse_draws(draws, fine, arithmetic)
    return native(fine[:, 0].astype(storage), 2.0**-level), native(coarse[:, 0].astype(storage), 2.0 ** (1 - level))


@pytest.mark.parametrize("block", [0, 3])
@pytest.mark.parametrize("level", [1, 2])
def test_series_are_those_of_numpys_own_arithmetic(tmp_path: Path, level: int, block: int) -> None:
    """P, E, D and R of every arm are, bit by bit, those of the same paths in native float16, bfloat16 and so on.

    E^a = P^a - P^ref on the fine path, D^a = P^a - P^a of the coarse path, R^(a,b) = D^b - D^a.
    """
    runner = runner_for(tmp_path, GEOMETRIC, parameters=RS)
    tally = runner.run(level, block)
    arms = {name: by_hand(runner, level, block, name) for name in ARMS}
    assert (tally.level, tally.paths, tally.dropped, tally.blocks, tally.raised) == (level, PATHS, 0, 1, {})
    assert list(tally.quantities) == ["up", "call"]  # in the kernel's order
    for quantity, found in tally.quantities.items():
        p = {name: fine[quantity] for name, (fine, _) in arms.items()}
        d = {name: fine[quantity] - coarse[quantity] for name, (fine, coarse) in arms.items()}
        assert found.values.keys() == found.differences.keys() == set(ARMS)
        assert found.errors.keys() == set(ARMS) - {"float64"}
        assert all(same(series, Series.of(p[a])) for a, series in found.values.items())
        assert all(same(series, Series.of(p[a] - p["float64"])) for a, series in found.errors.items())
        assert all(same(series, Series.of(d[a])) for a, series in found.differences.items())
        assert all(same(series, Series.of(d[b] - d[a])) for (a, b), series in found.corrections.items())
        assert same(found.coarse, Moments.of(arms["float64"][1][quantity]))
        assert ("float16", "float32") in found.corrections


def test_the_means_of_the_series_add_up(tmp_path: Path) -> None:
    """Mean R^(a,c) is mean R^(a,b) + mean R^(b,c), and mean D^a + R^(a,ref) is mean D^ref, to six roundings of |D|."""
    call = runner_for(tmp_path, GEOMETRIC, parameters=RS).run(2, 0).quantities["call"]
    off = 6 * 2.0**-53 * max(series.largest for series in call.values.values()) * PATHS
    r = {pair: series.moments.average for pair, series in call.corrections.items()}
    d = {arm: series.moments.average for arm, series in call.differences.items()}
    assert abs(r["float16", "float64"] - r["float16", "float32"] - r["float32", "float64"]) <= off
    assert all(abs(d[arm] + r[arm, "float64"] - d["float64"]) <= off for arm in ("float16", "bfloat16", "float32"))
    assert r["float16", "float64"] != 0


def test_the_coarsest_level_is_its_own_difference(tmp_path: Path) -> None:
    """On level 0, and on every level of an uncoupled ladder, D is P and there is no coarse path."""
    runner = runner_for(tmp_path, GEOMETRIC, parameters=RS)
    uncoupled = runner_for(tmp_path, GEOMETRIC, parameters=RS, kernel={"coupling": "none"})
    for tally in (runner.run(0, 0), uncoupled.run(0, 0), uncoupled.run(2, 0)):
        for found in tally.quantities.values():
            assert found.coarse is None
            assert same(found.differences, found.values)
            errors = {arm: -series.moments.average for arm, series in found.errors.items()}
            assert errors == {arm: found.corrections[arm, "float64"].moments.average for arm in errors}
    assert (runner.coupled(0), runner.coupled(1), uncoupled.coupled(1)) == (False, True, False)
    fine = runner.run(2, 0).quantities["call"].values["float16"]
    assert same(fine, uncoupled.run(2, 0).quantities["call"].values["float16"])


def test_a_block_is_the_same_whatever_ran_before(tmp_path: Path) -> None:
    """A block's tally depends on its key alone, not on the blocks that its runner ran before."""
    used, fresh = (runner_for(tmp_path, GEOMETRIC, parameters=RS) for _ in range(2))
    for level, block in ((0, 1), (2, 0), (1, 5)):
        used.run(level, block)
    assert same(used.run(1, 2), fresh.run(1, 2))
    assert not same(used.run(1, 2), fresh.run(1, 3))


def test_blocks_add_up_to_all_their_paths(tmp_path: Path) -> None:
    """The sum of two blocks has the paths of both, batch by batch."""
    runner = runner_for(tmp_path, GEOMETRIC, parameters=RS)
    first, second = runner.run(1, 0), runner.run(1, 1)
    both = first + second
    assert (both.level, both.paths, both.blocks, both.dropped) == (1, 2 * PATHS, 2, 0)
    for name, found in both.quantities.items():
        one, other = first.quantities[name], second.quantities[name]
        assert all(same(s, one.corrections[p] + other.corrections[p]) for p, s in found.corrections.items())
        assert found.coarse is not None
        assert found.coarse.total == found.values["float16"].moments.total == 2 * PATHS


ROOT = """
import numpy as np

def value(dW, h):
    return np.sqrt(1.0 - dW[0])
"""


def test_paths_that_the_reference_loses_are_dropped_from_every_arm(tmp_path: Path) -> None:
    """Where the reference is NaN on either path the path is in no series of any arm, and is counted.

    Where only a narrow arm is NaN, as 1 - dW rounds to below 0 there, its series alone loses the path.
    """
    runner = runner_for(tmp_path, ROOT)
    drawn = runner.draws(1, 0).values[:, 0]
    lost = (drawn[0] > 1) | (drawn.sum(axis=0) > 1)
    tally = runner.run(1, 0)
    assert tally.dropped == np.count_nonzero(lost) > 0
    found = tally.quantities["value"]
    every = [*found.values.values(), *found.errors.values(), *found.differences.values(), *found.corrections.values()]
    assert all(series.moments.total + series.nonfinite == PATHS - tally.dropped for series in every)
    assert found.values["float64"].nonfinite == found.differences["float64"].nonfinite == 0
    assert found.coarse is not None
    assert found.coarse.total == PATHS - tally.dropped
    kept = np.where(lost, 0.0, np.sqrt(1.0 - np.where(lost, 0.0, drawn[0])))
    assert same(found.values["float64"], Series.of(kept, ~lost))


GROWTH = """
import numpy as np

def value(dW, h):
    return 60000.0 + 8000.0 * dW[0]
"""


def test_an_arm_that_overflows_is_counted_and_the_others_are_whole(tmp_path: Path) -> None:
    """float16 is infinite where 60000 + 8000 dW rounds past 65504; its series count and leave out those paths.

    By NumPy's float16, in which 60000 and 8000 are exact.
    """
    runner = runner_for(tmp_path, GROWTH)
    with np.errstate(over="ignore"):
        drawn = runner.draws(0, 0).values[0, 0].astype(np.float16)
        infinite = int(np.isinf(np.float16(60000) + np.float16(8000) * drawn).sum())
    assert infinite > 0
    tally = runner.run(0, 0)
    found = tally.quantities["value"]
    assert tally.dropped == 0
    assert found.values["float16"].nonfinite == found.errors["float16"].nonfinite == infinite
    assert found.corrections["float16", "float32"].nonfinite == infinite
    assert found.values["float16"].moments.total == PATHS - infinite
    assert found.values["float16"].largest <= 65504
    assert all(found.values[arm].nonfinite == 0 for arm in ("bfloat16", "float32", "float64"))


RAISING = """
import numpy as np

def value(dW, h):
    x = 60000.0 + 8000.0 * dW[0]
    return checked(x)

def checked(x):
    if np.isinf(x).any():
        raise {exception}
    return x
"""


@pytest.mark.parametrize(
    ("exception", "kind", "message"),
    [
        ('FloatingPointError("diverged")', "FloatingPointError", "diverged"),
        ('SystemExit("stop")', "SystemExit", "stop"),
        ('KeyError("x")', "KeyError", "'x'"),
    ],
)
def test_what_a_kernel_raises_in_one_arm_becomes_data(tmp_path: Path, exception: str, kind: str, message: str) -> None:
    """Type, message, file and line are recorded, the arm has no series, the other arms have all of theirs."""
    source = RAISING.format(exception=exception)
    tally = runner_for(tmp_path, source).run(1, 0)
    assert tally.raised == {"float16": Raised(kind=kind, message=message, file="kernel.py", line=9)}
    found = tally.quantities["value"]
    others = ["float64", "bfloat16", "float32"]
    assert list(found.values) == list(found.differences) == others
    assert list(found.errors) == others[1:]
    assert not any("float16" in pair for pair in found.corrections)
    assert ("float32", "float64") in found.corrections
    assert found.values["bfloat16"].moments.total == PATHS


def test_an_arm_lost_in_one_block_is_lost(tmp_path: Path) -> None:
    """Merged with blocks where the arm came through, in either order, it stays lost and its exception is kept."""
    runner = runner_for(tmp_path, RAISING.format(exception='FloatingPointError("diverged")'))
    lost = runner.run(0, 0)
    whole = runner_for(tmp_path, GROWTH).run(0, 1)
    for both in (lost + whole, whole + lost):
        assert list(both.raised) == ["float16"]
        assert both.blocks == 2
        found = both.quantities["value"]
        assert not any("float16" in part for part in (found.values, found.errors, found.differences))
        assert not any("float16" in pair for pair in found.corrections)
        assert found.values["float32"].moments.total == 2 * PATHS
    other = LevelTally(
        level=0,
        paths=PATHS,
        dropped=0,
        blocks=1,
        quantities=lost.quantities,
        raised={"float16": Raised(kind="ValueError", message="later", file=None, line=None)},
    )
    assert (lost + other).raised == lost.raised  # the first one is kept


def test_an_interrupt_is_not_data(tmp_path: Path) -> None:
    """The user's Ctrl-C inside a kernel ends the run."""
    runner = runner_for(tmp_path, RAISING.format(exception="KeyboardInterrupt"))
    with pytest.raises(KeyboardInterrupt):
        runner.run(0, 0)


def test_booleans_and_integers_are_taken_as_they_are(tmp_path: Path) -> None:
    """Boolean arrays count as 0 and 1; integers are exact in every arm, also those that float16 does not have."""
    source = """
    import numpy as np

    def value(dW, h):
        return {"up": dW[0] > 0, "count": np.where(dW[0] > 0, 2049, 1), "plain": np.arange(dW.shape[1]) + 2**20}
    """
    runner = runner_for(tmp_path, source)
    up = (runner.draws(0, 0).values[0, 0] > 0).astype(np.float64)
    found = runner.run(0, 0).quantities
    for arm in ARMS:
        assert same(found["up"].values[arm], Series.of(up))
        assert same(found["count"].values[arm], Series.of(1.0 + 2048.0 * up))
        assert same(found["plain"].values[arm], Series.of(np.arange(PATHS, dtype=np.float64) + 2.0**20))
    assert found["up"].errors["bfloat16"].events == 0


@pytest.mark.parametrize("takes", ["increments", "normals", "uniforms"])
def test_a_kernel_may_write_into_its_draws(tmp_path: Path, takes: str) -> None:
    """Each run gets a copy of its own: overwriting it changes neither another arm nor the coarse path."""
    body, kernel = "    x = 1.0 + 0.5 * dW[0]\n    LATER\n    return x * x\n", {"takes": takes}
    quiet = runner_for(tmp_path, "def value(dW, h):\n" + body.replace("LATER", "pass"), kernel=kernel)
    expected = [quiet.run(level, 0) for level in range(3)]
    loud = "def value(dW, h):\n" + body.replace("LATER", "dW *= 0.0; dW[...] = 7.0")
    writing = runner_for(tmp_path, loud, kernel=kernel)
    assert all(same(writing.run(level, 0), expected[level]) for level in range(3))


def test_a_kernel_may_write_into_its_parameters(tmp_path: Path) -> None:
    """Arrays among the parameters are new in every call."""
    source = """
    def value(dW, h, *, rates):
        x = rates[0] + dW[0]
        rates[0] = 100.0
        return x
    """
    tally = runner_for(tmp_path, source, parameters={"rates": [0.5, 1.0]}).run(1, 0)
    assert tally.quantities["value"].values["float64"].largest < 50
    assert tally.quantities["value"].differences["float16"].largest < 50


LAYOUTS = [
    "steps, factors, paths",
    "steps, paths, factors",
    "factors, steps, paths",
    "factors, paths, steps",
    "paths, steps, factors",
    "paths, factors, steps",
]


@pytest.mark.parametrize("layout", LAYOUTS)
def test_layouts_give_the_same_paths(tmp_path: Path, layout: str) -> None:
    """A kernel that names another order of axes gets the same numbers in it, contiguous, in every arm and level."""
    source = """
    import numpy as np

    def value(dW, h):
        assert dW.flags.c_contiguous
        z = np.transpose(dW, ORDER)
        assert z.shape[1:] == (2, 1024)
        x = 1.0 + z[0, 0] * z[0, 1]
        for n in range(1, z.shape[0]):
            x = x + z[n, 0] * x
        return x
    """
    plain = runner_for(tmp_path, source.replace("ORDER", "(0, 1, 2)"), kernel={"factors": 2})
    expected = [plain.run(level, 0) for level in (0, 2)]
    order = tuple(layout.split(", ").index(axis) for axis in ("steps", "factors", "paths"))
    found = runner_for(tmp_path, source.replace("ORDER", str(order)), kernel={"factors": 2, "layout": layout})
    assert all(same(found.run(level, 0), tally) for level, tally in zip((0, 2), expected, strict=True))


@pytest.mark.parametrize("layout", ["steps, paths", "paths, steps", *LAYOUTS])
def test_arranged_draws_are_contiguous(layout: str) -> None:
    """Draws are arranged as `layout` says, by index, and one factor may have no axis; only another order is copied."""
    axes = layout.split(", ")
    draws = np.arange(3.0 * 2 * 5).reshape(3, 2, 5) if "factors" in axes else np.arange(15.0).reshape(3, 1, 5)
    found = arranged(draws, layout)
    assert found.flags.c_contiguous
    assert np.shares_memory(found, draws) == (layout in ("steps, paths", "steps, factors, paths"))
    for place, value in np.ndenumerate(found):
        at = dict(zip(axes, place, strict=True))
        assert value == draws[at["steps"], at.get("factors", 0), at["paths"]]


def test_paths_of_a_block_follow_from_the_audit_file(tmp_path: Path) -> None:
    """A block has the paths that fit 2^22 draws of its level, no more than asked for and at least 1,024.

    With 2,048 steps they are 32 fewer, so that the axis of the paths is known by its length.
    """
    ladder = {"finest": 12, "coarsest_steps": 1}
    runner = runner_for(tmp_path, GEOMETRIC, parameters=RS, ladder=ladder, sampling={"block": 4096})
    assert [runner.paths(level) for level in (0, 10, 11, 12)] == [4096, 4096, 2016, 1024]
    assert runner.draws(0, 0).values.shape == (1, 1, 4096)
    assert runner.draws(2, 0, paths=64).values.shape == (4, 1, 64)
    assert math.isclose(float(runner.draws(2, 0).values.std()), 0.5, rel_tol=0.1)


def test_a_sum_over_as_many_steps_as_a_block_has_paths_is_rounded(tmp_path: Path) -> None:
    """1,024 steps in blocks of 1,024 paths: a sum over the steps stays one, here and in every smaller sample."""
    runner = runner_for(
        tmp_path,
        "import numpy as np\ndef value(dW, h):\n    return np.sum(dW, axis=0)\n",
        ladder={"coarsest_steps": 1024, "finest": 0},
    )
    assert runner.paths(0) == PATHS - 32
    for paths in (None, 1024, 1026, 8):
        notes = Notes(["float16"])
        runner.caller(arithmetic_named("float16"), notes).fine(runner.draws(0, 0, paths=paths), 0)
        assert [(operation, route) for _, operation, route in notes.operations] == [("sum", "accumulated")]
