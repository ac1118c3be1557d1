"""A split that the audit refuses, since its branches do not cancel, is credited by no study beside it either."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from branch_cases import audit_file

from narrowgauge.api import run_audit
from narrowgauge.conduct.branches import broken_splits
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.lines import FormatLines

REORDERED = """
import numpy as np

def path(dW, h, volatility):
    s = np.full(dW.shape[-1], 1.0)
    for dw in dW:
        s = s + (0.05 * h * s + volatility * s * dw)
    return s

def correction(dW, h, volatility):
    low = np.full(dW.shape[-1], 1.0)
    for dw in dW:
        low = (low + 0.05 * h * low) + volatility * low * dw
    return low, path(dW, h, volatility)
"""
ALLOWED = '"within budget"'


def audited(folder: Path, allow: str, **tables: dict[str, str]) -> AuditRecord:
    """An audit whose low branch adds in another order than the low part, with a target that allows what that does."""
    made: dict[str, Any] = {
        "kernel": {"rounds": ""},
        "parameters": {"volatility": "0.2"},
        "ladder": {"finest": "2"},
        "target": {"rmse": "1.0"},
        "formats": {"schemes": '["split"]'},
        "branches": {"allow": allow},
        **tables,
    }
    record = run_audit(audit_file(folder, REORDERED, **made), None).record
    assert record.branches is not None
    assert {one.level for one in record.branches.mismatches} == {0, 1, 2}
    refused = {level: broken_splits(record.branches, level) for level in range(3)}
    assert refused == dict.fromkeys(range(3), frozenset() if allow else {"float16"})
    return record


def levels_of(found: FormatLines) -> dict[str, int | None]:
    """Return the finest paying level of the format as it is, of each set of wide lines, and of each what-if."""
    assert found.plain is not None
    assert found.widenings is not None
    assert found.what_ifs is not None
    sets = {f"wide {one.parts}": one.level for one in found.widenings}
    return {"plain": found.plain.level, **sets, **{one.name: one.level for one in found.what_ifs}}


@pytest.mark.parametrize("allow", ["", ALLOWED])
def test_the_study_of_the_lines_refuses_the_same_splits(tmp_path: Path, allow: str) -> None:
    """With no other scheme than the split neither the format nor a what-if pays; where it is allowed all do."""
    lines = {"formats": '["float16"]', "level": "2", "paths": "1024", "what_ifs": "true"}
    record = audited(tmp_path, allow, lines=lines)
    assert record.lines is not None
    assert record.lines.reason is None
    found = levels_of(record.lines.formats["float16"])
    assert found["plain"] == record.verdict.finest_paying_level["float16"].level
    assert {level is None for level in found.values()} == {not allow}


@pytest.mark.parametrize("allow", ["", ALLOWED])
def test_scenarios_refuse_the_same_splits(tmp_path: Path, allow: str) -> None:
    """With no other scheme than the split float16 has an edge in no scenario; where it is allowed, in each."""
    domain = {"parameters.volatility": "{ low = 0.1, high = 0.3 }", "scenarios": "2"}
    record = audited(tmp_path, allow, domain=domain)
    assert record.domain is not None
    assert len(record.domain.levels) == 3
    for level in record.domain.levels:
        assert (level.arms["float16"].edge_at is None) == (not allow)
        assert level.scheme.kind == ("split" if allow else "alone")
