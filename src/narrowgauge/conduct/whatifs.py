"""What another arithmetic would do for a narrow format, with the kernel as it is: each what-if judged like a format.

| what-if             | what is computed otherwise                                                  | charged     |
|---------------------|-----------------------------------------------------------------------------|-------------|
| stochastic rounding | a rounding goes to either neighbour, more often to the nearer one, unbiased | as narrow   |
| fused products      | a sum takes a product of its own line unrounded (fused multiply-add)        | as narrow   |
| flushed subnormals  | a subnormal result is a zero                                                | as narrow   |
| carried errors      | x = x + e carries the error of the addition, which joins e a step later     | as narrow   |
| wide increments     | all but the additions x = x + e is wide; e is converted to the format once  | as computed |
| exponents higher    | all exponents of the format lie so much higher or lower (values are scaled) | as narrow   |

The further operations of carried errors are not charged, nor what a machine may ask for random numbers.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.formats import Format
from narrowgauge.arithmetic.indouble import InDouble
from narrowgauge.arithmetic.stochastic import Stochastic
from narrowgauge.conduct.laddered import Changed, on_ladder, pays_fields
from narrowgauge.dispatch.byline import Widths
from narrowgauge.dispatch.placed import Carried, Fused, Operation
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.linearms import LineRunner, Variant
from narrowgauge.record.lines import CARRIED, WhatIfEntry

__all__ = ["what_ifs"]


def what_ifs(
    file: AuditFile,
    runner: LineRunner,
    form: Format,
    wide: Format | None,
    sums: Mapping[Operation, float],
    *,
    broken: Mapping[int, Collection[str]],
    shift: int = 0,
) -> list[WhatIfEntry]:
    """Return how far a narrow format pays in each what-if.

    `sums` are the additions to the state with their shares of all operations; without any, carried errors and wide
    increments are left out. So are exponents shifted by no power of two. `broken` has, by level, the formats of which
    no split is admissible. Raises what running the kernel raises.
    """
    changes = {name: _narrow(file, form, variant) for name, variant in _variants(file, form).items()}
    if sums:
        places = frozenset(sums)
        changes[CARRIED] = _narrow(file, form, Variant(make=lambda level, block: Carried(form, places)))
        if wide is not None:
            share = sum(sums.values())
            cost = share * file.costs.step(form.name) + (1 - share) * file.costs.step(wide.name)
            run = Widths(rest=wide, at=dict.fromkeys(sums, form), converts=True)
            changes["wide increments"] = Changed(form=form.name, run=run, step_cost=cost)
    if shift:
        moved = form.shifted(shift)
        changes[f"exponents {abs(shift)} {'higher' if shift > 0 else 'lower'}"] = _narrow(
            file, form, Variant(make=lambda level, block: InDouble(moved))
        )
    confidence = 1 - (1 - file.sampling.confidence) / len(changes)
    judged = on_ladder(file, runner, changes, confidence, broken=broken)
    return [
        WhatIfEntry(name=name, step_cost=changes[name].step_cost, **pays_fields(levels, form.name))
        for name, levels in judged.items()
    ]


def _variants(file: AuditFile, form: Format) -> dict[str, Variant]:
    seed = file.sampling.seed

    def stochastic(level: int, block: int) -> Arithmetic:
        return Arithmetic(format=form, rounding="stochastic", stream=Stochastic(seed, level, block))

    return {
        "stochastic rounding": Variant(make=stochastic, anew=True),
        "fused products": Variant(make=lambda level, block: Fused(form)),
        "flushed subnormals": Variant(make=lambda level, block: Arithmetic(format=form, subnormals="flushed")),
    }


def _narrow(file: AuditFile, form: Format, variant: Variant) -> Changed:
    return Changed(form=form.name, run=variant, step_cost=file.costs.step(form.name))
