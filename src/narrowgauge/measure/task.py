"""One task of a worker: what travels to it, the bench that it works at, and the wrapper that turns all into data.

User code never travels. A job holds the audit file as text, the name of the kernel and its fingerprint: the worker
finds and compiles the kernel itself, and refuses when that has another fingerprint.
"""

from __future__ import annotations

import importlib
import operator
import sys
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from time import perf_counter
from types import FunctionType
from typing import Any, Generic, TypeVar

import msgspec
from threadpoolctl import threadpool_limits

from narrowgauge import errors
from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.errors import KernelError, NarrowgaugeError, RaisedElsewhereError, WorkerError, said
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.audittables import TABLES
from narrowgauge.kernel.loading import KernelSource, executing, find_kernel
from narrowgauge.kernel.raised import own_traceback, whole_traceback
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.calls import Caller
from narrowgauge.measure.packing import packed, unpacked
from narrowgauge.measure.provenance import fingerprint_of_process
from narrowgauge.measure.tally import LevelTally

__all__ = [
    "Bench",
    "Block",
    "Failure",
    "Job",
    "Key",
    "Reply",
    "attempted",
    "here",
    "job_for",
    "pinned",
    "run_block",
    "run_task",
]

Key = tuple[int, int]  # level and block
T = TypeVar("T")


@dataclass(frozen=True, slots=True, kw_only=True)
class Block:
    """A finished block: its tally, packed; the seconds that it took, and the fingerprint of where."""

    level: int
    block: int
    data: bytes
    seconds: float
    fingerprint: str

    @property
    def tally(self) -> LevelTally:
        """The tally; raises ValueError where `data` is none."""
        return unpacked(self.data)


@dataclass(frozen=True, slots=True, kw_only=True)
class Job:
    """What a worker needs to know of an audit. `text` is the audit file with every default, as JSON.

    `by_name` says that kernel.run is a function handed over from Python, found again by module and name. `token`
    tells audits apart that one worker serves.
    """

    token: str
    text: str
    by_name: bool
    digest: str


class Bench:
    """A worker's own state for one audit: the kernel that it found, with its private copies kept between blocks."""

    def __init__(self, file: AuditFile, kernel: KernelSource) -> None:
        self.file, self.kernel = file, kernel
        self.runner = BlockRunner(file, kernel)
        self._warm = False

    @classmethod
    def opened(cls, job: Job) -> Bench:
        """Find the kernel of a job; WorkerError where it has another fingerprint than the job says."""
        file = _file_of(job)
        kernel = find_kernel(file)
        found = kernel.digest()
        if found != job.digest:
            raise WorkerError(
                f"{file.source}: kernel.run: the worker finds another state of {file.kernel.run} ({found}, not "
                f"{job.digest}); accepted: the same source files for all workers, unchanged while the audit runs"
            )
        return cls(file, kernel)

    def warm(self) -> None:
        """Import what the kernel imports, once, so that its libraries of linear algebra are there to be pinned."""
        if not self._warm:
            Caller(self.file, self.kernel, arithmetic_named(REFERENCE))
            self._warm = True


def run_block(bench: Bench, level: int, block: int) -> Block:
    """Run one block at a bench, with libraries of linear algebra kept to one thread."""
    bench.warm()
    with pinned():
        start = perf_counter()
        tally = bench.runner.run(level, block)
        seconds = perf_counter() - start
        return Block(
            level=level, block=block, data=packed(tally), seconds=seconds, fingerprint=fingerprint_of_process()
        )


def job_for(file: AuditFile, kernel: KernelSource, token: str, *, travels: bool = True) -> Job:
    """Return what a worker needs to know.

    Raises AuditFileError where that `travels` to other processes, and they could not find the function by its name.
    """
    by_name = file.function is not None
    if travels and by_name and _named(file.kernel.run) is not file.function:
        raise errors.AuditFileError(
            file.source,
            "kernel.run",
            f"the function {file.kernel.run} was handed over from Python and cannot be found by that name, so that it "
            "cannot travel to a worker",
            "workers = 1, or a function at the top level of a module that can be imported",
        )
    tables: dict[str, object] = {name: getattr(file, name) for name in TABLES}
    rest = {"parameters": file.parameters, "assumed": file.assumed, "source": file.source, "folder": str(file.folder)}
    return Job(
        token=token, text=msgspec.json.encode({**tables, **rest}).decode(), by_name=by_name, digest=kernel.digest()
    )


def _file_of(job: Job) -> AuditFile:
    """Return the audit file of a job, with the function found by its name if that is how it travels."""
    raw = msgspec.json.decode(job.text)
    tables: dict[str, Any] = {
        name: None if raw[name] is None else msgspec.convert(raw[name], record) for name, record in TABLES.items()
    }
    source, run = raw["source"], tables["kernel"].run
    function = None
    if job.by_name:
        try:
            with executing():
                importlib.import_module(run.partition(":")[0])
            function = _named(run)
        except BaseException as problem:  # whatever the user's module raises is the user's to see
            what = f"{run}: importing the module raised {type(problem).__name__}: {said(problem)}"
            raise KernelError(what) from problem
        if function is None:
            raise WorkerError(f"{source}: kernel.run: the worker finds no function {run}")
    return AuditFile(
        **tables,
        parameters=raw["parameters"],
        source=source,
        folder=Path(raw["folder"]),
        function=function,
        assumed=tuple(raw["assumed"]),
    )


def _named(run: str) -> FunctionType | None:
    """Return the function that "module:qualified.name" stands for among imported modules, or None."""
    module, _, name = run.partition(":")
    if module == "__main__":  # every process has its own
        return None
    try:
        found = operator.attrgetter(name)(sys.modules[module])
    except (KeyError, AttributeError):
        return None
    return found if isinstance(found, FunctionType) else None


class _Pins:
    """How many tasks of this process want libraries of linear algebra to keep to one thread.

    The first one pins them, the last one lets go: with a limit for each task, one that ends would set free the threads
    of another that still runs, and with them the order of its sums.
    """

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._count = 0
        self._pinned: list[Any] = []

    @contextmanager
    def held(self) -> Iterator[None]:
        with self._lock:
            self._count += 1
            limits = threadpool_limits(limits=1)  # every time: a library may be new, or count for each thread
            if any(number != 1 for number in limits.get_original_num_threads().values()):
                self._pinned.append(limits)
        try:
            yield
        finally:
            with self._lock:
                self._count -= 1
                while self._count == 0 and self._pinned:
                    self._pinned.pop().restore_original_limits()


_PINS = _Pins()


def pinned() -> Any:
    """Return a context in which libraries of linear algebra keep to one thread, alike in driver and workers."""
    return _PINS.held()


@dataclass(frozen=True, slots=True, kw_only=True)
class Failure:
    """Whatever ended a task, as data: an error of this program's own by its class, anything else as a fault of it.

    `trace` is the traceback of what the kernel raised, without this program's lines; of a fault all of it.
    """

    kind: str
    message: str
    attributes: dict[str, Any]
    trace: str

    @classmethod
    def of(cls, problem: BaseException) -> Failure:
        """Return what was raised as data."""
        kind, message = type(problem).__name__, said(problem)
        if isinstance(problem, NarrowgaugeError):
            cause = problem.__cause__
            own = "" if cause is None or isinstance(cause, NarrowgaugeError) else own_traceback(cause)
            plain = {n: v for n, v in vars(problem).items() if isinstance(v, (str, int, float, type(None)))}
            return cls(kind=kind, message=message, attributes=plain, trace=own)
        return cls(kind=kind, message=message, attributes={}, trace=whole_traceback(problem))

    def raised(self) -> BaseException:
        """Return the exception that says the same here: of the same class, with its message and attributes."""
        made = getattr(errors, self.kind, None)
        if not (isinstance(made, type) and issubclass(made, NarrowgaugeError)):
            return RuntimeError(f"a task failed with {self.kind}: {self.message}\n{self.trace}")
        problem = made.__new__(made)
        Exception.__init__(problem, self.message)
        vars(problem).update(self.attributes)
        problem.__cause__ = RaisedElsewhereError(self.trace) if self.trace else None
        return problem


@dataclass(frozen=True, slots=True, kw_only=True)
class Reply(Generic[T]):
    """What a task came to: a value, or a failure."""

    value: T | None = None
    failure: Failure | None = None


def attempted(task: Callable[[], T], level: int | None = None) -> Reply[T]:
    """Run a task, of one level or none, and return what it came to; whatever it raises is data.

    So no kernel ends a worker with an exit code of its own choice. Ctrl-C does not reach a worker as an exception.
    """
    try:
        return Reply(value=task())
    except (SystemExit, KeyboardInterrupt, GeneratorExit) as problem:  # no other code than a kernel's raises these
        what = KernelError(f"the kernel raised {type(problem).__name__}: {said(problem)}", level=level)
        what.__cause__ = problem
        return Reply(failure=Failure.of(what))
    except BaseException as problem:  # the one place that turns whatever was raised into data
        return Reply(failure=Failure.of(problem))


# What this process has opened: by thread, since a bench serves one at a time, with the token of the audit.
_BENCHES: dict[int, tuple[str, Bench]] = {}
_LOCAL: dict[str, tuple[AuditFile, KernelSource]] = {}


@contextmanager
def here(job_token: str, file: AuditFile, kernel: KernelSource) -> Iterator[None]:
    """Let the threads of this process take an audit's kernel as it is, while the context lasts, and forget it then."""
    _LOCAL[job_token] = file, kernel
    try:
        yield
    finally:
        del _LOCAL[job_token]
        for thread, (token, _) in list(_BENCHES.items()):
            if token == job_token:
                _BENCHES.pop(thread, None)


def run_task(job: Job, task: Callable[[Bench], T], level: int | None) -> Reply[T]:
    """Run a task, of one level or none, at this thread's bench: what an executor is given."""

    def at_bench() -> T:
        thread = threading.get_ident()
        token, bench = _BENCHES.get(thread, ("", None))
        if bench is None or token != job.token:
            found = _LOCAL.get(job.token)
            bench = Bench.opened(job) if found is None else Bench(*found)
            _BENCHES[thread] = job.token, bench
        return task(bench)

    return attempted(at_bench, level)
