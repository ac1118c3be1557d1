"""Random numbers for stochastic rounding, keyed by (seed, level, block, number of the operation).

They follow from these four integers and an element's place in its array alone: not from workers, the order of blocks,
or the layout of memory. An operation's key is hashed from the four, and element i takes the i-th number of the
SplitMix64 sequence that starts there, a function of key and i: "Fast splittable pseudorandom number generators", OOPSLA
2014, doi 10.1145/2660193.2660195 (constants recalled from memory). A number has 53 bits, so that the probability of a
rounding is right to 2^-53.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic import compiled
from narrowgauge.arithmetic.scratch import words64

__all__ = ["Stochastic"]

_STEP, _FIRST, _SECOND = 0x9E3779B97F4A7C15, 0xBF58476D1CE4E5B9, 0x94D049BB133111EB
_WORD = (1 << 64) - 1


class Stochastic:
    """The stream of one run of a kernel on one block; `operations` counts what was rounded so far.

    Two runs that must agree to the bit each take a new stream of the same key. The draws come from another generator,
    so that equal integers do not make roundings follow draws.
    """

    __slots__ = ("_keys", "block", "level", "operations", "seed")

    def __init__(self, seed: int, level: int, block: int) -> None:
        self.seed, self.level, self.block = seed, level, block
        self.operations = 0
        sequence = np.random.SeedSequence(seed, spawn_key=(level, block))
        self._keys = [int(word) for word in sequence.generate_state(2, np.uint64)]

    def __repr__(self) -> str:
        return f"Stochastic(seed={self.seed}, level={self.level}, block={self.block}) at {self.operations}"

    def uniforms(self, shape: tuple[int, ...]) -> npt.NDArray[np.float64]:
        """Return the next operation's numbers in [0, 1), multiples of 2^-53, in C order; good until the next call."""
        self.operations += 1
        first, second = self._keys
        start = np.uint64(_mixed(first + self.operations * _STEP) ^ second)
        size = int(np.prod(shape, dtype=int))
        found = words64("uniforms", (size,), size).view(np.float64)
        loop = compiled.kernel("uniforms")
        if loop is not None:
            loop(found, start)
        else:
            _fill(found, start)
        return found.reshape(shape)


def _mixed(word: int) -> int:
    word &= _WORD
    word = ((word ^ (word >> 30)) * _FIRST) & _WORD
    word = ((word ^ (word >> 27)) * _SECOND) & _WORD
    return word ^ (word >> 31)


def _fill(found: npt.NDArray[np.float64], start: np.uint64) -> None:
    words = np.arange(1, found.size + 1, dtype=np.uint64)
    words *= np.uint64(_STEP)
    words += start
    work = words64("mixing", words.shape, words.size)
    for shift, factor in ((30, _FIRST), (27, _SECOND)):
        np.right_shift(words, np.uint64(shift), out=work)
        words ^= work
        words *= np.uint64(factor)
    np.right_shift(words, np.uint64(31), out=work)
    words ^= work
    words >>= np.uint64(11)
    np.multiply(words, 2.0**-53, out=found)
