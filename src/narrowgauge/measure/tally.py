"""What was measured on one level, as data that adds up.

For a quantity P, its value on level l under arm a is P_l^a; the level difference D_l^a = P_l^a - P_(l-1)^a takes both
from the same draws (D_0 = P_0); the error is E_l^a = P_l^a - P_l^ref; the correction from a to b is D_l^b - D_l^a.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from narrowgauge.measure.moments import Moments, Series

__all__ = ["LevelTally", "Pair", "QuantityTally", "Raised"]

Pair = tuple[str, str]


@dataclass(frozen=True, slots=True, kw_only=True)
class Raised:
    """What a kernel raised in an arm other than the reference, and where in the user's code."""

    kind: str
    message: str
    file: str | None
    line: int | None


@dataclass(frozen=True, slots=True, kw_only=True)
class QuantityTally:
    """Series of one quantity on one level: per arm P, E and D, per (narrow, wide) pair R. Adds with `+`.

    `coarse` holds the moments of the reference's coarse path, None on a level without one.
    """

    values: Mapping[str, Series]
    errors: Mapping[str, Series]
    differences: Mapping[str, Series]
    corrections: Mapping[Pair, Series]
    coarse: Moments | None

    def __add__(self, other: QuantityTally) -> QuantityTally:
        """Merge with the tally of further paths; an arm that either side lost is lost."""
        both = self.coarse is not None and other.coarse is not None
        return QuantityTally(
            values={a: s + other.values[a] for a, s in self.values.items() if a in other.values},
            errors={a: s + other.errors[a] for a, s in self.errors.items() if a in other.errors},
            differences={a: s + other.differences[a] for a, s in self.differences.items() if a in other.differences},
            corrections={p: s + other.corrections[p] for p, s in self.corrections.items() if p in other.corrections},
            coarse=self.coarse + other.coarse if both else None,  # type: ignore[operator]  # both are there
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class LevelTally:
    """All that was measured on one level so far. Adds with `+`, in the order of the blocks.

    `paths` were run, `dropped` of them were not finite in the reference and are in no series.
    """

    level: int
    paths: int
    dropped: int
    blocks: int
    quantities: Mapping[str, QuantityTally]
    raised: Mapping[str, Raised]

    def __add__(self, other: LevelTally) -> LevelTally:
        """Merge with the tally of the following blocks."""
        return LevelTally(
            level=self.level,
            paths=self.paths + other.paths,
            dropped=self.dropped + other.dropped,
            blocks=self.blocks + other.blocks,
            quantities={name: tally + other.quantities[name] for name, tally in self.quantities.items()},
            raised={**other.raised, **self.raised},
        )
