"""Uniforms of a block: keyed by integers, made once in float64 for all arms.

A block's stream is PCG64DXSM(SeedSequence(seed, spawn_key=(purpose, level, block))), with the number of a scenario as a
fourth key. The spawn key keeps streams apart where a seed list [seed, level, block] can collide; a uniform is
(j + 1/2) / 2^52 with j the upper 52 bits of one output, so that it is never 0 or 1 and its normal is finite.
"""

from __future__ import annotations

from enum import IntEnum, unique

import numpy as np
import numpy.typing as npt

__all__ = ["GRAIN", "Purpose", "UniformStream", "apart", "block_paths", "uniforms"]

_MOST_DRAWS = 2**22  # of one block: bounds the memory of a block, whatever the level
_ONE = np.uint64(0x3FF) << np.uint64(52)  # the bits of 1.0
_BATCHES = 32
GRAIN = 1024  # paths; a block is a multiple of it and is cut into 32 batches


@unique
class Purpose(IntEnum):
    """What a stream is for: the first integer of its key, so that no two uses see the same numbers."""

    AUDIT = 0
    IDENTITY = 1
    TRIAL = 2
    BRANCHES = 3
    LINES = 4
    SCENARIO = 5  # the key of a block, then the number of the scenario; alone it is that of the scenarios themselves
    GATE = 6  # never of uniforms: the seed of a gate's own streams is drawn with it


def block_paths(block: int, steps: int, factors: int, refinement: int = 2) -> int:
    """Return the paths of one block: the largest multiple of 1,024 up to `block` within 2^22 draws, at least 1,024.

    A few less where they could be taken for steps, see `apart`. It follows from the audit file alone, never from the
    machine.
    """
    fitting = _MOST_DRAWS // (steps * factors)
    return apart(max(GRAIN, min(block, fitting) // GRAIN * GRAIN), steps, refinement)


def apart(paths: int, steps: int, refinement: int) -> int:
    """Return a number of paths, `paths` or a few less, that is no length which the time steps give an array.

    A sum over an axis as long as the paths is taken for one over paths: those of the fine and of the coarse run, with
    or without the starting point, must be of other lengths. From 1,024 paths on the number stays a multiple of 32.
    """
    coarse = steps // refinement
    taken = {steps, steps + 1, coarse, coarse + 1}
    less = _BATCHES if paths >= GRAIN else 2
    while paths in taken and paths > less:
        paths -= less
    return paths


class UniformStream:
    """The uniforms of a block, handed out one request after the other; `further` is a scenario's number, if any."""

    def __init__(self, seed: int, purpose: Purpose, level: int, block: int, *further: int) -> None:
        key = np.random.SeedSequence(seed, spawn_key=(int(purpose), level, block, *further))
        self._source = np.random.PCG64DXSM(key)

    def take(self, shape: tuple[int, ...]) -> npt.NDArray[np.float64]:
        """Return the next uniforms in (0, 1), float64 of the given shape, in C order."""
        words = np.asarray(self._source.random_raw(int(np.prod(shape, dtype=np.int64))))
        # In place, since fresh memory costs more than arithmetic: j are the fraction bits of 1 + j / 2^52.
        words >>= np.uint64(12)
        words |= _ONE
        values = words.view(np.float64)
        values -= 1.0  # exact: j / 2^52
        values += 2.0**-53  # exact: 53 bits
        return values.reshape(shape)


def uniforms(
    seed: int, purpose: Purpose, level: int, block: int, shape: tuple[int, ...], *further: int
) -> npt.NDArray[np.float64]:
    """Return the uniforms of a block in (0, 1), float64 of the given shape, in C order."""
    return UniformStream(seed, purpose, level, block, *further).take(shape)
