"""Worker processes of the driver's own, each with a pipe and a thread of the driver that feeds it.

A worker that dies, or is past the time limit, is replaced and its block handed out once more; when that ends in the
same way the kernel is to blame. Processes are started afresh, not forked, and without the driver's main module, so that
a script needs a guard around the audit that it starts only where it holds the kernel, too. In a worker no audit can be
started.
"""

from __future__ import annotations

import contextlib
import json
import os
import pickle
import queue
import signal
import subprocess
import sys
import tempfile
import threading
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass
from types import TracebackType
from typing import Any, TypeVar

from narrowgauge.errors import KernelError, WorkerError
from narrowgauge.kernel.command import how_ended
from narrowgauge.kernel.loading import WORKER
from narrowgauge.measure.crash import innermost
from narrowgauge.measure.engines import TRIAL, Errand, errand_of, largest_first
from narrowgauge.measure.task import Bench, Block, Job, Key, Reply
from narrowgauge.measure.worker import READY, Asked

__all__ = ["ProcessEngine"]

T = TypeVar("T")

_PROGRAM = (
    "import json, signal, sys\n"
    "signal.signal(signal.SIGINT, signal.SIG_IGN)\n"  # Ctrl-C is the driver's to hear
    "path, trace, driver, scratch = sys.argv[1:]\n"
    "sys.path[:], sys.argv[1:] = json.loads(path), []\n"
    "from narrowgauge.measure.worker import serve\n"
    "serve(int(trace), int(driver), scratch)\n"
)
_ATTEMPTS = 2
_CUT = (EOFError, OSError, pickle.UnpicklingError)  # what reading or writing a pipe raises that has no other end
_FALLING = 5.0  # seconds for a process to end once its pipe is cut
_TEMPORARY = ("TMPDIR", "TEMP", "TMP")
# Read by libraries that a kernel imports only later, when they can no longer be pinned in time.
_ONE_THREAD = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"), "1")
# A dask cluster begun in the same program leaves this in the environment: glibc then gives memory back after every
# array, and most of the time goes into page faults.
_TRIMMING = "MALLOC_TRIM_THRESHOLD_"


@dataclass(frozen=True, slots=True, kw_only=True)
class _Task:
    """A task to be done: what messages call it, its level if it has one, a function of a bench, who waits."""

    name: str
    level: int | None
    run: Callable[[Bench], Any]
    done: queue.SimpleQueue[_Done]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Done:
    """What a task came to."""

    value: Any
    problem: BaseException | None


class ProcessEngine:
    """Runs blocks in `workers` processes; `timeout` is the time limit of a task in seconds, None for no limit."""

    def __init__(self, job: Job, workers: int, timeout: float | None = None) -> None:
        self.title = "1 worker process" if workers == 1 else f"{workers} worker processes"
        self.workers = workers
        self._tasks: queue.SimpleQueue[_Task | None] = queue.SimpleQueue()
        try:
            self._scratch = tempfile.TemporaryDirectory(prefix="narrowgauge-", ignore_cleanup_errors=True)
        except OSError as problem:  # none of the usual places can be written, as in a container that is read-only
            what = f"worker processes need a folder for temporary files: {problem.strerror}"
            raise WorkerError(f"{what}; accepted: TMPDIR in the environment naming one that can be written") from None
        self._slots = [_Slot(job, timeout, self._tasks, self._scratch.name) for _ in range(workers)]

    def __enter__(self) -> ProcessEngine:
        for slot in self._slots:
            slot.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, problem: BaseException | None, trace: TracebackType | None
    ) -> None:
        """End all workers, those that are at work at once."""
        self._withdraw()
        for slot in self._slots:
            slot.stop()
            self._tasks.put(None)
        for slot in self._slots:
            slot.join()
        self._scratch.cleanup()

    def call(self, task: Callable[[Bench], T], name: str = TRIAL) -> T:
        """Run one task in one of the processes."""
        waiting: queue.SimpleQueue[_Done] = queue.SimpleQueue()
        self._tasks.put(_Task(name=name, level=None, run=task, done=waiting))
        done = waiting.get()
        if done.problem is not None:
            raise done.problem
        value: T = done.value
        return value

    def blocks(self, sizes: Mapping[Key, int]) -> Iterator[Block]:
        """Run blocks, the largest first, and yield them as they are finished."""
        return self.errands(map(errand_of, largest_first(sizes)))

    def errands(self, wanted: Iterable[Errand[T]]) -> Iterator[T]:
        """Run tasks and yield what they come to as they are finished."""
        waiting: queue.SimpleQueue[_Done] = queue.SimpleQueue()
        sent = [_Task(name=one.name, level=one.level, run=one.run, done=waiting) for one in wanted]
        for task in sent:
            self._tasks.put(task)
        failed: list[BaseException] = []
        for _ in sent:
            try:
                done = waiting.get(block=not failed)
            except queue.Empty:
                break
            if done.problem is None:
                yield done.value
            else:
                failed.append(done.problem)
                self._withdraw()
        if failed:
            raise failed[0]

    def _withdraw(self) -> None:
        """Hand out no more."""
        with contextlib.suppress(queue.Empty):
            while True:
                self._tasks.get(block=False)


class _Slot(threading.Thread):
    """A thread with one worker process at a time, which it feeds, watches and replaces."""

    def __init__(
        self,
        job: Job,
        timeout: float | None,
        tasks: queue.SimpleQueue[_Task | None],
        scratch: str,
    ) -> None:
        super().__init__(daemon=True)
        # What a worker that is ended leaves in the folder for temporary files goes with the engine.
        self._scratch = scratch
        self._environment = {**os.environ, **_ONE_THREAD, **dict.fromkeys(_TEMPORARY, scratch)}
        self._environment.pop(_TRIMMING, None)
        self._job, self._timeout, self._tasks = job, timeout, tasks
        self._trace = tempfile.TemporaryFile()  # noqa: SIM115  # `run` closes it; without a name, nothing is left of it
        self._lock = threading.Lock()  # around all of the following
        self._process: subprocess.Popen[bytes] | None = None
        # `_busy`: the process is at work, or on its way to be ready
        self._busy = self._late = self._stopped = False

    def run(self) -> None:
        """Take tasks until there are none, then let the process end by itself."""
        with contextlib.suppress(Exception):  # what is wrong is so, too, when the first task is there to be told
            self._began()
        while (task := self._tasks.get()) is not None:
            try:
                value, problem = self._served(task), None
            except _StoppedError:
                break
            except BaseException as raised:  # handed to the driver, which raises it
                value, problem = None, raised
            task.done.put(_Done(value=value, problem=problem))
        if self._process is not None:
            _ended(self._process)
        self._trace.close()

    def stop(self) -> None:
        """Start no more processes, and end one that is at work or only starting."""
        with self._lock:
            self._stopped = True
            if self._busy and self._process is not None:
                _kill(self._process)

    def _served(self, task: _Task) -> Any:
        """Return what a task came to; raises what it raised, or KernelError where it ended its process twice."""
        ends: list[str] = []
        while len(ends) < _ATTEMPTS:
            found = self._asked(self._began(), task)
            if not isinstance(found, Reply):
                ends.append(found)
                continue
            if found.failure is not None:
                raise found.failure.raised()
            return found.value
        first, last = ends
        how = f"{last}, twice" if first == last else f"{first}, and when it was tried once more it {last}"
        raise KernelError(f"{task.name}: the process that ran the kernel {how}", level=task.level)

    def _asked(self, process: subprocess.Popen[bytes], task: _Task) -> Reply[Any] | str:
        """Send a task and return the reply, or in words how the process ended without one."""
        self._set_busy(True)
        watch = None if self._timeout is None else threading.Timer(self._timeout, self._overdue, (process,))
        if watch is not None:
            watch.daemon = True
            watch.start()
        try:
            _send(process, (self._job, task.run, task.level))
            reply: Reply[Any] = _received(process)
        except _CUT:
            code = _ended(process)
            if self._stopped:
                raise _StoppedError from None
            if self._late:
                return f"was still at it after {self._timeout:g} s, the time limit, and was stopped"
            return _way(code) + innermost(self._trace)
        else:
            return reply
        finally:
            self._set_busy(False)
            if watch is not None:
                watch.cancel()

    def _set_busy(self, busy: bool) -> None:
        """Note that work begins or ends; raises _StoppedError instead of beginning any once the slot is stopped."""
        with self._lock:
            if busy and self._stopped:
                raise _StoppedError
            self._busy = busy
            if busy:
                self._late = False

    def _overdue(self, process: subprocess.Popen[bytes]) -> None:
        with self._lock:
            if self._busy and process is self._process:  # else the reply came at the last moment
                self._late = True
                _kill(process)

    def _began(self) -> subprocess.Popen[bytes]:
        """Return the process, started anew where it has ended; raises WorkerError where that fails."""
        if self._process is not None:
            if self._process.poll() is None:
                return self._process
            _ended(self._process)
        files = () if os.name == "nt" else (self._trace.fileno(),)  # there a process inherits no file by its number
        # What is no string there is passed over when a module is searched.
        path = [entry for entry in sys.path if isinstance(entry, str)]
        own = (str(sum(files)), str(os.getpid()), self._scratch)
        command = [sys.executable, "-c", _PROGRAM, json.dumps(path), *own]
        with self._lock:
            if self._stopped:
                raise _StoppedError
            try:
                process = self._process = subprocess.Popen(
                    command,
                    stdin=subprocess.PIPE,
                    stdout=subprocess.PIPE,
                    env={**self._environment, WORKER: "1"},
                    pass_fds=files,
                    process_group=0,  # out of reach of the terminal's Ctrl-C
                )
            except OSError as problem:
                raise WorkerError(f"a worker process cannot be started: {problem.strerror}") from None
            self._busy = True
        try:
            ready = _received(process)
        except _CUT:
            code = _ended(process)
            if self._stopped:
                raise _StoppedError from None
            raise WorkerError(f"a worker process {_way(code)} before it was ready") from None
        finally:
            self._set_busy(False)
        assert ready == READY
        return process


class _StoppedError(Exception):
    """The driver stopped this slot."""


def _send(process: subprocess.Popen[bytes], message: Asked) -> None:
    assert process.stdin is not None  # a pipe
    pickle.dump(message, process.stdin)
    process.stdin.flush()


def _received(process: subprocess.Popen[bytes]) -> Any:
    assert process.stdout is not None  # a pipe
    return pickle.load(process.stdout)


def _kill(process: subprocess.Popen[bytes]) -> None:
    """End a process and, where there are groups of processes, all that it started: they may hold its pipe open."""
    if process.poll() is None:
        if hasattr(os, "killpg"):
            os.killpg(process.pid, signal.SIGKILL)
        else:
            process.kill()


def _ended(process: subprocess.Popen[bytes]) -> int:
    """Cut the pipe, wait until the process ends, and return its exit code, or minus the number of a signal."""
    for stream in (process.stdin, process.stdout):
        assert stream is not None  # both are pipes
        with contextlib.suppress(OSError):  # what was not sent yet goes nowhere
            stream.close()
    try:
        return process.wait(_FALLING)
    except subprocess.TimeoutExpired:
        _kill(process)
        return process.wait()


def _way(code: int) -> str:
    """Return how a process ended, by its exit code, and why that may be."""
    how = how_ended(code)
    return f"{how}, as it is when memory runs out" if how.endswith("SIGKILL") else how
