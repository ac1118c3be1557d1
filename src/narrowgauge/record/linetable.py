"""The shares of the lines as rows: one per format, quantity and part, for lines.csv and for a data frame."""

from __future__ import annotations

from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.lines import ShareEntry
from narrowgauge.record.table import Row, csv_text

__all__ = ["line_rows", "lines_csv"]


def line_rows(record: AuditRecord) -> list[Row]:
    """Return one row per format, quantity and part; a figure that does not exist is None, and without [lines] none."""
    rows: list[Row] = []
    for form, study in ({} if record.lines is None else record.lines.formats).items():
        for quantity, found in study.quantities.items():
            for one in found.parts:
                part = study.parts[one.part]
                rows.append(
                    {
                        "format": form,
                        "quantity": quantity,
                        "level": study.level,
                        "steps": study.steps,
                        "paths": study.paths,
                        "kind": part.kind,
                        "file": part.file,
                        "line": part.line,
                        "role": part.role,
                        "operations": part.operations,
                        **_prefixed("error", one.error),
                        **_prefixed("correction", one.correction),
                    }
                )
    return rows


def lines_csv(record: AuditRecord) -> str:
    """Return lines.csv: a header and the rows of `line_rows`, floats by shortest repr, None as an empty field."""
    return csv_text(line_rows(record))


def _prefixed(name: str, entry: ShareEntry | None) -> Row:
    return {
        f"{name}_{field}": None if entry is None else getattr(entry, field) for field in ShareEntry.__struct_fields__
    }
