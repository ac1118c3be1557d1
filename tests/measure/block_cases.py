"""Kernels as files, and runners for them, for the tests beside this file."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping
from dataclasses import fields
from pathlib import Path
from typing import Any

import numpy as np

from narrowgauge.kernel.auditfile import AuditFile, audit_file_from
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.moments import Moments, Series
from narrowgauge.measure.tally import LevelTally

PATHS = 1024  # one block of every level here
GEOMETRIC = """
import numpy as np

def value(dW, h, *, r, s):
    x = np.ones_like(dW[0])
    for n in range(dW.shape[0]):
        x = x + r * h * x + s * x * dW[n]
    return {"up": x > 1.0, "call": np.maximum(x - 1.0, 0.0)}
"""


def written(folder: Path, source: str) -> Path:
    """Write a kernel's source and return its path; line 1 of the file is the first that is not empty."""
    path = folder / "kernel.py"
    path.write_text(textwrap.dedent(source).lstrip("\n"), encoding="utf-8")
    return path.resolve()


def file_for(path: Path, tables: Mapping[str, Mapping[str, object]] | None = None) -> AuditFile:
    """Return an audit file for a kernel `value`: increments, levels 0 to 2 of 1, 2 and 4 steps, blocks of 1,024."""
    asked: dict[str, dict[str, object]] = {
        "kernel": {"run": f"{path}:value", "takes": "increments"},
        "ladder": {"horizon": 1.0, "finest": 2},
        "sampling": {"block": PATHS},
    }
    for name, table in (tables or {}).items():
        asked[name] = {**asked.get(name, {}), **table}
    return audit_file_from(asked)


def runner_for(folder: Path, source: str, **tables: Mapping[str, object]) -> BlockRunner:
    """Return a runner of the kernel `value` in a source text."""
    audit_file = file_for(written(folder, source), tables)
    return BlockRunner(audit_file, find_kernel(audit_file))


def same(one: Any, other: Any) -> bool:
    """Whether two tallies, series or moments agree in every bit."""
    if isinstance(one, np.ndarray):
        return bool(np.array_equal(one, other, equal_nan=True))
    if isinstance(one, Mapping):
        return list(one) == list(other) and all(same(one[key], other[key]) for key in one)
    if isinstance(one, (Moments, Series, LevelTally)) or hasattr(one, "corrections"):
        return type(one) is type(other) and all(same(getattr(one, f.name), getattr(other, f.name)) for f in fields(one))
    return bool(one == other)
