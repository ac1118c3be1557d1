"""What branches that differ do to a verdict, and what the record and the terminal say of it."""

from __future__ import annotations

import io
from pathlib import Path
from typing import Any

import pytest
from branch_cases import PAIR, PATH, audit_file, checked, defective
from rich.console import Console

from narrowgauge.api import audit, run_audit
from narrowgauge.conduct.branches import broken_splits
from narrowgauge.measure.workers import Workers
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.canonical import read_strict
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
    assert "float16: no split is used on levels 0 to 3, since the two functions give other bits." in text
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


def test_whoever_measures_the_record_is_the_same(tmp_path: Path) -> None:
    """A worker process finds both functions by their files, and the audit goes on where it stopped."""
    source, _ = defective("reordered sum")
    file = audit_file(tmp_path, source, formats=FORMATS)
    records = []
    for workers, resume in ((1, False), (2, False), (2, True)):
        folder = tmp_path / str(workers)
        record = run_audit(file, folder, workers=Workers(number=workers), resume=resume).record
        document = record.document()
        del document["provenance"]
        records.append(document)
        assert read_strict((folder / "audit.json").read_text(encoding="utf-8"), "audit.json") == record.document()
    assert records[0] == records[1] == records[2]


def test_a_function_that_was_handed_over_has_a_correction_by_name(tmp_path: Path) -> None:
    """Paths are relative to the current folder, as for a kernel."""
    source, _ = defective("reordered sum")
    (tmp_path / "kernel.py").write_text(source, encoding="utf-8")
    space: dict[str, Any] = {"__name__": "handed_kernel"}
    exec(compile(source, str(tmp_path / "kernel.py"), "exec"), space)
    result = audit(
        {
            "kernel": {"run": space["path"], "takes": "increments", "rounds": "itself"},
            "ladder": {"horizon": 0.7, "finest": 1},
            "formats": {"narrow": ["float16"], "wide": ["float64"]},
            "branches": {"correction": f"{tmp_path / 'kernel.py'}:correction"},
            "sampling": {"block": 1024, "paths": 1024, "most_paths": 1024},
        },
        quiet=True,
    )
    assert result.record.branches is not None
    assert {one.level for one in result.record.branches.mismatches} == {0, 1}
    assert {one.of_rmse for one in result.record.branches.mismatches} == {None}


SUMMED = """import numpy as np

def path(dW, h):
    return np.exp(0.2 * dW.sum(axis=0))

def correction(dW, h):
    return path(dW, h), path(dW, h)
"""


def test_numpys_own_sum_is_named_in_the_alarm(tmp_path: Path) -> None:
    """A float32 sum over the steps goes pairwise in Fortran's order: the bits of float32 hang on the layout.

    Two functions may get their draws in two layouts. One that is both branches gets them in the one that it has, and is
    left to be told so.
    """
    formats = {"narrow": '["float16", "float32"]', "wide": '["float64"]'}
    ladder = {"horizon": "1.0", "finest": "3", "coarsest_steps": "16"}

    def text(branches: dict[str, str] | None) -> str:
        file = audit_file(tmp_path, SUMMED, kernel={"rounds": ""}, branches=branches, formats=formats, ladder=ladder)
        return shown(run_audit(file, None).record)

    alarm = "float32: no split is used on any level, since NumPy's own sum gives other bits by the layout"
    assert alarm in text({"correction": '"kernel.py:correction"'})
    alone = text(None)
    assert alarm not in alone
    assert "NumPy itself gives other bits" in alone
    assert "hand both branches their draws in the same order." in alone


BY_DESCENT = """import numpy as np

def path(dW, h):
    mixed = np.einsum("psf,gf->psg", dW, np.eye(3, dtype=dW.dtype))
    return np.exp(mixed).mean(axis=(1, 2))

def correction(draws, h):
    low, high = draws if isinstance(draws, tuple) else (draws, draws)
    return path(low, h), path(high, h)
"""


@pytest.mark.parametrize("rounds", ["", '"itself"'])
def test_an_operand_that_lies_as_the_draws_do_by_descent_is_numpys_own(tmp_path: Path, rounds: str) -> None:
    """A mean over two axes of a product that keeps the layout of the draws: nothing to hold against one function."""
    formats = {"narrow": '["float16", "float32"]', "wide": '["float64"]'}
    kernel = {"rounds": rounds, "factors": "3", "layout": '"paths, steps, factors"'}
    for branches in (None, {"correction": '"kernel.py:correction"'}):
        entry = checked(tmp_path, BY_DESCENT, kernel=kernel, formats=formats, branches=branches)
        assert {one.arm for one in entry.mismatches} == {"float32"}
        assert all(one.condition == "layout" and one.numpys_own for one in entry.mismatches)
        assert broken_splits(entry, 1) == ({"float32"} if branches else set())


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


def test_a_correction_that_raises_is_said_first(tmp_path: Path) -> None:
    """No split of the format is used, and the kernel itself raised nowhere."""
    source = PATH + "\ndef correction(draws, h):\n    raise ArithmeticError('no high part yet')\n"
    record = audited(tmp_path, source, "0.002")
    assert {reason for _, reason in verdicts(record)} == {"branches"}
    text = shown(record)
    alarm = "float16: no split is used on any level, since a branch raised: level 0, arm float16: ArithmeticError"
    assert alarm in text[: text.index("Audit of")]
    assert "a branch raises in every format that a split could use" in text
