"""Tallies and audit files for the tests of judgements, made from bare arrays so that every variance is exact.

A shape has mean 0 and unbiased variance 1, is alike in all of the 32 batches, and different shapes are uncorrelated in
each: sums of multiples of shapes have the variances of the sums, and a jackknife of them has no spread.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import numpy.typing as npt
from scipy.stats import norm

from narrowgauge.judge.gain import LevelCosts, LevelView
from narrowgauge.kernel.auditfile import AuditFile, CostTable, audit_file_from
from narrowgauge.measure.arms import REFERENCE, arms_of, pairs_of
from narrowgauge.measure.moments import BATCHES, Moments, Series
from narrowgauge.measure.tally import LevelTally, QuantityTally, Raised

Doubles = npt.NDArray[np.float64]

EPS = float(np.finfo(np.float64).eps)
_BATCH = 128  # four signs times eight sizes
PATHS = BATCHES * _BATCH
# Where everything is exact but for the rounding of sums of so many terms.
NEAR = PATHS * EPS
COSTS = CostTable(float64=1.0, float32=0.5, float16=0.25, bfloat16=0.25)  # by storage


def shape(number: int, paths: int = PATHS) -> Doubles:
    """Return shape 0, 1, 2 or 3: 16 values, none of them 0, in a multiple of 4,096 paths."""
    path = np.arange(paths)
    sizes = norm.ppf(0.5 + (np.arange(8) + 0.5) / 16)
    values = np.where((path >> number) & 1, -1.0, 1.0) * sizes[(path >> 4) % 8]
    return np.asarray(values / values.std(ddof=1))


def uneven(spread: float, paths: int = PATHS) -> Doubles:
    """Return a factor for each path, 1 + spread in even batches and 1 - spread in odd ones."""
    return np.repeat(np.where(np.arange(BATCHES) % 2, 1 - spread, 1 + spread), paths // BATCHES)


def differences(signal: float, **noises: float) -> dict[str, Doubles]:
    """Return D per arm: the reference has variance `signal`, R of an arm the one given, independent of all others."""
    reference = np.sqrt(signal) * shape(0)
    noisy = {name: reference - np.sqrt(r) * shape(k) for k, (name, r) in enumerate(noises.items(), 1)}
    return {REFERENCE: reference, **noisy}


def quantity(
    arms: Mapping[str, Doubles], *, fine: Mapping[str, Doubles] | None = None, coarse: bool = False
) -> QuantityTally:
    """Return the tally of level differences D per arm; P is `fine`, or D itself as on level 0.

    With `coarse` there is a coarse path, whose moments are those of P - D of the reference.
    """
    names = arms_of(list(arms))
    values = arms if fine is None else fine
    with np.errstate(invalid="ignore"):
        return QuantityTally(
            values={name: Series.of(values[name]) for name in names},
            errors={name: Series.of(values[name] - values[REFERENCE]) for name in names[1:]},
            differences={name: Series.of(arms[name]) for name in names},
            corrections={(a, b): Series.of(arms[b] - arms[a]) for a, b in pairs_of(names, names)},
            coarse=Moments.of(values[REFERENCE] - arms[REFERENCE]) if coarse else None,
        )


def level_tally(
    quantities: Mapping[str, QuantityTally] | QuantityTally, *, level: int = 0, raised: Sequence[str] = ()
) -> LevelTally:
    """Return the tally of one level; a bare quantity is called "value"."""
    found = {"value": quantities} if isinstance(quantities, QuantityTally) else dict(quantities)
    return LevelTally(
        level=level,
        paths=next(iter(found.values())).differences[REFERENCE].moments.total,
        dropped=0,
        blocks=1,
        quantities=found,
        raised={name: Raised(kind="ValueError", message="", file=None, line=None) for name in raised},
    )


def view(
    tally: QuantityTally,
    costs: CostTable = COSTS,
    *,
    steps: int = 1,
    draws: int = 0,
    largest_correction: float | None = None,
) -> LevelView:
    """Return the view of a quantity on a level of so many steps, fine and coarse together."""
    return LevelView(tally, LevelCosts(steps=steps, draws=draws, table=costs), largest_correction)


def audit(finest: int = 0, **tables: Mapping[str, object]) -> AuditFile:
    """Return an audit file of levels 0 to `finest`, horizon 1, one step on level 0; no table is required."""
    kernel = {"run": _never, "takes": "increments", **tables.pop("kernel", {})}
    ladder = {"horizon": 1.0, "finest": finest, **tables.pop("ladder", {})}
    return audit_file_from({"kernel": kernel, "ladder": ladder, **tables})


def counted(values: Sequence[float], counts: npt.NDArray[np.int64]) -> Series:
    """Return the series of so many paths, (batches, values), with each value."""
    table, size = np.asarray(values, dtype=np.float64), counts.sum(axis=1).astype(np.float64)
    mean = counts @ table / size
    offset = table - mean[:, None]
    met = table[counts.sum(axis=0) > 0]
    sizes = np.abs(met[met != 0.0])
    return Series(
        moments=Moments(
            count=size,
            mean=mean,
            m2=(counts * offset**2).sum(axis=1),
            m3=(counts * offset**3).sum(axis=1),
            m4=(counts * offset**4).sum(axis=1),
        ),
        events=int(counts[:, table != 0.0].sum()),
        largest=float(sizes.max(initial=0.0)),
        smallest=float(sizes.min()) if sizes.size else 0.0,
        distinct=frozenset(met.tolist()),
        nonfinite=0,
    )


def _never(dW: Doubles, h: float) -> Doubles:
    raise AssertionError("no test of a judgement runs a kernel")
