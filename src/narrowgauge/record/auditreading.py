"""An audit's record read back from its folder: whole, of a schema that is known, and with all that it refers to."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from pathlib import Path

import msgspec

from narrowgauge.record.audit import SCHEMA, AuditRecord, LevelEntry, QuantityEntry
from narrowgauge.record.canonical import DocumentError, read_strict
from narrowgauge.record.reading import converted, shown, text_of

__all__ = ["RECORD_FILE", "audit_in", "audit_record", "read_audit"]

RECORD_FILE = "audit.json"
_LARGEST = 64 * 2**20  # bytes
_FORMATS = ("float16", "bfloat16", "float32", "float64", "tf32", "e4m3", "e5m2")  # a test holds them to `arithmetic`
_ACCEPTED = "accepted: a folder into which narrowgauge audit has written"


def audit_in(folder: Path) -> AuditRecord:
    """Return the record of the audit in a folder.

    Raises DocumentError, which names the folder or the file, the path into it, and what is accepted.
    """
    return read_audit(folder)[0]


def read_audit(folder: Path) -> tuple[AuditRecord, str]:
    """Return the record in an audit's folder and the digest of its file; raises as `audit_in` does."""
    path, text = str(folder / RECORD_FILE), _text_in(folder)
    return audit_record(read_strict(text, path), path), f"sha256:{hashlib.sha256(text.encode()).hexdigest()}"


def _text_in(folder: Path) -> str:
    """Return the text of the record in a folder; DocumentError where there is none that can be read."""
    path = folder / RECORD_FILE
    try:
        path.open("rb").close()
    except OSError as problem:
        raise DocumentError(str(folder), "", f"{_missing(folder, problem)}; {_ACCEPTED}") from None
    return text_of(path, _LARGEST)


def audit_record(document: object, source: str) -> AuditRecord:
    """Return a document as the record of an audit; DocumentError says where it is none."""
    if not isinstance(document, dict):
        raise DocumentError(source, "", "this is no audit; accepted: an object with a schema")
    schema = document.get("schema")
    if schema != SCHEMA:
        found = "is missing" if schema is None else f"{shown(schema)} is not known to this version"
        raise DocumentError(source, "schema", f"{found}; accepted: {shown(SCHEMA)}")
    record = converted(document, AuditRecord, source)
    for place, what in _dangling(record):
        raise DocumentError(source, place, f"{what}; accepted: what this version writes")
    return record


def _missing(folder: Path, problem: OSError) -> str:
    """Return why a folder has no record that can be read."""
    if not folder.exists():
        return "there is no such folder"
    if not folder.is_dir():
        return "is no folder"
    if isinstance(problem, FileNotFoundError):
        if (folder / "blocks.sqlite").exists():
            return f"holds no {RECORD_FILE}, since the audit there has not ended (--resume goes on with it)"
        return f"holds no {RECORD_FILE}"
    return f"{RECORD_FILE} cannot be read: {problem.strerror}"


def _dangling(record: AuditRecord) -> Iterator[tuple[str, str]]:
    """Yield each place that refers to an arm, a level or a quantity that is not there, or holds none at all."""
    if not record.quantities:
        yield "quantities", "there is none"
        return
    narrow = list(record.verdict.finest_paying_level)
    for name in (*narrow, "float64"):
        if name not in record.arms:
            yield "arms", f"there is no {name!r}"
            return
    for name, arm in record.arms.items():
        if arm.format not in _FORMATS:
            yield f"arms.{name}.format", f"{arm.format!r} is no format"
            return
    if record.rules.levels_sharing < 1:
        yield "rules.levels_sharing", "at least one level shares the target"
    ladders = {tuple(level.level for level in entry.levels) for entry in record.quantities.values()}
    if len(ladders) > 1 or () in ladders:
        yield "quantities", "they do not have the same levels, at least one"
        return
    for quantity, entry in record.quantities.items():
        where = f"quantities.{quantity}"
        for place, what in _in_quantity(entry, narrow, set(record.arms)):
            yield f"{where}.{place}", what
    for number, scheme in enumerate(record.verdict.schemes):
        if scheme is not None and scheme.narrow not in record.arms:
            yield f"verdict.schemes[{number}].narrow", f"there is no arm {scheme.narrow!r}"


def _in_quantity(entry: QuantityEntry, narrow: list[str], arms: set[str]) -> Iterator[tuple[str, str]]:
    for name in narrow:
        if name not in entry.finest_paying_level:
            yield "finest_paying_level", f"there is no {name!r}"
    for place, level in enumerate(entry.levels):
        for found, what in _in_level(level, narrow, arms):
            yield f"levels[{place}].{found}", what
    if isinstance(entry.separation, msgspec.UnsetType):
        return
    for name, parts in entry.separation.parts.items():
        if len(parts) != len(entry.levels):
            yield f"separation.parts.{name}", f"{len(parts)} levels where the ladder has {len(entry.levels)}"


def _in_level(level: LevelEntry, narrow: list[str], arms: set[str]) -> Iterator[tuple[str, str]]:
    if level.steps < 1 or level.blocks < 1:
        yield "steps", "a level has at least one step and one block"
    for name in narrow:
        if name not in level.arms:
            yield "arms", f"there is no {name!r}"
    best = level.best
    if best is not None and not {best.narrow, best.wide or best.narrow} <= arms:
        yield "best", "its scheme names an arm that is not there"
