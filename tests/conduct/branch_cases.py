"""Pairs of branches with one seeded defect each, for the tests beside this file.

The kernel is an Euler scheme of geometric Brownian motion that rounds for itself, in NumPy; the correction has its low
part on the lines that are marked, in the narrow type, and its high part in the wide one.
"""

from __future__ import annotations

import textwrap
from collections.abc import Mapping
from pathlib import Path

from narrowgauge.conduct.branches import branches_entry
from narrowgauge.kernel.auditfile import AuditFile, read_audit_file
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.record.branches import BranchesEntry, MismatchEntry

PATH = """
import numpy as np

def path(dW, h):
    T = dW.dtype.type
    mu, sigma, dt = T(0.05), T(0.2), T(h)
    s = np.full(dW.shape[-1], T(1.0))
    for dw in dW:
        drift = mu * s * dt
        noise = sigma * s * dw
        s = s + (drift + noise)
    return s
"""
PAIR = """

def correction(draws, h):
    low, high = draws
    return low_part(low, high, h), path(high, h)

def low_part(dW, wide, h):
    T = dW.dtype.type
    mu, sigma, dt = T(0.05), T(0.2), T(h)
    s = np.full(dW.shape[-1], T(1.0))
    for n, dw in enumerate(dW):
        drift = mu * s * dt
        noise = sigma * s * dw
        s = s + (drift + noise)
    return s
"""
# What is exchanged in the low part, by the name of the defect.
OWN_DEFECTS: dict[str, tuple[str, str]] = {
    "reordered sum": ("        s = s + (drift + noise)", "        s = (s + drift) + noise"),
    "hoisted product": ("        drift = mu * s * dt", "        drift = (mu * dt) * s"),
    "fused multiply-add": (
        "        s = s + (drift + noise)",
        "        s = s + (np.float64(sigma * s) * np.float64(dw) + np.float64(drift)).astype(T)",
    ),
    "float32 intermediate": (
        "        s = s + (drift + noise)",
        "        s = (s.astype(np.float32) + (drift.astype(np.float32) + noise.astype(np.float32))).astype(T)",
    ),
    "float64 constant": ("        drift = mu * s * dt", "        drift = (np.float64(0.05) * s * dt).astype(T)"),
    "draws not rounded": ("        noise = sigma * s * dw", "        noise = (sigma * s * wide[n]).astype(T)"),
    "step size not cast": ("        drift = mu * s * dt", "        drift = (mu * s * np.float64(h)).astype(T)"),
}
LEAST: dict[str, Mapping[str, str]] = {
    "kernel": {"run": '"kernel.py:path"', "takes": '"increments"', "rounds": '"itself"'},
    "ladder": {"horizon": "0.7", "finest": "3"},
    "target": {"rmse": "0.002"},
    "formats": {"narrow": '["float16"]', "wide": '["float64"]'},
    "branches": {"correction": '"kernel.py:correction"'},
    "sampling": {"block": "1024", "paths": "1024", "most_paths": "1024"},
}


def audit_file(folder: Path, source: str, **tables: Mapping[str, str] | None) -> AuditFile:
    """Write a kernel and its audit file, of which `tables` change single keys; None leaves a table out."""
    (folder / "kernel.py").write_text(textwrap.dedent(source).lstrip("\n"), encoding="utf-8")
    lines = []
    for name in dict.fromkeys([*LEAST, *tables]):
        changed = tables.get(name, {})
        if changed is not None:
            table = {**LEAST.get(name, {}), **changed}
            lines.append(f"[{name}]\n" + "".join(f"{key} = {value}\n" for key, value in table.items() if value))
    path = folder / "audit.toml"
    path.write_text("\n".join(lines), encoding="utf-8")
    return read_audit_file(path)


def entry_for(file: AuditFile) -> BranchesEntry:
    """Run the check of an audit file's branches alone."""
    kernel = find_kernel(file)
    entry = branches_entry(file, kernel, BlockRunner(file, kernel))
    assert entry is not None
    return entry


def checked(folder: Path, source: str, **tables: Mapping[str, str] | None) -> BranchesEntry:
    """Return what the check of a kernel's branches comes to."""
    return entry_for(audit_file(folder, source, **tables))


def defective(name: str) -> tuple[str, int]:
    """Return the source of a pair with one defect in the low part, and the line of the file where it stands."""
    old, new = OWN_DEFECTS[name]
    head, body = PAIR.split("def low_part")
    assert body.count(old) == 1
    source = (PATH + head + "def low_part" + body.replace(old, new)).lstrip("\n")
    return source, source.splitlines().index(new) + 1


def lines(one: MismatchEntry) -> set[tuple[str | None, int | None]]:
    """Return the lines of both sides where they part."""
    where = one.where
    sides = () if where is None else (where.low, where.correction)
    return {(side.file, side.line) for side in sides if side is not None}
