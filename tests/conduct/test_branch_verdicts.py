"""What branches that differ do to a verdict, and what the record and the terminal say of it."""

from __future__ import annotations

import io
from pathlib import Path

from branch_cases import PAIR, PATH, audit_file, defective
from rich.console import Console

from narrowgauge.api import run_audit
from narrowgauge.record.audit import AuditRecord
from narrowgauge.report.text import audit_text

FORMATS = {"narrow": '["float16"]', "wide": '["float64"]', "schemes": '["split"]'}


def audited(folder: Path, source: str, rmse: str, **branches: str) -> AuditRecord:
    """An audit whose only schemes are splits."""
    asked = {"correction": '"kernel.py:correction"', **branches}
    file = audit_file(folder, source, target={"rmse": rmse}, formats=FORMATS, branches=asked)
    return run_audit(file, None).record


def shown(record: AuditRecord) -> str:
    console = Console(file=io.StringIO(), width=200, color_system=None)
    console.print(audit_text(record, None))
    assert isinstance(console.file, io.StringIO)
    return " ".join(console.file.getvalue().split())


def verdicts(record: AuditRecord) -> list[tuple[str | None, str | None]]:
    return [(one.arms["float16"].verdict, one.arms["float16"].reason) for one in record.quantities["value"].levels]


def test_a_split_whose_branches_differ_is_not_admissible(tmp_path: Path) -> None:
    """On the levels where they do; the reason of the verdict is "branches", and the terminal says so first."""
    source, line = defective("reordered sum")
    record = audited(tmp_path, source, "0.002")
    assert record.branches is not None
    differ = {one.level for one in record.branches.mismatches}
    assert differ
    for level, verdict in enumerate(verdicts(record)):
        assert (verdict == ("does not pay", "branches")) == (level in differ)
    text = shown(record)
    assert text.startswith("THE BRANCHES OF A SPLIT DO NOT CANCEL.")
    assert f"kernel.py:{line}: add of " in text
    assert "of the target RMSE; this level's share of the target is 1.25e-04." in text


def test_a_mismatch_within_budget_is_said_and_the_audit_goes_on(tmp_path: Path) -> None:
    """A target so wide that the interval of the bias lies inside every share; without the key that is no help."""
    source, _ = defective("reordered sum")
    record = audited(tmp_path, source, "1.0", allow='"within budget"')
    assert record.branches is not None
    assert {one.splits for one in record.branches.mismatches} == {"within budget"}
    assert all(reason != "branches" for _, reason in verdicts(record))
    assert "this level's share of the target, which the audit file allows." in shown(record)
    strict = audited(tmp_path, source, "1.0")
    assert ("does not pay", "branches") in verdicts(strict)


def test_a_mismatch_past_the_budget_is_not_allowed(tmp_path: Path) -> None:
    """The key alone allows nothing."""
    source, _ = defective("reordered sum")
    assert ("does not pay", "branches") in verdicts(audited(tmp_path, source, "0.0002", allow='"within budget"'))


def test_branches_that_agree_take_one_line(tmp_path: Path) -> None:
    """Nothing is said first, and the record has what was compared."""
    record = audited(tmp_path, PATH + PAIR, "0.002")
    assert all(reason != "branches" for _, reason in verdicts(record))
    text = shown(record)
    assert "DO NOT CANCEL" not in text
    assert (
        "Branches of a split: kernel.py:path against the low part of kernel.py:correction; all bits agree. Compared: "
        "float16 on levels 0 to 3, at least 1,024 paths each; float16 on levels 0 and 3 with 1, 3, 7, 8, 64 or 1,024 "
        "paths a call, in 4 memory layouts, in 2 threads at once, repeated and with other draws on 3 paths, which must "
        "not show on the rest." in text
    )
