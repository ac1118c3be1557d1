"""What-ifs in the record of an audit."""

from __future__ import annotations

from pathlib import Path

from audit_cases import GEOMETRIC, audited

from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.lines import WhatIfEntry

NEAR_THE_END = """
import numpy as np

def value(dW, h):
    x = np.full(dW.shape[1], 2.0**-22)
    for dw in dW:
        x = x + 0.25 * x * dw
    return x
"""


def what_ifs(folder: Path, source: str, form: str) -> tuple[AuditRecord, list[WhatIfEntry]]:
    record = audited(
        folder,
        source,
        formats={"narrow": f'["{form}"]', "wide": '["float32"]', "today": '"float32"', "schemes": '["split"]'},
        cost={"float64": "1.0", "float32": "0.5", form: "0.25"},
        lines={"formats": f'["{form}"]', "paths": "1024", "search": "false", "what_ifs": "true"},
    ).record
    assert record.lines is not None
    assert record.lines.reason is None
    found = record.lines.formats[form].what_ifs
    assert found is not None
    return record, found


def test_shifted_exponents_are_tried_where_results_pass_the_range(tmp_path: Path) -> None:
    """A state near 2^-22 is subnormal in float16, which does not pay; with exponents as much lower it does.

    Control: as the subnormals are flushed to zero, nothing else being changed, it does not pay on any level either.
    """
    record, found = what_ifs(tmp_path, NEAR_THE_END, "float16")
    assert record.range is not None
    assert record.range.watched is not None
    shift = record.range.watched.shifts["float16"].exponent
    assert shift < 0
    levels = {one.name: one.level for one in found}
    assert levels[f"exponents {-shift} lower"] is not None
    assert record.verdict.finest_paying_level["float16"].level is None
    assert levels["flushed subnormals"] is None
    shifted = next(one for one in found if one.name.startswith("exponents"))
    assert shifted.step_cost == 0.25


def test_exponents_are_left_where_results_stay_in_range(tmp_path: Path) -> None:
    """No result of a path near 1 is near an end of the range of bfloat16."""
    _, found = what_ifs(tmp_path, GEOMETRIC, "bfloat16")
    assert not [one.name for one in found if one.name.startswith("exponents")]
