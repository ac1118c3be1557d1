"""Records of a small audit, as it is and changed by hand, for the tests beside this file."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import msgspec

from narrowgauge.api import run_audit
from narrowgauge.kernel.auditfile import read_audit_file
from narrowgauge.policy.drawup import draw_up, read_audit
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.plan import SchemeEntry
from narrowgauge.record.policy import PolicyDocument

KERNEL = """
import numpy as np


def value(dW, h, *, rate, volatility, strike):
    x = np.full(dW.shape[1], 1.0)
    for dw in dW:
        x = x + (rate * h * x + volatility * x * dw)
    return {"end": x, "call": np.maximum(x - strike, 0.0)}
"""
# INVENTED DATA: a geometric Brownian path.
AUDIT = """
[kernel]
run = "model.py:value"
takes = "increments"

[parameters]
rate = 0.05
volatility = 0.3
strike = 1.1

[ladder]
horizon = 1.0
coarsest_steps = 4
finest = 3

[target]
rmse = { end = 0.002, call = 0.002 }

[formats]
schemes = ["split"]

[cost]
float64 = 1.0
float32 = 0.5
float16 = 0.25
bfloat16 = 0.25
draws = 0.125
path = 0.5

[sampling]
block = 8192
paths = 8192
most_paths = 8192
"""
LEVELS = range(4)
BUDGET = (1 - 0.25**2) * 0.002**2  # of the sampling variance


def run(folder: Path, audit: str = AUDIT, kernel: str = KERNEL) -> tuple[AuditRecord, str]:
    """Run an audit and return its record and the digest of its file."""
    (folder / "model.py").write_text(kernel, encoding="utf-8")
    (folder / "audit.toml").write_text(audit, encoding="utf-8")
    run_audit(read_audit_file(folder / "audit.toml"), folder / "out")
    return read_audit(folder / "out")


def changed(value: Any, *steps: str | int, to: Any) -> Any:
    """Return a record, or a part of it, with what stands at a path replaced."""
    if not steps:
        return to
    first, *rest = steps
    if isinstance(value, list):
        return [changed(one, *rest, to=to) if place == first else one for place, one in enumerate(value)]
    if isinstance(value, Mapping):
        return {key: changed(one, *rest, to=to) if key == first else one for key, one in value.items()}
    return msgspec.structs.replace(value, **{str(first): changed(getattr(value, str(first)), *rest, to=to)})


def judged(record: AuditRecord, level: int, arm: str, verdict: str | None, *, quantities: Any = ("end", "call")) -> Any:
    """Return a record in which an arm has this verdict on a level, for these quantities."""
    for name in quantities:
        steps = ("quantities", name, "levels", level, "arms", arm)
        record = changed(record, *steps, "verdict", to=verdict)
        record = changed(record, *steps, "reason", to=None if verdict == "pays" else "budget")
    return record


def paying(record: AuditRecord) -> AuditRecord:
    """Return a record in which float16 and float32 pay everywhere, bfloat16 nowhere, and float16 is used."""
    split = SchemeEntry(kind="split", narrow="float16", wide="float32")
    for level in LEVELS:
        record = judged(record, level, "float16", "pays")
        record = judged(record, level, "float32", "pays")
        record = judged(record, level, "bfloat16", "does not pay")
        for name in record.quantities:
            steps = ("quantities", name, "levels", level, "arms")
            record = changed(record, *steps, "float16", "scheme", to=split)
            alone = SchemeEntry(kind="alone", narrow="float32", wide=None)
            record = changed(record, *steps, "float32", "scheme", to=alone)
        assert record.verdict.schemes[level] == split
    return record


def policy(record: AuditRecord, **more: Any) -> PolicyDocument:
    """Return the policy of a record."""
    return draw_up(record, "sha256:" + "0" * 64, **more)


def sampling_variance(record: AuditRecord, document: PolicyDocument, name: str) -> float:
    """Return the sum of V / N over the branches of a policy, with the variances of the record."""
    total = 0.0
    for one in document.levels:
        level = record.quantities[name].levels[one.level]
        total += level.arms[one.narrow].level_variance / one.paths
        if one.wide is not None:
            total += level.corrections[f"{one.narrow}:{one.wide}"].variance / one.correction_paths
    return total


def run_cost(document: PolicyDocument) -> float:
    """Return the cost of a run by a policy, from the cost table of the audit file."""
    steps_cost = {"float64": 1.0, "float32": 0.5, "float16": 0.25, "bfloat16": 0.25}
    total = 0.0
    for one in document.levels:
        steps = one.steps + (one.steps // 2 if one.level else 0)
        fixed = 0.125 * one.steps + 0.5
        total += one.paths * (steps * steps_cost[one.narrow] + fixed)
        if one.wide is not None:
            both = steps_cost[one.narrow] + steps_cost[one.wide]
            total += one.correction_paths * (steps * both + fixed)
    return total
