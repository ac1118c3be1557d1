"""The audit as a Python call, and its result."""

from __future__ import annotations

import json
import tempfile
import time
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from narrowgauge.conduct.account import account
from narrowgauge.conduct.run import Watcher, run
from narrowgauge.conduct.trial import try_arms
from narrowgauge.errors import AuditFileError, AuditFolderError, NarrowgaugeError
from narrowgauge.kernel.auditfile import AuditFile, audit_file_from, read_audit_file
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.drawplan import worked_out
from narrowgauge.measure.provenance import provenance
from narrowgauge.record.audit import AuditRecord, KernelEntry, TrialEntry
from narrowgauge.record.canonical import canonical_text, read_strict, write_atomically
from narrowgauge.record.table import accumulation_rows, level_rows, levels_csv

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["Audit", "audit", "run_audit", "try_out"]

_RECORD, _LEVELS = "audit.json", "levels.csv"


class Audit:
    """The result of an audit: `record` is the document, the tables are made when asked; `folder` holds its files."""

    def __init__(self, record: AuditRecord, folder: Path | None) -> None:
        self.record = record
        self.folder = folder

    @property
    def levels(self) -> pd.DataFrame:
        """One row per quantity, level and arm."""
        return _frame(level_rows(self.record))

    @property
    def accumulation(self) -> pd.DataFrame:
        """One row per quantity, arm and law (error, correction)."""
        return _frame(accumulation_rows(self.record))

    @property
    def lines(self) -> pd.DataFrame:
        """One row per line of the kernel, operation and route, with its count in the trial run."""
        fields = ("file", "line", "operation", "route", "count")
        found = self.record.reach.lines if self.record.reach is not None else []
        return _frame([{name: getattr(line, name) for name in fields} for line in found])


def audit(
    source: str | Path | Mapping[str, object],
    *,
    out: str | Path | None = None,
    workers: int = 1,
    executor: Any = None,
    resume: bool = False,
    quiet: bool = False,
) -> Audit:
    """Audit a kernel and return the result.

    `source` is the path of an audit file, or a mapping of its shape whose kernel.run may be a function. With `out` the
    record and the table of levels are written into that folder, which must not hold another audit. Unless `quiet` a
    progress bar is shown on a terminal. This version runs in one process: `workers` must be 1, `executor` None and
    `resume` False. Raises NarrowgaugeError for whatever is wrong with the input.
    """
    for name, value, accepted in (("workers", workers, 1), ("executor", executor, None), ("resume", resume, False)):
        if value != accepted:
            raise NarrowgaugeError(
                f"audit: {name} = {value!r} is not supported by this version; accepted: {accepted!r}"
            )
    if not isinstance(source, (str, Path, Mapping)):
        raise AuditFileError("audit", "", f"{source!r} is no audit file", "a path, or a mapping of its shape")
    file = audit_file_from(source) if isinstance(source, Mapping) else read_audit_file(Path(source))
    folder = None if out is None else Path(out)
    if quiet:
        return run_audit(file, folder)
    from narrowgauge.report.text import Progress  # rich is needed for the bar alone

    with Progress(quiet=True) as watcher:
        return run_audit(file, folder, watcher=watcher)


def run_audit(file: AuditFile, out: Path | None, *, replace: bool = False, watcher: Watcher | None = None) -> Audit:
    """Run an audit and write its files into `out`, if given.

    Raises AuditFolderError where `out` holds another audit and `replace` is false, before anything is measured.
    """
    start = time.perf_counter()
    kernel = find_kernel(file)
    file = worked_out(file, kernel)
    entry = KernelEntry(run=file.kernel.run, fingerprint=kernel.digest())
    if out is not None:
        _claim(out, file, entry, replace)
    outcome = run(file, kernel, watcher=watcher)
    record = account(file, outcome, entry, provenance(time.perf_counter() - start))
    if out is not None:
        _write(out / _RECORD, canonical_text(record.document()))
        _write(out / _LEVELS, levels_csv(record))
    return Audit(record, out)


def try_out(file: AuditFile) -> TrialEntry:
    """Run the identity run and one small run of every arm; nothing is written."""
    kernel = find_kernel(file)
    file = worked_out(file, kernel)
    return try_arms(file, kernel, BlockRunner(file, kernel))


def _claim(folder: Path, file: AuditFile, kernel: KernelEntry, replace: bool) -> None:
    """Make the folder, and make sure that it holds no other audit."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=folder):
            pass  # better now than when the audit is done
        path = folder / _RECORD
        data = path.read_bytes() if path.exists() else None
    except OSError as problem:
        raise AuditFolderError(f"{folder}: cannot be used for the results: {problem.strerror}") from None
    if data is None or replace:
        return
    accepted = "accepted: --out with another folder, or --replace"
    text = data.decode("utf-8", "replace")  # what is not UTF-8 is no audit of ours, whatever it says
    try:
        found = read_strict(text, str(path))
    except NarrowgaugeError as problem:
        raise AuditFolderError(f"{folder}: holds an audit.json that cannot be read ({problem}); {accepted}") from None
    mine: dict[str, object] = {"kernel": {"run": kernel.run, "fingerprint": kernel.fingerprint}, "asked": file.asked()}
    for key, value in mine.items():
        there = found.get(key) if isinstance(found, dict) else None
        if there != json.loads(json.dumps(value)):
            what = "another kernel, or another state of it" if key == "kernel" else "other settings"
            raise AuditFolderError(f"{folder}: holds another audit ({what}); {accepted}")


def _write(path: Path, text: str) -> None:
    try:
        write_atomically(path, text)
    except OSError as problem:
        raise AuditFolderError(f"{path}: cannot be written: {problem.strerror}") from None


def _frame(rows: list[dict[str, object]]) -> pd.DataFrame:
    import pandas as pd  # only when a table is asked for

    return pd.DataFrame(rows)
