"""Kernels as files, and small audits of them, for the tests beside this file."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping
from dataclasses import fields, is_dataclass
from pathlib import Path

import numpy as np

from narrowgauge.api import Audit, run_audit
from narrowgauge.kernel.auditfile import AuditFile, read_audit_file
from narrowgauge.record.canonical import canonical_text, read_strict

GEOMETRIC = """
import numpy as np

def value(dW, h):
    x = np.ones_like(dW[0])
    for n in range(dW.shape[0]):
        x = x + 0.05 * h * x + 0.2 * x * dW[n]
    return x
"""
LEAST: dict[str, dict[str, str]] = {
    "kernel": {"run": '"kernel.py:value"', "takes": '"increments"'},
    "ladder": {"horizon": "1.0", "finest": "2"},
    "sampling": {"block": "1024", "paths": "1024", "most_paths": "2048"},
}


def written(folder: Path, source: str) -> Path:
    """Write a kernel's source and return its path; line 1 of the file is the first that is not empty."""
    path = folder / "kernel.py"
    path.write_text(textwrap.dedent(source).lstrip("\n"), encoding="utf-8")
    return path.resolve()


def file_for(folder: Path, source: str, **tables: Mapping[str, str]) -> AuditFile:
    """Return the audit file of a kernel `value`: levels 0 to 2 of 1, 2 and 4 steps, looks at 1,024 and 2,048 paths.

    `tables` holds further keys, and values as TOML writes them.
    """
    written(folder, source)
    names = [*LEAST, *(name for name in tables if name not in LEAST)]
    asked = {name: {**LEAST.get(name, {}), **tables.get(name, {})} for name in names}
    lines = [f"[{name}]\n" + "".join(f"{k} = {v}\n" for k, v in table.items()) for name, table in asked.items()]
    path = folder / "audit.toml"
    path.write_text("\n".join(lines), encoding="utf-8")
    return read_audit_file(path)


def audited(folder: Path, source: str, **tables: Mapping[str, str]) -> Audit:
    """Run the audit of a kernel and write it into `folder / "out"`; what was written must read back the same."""
    result = run_audit(file_for(folder, source, **tables), folder / "out", replace=True)
    text = (folder / "out" / "audit.json").read_text(encoding="utf-8")
    assert read_strict(text, "audit.json") == result.record.document()
    assert text == canonical_text(result.record.document())
    return result


def bits(value: object) -> object:
    """Return a tally as nested lists in which every array is its bytes: equal only if all bits are."""
    if isinstance(value, np.ndarray):
        return value.tobytes()
    if isinstance(value, Mapping):
        return [(key, bits(part)) for key, part in value.items()]
    return [bits(getattr(value, field.name)) for field in fields(value)] if is_dataclass(value) else value
