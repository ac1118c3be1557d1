"""The record that a finished audit left in its folder; no numpy."""

from __future__ import annotations

import hashlib
from pathlib import Path

from narrowgauge.record.audit import SCHEMA, AuditRecord
from narrowgauge.record.canonical import DocumentError, read_strict
from narrowgauge.record.reading import converted, shown, text_of

__all__ = ["read_audit"]

_LARGEST = 64 * 2**20  # bytes of an audit.json


def read_audit(folder: Path) -> tuple[AuditRecord, str]:
    """Return the record in an audit's folder and the digest of its file; DocumentError says what is wrong with it."""
    path = Path(folder) / "audit.json"
    text = text_of(path, _LARGEST)
    document = read_strict(text, str(path))
    schema = document.get("schema") if isinstance(document, dict) else None
    if schema != SCHEMA:
        raise DocumentError(str(path), "schema", f"{shown(schema)} is not accepted; accepted: {SCHEMA}")
    return converted(document, AuditRecord, str(path)), f"sha256:{hashlib.sha256(text.encode()).hexdigest()}"
