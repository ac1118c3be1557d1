"""What approximate draws do, as entries of the record."""

from __future__ import annotations

from collections.abc import Mapping

from narrowgauge.conduct.entries import interval_fields, variance_of, variance_se_of
from narrowgauge.draws.approximate import Approximation
from narrowgauge.judge.separation import Order, Parts, order, parts
from narrowgauge.kernel.approximation import quality
from narrowgauge.kernel.arms import Arm
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.tally import QuantityTally
from narrowgauge.record.draws import DrawsEntry, OrderEntry, PartsEntry, SeparationEntry

__all__ = ["draws_entry", "separation_entry"]


def draws_entry(file: AuditFile, approximation: Approximation | None) -> DrawsEntry | None:
    """Return what an audit's approximate normals are, and how good; None without [draws]. Raises as `quality` does."""
    if file.draws is None or approximation is None:
        return None
    mean, variance, error = quality(approximation)
    return DrawsEntry(
        approximate=file.draws.approximate,
        cells=file.draws.cells,
        intervals=file.draws.intervals,
        degree=file.draws.degree,
        mean=mean,
        variance=variance,
        mean_square_error=error,
    )


def separation_entry(file: AuditFile, tallies: Mapping[int, QuantityTally], alpha: float) -> SeparationEntry:
    """Return the parts of the corrections of one quantity, by level, and their orders."""
    cheap = [name for name in file.arms if not Arm.named(name).exact]
    return SeparationEntry(
        parts={
            form: [_parts_entry(level, parts(tally, form, alpha)) for level, tally in tallies.items()]
            for form in (Arm.named(name).format for name in cheap)
            if form != REFERENCE
        },
        orders={name: _order_entry(_order(file, tallies, name, alpha)) for name in cheap},
    )


def _order(file: AuditFile, tallies: Mapping[int, QuantityTally], name: str, alpha: float) -> Order:
    found = {level: tally.corrections.get((name, REFERENCE)) for level, tally in tallies.items() if file.coupled(level)}
    known = {level: series for level, series in found.items() if series is not None}
    return order(known, file.ladder.refinement, alpha)


def _parts_entry(level: int, found: Parts) -> PartsEntry:
    return PartsEntry(
        level=level,
        arithmetic=variance_of(found.arithmetic),
        arithmetic_se=variance_se_of(found.arithmetic),
        draws=variance_of(found.draws),
        draws_se=variance_se_of(found.draws),
        both=variance_of(found.both),
        both_se=variance_se_of(found.both),
        **interval_fields("ratio", found.ratio),
        larger=found.larger,
    )


def _order_entry(found: Order) -> OrderEntry:
    fields = interval_fields("slope", found.slope)
    return OrderEntry(**fields, levels=list(found.levels), reason=found.reason)
