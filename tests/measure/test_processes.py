"""Worker processes: kernels that raise, leave, crash and hang in them, and that none of them is left over."""

from __future__ import annotations

import os
import queue
import subprocess
import sys
import tempfile
import time
from contextlib import closing
from pathlib import Path

import pytest
from worker_cases import CALLS, CRASHES, SIZES, TROUBLED, blocks_until, engine_for, finest, handed, process

from narrowgauge.errors import KernelError, RaisedElsewhereError, WorkerError
from narrowgauge.measure import processes
from narrowgauge.measure.processes import ProcessEngine
from narrowgauge.measure.task import Job

CRASHED = "the process that ran the kernel"


def alive(engine: ProcessEngine) -> list[int]:
    """The worker processes that have not ended."""
    known = [slot._process for slot in engine._slots]
    return [one.pid for one in known if one is not None and one.poll() is None]


def test_blocks_come_back_from_two_processes(tmp_path: Path) -> None:
    """Each once, with one fingerprint; a task's value comes back, too; in the end both processes have ended."""
    with engine_for(tmp_path, ",,", workers=2) as engine:
        assert engine.call(finest) == 2
        found, fingerprints, problem = blocks_until(engine)
        pids = alive(engine)
    assert problem is None
    assert sorted(found) == sorted(SIZES)
    assert len(fingerprints) == 1
    assert len(pids) == 2
    assert alive(engine) == []


def test_what_a_cluster_left_in_the_environment_is_not_handed_on(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """With it a worker gives memory back after every array, and takes more than twice as long."""
    monkeypatch.setenv("MALLOC_TRIM_THRESHOLD_", "65536")
    with engine_for(tmp_path, ",,") as engine:
        assert engine.call(handed) is None


def test_without_a_folder_for_temporary_files_it_says_so(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """As in a container that is read-only: what to set is said, and no fault of the program."""
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path / "nowhere"))
    with pytest.raises(WorkerError) as caught:
        engine_for(tmp_path, ",,")
    assert str(caught.value) == (
        "worker processes need a folder for temporary files: No such file or directory; accepted: TMPDIR in the "
        "environment naming one that can be written"
    )


def test_what_a_kernel_raises_is_its_error(tmp_path: Path) -> None:
    """With level and arm and the user's lines, as in one process; the worker lives on."""
    messages = (
        "level 0, arm float64: the kernel raised ValueError: no luck",
        "level 1, arm float64: the kernel raised SystemExit: 0",
        "level 2: the kernel raised KeyboardInterrupt: ",
    )
    with engine_for(tmp_path, "raise,exit,interrupt") as engine:
        for level, message in enumerate(messages):
            found, _, problem = blocks_until(engine, [level])
            assert found == []
            assert isinstance(problem, KernelError)
            assert (str(problem), problem.level) == (message, level)
            assert isinstance(problem.__cause__, RaisedElsewhereError)
            assert "kernel.py" in problem.__cause__.text
            assert "narrowgauge" not in problem.__cause__.text.replace(str(tmp_path), "")
        assert engine._slots[0]._process is not None
        assert alive(engine) == [engine._slots[0]._process.pid]


@pytest.mark.skipif(sys.platform == "win32", reason="processes end otherwise there")
def test_a_kernel_that_ends_its_process_twice_is_to_blame(tmp_path: Path) -> None:
    """The message names level, block and how the process ended, a crash with the user's lines; finished blocks stay."""
    with engine_for(tmp_path, ",segfault,leave") as engine:
        found, _, problem = blocks_until(engine)
        _, _, left = blocks_until(engine, [2])
    assert found == [(0, 0), (0, 1)]
    assert isinstance(problem, KernelError)
    assert problem.level == 1
    with pytest.raises(KernelError, match=rf"^level 1: block 0: {CRASHED} was ended by SIGSEGV at .*ctypes.*:[0-9]+, "):
        raise problem
    kernel = tmp_path / "kernel.py"
    assert str(problem).endswith(f", called from {kernel}:{CRASHES}, called from {kernel}:{CALLS}, twice")
    assert str(left) == f"level 2: block 0: {CRASHED} ended with exit code 0, twice"


@pytest.mark.skipif(sys.platform == "win32", reason="processes end otherwise there")
def test_a_block_is_handed_out_once_more(tmp_path: Path) -> None:
    """A process that ends once is replaced, and nothing is missing; two ends that differ are both told."""
    with engine_for(tmp_path, "once,,once leave") as engine:
        found, _, problem = blocks_until(engine, [0, 1])
        assert problem is None
        assert len(found) == 4
        (tmp_path / "flag").touch()
        _, _, problem = blocks_until(engine, [2])
    assert isinstance(problem, KernelError)
    start, how = f"level 2: block 0: {CRASHED} was ended by SIGSEGV at ", str(problem)
    assert how.startswith(start)
    assert how.endswith(", and when it was tried once more it ended with exit code 0")


@pytest.mark.skipif(not hasattr(os, "fork"), reason="there is no fork")
def test_a_block_past_the_time_limit_is_stopped(tmp_path: Path) -> None:
    """Twice, then the kernel is to blame, even where it left a process of its own behind that holds the pipe.

    A block that is done within a generous limit is not stopped.
    """
    with engine_for(tmp_path, ",fork and hang,", timeout=600.0) as engine:
        found, _, problem = blocks_until(engine, [0])
        assert (found, problem) == ([(0, 0), (0, 1)], None)
        engine._slots[0]._timeout = 2.5  # short, where the kernel surely hangs
        found, _, problem = blocks_until(engine, [1])
    how = "was still at it after 2.5 s, the time limit, and was stopped, twice"
    assert str(problem) == f"level 1: block 0: {CRASHED} {how}"
    assert isinstance(problem, KernelError)
    assert found == []


@pytest.mark.skipif(not hasattr(os, "fork"), reason="there is no fork")
def test_a_fork_that_goes_on_does_not_answer(tmp_path: Path) -> None:
    """A kernel that forks and lets both go on is answered for once, by the worker."""
    with engine_for(tmp_path, "fork,,") as engine:
        found, _, problem = blocks_until(engine, [0])
        more, _, again = blocks_until(engine, [1])
    assert (found, problem) == ([(0, 0), (0, 1)], None)
    assert (more, again) == ([(1, 0), (1, 1)], None)


@pytest.mark.skipif(not hasattr(os, "fork"), reason="there is no fork")
def test_a_fork_that_goes_on_writes_nowhere(tmp_path: Path) -> None:
    """The numbers of the worker's pipes are those of files that it opened: nothing of an answer gets in there."""
    with engine_for(tmp_path, "fork and write,,") as engine:
        found, _, problem = blocks_until(engine, [0])
    assert (found, problem) == ([(0, 0), (0, 1)], None)
    until = time.monotonic() + 60
    while len(list(tmp_path.glob("flag.*"))) < 20 and time.monotonic() < until:
        time.sleep(0.05)
    time.sleep(0.5)  # nothing comes after that
    assert [path.stat().st_size for path in tmp_path.glob("flag.*")] == [0] * 20


@pytest.mark.parametrize("how", ["close", "none"])
def test_a_kernel_may_close_standard_output(tmp_path: Path, how: str) -> None:
    """The worker has none of its own there, and goes on."""
    with engine_for(tmp_path, f"{how},,") as engine:
        pid = engine.call(process)
        found, _, problem = blocks_until(engine, [0, 1])
        assert engine.call(process) == pid
    assert (len(found), problem) == (4, None)


def test_a_stopped_slot_begins_nothing(tmp_path: Path) -> None:
    """Stopped between a process and its task: the task is not sent, and nobody waits for it."""
    engine = engine_for(tmp_path, ",,")
    slot = engine._slots[0]
    with engine._scratch, closing(slot._trace):
        begun = slot._began()
        slot.stop()
        task = processes._Task(name="", level=None, run=finest, done=queue.SimpleQueue())
        with pytest.raises(processes._StoppedError):
            slot._asked(begun, task)
        processes._ended(begun)


def test_a_process_that_is_only_starting_is_stopped(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Whatever it imports before it is ready is not waited for."""
    engine, received = engine_for(tmp_path, ",,"), processes._received
    slot = engine._slots[0]

    def stopped(process: subprocess.Popen[bytes]) -> object:
        slot.stop()
        return received(process)

    monkeypatch.setattr(processes, "_PROGRAM", "import time; time.sleep(60)")
    monkeypatch.setattr(processes, "_received", stopped)
    with engine._scratch, closing(slot._trace), pytest.raises(processes._StoppedError):
        slot._began()


def test_what_is_no_text_in_the_search_path_is_passed_over(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A Path there is no entry for the driver, nor for a worker."""
    monkeypatch.setattr(sys, "path", [*sys.path, tmp_path])
    with engine_for(tmp_path, ",,") as engine:
        assert engine.call(finest) == 2


@pytest.mark.parametrize(
    ("code", "words"),
    [
        (0, "ended with exit code 0"),
        (3, "ended with exit code 3"),
        (-9, "was ended by SIGKILL, as it is when memory runs out"),
        (-11, "was ended by SIGSEGV"),
        (-60, "was ended by signal 60"),
    ],
)
def test_how_a_process_ended_is_told_by_its_name(code: int, words: str) -> None:
    """Exit codes by number, signals by name where they have one."""
    assert processes._way(code) == words


def test_what_a_kernel_prints_does_not_get_into_the_pipe(tmp_path: Path, capfd: pytest.CaptureFixture[str]) -> None:
    """It goes to standard error, and there is nothing to read."""
    with engine_for(tmp_path, "print,,") as engine:
        found, _, problem = blocks_until(engine, [0])
    assert problem is None
    assert len(found) == 2
    out, err = capfd.readouterr()
    assert out == ""
    assert set(err.split()) == {"printed"}


def test_processes_that_do_not_start_are_an_error_of_the_workers(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """An interpreter that is not there, and one that ends at once, are said so, and nobody waits for ever."""
    for executable, message in (
        (str(tmp_path / "none"), "a worker process cannot be started: No such file or directory"),
        ("false", "a worker process ended with exit code 1 before it was ready"),
    ):
        monkeypatch.setattr(sys, "executable", executable)
        with engine_for(tmp_path, ",,") as engine, pytest.raises(WorkerError) as caught:
            engine.call(finest)
        assert str(caught.value) == message


def test_a_worker_that_finds_another_kernel_refuses(tmp_path: Path) -> None:
    """The file was changed after the audit had begun: an error of the workers, with both fingerprints."""
    with engine_for(tmp_path, ",,") as engine:
        (tmp_path / "kernel.py").write_text(TROUBLED + "\n# changed\n")
        with pytest.raises(WorkerError, match=r"the worker finds another state of .*accepted: the same source files"):
            engine.call(finest)


DRIVER = """
import sys
from pathlib import Path
sys.path.insert(0, sys.argv[2])
from worker_cases import blocks_until, engine_for
engine = engine_for(Path(sys.argv[1]), ",,hang")
engine.__enter__()
print(engine._slots[0]._began().pid, engine._scratch.name, flush=True)
blocks_until(engine)
"""


@pytest.mark.skipif(sys.platform == "win32", reason="processes end otherwise there")
def test_workers_end_with_a_driver_that_is_killed(tmp_path: Path) -> None:
    """In the middle of a block, too: within seconds there is no such process, and no folder of its temporary files."""
    command = [sys.executable, "-c", DRIVER, tmp_path, Path(__file__).parent]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as driver:
        assert driver.stdout is not None
        number, scratch = driver.stdout.readline().split()
        pid = int(number)
        assert Path(scratch).is_dir()
        time.sleep(0.5)
        driver.kill()
    until = time.monotonic() + 30
    while time.monotonic() < until and Path(f"/proc/{pid}").exists():
        time.sleep(0.05)
    with pytest.raises(ProcessLookupError):
        os.kill(pid, 0)
    assert not Path(scratch).exists()


def test_a_job_is_plain_data() -> None:
    """Nothing of the user's code travels: four fields of text and truth."""
    assert set(Job.__dataclass_fields__) == {"token", "text", "by_name", "digest"}
