"""What a trial says of constants, changed decisions, integers, texts and allowed escapes."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from audit_cases import audited, file_for
from msgspec.structs import replace

from narrowgauge.api import try_out
from narrowgauge.errors import EscapeError, KernelError
from narrowgauge.kernel.auditfile import AuditFile, audit_file_from, read_audit_file
from narrowgauge.record.audit import ConstantEntry, ConstantValue, DecisionEntry, LineCount, RangeEntry, TrialEntry

GUARD = """
import numpy as np

def value(dW, h):
    x = np.ones_like(dW[0])
    for n in range(dW.shape[0]):
        x = x + 0.2 * x * dW[n]
        x = np.maximum(x, 1e-8)
    x = x * 1e-14 + 0.1
    x = x + 3e-5
    return x * 6e23
"""


def constants(trial: TrialEntry) -> list[ConstantEntry]:
    assert trial.range is not None
    return trial.range.constants


def found(file: AuditFile) -> list[tuple[object, ...]]:
    """Line or parameter, arm, kind and value of every constant that a trial lists."""
    return [
        (entry.parameter or entry.line, entry.arm, entry.kind, value.value)
        for entry in constants(try_out(file))
        for value in entry.values
    ]


def test_constants_of_a_kernel_by_line_and_arm(tmp_path: Path) -> None:
    """1e-8 and 1e-14 vanish in float16, 6e23 overflows, 3e-5 is subnormal; bfloat16 and float32 take all of them."""
    file = file_for(tmp_path, GUARD)
    assert found(file) == [
        (7, "float16", "zero", 1e-8),
        (8, "float16", "zero", 1e-14),
        (9, "float16", "subnormal", 3e-5),
        (10, "float16", "infinite", 6e23),
    ]
    first = constants(try_out(file))[0]
    assert (first.file, first.line, first.parameter) == ("kernel.py", 7, None)
    # four steps on level 2, one on level 0
    assert (first.count, first.distinct) == (5, 1)
    assert first.values == [ConstantValue(value=1e-8, became=0.0, ulps=1e-8 * 2.0**37, count=5)]


def test_an_audit_records_what_its_trial_showed(tmp_path: Path) -> None:
    """The parts `range` and `reach` of the record are the trial's, also as audit.json has them."""
    file = file_for(tmp_path, GUARD)
    record = audited(tmp_path, GUARD).record
    trial = try_out(file)
    assert record.range is not None
    assert replace(record.range, watched=None) == trial.range
    assert record.reach == trial.reach


STEPS = "import numpy as np\n\ndef value(dW, h):\n    return dW[0] + h * 0.001\n"


def test_step_sizes_of_the_finest_level_are_met(tmp_path: Path) -> None:
    """h / 1000 is a subnormal number of float16 from level 4 on: the trial's own levels do not show it."""
    assert found(file_for(tmp_path, STEPS, ladder={"finest": "3"})) == []
    assert found(file_for(tmp_path, STEPS, ladder={"finest": "5"})) == [(4, "float16", "subnormal", 0.001 / 32)]


def test_the_finest_level_is_run_on_few_paths_if_that_will_do(tmp_path: Path) -> None:
    """Eight paths; a kernel that works on groups of 64 gets a whole block of them instead."""
    source = """
    import numpy as np

    def value(dW, h):
        x = dW[0] + 1e-30 * dW.shape[1]
        return (x.reshape(-1, GROUP) * 1.0).reshape(-1)
    """
    for group, paths in ((2, (1024, 8)), (64, (1024,))):
        kernel = source.replace("GROUP", str(group))
        values = found(file_for(tmp_path, kernel, ladder={"finest": "5"}))
        assert values == [(4, "float16", "zero", 1e-30 * number) for number in paths]


def test_a_kernel_that_fails_on_the_finest_level_alone_fails_the_trial(tmp_path: Path) -> None:
    """What escapes there is a fault of float64, and what constants there are is then not known."""
    source = (
        "import numpy as np\n\ndef value(dW, h):\n    if h < 0.1:\n        float(dW[0, 0])\n    return dW[0] + 1e-8\n"
    )
    trial = try_out(file_for(tmp_path, source, ladder={"finest": "5"}))
    assert [(fault.arm, fault.kind) for fault in trial.faults] == [("float64", "escape")]
    assert (trial.identical, trial.range) == (False, None)


def test_a_constant_that_changes_each_step_does_not_flood(tmp_path: Path) -> None:
    """Of 64 values on a line five are shown; the record says how many there were."""
    source = """
    import numpy as np

    def value(dW, h):
        x = dW[0]
        for n in range(1, len(dW) + 1):
            x = x + n * 1e-10
        return x
    """
    (entry,) = constants(try_out(file_for(tmp_path, source, ladder={"finest": "6"})))
    # n = 1 to 4 on level 2, 1 on level 0, 1 to 64 on the finest
    assert (entry.count, entry.distinct) == (4 + 1 + 64, 64)
    assert [(value.value, value.count) for value in entry.values] == [
        (1 * 1e-10, 3), (2 * 1e-10, 2), (3 * 1e-10, 2), (4 * 1e-10, 2), (5 * 1e-10, 1),
    ]  # fmt: skip


def test_numbers_of_array_parameters_are_named(tmp_path: Path) -> None:
    """They meet the state before the kernel's first line: the parameter stands in place of the line."""
    source = (
        "import numpy as np\n\ndef value(dW, h, *, rate, curve, tail):\n    return dW[0] + rate + curve[0] + tail[1]\n"
    )
    file = file_for(tmp_path, source, parameters={"rate": "1e-8", "curve": "[0.5, 1e-9]", "tail": "[7e4, 1.0]"})
    assert found(file) == [
        ("curve", "float16", "zero", 1e-9),
        ("tail", "float16", "infinite", 7e4),
        (4, "float16", "zero", 1e-8),
    ]


def test_a_constant_that_one_arm_alone_meets_is_found(tmp_path: Path) -> None:
    """After an overflow float16 takes a branch of its own, with a constant that float64 never meets."""
    source = """
    import numpy as np

    def value(dW, h):
        x = 5e4 + dW[0] * 0.0
        if np.isinf(x + x).any():
            x = x * 1e-9
        return x
    """
    assert found(file_for(tmp_path, source)) == [(6, "float16", "zero", 1e-9)]


def test_constants_of_a_kernel_that_draws_for_itself(tmp_path: Path) -> None:
    """It is tried on one tape, and on the finest level on another one."""
    source = """
    import numpy as np

    def value(rng, h, *, steps, paths):
        x = np.ones(paths)
        for _ in range(steps):
            x = x + 0.2 * np.sqrt(h) * rng.standard_normal(paths) + 1e-8
        return x
    """
    file = file_for(tmp_path, source, kernel={"takes": '"rng"'}, ladder={"finest": "4"})
    assert found(file) == [(6, "float16", "zero", 1e-8)]


LOOP = """
import numpy as np

def value(dW, h):
    x, n = dW[0] * 0.0, 0
    while x[0] < 1.0:
        x = x + 0.1
        n = n + int(x[1])
    if x[0] > 1.01:
        x = x * 1.0
    return x
"""


def loops(kind: type[np.floating]) -> tuple[int, float]:
    """How many sums of a tenth stay below one in a format of NumPy's, and the first that does not."""
    x, count = kind(0.0), 0
    while x < kind(1.0):
        x, count = kind(x + kind(0.1)), count + 1
    return count, float(x)


def test_decisions_that_an_arm_takes_otherwise(tmp_path: Path) -> None:
    """The line, the arm, and both numbers of decisions and of true ones, on the same draws; agreement is not listed."""
    file = file_for(tmp_path, LOOP)
    reach = try_out(file).reach
    here = {"float16": np.float16, "float32": np.float32}
    wide, last = loops(np.float64)
    expected = []
    for name, kind in here.items():
        count, end = loops(kind)
        assert count != wide or name == "float32"
        if count != wide:
            expected += [(5, name, wide + 1, wide, count + 1, count), (7, name, wide, wide, count, count)]
        if (end > 1.01) != (last > 1.01):
            expected.append((8, name, 1, last > 1.01, 1, end > 1.01))
    assert expected
    assert [
        (one.line, one.arm, one.reference_count, one.reference_true, one.count, one.true)
        for one in reach.changed_decisions
        if one.arm in here
    ] == sorted(expected, key=lambda row: (row[0], row[1]))
    assert reach.changed_decisions == sorted(reach.changed_decisions, key=lambda one: one.line or 0)
    assert isinstance(reach.changed_decisions[0], DecisionEntry)


def test_a_kernel_whose_decisions_agree_lists_none(tmp_path: Path) -> None:
    """Negative control: a decision on which all formats agree is counted and not listed."""
    source = (
        "import numpy as np\n\ndef value(dW, h):\n    if dW[0, 0] < 9.0:\n        return dW[0]\n    return -dW[0]\n"
    )
    reach = try_out(file_for(tmp_path, source)).reach
    assert (reach.decisions, reach.changed_decisions) == (1, [])


def test_integers_and_texts_are_listed_by_line(tmp_path: Path) -> None:
    """int() with its line and the largest count of a run, among the decisions; text as a remark."""
    source = """
    import numpy as np

    def value(dW, h):
        for dw in dW:
            k = int(dw[0] > 0)
        name = f"{dW[0, 0]:.3f} {dW[0, 1]}"
        str(dW[0, 0])
        return dW[0] + int(dW[0, 0] * 0.0)
    """
    reach = try_out(file_for(tmp_path, source)).reach
    assert reach.integers == [
        LineCount(file="kernel.py", line=5, count=4),
        LineCount(file="kernel.py", line=8, count=1),
    ]
    assert reach.decisions == 5
    words = "of the state became text, which leaves the emulation: what is read back from it is not rounded"
    assert reach.remarks == [f"kernel.py:6: 2 values {words}", f"kernel.py:7: a value {words}"]


ESCAPE = """
import numpy as np

def value(dW, h):
    level = float(dW[0, 0])
    x = dW[0] + level / 3
    return x * 1.5
"""


def test_an_allowed_escape_is_counted_in_every_arm(tmp_path: Path) -> None:
    """The audit goes through, float64 has plain NumPy's bits, and reach names the line."""
    allow = {"allow": '["kernel.py:4"]'}
    result = audited(tmp_path, ESCAPE, kernel=allow)
    trial = try_out(file_for(tmp_path, ESCAPE, kernel=allow))
    assert (trial.identical, trial.faults) == (True, [])
    assert trial.reach.allowed_escapes == [LineCount(file="kernel.py", line=4, count=1)]
    assert trial.reach.remarks == []
    assert result.record.reach == trial.reach
    assert result.record.asked["kernel"]["allow"] == ["kernel.py:4"]  # type: ignore[index]


def test_an_escape_on_any_other_line_is_still_caught(tmp_path: Path) -> None:
    """Negative control: another allowed line does not help, and the remark says that it let nothing out."""
    file = file_for(tmp_path, ESCAPE, kernel={"allow": '["kernel.py:5"]'})
    trial = try_out(file)
    place = f"{(tmp_path / 'kernel.py').resolve()}:4: "
    assert [fault.arm for fault in trial.faults] == ["float64", "bfloat16", "float16", "float32"]
    assert all(fault.kind == "escape" and fault.message.startswith(place) for fault in trial.faults)
    assert trial.reach.remarks == ["kernel.allow: nothing escaped at kernel.py:5"]
    with pytest.raises(EscapeError) as raised:
        audited(tmp_path, ESCAPE, kernel={"allow": '["kernel.py:5"]'})
    assert str(raised.value).startswith(place)


def test_an_escape_of_one_arm_alone_names_level_and_arm(tmp_path: Path) -> None:
    """Plain values that float64 has and a narrower format has not stop an audit before it measures."""
    source = """
    import numpy as np

    def value(dW, h):
        x = dW[0] * 1.0
        x[:2] = np.linspace(0.1, 0.3, 2)
        return x
    """
    place = f"{(tmp_path / 'kernel.py').resolve()}:5: "
    with pytest.raises(EscapeError) as raised:
        audited(tmp_path, source)
    assert str(raised.value).startswith(f"level 2, arm bfloat16: {place}a plain float array is stored ")
    trial = try_out(file_for(tmp_path, source, kernel={"allow": '["kernel.py:5"]'}))
    assert (trial.faults, trial.reach.remarks) == ([], [])
    assert trial.reach.allowed_escapes == [LineCount(file="kernel.py", line=5, count=1)]


def test_what_a_narrow_arm_raises_is_left_to_the_measurement(tmp_path: Path) -> None:
    """The trial before an audit does not end it; the record has what was raised, and the constants met until then."""
    source = """
    import numpy as np

    def value(dW, h):
        x = 70000.0 + dW[0]
        if np.isinf(x).any():
            raise ArithmeticError("lost")
        return x
    """
    record = audited(tmp_path, source).record
    raised = record.quantities["value"].levels[0].arms["float16"].raised
    assert raised is not None
    assert raised.type == "ArithmeticError"
    assert record.range is not None
    assert replace(record.range, watched=None) == RangeEntry(
        constants=[
            ConstantEntry(
                file="kernel.py",
                line=4,
                parameter=None,
                arm="float16",
                kind="infinite",
                count=2,
                distinct=1,
                values=[ConstantValue(value=7e4, became=None, ulps=None, count=2)],
            )
        ]
    )


def test_arms_are_held_against_plain_numpy_where_float64_is_stopped(tmp_path: Path) -> None:
    """A narrow arm that draws more than plain NumPy is told so, also on a level that float64 never came to."""
    source = """
    import numpy as np

    def value(rng, h, *, steps, paths):
        x = rng.standard_normal(paths)
        if (x[:1] * 0.0 + 1.0 + 1e-12 > 1.0).any():
            float(x[0])
        elif steps == EXTRA:
            rng.standard_normal(paths)
        for _ in range(steps):
            x = x + rng.standard_normal(paths)
        return x
    """
    rng = {"takes": '"rng"'}
    trial = try_out(file_for(tmp_path, source.replace("EXTRA", "0"), kernel=rng))
    assert [(fault.arm, fault.kind) for fault in trial.faults] == [("float64", "escape")]
    for steps, level in ((1, 0), (4, 2)):
        with pytest.raises(KernelError) as raised:
            try_out(file_for(tmp_path, source.replace("EXTRA", str(steps)), kernel=rng))
        assert (raised.value.level, raised.value.arm) == (level, "bfloat16")


def adapter(dW, h):  # type: ignore[no-untyped-def]  # as a user writes it
    return dW[0] + float(dW[0, 0]) * 1e-8


def test_lines_of_a_function_that_is_handed_over(monkeypatch: pytest.MonkeyPatch) -> None:
    """Its file counts as the kernel's own; the path is relative to the current folder."""
    monkeypatch.chdir(Path(__file__).parent)
    line = adapter.__code__.co_firstlineno + 1
    mapping: dict[str, dict[str, object]] = {
        "kernel": {"run": adapter, "takes": "increments", "allow": [f"{Path(__file__).name}:{line}"]},
        "ladder": {"horizon": 1.0, "finest": 1},
    }
    trial = try_out(audit_file_from(mapping))
    assert trial.faults == []
    assert [one.line for one in trial.reach.allowed_escapes] == [line]


def test_an_audit_file_elsewhere_has_paths_relative_to_itself(tmp_path: Path) -> None:
    """kernel.allow names files as kernel.run does, from the audit file's folder, with .. and links followed."""
    (tmp_path / "models").mkdir()
    (tmp_path / "audits").mkdir()
    (tmp_path / "models" / "kernel.py").write_text(ESCAPE.lstrip("\n"))
    path = tmp_path / "audits" / "audit.toml"
    path.write_text(
        '[kernel]\nrun = "../models/kernel.py:value"\ntakes = "increments"\nallow = ["../models/kernel.py:4"]\n'
        "[ladder]\nhorizon = 1.0\nfinest = 1\n"
    )
    trial = try_out(read_audit_file(path))
    assert (trial.faults, len(trial.reach.allowed_escapes)) == ([], 1)
