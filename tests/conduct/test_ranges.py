"""The run that looks at every number: stagnation, ends of the range, cancellation, and what a shift changes."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from audit_cases import GEOMETRIC, audited, file_for

from narrowgauge.conduct.ranges import PATHS, watched_levels, watched_range
from narrowgauge.conduct.run import run
from narrowgauge.draws.streams import Purpose
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.record.range import LineArmEntry, LineRangeEntry, RangeLevelEntry, WatchedEntry

FLAT = {"coarsest_steps": "1", "finest": "0"}


def watched(folder: Path, source: str, **tables: dict[str, str]) -> WatchedEntry:
    file = file_for(folder, source, **tables)
    return watched_range(file, BlockRunner(file, find_kernel(file)))


def only(level: RangeLevelEntry, operation: str) -> LineRangeEntry:
    (line,) = (line for line in level.lines if line.operation == operation)
    return line


def arm_of(found: WatchedEntry, operation: str, arm: str, level: int = -1) -> LineArmEntry:
    return only(found.levels[level], operation).arms[arm]


def summed(folder: Path, terms: str) -> WatchedEntry:
    source = f"""
    import numpy as np

    def value(dW, h):
        s = np.zeros_like(dW[0])
        for n in {terms}
        return s
    """
    return watched(folder, source, ladder=FLAT)


def test_a_sum_of_ones_loses_them_from_two_to_the_precision_on(tmp_path: Path) -> None:
    """4,096 ones: float16 stops at 2,048, bfloat16 at 256, and every path loses the rest (computed)."""
    found = summed(tmp_path, "range(4096):\n            s = s + 1.0")
    half, brain = (arm_of(found, "add", arm) for arm in ("float16", "bfloat16"))
    assert (half.first_lost, half.lost, half.additions) == (2048, 2048 * PATHS, 4096 * PATHS)
    assert (brain.first_lost, brain.lost) == (256, 3840 * PATHS)
    shares = found.levels[0].arms
    lost = shares["float16"].lost
    assert (lost.count, lost.share, lost.share_low, lost.share_high) == (2048 * PATHS, 0.5, 0.5, 0.5)
    assert shares["float32"].lost.count == 0
    assert 0.0 < (shares["float32"].lost.share_high or 0.0) < 0.03


@pytest.mark.parametrize(("arm", "n"), [("float16", 513), ("bfloat16", 65)])
def test_a_harmonic_sum_stops_where_it_is_known_to(tmp_path: Path, arm: str, n: int) -> None:
    """At n = 513 in binary16 and 65 in bfloat16 (computed): the first of 600 terms that is lost, and all after it."""
    found = arm_of(summed(tmp_path, "range(1, 601):\n            s = s + 1.0 / n"), "add", arm)
    assert found.first_lost == n - 1, "steps are counted from 0, terms from 1"
    assert found.lost == (600 - n + 1) * PATHS


@pytest.mark.parametrize(("n", "sum_there"), [(512, 7.0859375), (600, 7.0859375)])
def test_the_harmonic_sum_stays_at_its_published_value(tmp_path: Path, n: int, sum_there: float) -> None:
    """Measured in a whole audit: 7.0859375 from term 512 on."""
    source = f"""
    import numpy as np

    def value(dW, h):
        s = np.zeros_like(dW[0])
        for n in range(1, {n + 1}):
            s = s + 1.0 / n
        return s + 0.0 * dW[0]
    """
    level = audited(tmp_path, source, ladder=FLAT).record.quantities["value"].levels[0]
    reference = level.reference.mean
    error = level.arms["float16"].error_mean
    assert reference is not None
    assert error is not None
    assert reference + error == pytest.approx(sum_there, abs=1e-9)


GROWING = """
import numpy as np

def value(dW, h):
    x = np.where(dW[0] == dW[0].max(), 100.0, 0.5)
    for n in range(dW.shape[0]):
        x = x * 4.0
    return x
"""


def test_the_first_infinite_value_is_located(tmp_path: Path) -> None:
    """100 x 4^5 is past 65,504: level 3 (8 steps), the fifth run of line 6, on the path with the largest draw."""
    found = watched(tmp_path, GROWING, ladder={"finest": "3"})
    by_level = {one.level: one.arms["float16"].first_nonfinite for one in found.levels}
    assert [level for level, first in by_level.items() if first is not None] == [3]
    first = by_level[3]
    assert first is not None
    file = file_for(tmp_path, GROWING, ladder={"finest": "3"})
    draws = BlockRunner(file, find_kernel(file)).draws(3, 0, Purpose.IDENTITY, PATHS).values  # type: ignore[union-attr]
    assert (first.file, first.line, first.operation, first.kind) == ("kernel.py", 6, "multiply", "infinite")
    assert (first.step, first.path) == (4, int(np.argmax(draws[0, 0])))
    assert first.operands == [25600.0, 4.0]
    line = arm_of(found, "multiply", "float16")
    assert line.overflows == 1, "what follows comes of an operand that is infinite already"
    assert line.headroom_above == 15 - 22, "100 x 4^8 is 2^22.6"
    assert arm_of(found, "multiply", "bfloat16").overflows == 0


TINY = """
import numpy as np

def value(dW, h):
    x = np.full_like(dW[0], 2.0**-12)
    y = x * 2.0**-5
    z = y * 2.0**-9
    w = x / 2.0**15
    return x + (y - y) + z * 0.0 + w * 0.0
"""


def test_subnormals_and_underflows_are_told_apart_by_line(tmp_path: Path) -> None:
    """2^-17 is subnormal in float16, 2^-26 and 2^-27 become 0; a 0 of a 0, and an exact difference, do not count."""
    found = watched(tmp_path, TINY, ladder=FLAT)
    kinds = {
        (line.line, line.operation): (one.subnormals, one.underflows)
        for line in found.levels[0].lines
        if (one := line.arms["float16"]) and (one.subnormals or one.underflows)
    }
    assert kinds == {(5, "multiply"): (PATHS, 0), (6, "multiply"): (0, PATHS), (7, "divide"): (0, PATHS)}
    below = found.levels[0].arms["float16"].below
    assert below.count == 3 * PATHS
    assert found.levels[0].arms["bfloat16"].below.count == 0


def test_cancellation_is_the_distance_of_exponents(tmp_path: Path) -> None:
    """(1 + 2^-6) - 1 loses six bits of 11, x - x all of them, and a sum of positive numbers none."""
    source = """
    import numpy as np

    def value(dW, h):
        x = np.ones_like(dW[0]) + 2.0**-6
        y = x - 1.0
        z = np.subtract(y, y)
        return x + z
    """
    lines = watched(tmp_path, source, ladder=FLAT).levels[0].lines
    bits = {line.line: line.arms["float16"].cancelled_most for line in lines if line.operation in ("add", "subtract")}
    assert bits == {4: 0, 5: 6, 6: 11, 7: 0}


SMALL = """
def value(dW, h):
    x = 3e-6 + 1e-6 * dW[0]
    for n in range(dW.shape[0]):
        x = x + 0.1 * x * dW[n]
    return x
"""


def test_a_shift_that_centres_the_range_is_tried(tmp_path: Path) -> None:
    """Results about 2^-18 are subnormal in float16; with exponents lower few are, and the error variance shows it.

    float16 keeps 6 bits there and 11 of normal numbers: variances apart by 2^10; a hundredth is far inside. Draws of up
    to 4 have to stay within the range, which ends at 2^(15 - 12); bfloat16 needs no shift.
    """
    found = watched(tmp_path, SMALL)
    assert list(found.shifts) == ["float16"]
    shift = found.shifts["float16"]
    assert -13 <= shift.exponent <= -12
    for level in shift.levels:
        before, after = level.error_variance["value"], level.shifted_error_variance["value"]
        assert before is not None
        assert after is not None
        assert after < before / 100
        assert level.subnormals > 0
        assert level.shifted_subnormals < level.subnormals / 10
        assert (level.shifted_underflows, level.shifted_overflows) == (0, 0)


ONE_PATH = """
def value(dW, h):
    s = 0.0 * dW[0]
    for n in range(300):
        s = s + 1.0
    return s
"""


def test_steps_of_a_kernel_of_one_path_are_counted_within_each_call(tmp_path: Path) -> None:
    """bfloat16 stops at 256 in every call, also where paths are run one at a time since a row of them is not."""
    for source in (ONE_PATH, ONE_PATH.replace("    return s", "    return s if s > -1.0 else 0.0")):
        found = watched(tmp_path, source, ladder=FLAT, kernel={"layout": '"steps"'})
        line = arm_of(found, "add", "bfloat16")
        paths = found.levels[0].paths
        assert (line.first_lost, line.lost, line.additions) == (256, 44 * paths, 300 * paths)
    assert paths == 32, "path by path"


def test_levels_are_the_coarsest_a_middle_and_the_finest_that_is_not_too_long(tmp_path: Path) -> None:
    """Of levels 0 to 12 with 1 to 4,096 steps the finest looked at has 1,024; a long single level is looked at."""
    assert watched_levels(file_for(tmp_path, GEOMETRIC, ladder={"finest": "12"})) == [0, 5, 10]
    assert watched_levels(file_for(tmp_path, GEOMETRIC, ladder={"coarsest_steps": "2048", "finest": "0"})) == [0]


def test_a_kernel_of_groups_of_paths_is_looked_at_with_a_block_of_them(tmp_path: Path) -> None:
    """One that takes its paths in groups of 512 gets 1,024."""
    source = "def value(dW, h):\n    return (dW[0].reshape(-1, 512) * 2.0).reshape(-1)\n"
    assert [one.paths for one in watched(tmp_path, source, ladder=FLAT).levels] == [1024]


def test_an_arm_that_raises_is_said_and_the_others_are_looked_at(tmp_path: Path) -> None:
    """What was seen until then is kept."""
    source = """
    def value(dW, h):
        x = 300.0 + 0.0 * dW[0]
        x = x * x
        if not (x < 1e5).all():
            raise OverflowError("too large")
        return x
    """
    arms = watched(tmp_path, source, ladder=FLAT).levels[0].arms
    assert arms["float16"].stopped == "the kernel raised OverflowError: too large"
    assert arms["float16"].overflows == PATHS
    assert arms["float32"].stopped is None


def test_an_audit_looks_at_every_number_and_a_run_without_study_does_not(tmp_path: Path) -> None:
    """The record has the part, and reads back; `studied=False`, as a gate runs it, costs nothing and has none."""
    record = audited(tmp_path, GEOMETRIC).record
    assert record.range is not None
    assert record.range.watched is not None
    assert [one.level for one in record.range.watched.levels] == [0, 1, 2]
    file = file_for(tmp_path, GEOMETRIC)
    assert run(file, find_kernel(file), studied=False).study is None
