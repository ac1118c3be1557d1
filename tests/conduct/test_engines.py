"""The same audit gives the same bytes whoever runs its blocks, and says who did."""

from __future__ import annotations

import io
import json
import multiprocessing
import random
import sys
from collections.abc import Iterator, Mapping
from concurrent.futures import Executor, Future, ProcessPoolExecutor, ThreadPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any

import msgspec
import numpy as np
import pytest
from audit_cases import GEOMETRIC, file_for
from rich.console import Console

from narrowgauge.api import Audit, audit, run_audit
from narrowgauge.arithmetic import compiled
from narrowgauge.conduct.run import run
from narrowgauge.errors import AuditFileError, KernelError, WorkerError
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.engines import SerialEngine, largest_first
from narrowgauge.measure.task import Block, Key
from narrowgauge.measure.workers import Workers
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.canonical import canonical_text
from narrowgauge.report.text import verdict_text

SAMPLING = {"most_paths": "4096"}
DRAWS_FOR_ITSELF = """
import numpy as np

def value(rng, h, *, steps, paths):
    x = np.ones(paths)
    for i in range(steps):
        x = x + 0.2 * np.sqrt(h) * x * rng.standard_normal(paths)
    return {"b": x, "a": np.maximum(x - 1.0, 0.0)}
"""


def file_of(folder: Path) -> AuditFile:
    return file_for(folder, GEOMETRIC, target={"rmse": "1e-3"}, sampling=SAMPLING)


def text(record: AuditRecord) -> str:
    """The record as it is written, without the one part that may differ between two runs."""
    return canonical_text(msgspec.structs.replace(record, provenance={}).document())


def spawning() -> ProcessPoolExecutor:
    return ProcessPoolExecutor(2, mp_context=multiprocessing.get_context("spawn"))


@contextmanager
def dask_executor() -> Iterator[tuple[str, Any]]:
    import distributed  # takes a second

    options: dict[str, Any] = {"n_workers": 2, "threads_per_worker": 1, "processes": True, "dashboard_address": None}
    with distributed.LocalCluster(**options) as cluster, distributed.Client(cluster) as client:
        yield cluster.scheduler_address, client.get_executor(pure=False)


@pytest.fixture
def alone(tmp_path: Path) -> Audit:
    return run_audit(file_of(tmp_path), tmp_path / "alone")


def test_two_processes_write_the_same_files(tmp_path: Path, alone: Audit) -> None:
    """Byte for byte, provenance aside, in which both say what they are; a user of many blocks hears of each once."""
    result = run_audit(file_of(tmp_path), tmp_path / "two", workers=Workers(number=2))
    assert text(result.record) == text(alone.record)
    assert (tmp_path / "two" / "levels.csv").read_bytes() == (tmp_path / "alone" / "levels.csv").read_bytes()
    found = result.record.provenance
    assert (found["engine"], alone.record.provenance["engine"]) == ("2 worker processes", "one process")
    assert found["workers"] == alone.record.provenance["workers"]


def test_a_kernel_that_draws_for_itself_is_found_out_in_a_worker(tmp_path: Path) -> None:
    """What it draws is worked out there, and the record is the one of a single process."""
    file = file_for(tmp_path, DRAWS_FOR_ITSELF, kernel={"takes": '"rng"'})
    assert text(run_audit(file, None, workers=Workers(number=2)).record) == text(run_audit(file, None).record)


@pytest.mark.parametrize("pool", [lambda: ThreadPoolExecutor(2), spawning], ids=["threads", "processes"])
def test_an_executor_gives_the_same_record(tmp_path: Path, alone: Audit, pool: Any) -> None:
    """A pool of threads and one of processes, which stay their owner's to use and to shut down."""
    file_of(tmp_path)
    with pool() as executor:
        result = audit(tmp_path / "audit.toml", executor=executor, quiet=True)
        assert executor.submit(abs, -1).result() == 1
    assert text(result.record) == text(alone.record)
    assert result.record.provenance["engine"] == f"executor {type(executor).__name__}"


@pytest.mark.filterwarnings("default")  # dask's own are not ours to mend
def test_a_dask_cluster_gives_the_same_record(tmp_path: Path, alone: Audit) -> None:
    """Two worker processes, as an executor from Python and by the address of their scheduler."""
    with dask_executor() as (address, executor):
        file = file_of(tmp_path)
        assert text(audit(tmp_path / "audit.toml", executor=executor, quiet=True).record) == text(alone.record)
        result = run_audit(file, None, workers=Workers(cluster=address))
    assert text(result.record) == text(alone.record)
    assert result.record.provenance["engine"] == "dask cluster of 2 threads"


class Shuffled(SerialEngine):
    """An engine that finishes blocks in any order."""

    workers = 40

    def __init__(self, file: AuditFile, seed: int) -> None:
        super().__init__(file, find_kernel(file))
        self._random = random.Random(seed)

    def blocks(self, sizes: Mapping[Key, int]) -> Iterator[Block]:
        """Run the blocks, shuffled."""
        keys = list(sizes)
        self._random.shuffle(keys)
        for key in keys:
            yield from super().blocks({key: sizes[key]})


@pytest.mark.parametrize("seed", range(3))
def test_blocks_that_finish_in_any_order_are_added_in_order(tmp_path: Path, seed: int) -> None:
    """Every bit of every tally is that of the blocks in turn; adding them as they come would not be."""
    file = file_for(tmp_path, GEOMETRIC, sampling={"most_paths": "8192"})
    kernel = find_kernel(file)
    straight = run(file, kernel, settled=lambda _: False)
    shuffled = run(file, kernel, settled=lambda _: False, engine=Shuffled(file, seed))
    for level, tally in straight.tallies.items():
        here, there = (one.quantities["value"].errors["float16"].moments for one in (tally, shuffled.tallies[level]))
        for name in ("count", "mean", "m2", "m3", "m4"):
            assert np.array_equal(getattr(here, name), getattr(there, name))
    assert shuffled.judgements.keys() == straight.judgements.keys()


class Forgetful(SerialEngine):
    """An engine whose every block is run by a worker that knows no other."""

    def __init__(self, file: AuditFile) -> None:
        super().__init__(file, find_kernel(file))
        self._file = file

    def blocks(self, sizes: Mapping[Key, int]) -> Iterator[Block]:
        """Run each block alone."""
        for key in sizes:
            yield from SerialEngine(self._file, find_kernel(self._file)).blocks({key: sizes[key]})


def test_quantities_that_change_from_level_to_level_are_told_by_the_driver(tmp_path: Path) -> None:
    """Where each worker sees one level, the error is the one of a single process."""
    source = GEOMETRIC.replace("return x", 'return {"a" if len(dW) < 2 else "b": x}')
    file = file_for(tmp_path, source, kernel={"coupling": '"none"'})
    for engine in (None, Forgetful(file)):
        with pytest.raises(KernelError) as caught:
            run(file, find_kernel(file), engine=engine)
        assert str(caught.value) == "level 1, arm float64: the kernel returned b where level 0 has a"
        assert (caught.value.level, caught.value.arm) == (1, "float64")


def test_large_blocks_are_handed_out_first() -> None:
    """And those of one size in the order of their keys."""
    assert largest_first({(0, 1): 1, (2, 1): 5, (2, 0): 5, (1, 0): 3}) == [(2, 0), (2, 1), (1, 0), (0, 1)]


def drifted(dW: Any, h: float) -> Any:
    return 1.0 + dW[0]


MAPPING: dict[str, Any] = {
    "kernel": {"run": drifted, "takes": "increments"},
    "ladder": {"horizon": 1.0, "finest": 1},
    "sampling": {"block": 1024, "paths": 1024, "most_paths": 1024},
}


def test_a_function_of_a_module_travels_by_name(tmp_path: Path) -> None:
    """A function that was handed over is found again by the worker."""
    assert text(audit(MAPPING, workers=2, quiet=True).record) == text(audit(MAPPING, quiet=True).record)


def test_a_function_without_a_name_runs_on_threads_only() -> None:
    """Processes refuse a closure before they start; threads of this process take it."""
    closure: Any = eval("lambda dW, h: 1.0 + dW[0]")
    asked = {**MAPPING, "kernel": {**MAPPING["kernel"], "run": closure}}
    with spawning() as pool:
        for options in ({"workers": 2}, {"executor": pool}):
            with pytest.raises(AuditFileError, match="cannot travel to a worker; accepted: workers = 1, or a function"):
                audit(asked, quiet=True, **options)
    with ThreadPoolExecutor(2) as threads:
        assert text(audit(asked, executor=threads, quiet=True).record) == text(audit(asked, quiet=True).record)


TROUBLED = GEOMETRIC.replace("    x = np.ones", "    if dW.shape == (2, 2048):\n        {}\n    x = np.ones")
BLOCKS = {"kernel": {"coupling": '"none"'}, "sampling": {"block": "2048", "most_paths": "4096"}}


def troubled(folder: Path, what: str) -> AuditFile:
    return file_for(folder, TROUBLED.format(f"import os, sys; {what}"), **BLOCKS)


@pytest.mark.parametrize(
    ("what", "message"),
    [
        ("sys.exit(0)", "level 1, arm float64: the kernel raised SystemExit: 0"),
        ("raise ValueError('no luck')", "level 1, arm float64: the kernel raised ValueError: no luck"),
    ],
)
def test_a_kernel_in_trouble_is_told_the_same_by_threads(tmp_path: Path, what: str, message: str) -> None:
    """With the same words as in one process."""
    file = troubled(tmp_path, what)
    with ThreadPoolExecutor(1) as executor:
        for workers in (Workers(), Workers(executor=executor)):
            with pytest.raises(KernelError) as caught:
                run_audit(file, None, workers=workers)
            assert str(caught.value) == message
            assert caught.value.__cause__ is not None


def test_a_process_of_a_pool_that_ends_is_an_error_of_the_workers(tmp_path: Path) -> None:
    """The message says what the executor said, and how to find the block."""
    with spawning() as executor, pytest.raises(WorkerError) as caught:
        run_audit(troubled(tmp_path, "os._exit(0)"), None, workers=Workers(executor=executor))
    assert f"the executor could not run it ({BrokenProcessPool.__name__}: " in str(caught.value)
    assert str(caught.value).startswith("level 1, block ")
    assert str(caught.value).endswith("shows like this, too: --workers finds the block that does")


class Refusing(Executor):
    """An executor that takes nothing, or whose workers lack the program."""

    def __init__(self, *, takes: bool) -> None:
        self._takes = takes

    def submit(self, *_arguments: Any, **_options: Any) -> Future[Any]:
        """Refuse, or fail."""
        if not self._takes:
            raise RuntimeError("cannot schedule new futures after shutdown")
        future: Future[Any] = Future()
        future.set_exception(ModuleNotFoundError("No module named 'narrowgauge'"))
        return future


@pytest.mark.parametrize(
    ("takes", "said"),
    [
        (False, "RuntimeError: cannot schedule new futures after shutdown"),
        (True, "ModuleNotFoundError: No module named 'narrowgauge'"),
    ],
)
def test_an_executor_that_does_nothing_is_an_error_of_the_workers(tmp_path: Path, takes: bool, said: str) -> None:
    """Whether it refuses the task or fails it."""
    with pytest.raises(
        WorkerError, match=rf"^the trial run: the executor could not run it \({said}\); accepted: an ex"
    ):
        run_audit(file_of(tmp_path), None, workers=Workers(executor=Refusing(takes=takes)))


def test_a_cluster_that_is_not_there_is_an_error(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without dask.distributed the message says what installs it; an address that is none names the option."""
    with monkeypatch.context() as patch:
        patch.setitem(sys.modules, "distributed", None)
        with pytest.raises(
            WorkerError, match=r"^--cluster needs dask.distributed, .*; the extra cluster of narrowgauge"
        ):
            run_audit(file_of(tmp_path), None, workers=Workers(cluster="tcp://127.0.0.1:1"))
    with pytest.raises(WorkerError, match=r"^--cluster nonsense://x: no scheduler can be reached \(.*such as tcp://ho"):
        run_audit(file_of(tmp_path), None, workers=Workers(cluster="nonsense://x"))


class Mixed(SerialEngine):
    """An engine whose blocks come from two kinds of machines, one of which has no subnormal numbers."""

    def blocks(self, sizes: Mapping[Key, int]) -> Iterator[Block]:
        """Run the blocks and forge where."""
        for number, block in enumerate(super().blocks(sizes)):
            known = json.loads(block.fingerprint)
            if number % 2:
                known.update(numpy="2.5.0", vector_features=["AVX2"], subnormals=False)
            yield replace(block, fingerprint=json.dumps(known))


def test_workers_that_differ_are_reported(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """In provenance, and to the user before the verdict, by what they differ in; alike ones are not mentioned."""
    file = file_of(tmp_path)
    plain = run_audit(file, None).record
    assert "WORKERS" not in shown(plain)
    monkeypatch.setattr("narrowgauge.measure.workers.SerialEngine", Mixed)
    record = run_audit(file, None).record
    listed: Any = record.provenance["workers"]
    assert sorted(one["numpy"] for one in listed) == sorted([np.__version__, "2.5.0"])
    said = shown(record)
    assert (
        "THE WORKERS DIFFER. Blocks were measured by 2 kinds of workers, which differ in numpy, subnormals and" in said
    )
    assert "SUBNORMAL NUMBERS WERE SWITCHED OFF." in said
    assert text(record) == text(plain)


class Uncompiled(SerialEngine):
    """An engine whose blocks come from two processes with trouble in compiling, and one without."""

    def blocks(self, sizes: Mapping[Key, int]) -> Iterator[Block]:
        """Run the blocks and forge what was said."""
        for number, block in enumerate(super().blocks(sizes)):
            said = (None, "no numba", "no [red]cache")[number % 3]
            known = json.loads(block.fingerprint) | {"compiling": said}
            yield replace(block, fingerprint=json.dumps(known))


def test_what_made_workers_slower_is_said_and_is_no_difference(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Each note once, by its own words, in provenance and on the terminal; the bits do not hang on it."""
    file = file_of(tmp_path)
    monkeypatch.setattr(compiled, "note", lambda: None)
    plain = run_audit(file, None).record
    assert "Slower" not in shown(plain)
    monkeypatch.setattr(compiled, "note", lambda: "no compiler")
    assert "Slower than it could be, with the same bits: no compiler." in shown(run_audit(file, None).record)
    monkeypatch.setattr("narrowgauge.measure.workers.SerialEngine", Uncompiled)
    record = run_audit(file, None).record
    listed: Any = record.provenance["workers"]
    assert {one["compiling"] for one in listed} == {None, "no numba", "no [red]cache"}
    said = shown(record)
    assert said.count("Slower than it could be, with the same bits: ") == 2
    assert "bits: no [red]cache." in said
    assert "WORKERS" not in said
    assert text(record) == text(plain)


def shown(record: AuditRecord) -> str:
    """The words of the verdict's text."""
    stream = io.StringIO()
    Console(file=stream, width=80).print(verdict_text(record, None))
    return " ".join(stream.getvalue().split())
