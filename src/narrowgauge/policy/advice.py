"""Lines worth a wider format, as a policy's advice: what the study of the lines of an audit found."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.lines import FormatLines

__all__ = ["advised"]


def advised(record: AuditRecord) -> list[dict[str, Any]]:
    """Return the fields of each `AdvicePart`, by format from cheapest to best; none without a study that found some."""
    if record.lines is None:
        return []
    return [
        {"source": record.kernel.fingerprint, "narrow": form, **fields}
        for form, study in record.lines.formats.items()
        for fields in _of(study)
    ]


def _of(study: FormatLines) -> Iterator[dict[str, Any]]:
    for one in study.widenings or ():
        parts = [study.parts[place] for place in one.parts]
        lines = sorted((part.file, part.line) for part in parts if part.file is not None and part.line is not None)
        yield {
            "wide": study.wide,
            "lines": [{"file": file, "line": line} for file, line in lines],
            "draws": any(part.kind == "draws" for part in parts),
            **{name: getattr(one, name) for name in ("operations", "step_cost", "level")},
            **{name: getattr(one, name) for name in ("gain", "gain_low", "gain_high")},
        }
