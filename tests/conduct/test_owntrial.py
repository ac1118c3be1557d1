"""Audits of Python functions that round for themselves: called in each format, and taken at their word."""

from __future__ import annotations

import sys
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import ml_dtypes
import numpy as np
import pytest
from audit_cases import audited, file_for
from rich.console import Console

from narrowgauge.api import audit, run_audit, try_out
from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.errors import AuditFileError, EscapeError, KernelError, WorkerError
from narrowgauge.kernel.auditfile import audit_file_from
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.workers import Workers, engine_for
from narrowgauge.report.text import audit_text, trial_text

OWN = {"rounds": '"itself"'}
SOURCE = """
import numpy as np
from numpy import maximum

def value(dW, h, *, rate=0.05):
    one = dW.dtype.type
    x = np.ones(dW.shape[1], dW.dtype)
    for dw in dW:
        x = x + (one(rate * h) * x + one(0.2) * x * dw)
    return {"end": x, "call": maximum(x - one(1), one(0))}
"""
EMULATED = """
import numpy as np

def value(dW, h, *, rate=0.05):
    x = np.ones(dW.shape[1])
    for dw in dW:
        x = x + (rate * h * x + 0.2 * x * dw)
    return {"end": x, "call": np.maximum(x - 1.0, 0.0)}
"""


@pytest.mark.parametrize("arm", ["float16", "bfloat16", "float32", "float64"])
def test_it_gives_what_the_emulation_gives(tmp_path: Path, arm: str) -> None:
    """On the same draws, fine and coarse: a kernel of + - * in its draws' type has the bits of its emulated source."""
    found = []
    for name, source, kernel in (("own", SOURCE, OWN), ("emulated", EMULATED, {})):
        folder = tmp_path / name
        folder.mkdir()
        file = file_for(folder, source, kernel=kernel)
        runner = BlockRunner(file, find_kernel(file))
        caller, draws = runner.caller(arithmetic_named(arm)), runner.draws(2, 0)
        found += [(caller.fine(draws, 2, coarse_follows=True), caller.coarse(draws, 2))]
    for one, other in zip(*found, strict=True):
        assert one.keys() == other.keys()
        for name in one:
            assert one[name].tobytes() == other[name].tobytes()


def test_approximate_draws_arrive_as_in_the_emulation(tmp_path: Path) -> None:
    """Both kinds of draws, fine and coarse, have the bits of the emulated source; a block has an arm of each."""
    found, cells = [], {"approximate": '"constant"', "cells": "16"}
    for name, source, kernel in (("own", SOURCE, OWN), ("emulated", EMULATED, {})):
        folder = tmp_path / name
        folder.mkdir()
        file = file_for(folder, source, kernel=kernel, draws=cells)
        runner = BlockRunner(file, find_kernel(file))
        caller, draws = runner.caller(arithmetic_named("float16"), kind="approximate"), runner.draws(2, 0)
        exact = runner.caller(arithmetic_named("float16")).fine(draws, 2)
        found += [(exact, caller.fine(draws, 2, coarse_follows=True), caller.coarse(draws, 2))]
        assert {"float16", "float16/approximate"} <= set(runner.run(1, 0).quantities["end"].values)
    for one, other in zip(*found, strict=True):
        for name in one:
            assert one[name].tobytes() == other[name].tobytes()
    assert found[0][0]["end"].tobytes() != found[0][1]["end"].tobytes()


def test_an_audit_with_approximate_draws(tmp_path: Path) -> None:
    """Costs are measured by format, the trial tries formats, and arms with approximate draws are judged like any."""
    draws = {"approximate": '"model.py:cheap"', "formats": '["float16"]'}
    (tmp_path / "model.py").write_text(
        "import numpy as np\ndef cheap(u):\n    return np.where(u < 0.5, -0.8, 0.8)\n", encoding="utf-8"
    )
    asked = {"kernel": OWN, "cost": {"measured": "true", "draws": "0.5"}, "draws": draws}
    assert try_out(file_for(tmp_path, SOURCE, **asked)).faults == []
    record = audited(tmp_path, SOURCE, **asked).record
    assert set(record.costs) == {"float16", "bfloat16", "float32", "float64"}  # type: ignore[arg-type]
    assert {entry.arm for entry in record.canary} == set(record.costs)  # type: ignore[arg-type,union-attr]
    assert "float16/approximate" in record.verdict.finest_paying_level
    entry = record.arms["float16/approximate"]
    assert (entry.format, entry.rounding, entry.draws) == ("float16", "the kernel's own", "approximate")


def test_draws_arrive_in_the_format_and_layout(tmp_path: Path) -> None:
    """As an array of the format's own type, contiguous in the order that layout names, the step size a Python float."""
    source = """
    def value(dW, h):
        raise ValueError(f"{dW.dtype} {dW.shape} {dW.flags.c_contiguous} {type(h).__name__} {h}")
    """
    kernel = {**OWN, "layout": '"paths, steps"'}
    file = file_for(tmp_path, source, kernel=kernel)
    runner = BlockRunner(file, find_kernel(file))
    for arm in ("float16", "bfloat16", "float32", "float64"):
        with pytest.raises(ValueError, match=rf"^{arm} \(1024, 4\) True float 0\.25$"):
            runner.caller(arithmetic_named(arm)).fine(runner.draws(2, 0), 2)


def test_the_whole_audit(tmp_path: Path) -> None:
    """It is judged like any; the record says that it rounds for itself, and the text what the canary saw."""
    result = audited(tmp_path, SOURCE, kernel=OWN, ladder={"finest": "4"})
    record = result.record
    assert (record.reach, record.range) == (None, None)
    assert record.canary is not None
    assert {(entry.arm, entry.finding) for entry in record.canary if entry.quantity == "end"} == {
        ("float16", "rounds"),
        ("bfloat16", "rounds"),
        ("float32", "rounds"),
        ("float64", "unknown"),
    }
    assert record.arms["float16"].rounding == "the kernel's own"
    assert record.arms["float16"].fused is None
    assert "rounds for itself" in record.cautions[1]
    shown = rendered(audit_text(record, None))
    assert "rounding is the kernel's own, exact draws" in shown
    assert "float16, end: rounded on the way" in shown
    assert "It cannot show whether every operation is rounded" in shown
    assert "the emulation met" not in shown
    assert "THE KERNEL DOES NOT ROUND" not in shown


def test_a_false_format_is_said_first(tmp_path: Path) -> None:
    """A kernel that only stores in the format is audited as it is, below a warning that names each format."""
    source = SOURCE.replace("    one =", "    own, dW = dW.dtype, dW.astype(np.float64)\n    one =")
    source = source.replace('"end": x,', '"end": x.astype(own),').replace("one(0))}", "one(0)).astype(own)}")
    shown = rendered(audit_text(audited(tmp_path, source, kernel=OWN, ladder={"finest": "4"}).record, None))
    assert shown.startswith("THE KERNEL DOES NOT ROUND IN THE FORMATS IT CLAIMS.")
    assert "- float32, end and call: computed in float64, of which only the result is rounded." in shown


def test_the_dry_run(tmp_path: Path) -> None:
    """Shows the canary, and what the kernel raises in a narrow format, which an audit keeps as data."""
    source = SOURCE.replace(
        "    one =", "    if dW.dtype == np.float16:\n        raise ValueError('no half')\n    one ="
    )
    trial = try_out(file_for(tmp_path, source, kernel=OWN))
    assert [(fault.arm, fault.kind, fault.message) for fault in trial.faults] == [
        ("float16", "raised", "the kernel raised ValueError: no half")
    ]
    assert {entry.arm for entry in trial.canary or ()} == {"bfloat16", "float32", "float64"}
    shown = rendered(trial_text(trial))
    assert "What the kernel would raise" in shown
    assert "- float16: the kernel raised ValueError: no half" in shown
    assert "A second run gives the same bits in every format." in shown
    record = audited(tmp_path, source, kernel=OWN).record
    assert record.quantities["end"].levels[0].arms["float16"].reason == "raised"


def test_nothing_is_taken_for_an_escape(tmp_path: Path) -> None:
    """float() of a number of the state, which the emulation refuses, is the kernel's own business."""
    source = "def value(dW, h):\n    return dW[0] * dW.dtype.type(float(dW[0, 0]))\n"
    run_audit(file_for(tmp_path, source, kernel=OWN), None)
    with pytest.raises(EscapeError):
        run_audit(file_for(tmp_path, source), None)


def test_the_users_module_stays_as_it_is(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A function of an imported module is copied for each format: what it keeps in its module is not touched."""
    (tmp_path / "counted.py").write_text(
        "CALLS = []\n\ndef value(dW, h):\n    CALLS.append(dW.dtype)\n    return dW[0]\n", encoding="utf-8"
    )
    monkeypatch.syspath_prepend(tmp_path)
    import counted  # type: ignore[import-not-found]  # made above

    asked = {
        "kernel": {"run": counted.value, "takes": "normals", "rounds": "itself"},
        "ladder": {"horizon": 1, "finest": 0},
    }
    audit({**asked, "sampling": {"block": 1024, "paths": 1024, "most_paths": 1024}}, quiet=True)
    assert counted.CALLS == []
    del sys.modules["counted"]


class Lazy:
    """An array of some library, of which NumPy knows how to convert it and nothing else."""

    def __init__(self, values: np.ndarray) -> None:
        self._values = values

    def __array__(self, dtype: object = None, copy: object = None) -> np.ndarray:
        return self._values


def lazily(dW: np.ndarray, h: float) -> dict[str, Lazy]:
    return {"end": Lazy(dW.sum(axis=0, dtype=dW.dtype))}


def test_any_array_that_numpy_converts_will_do() -> None:
    """Also in a mapping; bfloat16 comes from ml_dtypes."""
    asked = {"kernel": {"run": lazily, "takes": "normals", "rounds": "itself"}, "ladder": {"horizon": 1.0, "finest": 1}}
    sampling = {"block": 1024, "paths": 1024, "most_paths": 1024}
    record = audit({**asked, "sampling": sampling}, quiet=True).record
    assert record.quantities["end"].levels[1].arms["bfloat16"].error_variance > 0
    assert ml_dtypes.bfloat16(1.0) == 1.0


@pytest.mark.parametrize(
    ("body", "message"),
    [
        (
            "return dW.sum(axis=0) + len(calls)",
            "level 2: a second call with the same draws does not give the same bits for 'value': 1024 of 1024 paths "
            "differ",
        ),
        (
            "return dW[0].astype(np.float32)",
            "level 2, arm float64: the kernel got its draws in float64 and returned float32, which does not hold all "
            "numbers of float64; accepted: float64 or a wider type (some array libraries narrow float64 to float32 "
            "unless they are told not to)",
        ),
        (
            "return dW",
            "level 2, arm float64: the kernel returned an array of shape (4, 1024) for 1024 paths; accepted:",
        ),
        ("return None", "level 2, arm float64: the kernel returned nothing (None); accepted:"),
        ("return {}", "level 2, arm float64: the kernel returned an empty mapping; accepted:"),
        ("return {1: dW[0]}", "level 2, arm float64: the kernel returned a quantity named 1; accepted:"),
        ("return dW[0].astype(complex)", "level 2, arm float64: the kernel returned an array of dtype complex128; acc"),
        (
            "return np.ma.masked_less(dW[0], 0)",
            "level 2, arm float64: the kernel returned an array with masked values; accepted:",
        ),
        (
            "return np.log(dW[0])",
            "level 2, arm float64: the reference is not finite for 'value', first on path ",
        ),
        ("raise ValueError('no')", "level 2, arm float64: the kernel raised ValueError: no"),
    ],
)
def test_what_is_refused_before_anything_is_measured(tmp_path: Path, body: str, message: str) -> None:
    """Results that do not repeat, of the wrong type or shape, or not finite in the reference."""
    source = f"import numpy as np\ncalls = []\n\ndef value(dW, h):\n    calls.append(1)\n    {body}\n"
    file = file_for(tmp_path, source, kernel=OWN)
    for attempt in (try_out, lambda one: run_audit(one, None)):
        with pytest.raises(KernelError) as caught:
            attempt(file)
        assert message in str(caught.value)


def test_parameters_and_targets_are_checked(tmp_path: Path) -> None:
    """As for an emulated kernel."""
    with pytest.raises(AuditFileError, match=r"parameters\.rat: the kernel takes no such argument; accepted: rate"):
        try_out(file_for(tmp_path, SOURCE, kernel=OWN, parameters={"rat": "1.0"}))
    with pytest.raises(AuditFileError, match=r"target\.rmse: one number for 2 quantities"):
        try_out(file_for(tmp_path, SOURCE, kernel=OWN, target={"rmse": "1.0"}))


def test_the_finest_level_is_tried_in_the_reference(tmp_path: Path) -> None:
    """A kernel that gives out on many steps is found before the coarse levels are measured."""
    source = "def value(dW, h):\n    assert len(dW) < 16, 'too fine'\n    return dW[0]\n"
    with pytest.raises(KernelError, match="level 4, arm float64: the kernel raised AssertionError: too fine"):
        try_out(file_for(tmp_path, source, kernel=OWN, ladder={"finest": "4"}))


@pytest.mark.parametrize("tables", [{}, {"cost": {"measured": "true"}}])
def test_want_of_memory_in_a_format_ends_the_audit(tmp_path: Path, tables: dict[str, dict[str, str]]) -> None:
    """It is no result of the format: neither in the trial nor where canary and costs run it."""
    source = "def value(dW, h):\n    if dW.dtype == 'float16':\n        raise MemoryError\n    return dW[0]\n"
    with pytest.raises(KernelError, match="arm float16: the kernel raised MemoryError"):
        audited(tmp_path, source, kernel=OWN, **tables)


def test_a_kernel_that_takes_no_shrinking_draws_has_no_canary(tmp_path: Path) -> None:
    """The canary's draws are its own: a kernel that refuses them is audited without one."""
    source = (
        "def value(dW, h):\n    if (abs(dW) < 1e-3).mean() > 0.5:\n        raise ValueError\n    return 1 + dW[0]\n"
    )
    record = audited(tmp_path, source, kernel=OWN).record
    assert record.canary == []
    assert "Not tried: in float64 the kernel raises on draws that shrink" in rendered(audit_text(record, None))
    assert record.verdict.finest_paying_level


@pytest.mark.skipif(sys.platform == "win32", reason="there is no such program")
def test_a_command_is_never_run_by_threads_of_this_process(tmp_path: Path) -> None:
    """One worker is a process of its own; an executor of threads is refused."""
    asked = {
        "kernel": {"takes": "normals"},
        "command": {"run": ["env"], "outputs": ["x"]},
        "ladder": {"horizon": 1.0, "finest": 1},
    }
    file = audit_file_from(asked)
    kernel = find_kernel(file)
    with engine_for(file, kernel, Workers()) as engine:
        assert engine.title == "1 worker process"
    with (
        ThreadPoolExecutor(1) as threads,
        pytest.raises(WorkerError, match=r"would run env in this process.*accepted: workers, or an executor of proc"),
        engine_for(file, kernel, Workers(executor=threads)),
    ):
        pass


def rendered(document: object) -> str:
    console = Console(width=200, color_system=None)
    with console.capture() as capture:
        console.print(document)
    return capture.get()
