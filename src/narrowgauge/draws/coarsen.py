"""What the fine and the coarse path of a level see in one arithmetic.

| takes      | fine                                        | coarse                                                    |
|------------|---------------------------------------------|-----------------------------------------------------------|
| increments | round(sqrt(h) z), the product in float64    | sums of M rounded increments, in the arm's arithmetic, in |
|            |                                             | order of time                                             |
| normals    | round(z)                                    | the same sum of rounded normals, times round(1 / sqrt(M)) |
| uniforms   | round(u); 0 and 1 become the nearest value  | Phi((z_1 + ... + z_M) / sqrt(M)) in float64, rounded      |
|            | inside                                      | likewise                                                  |

Every array here is (steps, factors, paths).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.rounding import Floats
from narrowgauge.draws.approximate import Approximation
from narrowgauge.draws.normals import exact_normals, normal_cdf

__all__ = ["Draws", "Takes", "coarse_draws", "fine_draws", "inside"]

Takes = Literal["increments", "normals", "uniforms"]
Doubles = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Draws:
    """The float64 draws of one block, before any arm rounds them.

    `values` is what the kernel takes, `normals` the normals behind uniforms, both (steps, factors, paths); `refinement`
    is the number of fine steps in a coarse one. `approximate` is what the kernel takes with approximate normals of the
    same uniforms, None where no arm asks for them.
    """

    takes: Takes
    values: Doubles
    normals: Doubles | None
    refinement: int
    approximate: Doubles | None = None

    @classmethod
    def of(
        cls, takes: Takes, uniforms: Doubles, step: float, refinement: int, approximation: Approximation | None = None
    ) -> Draws:
        """Return the draws made from a block's uniforms, which they may overwrite; `step` is the fine h."""
        cheap = None if approximation is None else approximation(uniforms)
        if takes == "uniforms":
            return cls(takes=takes, values=uniforms, normals=exact_normals(uniforms), refinement=refinement)
        values = exact_normals(uniforms, out=uniforms)
        if takes == "increments":
            values *= math.sqrt(step)
            if cheap is not None:
                cheap *= math.sqrt(step)
        return cls(takes=takes, values=values, normals=None, refinement=refinement, approximate=cheap)

    def approximated(self) -> Draws:
        """Return the draws that an arm with approximate normals sees."""
        assert self.approximate is not None  # some arm asked for them
        return replace(self, values=self.approximate, approximate=None)


def fine_draws(draws: Draws, arithmetic: Arithmetic) -> Floats:
    """Return the draws of the fine path as carriers, (steps, factors, paths)."""
    rounded = arithmetic.cast(draws.values)
    return inside(rounded, arithmetic) if draws.takes == "uniforms" else rounded


def coarse_draws(draws: Draws, fine: Floats, arithmetic: Arithmetic) -> Floats:
    """Return the draws of the coarse path as carriers, (steps / M, factors, paths), from the arm's fine ones."""
    m = draws.refinement
    if draws.normals is not None:
        total = draws.normals.reshape(-1, m, *draws.normals.shape[1:]).sum(axis=1)
        return inside(arithmetic.cast(normal_cdf(total / math.sqrt(m))), arithmetic)
    groups = fine.reshape(-1, m, *fine.shape[1:])
    total = groups[:, 0]
    for j in range(1, m):
        total = arithmetic.apply(np.add, (total, groups[:, j]))
    if draws.takes == "normals":
        total = arithmetic.apply(np.multiply, (total, arithmetic.constant(1.0 / math.sqrt(m))))
    return np.ascontiguousarray(total)


def inside(rounded: Floats, arithmetic: Arithmetic) -> Floats:
    """Move what rounded to 0 or 1 to the nearest value of the format inside (0, 1), in place."""
    form = arithmetic.format
    np.clip(rounded, form.min_subnormal, 1.0 - form.unit_roundoff, out=rounded)
    return rounded
