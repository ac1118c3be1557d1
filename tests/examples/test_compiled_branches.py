"""The compiled example's libraries against their source in Python, as their audit files ask: [branches], end to end."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest
from compiled_builds import FOLDER, built, needs_fma, needs_half, small

from narrowgauge.api import run_audit
from narrowgauge.record.audit import AuditRecord, MismatchEntry
from narrowgauge.report.branches import branch_alarms, branch_lines, branch_summary

LEVELS = range(7)


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return Path(shutil.copytree(FOLDER, tmp_path_factory.mktemp("branches") / "compiled"))


def audited(folder: Path, name: str) -> AuditRecord:
    return run_audit(small(built(folder, name)), None).record


def mismatches(record: AuditRecord) -> list[MismatchEntry]:
    assert record.branches is not None
    return record.branches.mismatches


@needs_half
def test_the_build_that_rounds_every_operation_agrees(folder: Path) -> None:
    """4,096 paths of every level in float16 and float32, all bits; so does every condition that a library allows."""
    record = audited(folder, "rounded")
    assert mismatches(record) == []
    assert record.branches is not None
    assert {(one.arm, one.level) for one in record.branches.tried if one.paths == 4096} == {
        (arm, level) for arm in ("float16", "float32") for level in LEVELS
    }
    assert "all bits agree" in branch_summary(record.branches)
    assert branch_alarms(record) == []


@needs_half
def test_wider_intermediates_break_the_branches_and_are_named(folder: Path) -> None:
    """In float16 alone, on every level, as the cause of all that differs; the bias is there, and no split is used."""
    record = audited(folder, "wider")
    found = mismatches(record)
    assert {(one.arm, one.condition) for one in found} == {("float16", "branches")}
    assert {one.level for one in found} == set(LEVELS)
    assert {one.explanation for one in found} == {"wider intermediates, in float32"}
    assert all(one.bias is not None and one.of_rmse is not None for one in found)
    for quantity in record.quantities.values():
        for level in quantity.levels:
            scheme = level.arms["float16"].scheme
            assert scheme is None or scheme.kind == "alone"
    assert branch_alarms(record) == ["float16: no split is used on levels 0 to 6"]
    assert any("Explained by wider intermediates, in float32" in line for line in branch_lines(record.branches, record))


@needs_half
@needs_fma
def test_fused_products_break_them_in_single_precision(folder: Path) -> None:
    """In float32 alone: half precision, computed in float, has no such sum."""
    found = mismatches(audited(folder, "fused"))
    assert {one.arm for one in found} == {"float32"}
    assert {one.explanation for one in found} == {"fused multiply-add"}
