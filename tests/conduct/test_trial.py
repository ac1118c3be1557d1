"""The identity run and the trial of every arm: what they reach, what they refuse, word for word."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import msgspec
import pytest
from audit_cases import GEOMETRIC, file_for, written

from narrowgauge.api import audit, try_out
from narrowgauge.conduct.trial import examine, try_arms
from narrowgauge.draws.streams import Purpose
from narrowgauge.errors import AuditFileError, KernelError, RefusedError
from narrowgauge.kernel.auditfile import AuditFile, read_audit_file
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.record.audit import FaultEntry, ReachEntry, TrialEntry


def identity(file: AuditFile) -> ReachEntry:
    kernel = find_kernel(file)
    return examine(file, kernel, BlockRunner(file, kernel)).reach


def trial(file: AuditFile) -> TrialEntry:
    kernel = find_kernel(file)
    return try_arms(file, kernel, BlockRunner(file, kernel))


def refusal(folder: Path, source: str, **tables: dict[str, str]) -> KernelError:
    with pytest.raises(KernelError) as caught:
        identity(file_for(folder, source, **tables))
    return caught.value


def test_reach_counts_the_operations_of_every_line(tmp_path: Path) -> None:
    """The run on level 2 has four steps: per step three products, two sums and a decision, each rounded one by one.

    r h is a product of Python's own numbers and no operation of the state.
    """
    source = GEOMETRIC.replace("    return x\n", "        if x[0] > 1e9:\n            break\n    return x\n")
    path = "kernel.py"
    reach = identity(file_for(tmp_path, source))
    counts = {(line.file, line.line, line.operation): line.count for line in reach.lines if line.route == "rounded"}
    assert counts == {(path, 6, "add"): 8, (path, 6, "multiply"): 12}
    assert (reach.rounded, reach.share, reach.decisions) == (20, 1.0, 4)
    assert reach.operations == sum(line.count for line in reach.lines)
    assert reach.lines == sorted(reach.lines, key=lambda line: (line.file, line.line, line.operation))


@pytest.mark.parametrize(("finest", "steps"), [(0, 1), (1, 2), (2, 4), (6, 4)])
def test_the_run_is_on_level_two_or_the_finest(tmp_path: Path, finest: int, steps: int) -> None:
    """A ladder that ends before level 2 is tried on its finest level, by the number of additions."""
    reach = identity(file_for(tmp_path, GEOMETRIC, ladder={"finest": str(finest)}))
    assert sum(line.count for line in reach.lines if line.operation == "add") == 2 * steps


def test_a_kernel_that_rounds_nothing_has_no_share(tmp_path: Path) -> None:
    """Where no operation rounds, its share does not exist."""
    reach = identity(file_for(tmp_path, "def value(dW, h):\n    return dW[0]\n"))
    assert (reach.rounded, reach.share) == (0, None)


def test_draws_of_the_run_are_its_own(tmp_path: Path) -> None:
    """The kernel sees 1,024 paths of a stream that no audit sees, by what it says about its first draw."""
    file = file_for(tmp_path, "def value(dW, h):\n    raise ValueError(f'{dW.shape} {float(dW[0, 0])!r}')\n")
    runner = BlockRunner(file, find_kernel(file))
    with pytest.raises(KernelError) as caught:
        identity(file)
    first = float(runner.draws(2, 0, Purpose.IDENTITY, 1024).values[0, 0, 0])
    assert str(caught.value.__cause__) == f"(4, 1024) {first!r}"
    assert first != float(runner.draws(2, 0).values[0, 0, 0])


COUNTER = """
calls = []

def value(dW, h):
    calls.append(1)
    return dW[0] * 0.0 + len(calls)
"""
REPEATED = (
    "level 2: a second call with the same draws does not give the same bits for 'value': 1024 of 1024 paths differ, "
    "the first is path 0 with 2.0 for 1.0. The kernel is not a function of its draws alone; accepted: a kernel whose "
    "calls leave nothing behind"
)


def test_a_counter_in_the_module_is_caught(tmp_path: Path) -> None:
    """A kernel whose result depends on how often it was called is refused before anything is measured."""
    problem = refusal(tmp_path, COUNTER)
    assert str(problem) == REPEATED
    assert problem.level == 2
    with pytest.raises(KernelError) as caught:
        trial(file_for(tmp_path, COUNTER))
    assert str(caught.value) == REPEATED


CALLS: list[int] = []


def counting(dW: Any, h: float) -> Any:
    CALLS.append(1)
    return dW[0] * 0.0 + len(CALLS)


def test_a_counter_beside_a_function_handed_over_is_caught() -> None:
    """The same for a function of Python, whose state outlives the audit."""
    CALLS.clear()
    mapping = {"kernel": {"run": counting, "takes": "normals"}, "ladder": {"horizon": 1.0, "finest": 2}}
    with pytest.raises(KernelError) as caught:
        audit(mapping, quiet=True)
    assert str(caught.value) == REPEATED


def test_a_state_that_moves_some_paths_is_counted(tmp_path: Path) -> None:
    """The message counts the paths that differ and shows the first; a sign of zero and NaN against a number count."""
    source = """
    import numpy as np
    calls = []

    def value(dW, h):
        calls.append(1)
        x = np.zeros(dW.shape[1])
        if len(calls) % 2 == 0:
            x[7] = -0.0
            x[9] = np.nan
        return {"other": np.ones(dW.shape[1]), "zero": x}
    """
    message = str(refusal(tmp_path, source))
    assert "for 'zero': 2 of 1024 paths differ, the first is path 7 with -0.0 for 0.0. " in message


def test_nan_in_both_runs_is_the_same(tmp_path: Path) -> None:
    """Paths that are NaN in every run do not differ, whatever their sign bit, which means nothing."""
    identity(file_for(tmp_path, "import numpy as np\n\ndef value(dW, h):\n    return np.log(dW[0])\n"))
    source = """
    import numpy as np
    calls = []

    def value(dW, h):
        calls.append(1)
        return np.full(dW.shape[1], np.copysign(np.nan, (-1.0) ** len(calls)))
    """
    identity(file_for(tmp_path, source))


def test_a_kernel_that_looks_behind_the_machinery_is_caught(tmp_path: Path) -> None:
    """What the machinery changes is seen in the bits of float64, however small it is."""
    source = """
    import numpy as np

    def value(dW, h):
        x = np.zeros(dW.shape[1]) + 1.0
        x[3:] = x[3:] + (0.0 if hasattr(dW, '_carrier') else 2.0**-52)
        return x
    """
    assert str(refusal(tmp_path, source)) == (
        "level 2: float64 through the emulation does not give plain NumPy's bits for 'value': 1021 of 1024 paths "
        "differ, the first is path 3 with 1.0 for 1.0000000000000002. Either the kernel is not a function of its draws "
        "alone, or an operation of it is not emulated rightly"
    )


def test_a_quantity_of_one_run_only(tmp_path: Path) -> None:
    """Runs that do not return the same quantities are refused by the name of the first that is missing."""
    source = """
    import numpy as np

    def value(dW, h):
        return {"a": dW[0], "other" if hasattr(dW, "_carrier") else "plain": dW[0]}
    """
    assert str(refusal(tmp_path, source)) == "level 2: the quantity 'plain' is returned in one of two runs only"


def test_a_kernel_that_raises_under_plain_numpy(tmp_path: Path) -> None:
    """The error says so, and the kernel's own exception is its cause."""
    cases = {"raise ValueError('no rate')": "ValueError: no rate", "raise SystemExit": "SystemExit: "}
    for statement, text in cases.items():
        problem = refusal(tmp_path, f"def value(dW, h):\n    {statement}\n", ladder={"finest": "1"})
        assert str(problem) == f"level 1, arm plain NumPy: the kernel raised {text}"
        assert (problem.level, problem.arm) == (1, "plain NumPy")
        assert type(problem.__cause__).__name__ == text.partition(":")[0]


def test_a_kernel_that_raises_in_the_machinery_only(tmp_path: Path) -> None:
    """Then the message adds that plain NumPy does not."""
    source = """
    import numpy as np

    def value(dW, h):
        if hasattr(dW, '_carrier'):
            raise TypeError("an array, please")
        return dW[0]
    """
    problem = refusal(tmp_path, source)
    assert str(problem) == (
        "level 2, arm float64: the kernel raised TypeError: an array, please, where plain NumPy does not"
    )
    assert isinstance(problem.__cause__, TypeError)


def test_results_of_the_wrong_kind_are_refused_at_once(tmp_path: Path) -> None:
    """The contract is checked in the plain run, before anything else."""
    assert str(refusal(tmp_path, "def value(dW, h):\n    pass\n")) == (
        "level 2, arm plain NumPy: the kernel returned nothing (None); accepted: an array of shape (paths,), or a "
        "mapping of names to such arrays"
    )


def test_what_is_wrong_with_the_module_comes_out_as_it_is(tmp_path: Path) -> None:
    """A missing function is the audit file's fault; a module that raises is named as such."""
    file = file_for(tmp_path, "def other(dW, h):\n    return dW[0]\n")
    with pytest.raises(AuditFileError) as caught:
        identity(file)
    path = (tmp_path / "kernel.py").resolve()
    assert str(caught.value) == (
        f"{tmp_path / 'audit.toml'}: kernel.run: {path} has no function 'value'; accepted: one of other"
    )
    words = "kernel.py:value: executing the module raised ZeroDivisionError: division by zero"
    assert str(refusal(tmp_path, "1 / 0\n")) == words


RANDOM = "import numpy as np\n\ndef value(dW, h):\n    return dW[0] + np.random.standard_normal()\n"


def test_a_kernel_that_draws_for_itself_is_refused_for_that(tmp_path: Path) -> None:
    """The refusal of random numbers comes before the bits that differ because of them."""
    with pytest.raises(RefusedError) as caught:
        identity(file_for(tmp_path, RANDOM))
    place = f"{(tmp_path / 'kernel.py').resolve()}:4: "
    assert str(caught.value).startswith(f"{place}numpy.random.standard_normal is not offered by this version: ")


def test_a_trial_reports_every_arm_and_measures_none(tmp_path: Path) -> None:
    """A kernel without faults is identical and has no fault; the reach is that of the identity run."""
    file = file_for(tmp_path, GEOMETRIC)
    found = trial(file)
    assert (found.identical, found.faults) == (True, [])
    assert found.reach == identity(file)
    shown = try_out(file)
    assert msgspec.structs.replace(shown, branches=None) == found
    assert shown.branches is not None
    assert shown.branches.mismatches == []


def test_a_trial_lists_the_faults_of_all_arms(tmp_path: Path) -> None:
    """An escape stops each arm, each with file and line; float64 is then not identical, and nothing was reached."""
    source = "import numpy as np\n\ndef value(dW, h):\n    return np.array([float(x) for x in dW[0]])\n"
    place = f"{written(tmp_path, source)}:4: "
    found = trial(file_for(tmp_path, source))
    assert not found.identical
    assert (found.reach.operations, found.reach.share, found.reach.lines) == (0, None, [])
    assert [fault.arm for fault in found.faults] == ["float64", "bfloat16", "float16", "float32"]
    assert all(fault.kind == "escape" and fault.message.startswith(place) for fault in found.faults)


def test_a_trial_keeps_what_a_narrow_arm_raises(tmp_path: Path) -> None:
    """What the kernel raises in float16 alone is a fault of that arm; a wrong result there ends the trial."""
    source = """
    import numpy as np

    def value(dW, h):
        x = 70000.0 + dW[0]
        if np.isinf(x).any():
            STATEMENT
        return x
    """
    cases = {"raise ArithmeticError('lost')": "ArithmeticError: lost", "raise SystemExit(1)": "SystemExit: 1"}
    for statement, text in cases.items():
        found = trial(file_for(tmp_path, source.replace("STATEMENT", statement)))
        assert found.faults == [FaultEntry(arm="float16", kind="raised", message=f"the kernel raised {text}")]
        assert found.identical
    with pytest.raises(KernelError) as caught:
        trial(file_for(tmp_path, source.replace("STATEMENT", "return x[:3]")))
    assert str(caught.value) == (
        "level 2, arm float16: the kernel returned an array of shape (3,) for 1024 paths; accepted: an array of shape "
        "(paths,), or a mapping of names to such arrays"
    )


def test_plain_values_that_only_float64_has_are_a_fault_of_the_narrow_arms(tmp_path: Path) -> None:
    """A plain array passes in float64 and is an escape where the arm does not have its values."""
    source = "import numpy as np\n\ndef value(dW, h):\n    return np.linspace(0.0, 1.0, dW.shape[1])\n"
    found = trial(file_for(tmp_path, source))
    assert found.identical
    assert found.faults == [
        FaultEntry(
            arm=arm,
            kind="escape",
            message=f"the kernel returned a plain array whose values {arm} does not have: they did not go through the "
            "emulated arithmetic",
        )
        for arm in ("bfloat16", "float16", "float32")
    ]


TWO = "import numpy as np\n\ndef value(dW, h):\n    return {'call': dW[0] + 1.0, 'put': dW[0] * 2.0}\n"
EACH = "accepted: a table with a number for each of call, put"


@pytest.mark.parametrize(
    ("target", "message"),
    [
        ("rmse = 0.1", f"target.rmse: one number for 2 quantities; {EACH}"),
        ("rmse = {call = 0.1}", f"target.rmse: no number for put; {EACH}"),
        (
            "rmse = {call = 0.1, putt = 0.1}",
            "target.rmse.putt: the kernel returns no such quantity; accepted: call, put",
        ),
        (
            "rmse = {call = 0.1, put = 0.1}\nlargest_correction = {cal = 1.0}",
            "target.largest_correction.cal: the kernel returns no such quantity; accepted: call, put",
        ),
    ],
)
def test_a_target_names_the_quantities_that_the_kernel_returns(tmp_path: Path, target: str, message: str) -> None:
    """A name mistyped or left out would switch the judgement of bias off: refused, with the key."""
    file = read_audit_file(written_with(tmp_path, TWO, f"[target]\n{target}\n"))
    with pytest.raises(AuditFileError) as caught:
        identity(file)
    assert str(caught.value) == f"{file.source}: {message}"


@pytest.mark.parametrize(
    ("parameters", "signature", "message"),
    [
        ("", "dW, h, *, rate", "parameters.rate: missing, and the kernel has no default; accepted: rate"),
        ("ratee = 1", "dW, h, *, rate=1", "parameters.ratee: the kernel takes no such argument; accepted: rate"),
        ("rate = 1", "dW, h", "parameters.rate: the kernel takes no such argument; accepted: no parameters"),
        (
            "",
            "dW",
            "kernel.run: the kernel takes 1 positional arguments; accepted: a function of the draws, the step size "
            "and parameters",
        ),
    ],
)
def test_parameters_fit_the_signature(tmp_path: Path, parameters: str, signature: str, message: str) -> None:
    """A parameter that is missing or unknown is named by its key before anything runs."""
    source = f"def value({signature}):\n    return dW[0]\n"
    file = read_audit_file(written_with(tmp_path, source, f"[parameters]\n{parameters}\n"))
    with pytest.raises(AuditFileError) as caught:
        identity(file)
    assert str(caught.value) == f"{file.source}: {message}"


def written_with(folder: Path, source: str, tables: str) -> Path:
    """Write a kernel and an audit file of three levels with further tables, and return the file's path."""
    (folder / "kernel.py").write_text(source, encoding="utf-8")
    path = folder / "asked.toml"
    head = '[kernel]\nrun = "kernel.py:value"\ntakes = "increments"\n[ladder]\nhorizon = 1.0\nfinest = 2\n'
    path.write_text(head + tables, encoding="utf-8")
    return path
