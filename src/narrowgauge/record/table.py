"""The record's levels as rows: one per quantity, level and arm, for levels.csv and for a data frame."""

from __future__ import annotations

import csv
import io

from narrowgauge.record.audit import AuditRecord

__all__ = ["Row", "accumulation_rows", "csv_text", "level_rows", "levels_csv"]

Row = dict[str, object]

_REFERENCE = "float64"


def level_rows(record: AuditRecord) -> list[Row]:
    """Return one row per quantity, level and arm; a figure that does not exist is None."""
    rows: list[Row] = []
    for quantity, entry in record.quantities.items():
        for level in entry.levels:
            for arm, figures in level.arms.items():
                scheme = figures.scheme
                correction = level.corrections.get(f"{arm}:{_REFERENCE}")
                rows.append(
                    {
                        "quantity": quantity,
                        "level": level.level,
                        "steps": level.steps,
                        "h": level.h,
                        "paths": level.paths,
                        "arm": arm,
                        "reference_level_variance": level.reference.level_variance,
                        "level_variance": figures.level_variance,
                        "error_mean": figures.error_mean,
                        "error_mean_se": figures.error_mean_se,
                        "error_variance": figures.error_variance,
                        "error_variance_se": figures.error_variance_se,
                        "correction_variance": correction.variance if correction else None,
                        "correction_effective_size": correction.effective_size if correction else None,
                        "breakeven_cost_ratio": correction.breakeven_cost_ratio if correction else None,
                        "nonfinite": figures.nonfinite,
                        "scheme": scheme.kind if scheme else None,
                        "wide": scheme.wide if scheme else None,
                        "gain": figures.gain,
                        "gain_low": figures.gain_low,
                        "gain_high": figures.gain_high,
                        "edge": figures.edge,
                        "edge_low": figures.edge_low,
                        "edge_high": figures.edge_high,
                        "bias": figures.bias,
                        "bias_low": figures.bias_low,
                        "bias_high": figures.bias_high,
                        "verdict": figures.verdict,
                        "reason": figures.reason,
                        "paths_needed": figures.paths_needed,
                    }
                )
    return rows


def accumulation_rows(record: AuditRecord) -> list[Row]:
    """Return one row per quantity, arm and law (error, correction) with its coefficients and intervals."""
    rows: list[Row] = []
    for quantity, entry in record.quantities.items():
        for arm, laws in entry.accumulation.items():
            for name, law in (("error", laws.error), ("correction", laws.correction)):
                figures = {field: getattr(law, field) for field in law.__struct_fields__ if field != "levels"}
                rows.append({"quantity": quantity, "arm": arm, "law": name, **figures})
    return rows


def levels_csv(record: AuditRecord) -> str:
    """Return levels.csv: a header and the rows of `level_rows`, floats by shortest repr, None as an empty field."""
    return csv_text(level_rows(record))


def csv_text(rows: list[Row]) -> str:
    """Return rows as a table with a header: floats by shortest repr, None as an empty field."""
    text = io.StringIO()
    writer = csv.DictWriter(text, fieldnames=list(rows[0]) if rows else [], lineterminator="\n")
    writer.writeheader()
    writer.writerows(rows)
    return text.getvalue()
