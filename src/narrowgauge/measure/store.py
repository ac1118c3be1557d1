"""The ledger: finished blocks of one audit in `blocks.sqlite`, so that a killed audit goes on where it stopped.

One process at a time holds it: the file is locked as long as it is open, and the system lets go of the lock when the
process ends, however it ends. A block that took a second or more is on the disk before the next one is taken; quicker
ones are written together, at most a second's worth, and no more than those are lost with the power. Every block is
kept with a checksum: one that does not match is run again.
"""

from __future__ import annotations

import contextlib
import functools
import hashlib
import json
import sqlite3
import time
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any

from narrowgauge.errors import AuditFolderError
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.provenance import versions
from narrowgauge.measure.scenarios import Look
from narrowgauge.measure.task import Block, Key

__all__ = ["LEDGER", "Identity", "Ledger"]

LEDGER = "blocks.sqlite"
_SCHEMA = "narrowgauge-blocks/3"
_TOGETHER = 1.0  # seconds
_TABLES = """
CREATE TABLE audit (name TEXT PRIMARY KEY, value TEXT NOT NULL);
CREATE TABLE blocks (
    level INTEGER NOT NULL, block INTEGER NOT NULL, seconds REAL NOT NULL,
    fingerprint TEXT NOT NULL, tally BLOB NOT NULL, checksum TEXT NOT NULL, PRIMARY KEY (level, block)
);
CREATE TABLE looks (
    scenario INTEGER NOT NULL, look INTEGER NOT NULL, seconds REAL NOT NULL,
    fingerprint TEXT NOT NULL, tallies BLOB NOT NULL, checksum TEXT NOT NULL, PRIMARY KEY (scenario, look)
);
"""
_OTHERWISE = "accepted: --out with another folder, or --replace"
_PROBLEMS = (sqlite3.Error, UnicodeDecodeError)  # the latter where a message quotes what is damaged


@dataclass(frozen=True, slots=True, kw_only=True)
class Identity:
    """What makes two audits the same: audit file with defaults, kernel, and the versions their bits may hang on."""

    run: str
    fingerprint: str
    asked: str
    versions: Mapping[str, str]

    @classmethod
    def of(cls, file: AuditFile, digest: str) -> Identity:
        """Return the identity of an audit that would begin now."""
        asked = json.dumps(file.asked(), sort_keys=True)
        return cls(run=file.kernel.run, fingerprint=digest, asked=asked, versions=versions())

    def rows(self) -> dict[str, str]:
        """Return it as the ledger keeps it."""
        rows = {
            "schema": _SCHEMA,
            "run": self.run,
            "fingerprint": self.fingerprint,
            "asked": self.asked,
            "versions": json.dumps(dict(self.versions), sort_keys=True),
        }
        return {**rows, "checksum": _checksum(*rows.items())}

    def changes(self, rows: Mapping[str, str]) -> list[str]:
        """Return in words what differs from the audit that a ledger was begun with."""
        if rows.get("schema") != _SCHEMA:
            return [f"its ledger is of another kind ({rows.get('schema', 'unknown')}, not {_SCHEMA})"]
        kept = {name: value for name, value in rows.items() if name in self.rows() and name != "checksum"}
        if rows.get("checksum") != _checksum(*kept.items()):
            return ["its ledger is damaged"]
        found = []
        if (rows["run"], rows["fingerprint"]) != (self.run, self.fingerprint):
            found.append("the kernel has changed")
        if rows["asked"] != self.asked:
            keys = ", ".join(_different(json.loads(rows["asked"]), json.loads(self.asked)))
            found.append(f"the audit file has changed ({keys})")
        there = json.loads(rows["versions"])
        for name in sorted(there.keys() | self.versions.keys()):
            before, now = there.get(name, "none"), self.versions.get(name, "none")
            if before != now:
                found.append(f"{name} is {now} and was {before}")
        return found


class Ledger:
    """The ledger in an audit's folder, locked; first `resumes` or `clear`, then blocks.

    Use it as a context manager. Every use may raise AuditFolderError, which calls the folder `shown`. With `replace` a
    file that is no database, or a damaged one, makes room.
    """

    def __init__(self, folder: Path, *, replace: bool = False, shown: Path | None = None) -> None:
        self._folder, self._file, self._replace = shown or folder, folder / LEDGER, replace
        self._path = self._folder / LEDGER  # as messages call it
        self._written = time.monotonic()
        self._keys: set[Key] = set()
        self._looks: set[Key] = set()  # scenario and look
        self.kept: frozenset[Key] = frozenset()  # there from before
        self.kept_looks: frozenset[Key] = frozenset()  # likewise
        self.damaged = 0  # blocks there from before that are to be run again
        self._connection = self._opened(replace)

    def __enter__(self) -> Ledger:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, problem: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Write what is waiting, and let go of the folder."""
        try:
            # What is being raised came first.
            with contextlib.nullcontext() if problem is None else contextlib.suppress(AuditFolderError):
                self._commit()
        finally:
            self.close()

    def close(self) -> None:
        """Let go of the folder."""
        self._connection.close()

    def __contains__(self, key: Key) -> bool:
        return key in self._keys

    def resumes(self, identity: Identity, *, resume: bool, replace: bool) -> bool:
        """Return whether the audit goes on with the blocks that are there.

        Refused are another audit's blocks with `resume`, and those of an unfinished audit with neither `resume` nor
        `replace`.
        """
        if replace:
            return False
        with self._telling("cannot be read"):
            names = self._tables()
            if names and "audit" not in names:
                raise AuditFolderError(f"{self._path}: is no ledger of narrowgauge; {_OTHERWISE}")
            rows: dict[str, str] = dict(self._connection.execute("SELECT name, value FROM audit")) if names else {}
            count = self._connection.execute("SELECT count(*) FROM blocks").fetchone()[0] if names else 0
        if not count:
            return False
        self._check(rows, count, identity.changes(rows), resume)
        if not resume:
            return False
        self._take()
        return True

    def _take(self) -> None:
        """Go on with the blocks and looks that are as they were written, and drop the others."""
        with self._telling("cannot be read"):
            blocks, looks = (self._found(table) for table in ("blocks", "looks"))
        self.kept, self.kept_looks = (frozenset(filter(None, found.values())) for found in (blocks, looks))
        self._keys, self._looks = set(self.kept), set(self.kept_looks)
        self.damaged = len(blocks) - len(self.kept) + len(looks) - len(self.kept_looks)
        with self._telling("cannot be written"):
            run = self._connection.execute
            run("BEGIN")
            for table, found in (("blocks", blocks), ("looks", looks)):
                bad = [(row,) for row, key in found.items() if key is None]
                self._connection.executemany(f"DELETE FROM {table} WHERE rowid = ?", bad)
            run("DELETE FROM audit WHERE name = 'finished'")
            run("COMMIT")

    def _found(self, table: str) -> dict[int, Key | None]:
        """Return the rows of a table with their keys, None for one that is not as it was written."""
        return {
            row: (first, second) if _checksum(first, second, *rest) == checksum else None
            for row, first, second, *rest, checksum in self._connection.execute(f"SELECT rowid, * FROM {table}")
        }

    def clear(self, identity: Identity) -> None:
        """Begin the ledger of an audit, without any block."""
        with self._telling("cannot be written"):
            try:
                self._begin(identity)
            except _PROBLEMS as problem:
                if not (self._replace and _is_damage(problem)):
                    raise
                self._connection.close()
                self._connection = self._anew()
                self._begin(identity)

    def _begin(self, identity: Identity) -> None:
        run = self._connection.execute
        run("BEGIN")
        for name in sorted(self._tables()):
            run(f'DROP TABLE "{name}"')
        for statement in filter(str.strip, _TABLES.split(";")):
            run(statement)
        self._connection.executemany("INSERT INTO audit VALUES (?, ?)", identity.rows().items())
        run("COMMIT")

    def _tables(self) -> set[str]:
        return {name for (name,) in self._connection.execute("SELECT name FROM sqlite_master WHERE type = 'table'")}

    def block(self, key: Key) -> Block:
        """Return a block that is there."""
        with self._telling("cannot be read"):
            row = self._connection.execute(
                "SELECT seconds, fingerprint, tally FROM blocks WHERE level = ? AND block = ?", key
            ).fetchone()
        try:
            if row is None:
                raise ValueError("it is gone")
            seconds, fingerprint, data = row
            found = Block(level=key[0], block=key[1], data=data, seconds=seconds, fingerprint=fingerprint)
            found.tally  # noqa: B018  # better now than in the middle of a sum
        except ValueError as problem:
            what = f"level {key[0]}, block {key[1]} cannot be read: {problem}"
            raise AuditFolderError(f"{self._path}: {what}; {_OTHERWISE}") from None
        return found

    def put(self, block: Block) -> None:
        """Keep a finished block."""
        self._put("blocks", (block.level, block.block), block)
        self._keys.add((block.level, block.block))

    def look(self, key: Key) -> Look | None:
        """Return a finished look at a scenario, by the numbers of both; None where it is not there."""
        if key not in self._looks:
            return None
        with self._telling("cannot be read"):
            row = self._connection.execute(
                "SELECT seconds, fingerprint, tallies FROM looks WHERE scenario = ? AND look = ?", key
            ).fetchone()
        return Look(scenario=key[0], look=key[1], seconds=row[0], fingerprint=row[1], data=row[2])

    def put_look(self, look: Look) -> None:
        """Keep a finished look at a scenario."""
        self._put("looks", (look.scenario, look.look), look)
        self._looks.add((look.scenario, look.look))

    def _put(self, table: str, key: Key, found: Block | Look) -> None:
        with self._telling("cannot be written"):
            if not self._connection.in_transaction:
                self._connection.execute("BEGIN")
            row = (*key, float(found.seconds), found.fingerprint, found.data)
            run = self._connection.execute
            run(f"INSERT OR REPLACE INTO {table} VALUES (?, ?, ?, ?, ?, ?)", (*row, _checksum(*row)))
        if found.seconds >= _TOGETHER or time.monotonic() - self._written >= _TOGETHER:
            self._commit()

    def note(self, name: str, value: str) -> None:
        """Keep something else about the audit, until it is begun anew."""
        with self._telling("cannot be written"):
            self._connection.execute("INSERT OR REPLACE INTO audit VALUES (?, ?)", (name, value))

    def noted(self, name: str) -> str | None:
        """Return what was kept under this name, or None."""
        with self._telling("cannot be read"):
            found = self._connection.execute("SELECT value FROM audit WHERE name = ?", (name,)).fetchone()
        return None if found is None else str(found[0])

    def finish(self) -> None:
        """Note that the audit is done and written."""
        self._commit()
        with self._telling("cannot be written"):
            self._connection.execute("INSERT OR REPLACE INTO audit VALUES ('finished', 'yes')")

    def _commit(self) -> None:
        with self._telling("cannot be written"):
            if self._connection.in_transaction:
                self._connection.execute("COMMIT")
        self._written = time.monotonic()

    def _opened(self, replace: bool) -> sqlite3.Connection:
        """Return a connection that holds the only lock."""
        try:
            return self._locked()
        except _PROBLEMS as problem:
            if _is_busy(problem):
                what = f"{self._folder}: another audit is running in this folder"
                raise AuditFolderError(f"{what}; accepted: --out with another folder, or wait") from None
            if replace and _is_damage(problem):
                return self._anew()
            raise AuditFolderError(f"{self._path}: cannot be used: {problem}; {_OTHERWISE}") from None

    def _anew(self) -> sqlite3.Connection:
        """Return a connection to an empty file in the place of a damaged one."""
        for path in (self._file, self._file.with_name(f"{LEDGER}-journal")):
            path.unlink(missing_ok=True)
        return self._locked()

    def _locked(self) -> sqlite3.Connection:
        connection = sqlite3.connect(self._file, timeout=0, isolation_level=None)
        connection.text_factory = functools.partial(str, encoding="utf-8", errors="replace")  # checksums tell
        try:
            connection.execute("PRAGMA journal_mode = DELETE")
            connection.execute("PRAGMA synchronous = FULL")
            connection.execute("PRAGMA locking_mode = EXCLUSIVE")  # kept from the first transaction on
            connection.execute("BEGIN EXCLUSIVE")
            connection.execute("SELECT count(*) FROM sqlite_master").fetchone()
            connection.execute("COMMIT")
        except BaseException:  # an interrupt, too, must not leave the file locked; raised on
            connection.close()
            raise
        return connection

    def _check(self, rows: Mapping[str, str], blocks: int, changes: list[str], resume: bool) -> None:
        why = "; ".join(changes)
        if resume and changes:
            raise AuditFolderError(
                f"{self._folder}: the audit in this folder cannot be resumed: {why}; accepted: kernel, audit file and "
                "versions as they were when it began, --out with another folder, or --replace"
            )
        if resume or "finished" in rows:
            return
        done = "1 block is done" if blocks == 1 else f"{blocks} blocks are done"
        if changes:
            raise AuditFolderError(f"{self._folder}: holds another audit, unfinished ({done}; {why}); {_OTHERWISE}")
        raise AuditFolderError(
            f"{self._folder}: holds this audit, unfinished ({done}); accepted: --resume to go on with it, --replace to "
            "begin anew, or --out with another folder"
        )

    @contextlib.contextmanager
    def _telling(self, what: str) -> Iterator[None]:
        """Turn what the database raises into an error that names the file; what was written before stays."""
        try:
            yield
        except _PROBLEMS as problem:
            with contextlib.suppress(sqlite3.Error):  # of a damaged file even this may fail
                self._connection.rollback()
            kept = "; the blocks that were written before stay, and --resume goes on with them" if self._keys else ""
            rest = f"; {_OTHERWISE}" if _is_damage(problem) else kept
            raise AuditFolderError(f"{self._path}: {what}: {problem}{rest}") from None


def _is_busy(problem: Exception) -> bool:
    return _code(problem) in (sqlite3.SQLITE_BUSY, sqlite3.SQLITE_LOCKED)


def _is_damage(problem: Exception) -> bool:
    """Whether the file holds what no ledger does: no table of ours, a format unknown, text that has no code at all."""
    return _code(problem) in (sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB, sqlite3.SQLITE_ERROR, 0)


def _code(problem: Exception) -> int:
    code: int = getattr(problem, "sqlite_errorcode", 0)
    return code & 0xFF


def _checksum(*parts: object) -> str:
    """Return the SHA-256 of numbers, texts and bytes, each by its representation, in which their order counts."""
    return hashlib.sha256(repr(parts).encode("utf-8", "surrogatepass")).hexdigest()


def _different(before: Any, now: Any, path: str = "") -> list[str]:
    """Return the dotted keys at which two documents differ."""
    if isinstance(before, dict) and isinstance(now, dict):
        found = []
        for name in sorted(before.keys() | now.keys()):
            below = f"{path}.{name}" if path else name
            found += _different(before.get(name), now.get(name), below)
        return found
    return [] if before == now else [path]
