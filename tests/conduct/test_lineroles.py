"""What a line does, seen from two runs: state, step, payoff or set-up; and which constants are step sizes."""

from __future__ import annotations

from pathlib import Path

from audit_cases import file_for

from narrowgauge.conduct.lineroles import Seen, lasting, roles
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.linearms import LineRunner

SOURCE = """
import numpy as np

def moved(v, h, dw):
    return v + (0.5 * h * v + 0.2 * dw)

def value(dW, h):
    x = dW[0] * 0.0
    v = x + 1.0
    for dw in dW:
        root = np.sqrt(np.abs(v))
        x = x + root * dw
        v = moved(v, h, dw)
    y = np.exp(x)
    return np.maximum(y - 1.0, 0.0)
"""


def seen(folder: Path, source: str, level: int) -> Seen:
    file = file_for(folder, source)
    one = Seen()
    LineRunner(file, find_kernel(file), "float16").observed(level, 16, one)
    return one


def test_every_line_has_its_role(tmp_path: Path) -> None:
    """The state's line is where it is computed, also in a function; lines after the loop are the payoff's."""
    few, many = (seen(tmp_path, SOURCE, level) for level in (0, 2))
    found = {place.line: role for place, role in roles(few, many).items()}
    assert found == {4: "state", 7: "set-up", 8: "set-up", 10: "step", 11: "state", 13: "payoff", 14: "payoff"}


def test_without_a_loop_there_are_no_roles(tmp_path: Path) -> None:
    """A kernel that runs each line once whatever the steps has no line of a step."""
    source = "import numpy as np\n\ndef value(dW, h):\n    return dW.sum(axis=0) * 2.0\n"
    found = roles(seen(tmp_path, source, 0), seen(tmp_path, source, 2))
    assert set(found.values()) == {None}


def test_what_is_computed_anew_each_step_is_not_carried(tmp_path: Path) -> None:
    """A line is one of a step where nothing of it reaches the next step."""
    source = """
        import numpy as np

        def value(dW, h):
            best = np.abs(dW[0])
            for dw in dW:
                size = 2.0 * np.abs(dw)
                best = np.maximum(best, size)
            return best
    """
    found = {place.line: role for place, role in roles(seen(tmp_path, source, 0), seen(tmp_path, source, 2)).items()}
    assert found[6] == "step"
    assert found[7] == "state"


def test_constants_that_last_do_not_depend_on_the_step_size(tmp_path: Path) -> None:
    """Of the constants those are kept that runs of two step sizes meet on the same lines."""
    few, many = (seen(tmp_path, SOURCE, level) for level in (0, 2))
    found = {(place.line, number) for place, number in lasting([few, many]) if place is not None}
    assert (4, 0.2) in found
    assert (7, 0.0) in found
    assert not {(4, 0.5), (4, 0.125)} & found  # 0.5 h


def test_operations_are_counted_by_value(tmp_path: Path) -> None:
    """A line weighs as many rounded numbers as it computes: selections and signs are none."""
    one = seen(tmp_path, SOURCE, 2)
    values = {place.line: count for place, count in one.values.items()}
    assert values[11] == 2 * 4 * 16  # a product and a sum in each of 4 steps, 16 paths
    assert values[10] == 4 * 16  # the root alone
    assert values[14] == 16


def test_additions_to_the_state_are_told_from_other_sums(tmp_path: Path) -> None:
    """Both additions of x + a + b are to the state, in place or not; a difference in the increment is none."""
    source = """
        import numpy as np

        def value(dW, h):
            x = dW[0] * 0.0
            y = dW[0] + 1.0
            z = dW[0] + 2.0
            for dw in dW:
                x = x + 0.5 * (1.0 - x) * h
                y = y + h * y + dw
                z += 0.1 * dw
            return x + y + z
    """
    found = [one.place.line for one in seen(tmp_path, source, 2).sums]
    assert sorted(found) == [8, 9, 9, 10]


def test_a_sum_that_is_held_back_at_its_ends_is_one_to_the_state(tmp_path: Path) -> None:
    """In x = clip(x + a) the sum is carried on; what is clamped within an increment, or scaled behind it, is not."""
    source = """
        import numpy as np

        def value(dW, h):
            x = dW[0] * 0.0
            y = dW[0] + 1.0
            z = dW[0] + 2.0
            v = dW[0] + 3.0
            for dw in dW:
                x = np.clip(x + h * x + dw, -1.0, 1.0)
                y = np.minimum(np.maximum(y - dw, 0.0), 9.0)
                z = 0.5 * np.maximum(z + dw, 0.0)
                v = v + np.maximum(1.0 - v, 0.0) * dw
            return x + y + z + v
    """
    found = [one.place.line for one in seen(tmp_path, source, 2).sums]
    assert sorted(found) == [9, 9, 10, 12]


def test_the_state_of_a_single_path_is_found_too(tmp_path: Path) -> None:
    """A kernel of one path a call computes with numbers, not with arrays."""
    source = """
        def value(dW, h):
            x = 1.0
            for dw in dW:
                shock = 0.2 * dw
                x = x + x * shock
            return x
    """
    file = file_for(tmp_path, source, kernel={"layout": '"steps"'})
    few, many = Seen(), Seen()
    for level, one in ((0, few), (2, many)):
        LineRunner(file, find_kernel(file), "float16").observed(level, 16, one)
    assert {place.line: role for place, role in roles(few, many).items()} == {4: "step", 5: "state"}
