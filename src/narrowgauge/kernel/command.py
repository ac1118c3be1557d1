"""A kernel in any language: a command that reads its request from a folder and leaves its result there.

The command is run in the audit file's folder, without a shell, as RUN... FOLDER. The folder holds

- `request.json`: format, steps, factors, paths, h, layout, parameters (by name) and outputs (names);
- `draws.npy`: the draws in the format's type and the order of `layout`, bfloat16 as uint16;

and the command leaves `result.npy` there, (outputs, paths) in that type or a wider one, and ends with exit code 0.
"""

from __future__ import annotations

import contextlib
import json
import os
import shutil
import signal
import subprocess
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import IO, Any, ClassVar

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.formats import Format
from narrowgauge.errors import AuditFileError, KernelError
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.audittables import axes_of
from narrowgauge.kernel.identity import identity_of_command
from narrowgauge.kernel.owntables import CommandTable

__all__ = ["Command", "abandon", "how_ended"]

_RESULT = "result.npy"
_LAST_WORDS = 65536  # bytes of its output in which a last line is looked for
_STORED = {"bfloat16": np.dtype(np.uint16)}  # NumPy's files know no bfloat16
_RUNNING: dict[Path, subprocess.Popen[bytes] | None] = {}  # of this process, by scratch folder


class Command:
    """The command that `[command]` names; raises AuditFileError where there is no such program."""

    nan: ClassVar[str] = "the reference must be finite or infinite"

    def __init__(self, file: AuditFile, table: CommandTable) -> None:
        self._table, self._folder, self._layout = table, file.folder, file.kernel.layout
        self._axes = axes_of(self._layout)
        first = table.run[0]
        beside = os.path.basename(first) != first  # has a folder in it
        self._program = str(file.folder / first) if beside else shutil.which(first)
        if self._program is None or not os.access(self._program, os.X_OK) or os.path.isdir(self._program):
            there = self._program is not None and os.path.exists(self._program)
            what = f"{self._program} may not be executed" if there else f"no program {self._program or first}"
            raise AuditFileError(file.source, "command.run", what, "a program that may be executed, and its arguments")

    def digest(self) -> str:
        """Return the fingerprint of the command's words and of the files among them that lie beside the audit file."""
        return identity_of_command(self._folder, self._table.run)

    def check(self, formats: object) -> None:
        """Leave it: which formats a command offers shows when it is run."""

    def function(self, form: Format) -> Callable[..., dict[str, npt.NDArray[Any]]]:
        """Return the command in one format as a function of (draws, h, **parameters), the quantities by name.

        Raises KernelError where the command fails, takes too long or leaves the wrong thing.
        """

        def kernel(draws: npt.NDArray[Any], h: float, **parameters: Any) -> dict[str, npt.NDArray[Any]]:
            sizes = dict(zip(self._axes, draws.shape, strict=True))
            request = {
                "format": form.name,
                "steps": sizes["steps"],
                "factors": sizes.get("factors", 1),
                "paths": sizes["paths"],
                "h": h,
                "layout": self._layout,
                "parameters": {name: _plain(value) for name, value in parameters.items()},
                "outputs": list(self._table.outputs),
            }
            with _scratch() as folder:
                try:
                    (folder / "request.json").write_text(json.dumps(request), encoding="utf-8")
                    np.save(folder / "draws.npy", draws.view(_STORED.get(form.name, draws.dtype)), allow_pickle=False)
                except OSError as problem:
                    raise KernelError(f"{folder}: the request cannot be written: {problem.strerror}") from None
                self._run(folder)
                rows = self._read(folder / _RESULT, form, sizes["paths"])
            return dict(zip(self._table.outputs, rows, strict=True))

        return kernel

    def _run(self, folder: Path) -> None:
        """Run the command on a folder; raises KernelError with its last words where it fails."""
        assert self._program is not None  # __init__ found it
        with tempfile.TemporaryFile() as said:
            try:
                process = subprocess.Popen(
                    [self._program, *self._table.run[1:], str(folder)],
                    stdin=subprocess.DEVNULL,
                    stdout=said,
                    stderr=said,
                    cwd=self._folder,
                )
            except OSError as problem:
                raise KernelError(f"{self._program}: cannot be started: {problem.strerror}") from None
            _RUNNING[folder] = process
            try:
                code = process.wait(self._table.seconds)
            except subprocess.TimeoutExpired:
                limit = f"{self._table.seconds:g} s, command.seconds"
                raise self._failed(f"was still at it after {limit}, and was stopped", said) from None
            finally:
                _kill(process)
            if code:
                raise self._failed(how_ended(code), said)

    def _read(self, path: Path, form: Format, paths: int) -> npt.NDArray[Any]:
        """Return result.npy, (outputs, paths), in the format's type or as it was written."""
        shape = (len(self._table.outputs), paths)
        accepted = f"an array of shape {shape}, (outputs, paths), of {_stored(form)} or a wider type"
        if not path.is_file():
            raise self._failed(f"left no {_RESULT}; accepted: {accepted}")
        try:
            found: npt.NDArray[Any] = np.load(path, mmap_mode="r", allow_pickle=False)  # whatever its size
        except (OSError, ValueError, EOFError) as problem:
            raise self._failed(f"left a {_RESULT} that cannot be read ({problem}); accepted: {accepted}") from None
        if found.shape != shape:
            raise self._failed(f"left a {_RESULT} of shape {found.shape}; accepted: {accepted}")
        rows = np.array(found, found.dtype.newbyteorder("="))
        if form.name in _STORED and rows.dtype == _STORED[form.name]:
            return rows.view(form.storage)
        if rows.dtype.kind != "f":
            raise self._failed(f"left a {_RESULT} of {rows.dtype}; accepted: {accepted}")
        return rows

    def _failed(self, how: str, said: IO[bytes] | None = None) -> KernelError:
        words = ""
        if said is not None:
            said.seek(max(0, said.seek(0, os.SEEK_END) - _LAST_WORDS))
            lines = said.read().decode("utf-8", "replace").split("\n")
            words = next((line.strip() for line in reversed(lines) if line.strip()), "")
        return KernelError(f"{' '.join(self._table.run)} {how}" + (f". It said last: {words}" if words else ""))


def abandon() -> None:
    """End the command that this process still runs, and remove its folder: the process is about to leave at once."""
    for folder, process in list(_RUNNING.items()):
        if process is not None:
            _kill(process)
        shutil.rmtree(folder, ignore_errors=True)


def how_ended(code: int) -> str:
    """Return in words how a process ended, by its exit code, or minus the number of a signal."""
    if code >= 0:
        return f"ended with exit code {code}"
    try:
        return f"was ended by {signal.Signals(-code).name}"
    except ValueError:
        return f"was ended by signal {-code}"


@contextlib.contextmanager
def _scratch() -> Iterator[Path]:
    """Make a folder and remove it with all that is in it."""
    try:
        made = tempfile.TemporaryDirectory(prefix="narrowgauge-", ignore_cleanup_errors=True)
    except OSError as problem:
        raise KernelError(f"{tempfile.gettempdir()}: no folder can be made: {problem.strerror}") from None
    with made as name:
        folder = Path(name)
        _RUNNING[folder] = None
        try:
            yield folder
        finally:
            del _RUNNING[folder]


def _kill(process: subprocess.Popen[bytes]) -> None:
    """End a process that is still there with all that it started, as far as the system tells."""
    if process.poll() is not None:
        return
    below = _descendants(process.pid)
    process.kill()
    for number in below:
        with contextlib.suppress(OSError):  # it ended by itself
            os.kill(number, signal.SIGKILL)
    process.wait()


def _descendants(number: int) -> list[int]:
    """Return the processes that a process started, and theirs, where the system lists them as Linux does.

    The command stays in the worker's own group of processes, which its driver ends as a whole.
    """
    found: list[int] = []
    for listed in Path(f"/proc/{number}/task").glob("*/children"):
        with contextlib.suppress(OSError):
            found += [int(word) for word in listed.read_text(encoding="ascii").split()]
    return [*found, *(inner for child in found for inner in _descendants(child))]


def _stored(form: Format) -> str:
    return f"{_STORED[form.name]} (the bits of {form.name})" if form.name in _STORED else form.name


def _plain(value: Any) -> Any:
    return value.tolist() if isinstance(value, np.ndarray) else value
