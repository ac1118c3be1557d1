"""What travels to a worker, and the wrapper that turns whatever a kernel does into data."""

from __future__ import annotations

import json
import pickle
import threading
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from block_cases import GEOMETRIC, file_for, written
from threadpoolctl import threadpool_info, threadpool_limits

from narrowgauge import errors
from narrowgauge.errors import (
    AuditFileError,
    EscapeError,
    KernelError,
    NarrowgaugeError,
    RaisedElsewhereError,
    RefusedError,
    WorkerError,
)
from narrowgauge.kernel.auditfile import AuditFile, audit_file_from
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.kernel.raised import own_traceback
from narrowgauge.measure.packing import packed
from narrowgauge.measure.task import Bench, attempted, here, job_for, pinned, run_block, run_task


def scaled(dW: Any, h: float, *, s: float = 0.5) -> Any:
    return 1.0 + s * dW[0] * np.sqrt(h)


class Holder:
    @staticmethod
    def inner(dW: Any, h: float) -> Any:
        return dW[0]


def audit_of(function: Callable[..., Any], **parameters: float) -> AuditFile:
    return audit_file_from(
        {
            "kernel": {"run": function, "takes": "increments"},
            "ladder": {"horizon": 1, "finest": 1},
            "parameters": parameters,
            "sampling": {"block": 1024},
        }
    )


def level_zero(bench: Bench) -> bytes:
    return run_block(bench, 0, 0).data


def levels(bench: Bench) -> AuditFile:
    return bench.file


@pytest.mark.parametrize(
    "tables",
    [
        {},
        {"target": {"rmse": {"call": 0.1, "up": 1 / 3}}, "formats": {"narrow": ["float16"]}},
        {
            "parameters": {
                "r": 1,
                "s": -0.1,
                "name": "é\u2028",
                "table": [[1.0, 2.0], [3.0, 5e-324]],
                "on": True,
                "no": [],
            }
        },
    ],
)
def test_an_audit_file_travels_as_text(tmp_path: Path, tables: dict[str, Any]) -> None:
    """What the worker reads is the audit file with every default, each number bit for bit and of its type."""
    file = file_for(written(tmp_path, GEOMETRIC), tables)
    job = job_for(file, find_kernel(file), "token")
    assert json.loads(job.text)["folder"] == str(Path.cwd())
    found = Bench.opened(pickle.loads(pickle.dumps(job))).file
    assert found == file
    assert repr(found) == repr(file)


def test_a_block_is_the_same_at_any_bench(tmp_path: Path) -> None:
    """A bench that was opened from a job gives the bytes of one that has the kernel itself."""
    file = file_for(written(tmp_path, GEOMETRIC), {"parameters": {"r": 0.05, "s": 0.2}})
    kernel = find_kernel(file)
    block = run_block(Bench.opened(job_for(file, kernel, "token")), 2, 3)
    assert (block.level, block.block, block.seconds > 0) == (2, 3, True)
    assert block.data == packed(Bench(file, kernel).runner.run(2, 3)) == packed(block.tally)
    found = json.loads(block.fingerprint)
    assert (found["subnormals"], found["threads"]) == (True, 1)


def test_another_state_of_the_kernel_is_refused(tmp_path: Path) -> None:
    """A file that changed since the audit began is not run."""
    path = written(tmp_path, GEOMETRIC)
    file = file_for(path)
    job = job_for(file, find_kernel(file), "token")
    written(tmp_path, GEOMETRIC + "\n# changed")
    with pytest.raises(WorkerError, match=rf"^audit: kernel.run: the worker finds another state of {path}:value \(sha"):
        Bench.opened(job)


@pytest.mark.parametrize("function", [scaled, Holder.inner])
def test_a_function_travels_by_its_name(function: Callable[..., Any]) -> None:
    """One that a module has under its qualified name is found again, and only while it has the same fingerprint."""
    file = audit_of(function)
    job = job_for(file, find_kernel(file), "token")
    assert b"inner" not in pickle.dumps(job) or function is Holder.inner
    assert Bench.opened(job).file.function is function


def test_a_function_with_other_values_inside_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    """Its default argument was another one where it was handed over."""
    file = audit_of(scaled)
    job = job_for(file, find_kernel(file), "token")
    monkeypatch.setattr(scaled, "__kwdefaults__", {"s": 0.25})
    with pytest.raises(WorkerError, match="the worker finds another state of"):
        Bench.opened(job)


def test_a_function_without_a_name_stays_here() -> None:
    """A closure cannot travel to another process, and that is said before anything is run; a thread can have it."""

    def closure(dW: Any, h: float) -> Any:
        return dW[0]

    file = audit_of(closure)
    kernel = find_kernel(file)
    with pytest.raises(AuditFileError) as caught:
        job_for(file, kernel, "token")
    name = f"{__name__}:test_a_function_without_a_name_stays_here.<locals>.closure"
    assert str(caught.value) == (
        f"audit: kernel.run: the function {name} was handed over from Python and cannot be found by that name, so that "
        "it cannot travel to a worker; accepted: workers = 1, or a function at the top level of a module that can be "
        "imported"
    )
    job = job_for(file, kernel, "token", travels=False)
    with here("token", file, kernel):
        assert run_task(job, level_zero, 0).value == run_block(Bench(file, kernel), 0, 0).data
    assert run_task(job, level_zero, 0).failure is not None


def test_each_thread_has_a_bench_of_its_own_and_keeps_it(tmp_path: Path) -> None:
    """Two threads never share private copies; an audit that is over leaves no bench behind."""
    file = file_for(written(tmp_path, GEOMETRIC))
    kernel = find_kernel(file)
    job = job_for(file, kernel, "token")
    found: list[list[int]] = []
    both = threading.Barrier(2)

    def work() -> None:
        seen = []
        for _ in range(3):
            reply = run_task(job, lambda bench: bench, None)
            assert reply.value is not None
            seen.append(id(reply.value))
            both.wait(10)
        found.append(seen)

    with here("token", file, kernel):
        threads = [threading.Thread(target=work) for _ in range(2)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
    assert [len(set(seen)) for seen in found] == [1, 1]
    assert found[0] != found[1]


def raising(problem: BaseException) -> Callable[[], None]:
    def task() -> None:
        raise problem

    return task


@pytest.mark.parametrize(
    "problem",
    [
        KernelError("what", level=2, arm="float16"),
        EscapeError("k.py:3: what"),
        RefusedError("k.py:3: what"),
        AuditFileError("a.toml", "kernel.run", "what", "that"),
        WorkerError("what"),
    ],
)
def test_an_error_of_this_program_comes_back_as_itself(problem: NarrowgaugeError) -> None:
    """Of the same class, with the same message and attributes, through any pipe; without a cause it has none."""
    reply = pickle.loads(pickle.dumps(attempted(raising(problem))))
    back = reply.failure.raised()
    assert type(back) is type(problem)
    assert (str(back), vars(back), back.exit_code) == (str(problem), vars(problem), 2)
    assert back.__cause__ is None


def test_every_error_that_a_task_may_raise_can_be_made_again() -> None:
    """Each class of errors.py that is an error of the input."""
    for name in errors.__all__:
        made = getattr(errors, name)
        if isinstance(made, type) and issubclass(made, NarrowgaugeError):
            back = attempted(raising(made.__new__(made, "said"))).failure
            assert back is not None
            assert type(back.raised()) is made


def test_what_the_kernel_raised_comes_with_its_lines() -> None:
    """The cause is the traceback as text, the user's lines alone."""

    def fails() -> None:
        try:
            raise ValueError("no luck")
        except ValueError as cause:
            raise KernelError("raised", level=1) from cause

    failure = attempted(fails).failure
    assert failure is not None
    cause = failure.raised().__cause__
    assert isinstance(cause, RaisedElsewhereError)
    assert own_traceback(cause) == cause.text
    assert cause.text.splitlines()[0] == "Traceback (most recent call last):"
    assert cause.text.splitlines()[-1] == "ValueError: no luck"
    assert f'File "{__file__}"' in cause.text


@pytest.mark.parametrize("problem", [SystemExit(0), SystemExit(), KeyboardInterrupt(), GeneratorExit()])
def test_what_would_end_a_process_is_the_kernels(problem: BaseException) -> None:
    """sys.exit(0) and the like are an error of the kernel with its level, and exit code 2."""
    failure = attempted(raising(problem), 3).failure
    assert failure is not None
    back = failure.raised()
    assert isinstance(back, KernelError)
    assert str(back) == f"level 3: the kernel raised {type(problem).__name__}: {problem}"
    assert (back.level, back.exit_code) == (3, 2)


def test_anything_else_is_a_fault_of_this_program() -> None:
    """Its class, its words and the whole traceback are in what is raised here."""
    failure = attempted(raising(AssertionError("why"))).failure
    assert failure is not None
    back = failure.raised()
    assert not isinstance(back, NarrowgaugeError)
    assert "AssertionError: why\nTraceback" in str(back)
    assert "attempted" in str(back)


class MuteError(Exception):
    """Has no text."""

    def __str__(self) -> str:
        raise ZeroDivisionError


@pytest.mark.parametrize("leaving", [False, True])
def test_what_cannot_be_told_is_still_an_outcome(leaving: bool) -> None:
    """An exception whose text cannot be made comes back, whether it is a fault or the kernel's way to leave."""
    failure = attempted(raising(SystemExit(MuteError()) if leaving else MuteError())).failure
    assert failure is not None
    text = "(its text cannot be made)"
    assert failure.message == (f"the kernel raised SystemExit: {text}" if leaving else text)
    assert "in task\n    raise problem" in failure.trace


def threads() -> set[int]:
    return {library["num_threads"] for library in threadpool_info()}


def test_threads_are_pinned_until_the_last_task_ends() -> None:
    """Tasks that overlap in any order keep to one thread, and what was before is there again in the end."""
    with threadpool_limits(limits=2):
        before = threads()
        assert before == {2}
        first, second = pinned(), pinned()
        first.__enter__()
        second.__enter__()
        assert threads() == {1}
        first.__exit__(None, None, None)
        assert threads() == {1}
        second.__exit__(None, None, None)
        assert threads() == before
