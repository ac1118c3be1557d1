"""Keyed uniforms: the generator and its key, exactness, sizes of blocks, and that no two keys share numbers.

Statistical tests have a fixed seed, state their false-alarm rate, and hold a negative control.
"""

from __future__ import annotations

import itertools
import math
from fractions import Fraction

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import chi2, norm

from narrowgauge.draws.normals import exact_normals
from narrowgauge.draws.streams import Purpose, apart, block_paths, uniforms

Words = npt.NDArray[np.uint64]

MASK64, MASK128 = 2**64 - 1, 2**128 - 1
STEP = 0xDA942042E4DD58B5  # the multiplier of PCG64DXSM's state and of its output
SEEDING = 0x2360ED051FC65DA44385DF649FCCF645  # PCG64's own, which NumPy uses while seeding


def key_of(seed: int, purpose: int, level: int, block: int) -> np.random.SeedSequence:
    return np.random.SeedSequence(seed, spawn_key=(purpose, level, block))


def words_of(key: np.random.SeedSequence, count: int) -> list[int]:
    """PCG64DXSM in Python's integers: a 128-bit congruential state, output by double xorshift and multiply.

    "PCG: A family of simple fast space-efficient statistically good algorithms for random number generation",
    technical report HMC-CS-2014-0905, 2014, and its DXSM output of 2019 (both recalled from memory).
    """
    high, low, stream_high, stream_low = (int(word) for word in key.generate_state(4, np.uint64))
    increment = (((stream_high << 64 | stream_low) << 1) | 1) & MASK128
    state = ((increment + (high << 64 | low)) * SEEDING + increment) & MASK128
    words = []
    for _ in range(count):
        upper, lower = state >> 64, state & MASK64 | 1
        upper ^= upper >> 32
        upper = upper * STEP & MASK64
        upper ^= upper >> 48
        words.append(upper * lower & MASK64)
        state = (state * STEP + increment) & MASK128
    return words


@given(
    seed=st.integers(0, 2**63 - 1),
    purpose=st.sampled_from(Purpose),
    level=st.integers(0, 40),
    block=st.integers(0, 2**32),
)
def test_uniforms_are_those_of_the_keyed_generator(seed: int, purpose: Purpose, level: int, block: int) -> None:
    """Each uniform is (j + 1/2) / 2^52, j the upper 52 bits of one output of the published generator, exactly."""
    key = key_of(seed, int(purpose), level, block)
    exact = [(Fraction(word >> 12) + Fraction(1, 2)) / 2**52 for word in words_of(key, 6)]
    values = uniforms(seed, purpose, level, block, (3, 2))
    assert values.dtype == np.float64
    assert values.shape == (3, 2)
    assert [Fraction(value) for value in values.ravel().tolist()] == exact


def test_numpys_own_generator_agrees() -> None:
    """NumPy's Generator.random, which keeps 53 bits, lies within 2^-53 below or at the same uniforms."""
    plain = np.random.Generator(np.random.PCG64DXSM(key_of(7, 0, 2, 5))).random(4096)
    ours = uniforms(7, Purpose.AUDIT, 2, 5, (4096,))
    assert np.array_equal(ours, np.floor(plain * 2.0**52) * 2.0**-52 + 2.0**-53)


PURPOSES = [one for one in Purpose if one is not Purpose.SCENARIO]  # the key of a scenario has one integer more


def test_purposes_keep_their_integers() -> None:
    """A purpose is part of every key: its integer never changes, or old audits would see other numbers."""
    known = {"AUDIT": 0, "IDENTITY": 1, "TRIAL": 2, "BRANCHES": 3, "LINES": 4, "SCENARIO": 5, "GATE": 6}
    assert {purpose.name: int(purpose) for purpose in Purpose} == known


def from_words(monkeypatch: pytest.MonkeyPatch, words: list[int]) -> list[float]:
    """The uniforms that these outputs of the generator give."""

    class Given:
        def __init__(self, key: object) -> None:
            pass

        def random_raw(self, size: int) -> Words:
            assert size == len(words)
            return np.array(words, np.uint64)

    monkeypatch.setattr(np.random, "PCG64DXSM", Given)
    values: list[float] = uniforms(1, Purpose.AUDIT, 0, 0, (len(words),)).tolist()
    return values


def test_extreme_outputs_give_neither_zero_nor_one(monkeypatch: pytest.MonkeyPatch) -> None:
    """The smallest and largest output give 2^-53 and 1 - 2^-53, exactly, and their normals are finite.

    Negative controls: without the half the smallest is 0, and with 53 bits the largest is 1.
    """
    low, high = from_words(monkeypatch, [0, MASK64])
    assert (Fraction(low), Fraction(high)) == (Fraction(1, 2**53), 1 - Fraction(1, 2**53))
    assert np.isfinite(exact_normals(np.array([low, high]))).all()
    assert (0 >> 12) / 2**52 == 0.0
    assert ((MASK64 >> 11) + 0.5) / 2**53 == 1.0


def test_every_bit_of_the_52_counts_and_no_other(monkeypatch: pytest.MonkeyPatch) -> None:
    """Bit k of an output moves the uniform by 2^(k - 64) for the upper 52 bits, and not at all for the lower 12."""
    values = from_words(monkeypatch, [0, *(1 << k for k in range(64))])
    moved = [value - values[0] for value in values[1:]]
    assert moved == [0.0] * 12 + [2.0 ** (k - 64) for k in range(12, 64)]


def test_a_block_is_the_start_of_a_longer_one() -> None:
    """The shape only cuts the stream, in C order: fewer draws are the first ones of more."""
    long = uniforms(3, Purpose.AUDIT, 1, 4, (8, 2, 64))
    assert np.array_equal(uniforms(3, Purpose.AUDIT, 1, 4, (5, 128)).ravel(), long.ravel()[:640])
    assert long.flags.c_contiguous


def test_block_paths_by_brute_force() -> None:
    """The largest multiple of 1,024, not above `block`, for which steps x factors x paths <= 2^22, at least 1,024.

    Where an axis of steps could be as long, of the fine or of the coarse run, 32 less, or 64.
    """
    for steps, factors, block in itertools.product(
        [1, 2, 3, 7, 32, 100, 128, 129, 1000, 1023, 1024, 2047, 2048, 4095, 4096],
        [1, 2, 3, 5],
        [1024, 2048, 3072, 32768, 33792, 2**20],
    ):
        fitting = [paths for paths in range(1024, block + 1, 1024) if steps * factors * paths <= 2**22]
        size = block_paths(block, steps, factors)
        lengths = [n + more for n in (steps, steps // 2) for more in (0, 1)]
        most = fitting[-1] if fitting else 1024
        assert size == next(paths for paths in range(most, 0, -32) if paths not in lengths)
        assert size % 32 == 0  # the batches of a block are equal


def test_a_few_paths_are_no_steps_either() -> None:
    """Below 1,024 paths their number stays even, for kernels that take them in pairs; one path is left alone."""
    assert [apart(8, steps, 2) for steps in (4, 7, 8, 16, 100)] == [8, 6, 6, 6, 8]
    assert [apart(1024, steps, 2) for steps in (1023, 1024, 2048, 512)] == [992, 992, 992, 1024]
    assert apart(2, 1, 2) == 2


def test_streams_of_different_keys_share_no_output() -> None:
    """Over seeds, purposes, levels and blocks no uniform stands in two streams.

    32,768 words of 52 bits for each purpose, 196,608 of six: two of independent streams agree by chance in
    196608^2 / 2 / 2^52 = 4.3e-6 of seeds.
    Negative control: the same key twice.
    """
    keys = list(itertools.product((1, 2), PURPOSES, range(8), range(32)))
    drawn = [uniforms(seed, purpose, level, block, (64,)) for seed, purpose, level, block in keys]
    everything = np.concatenate(drawn)
    assert np.unique(everything).size == everything.size == 32768 * len(PURPOSES)
    again = np.concatenate([*drawn, uniforms(1, Purpose.AUDIT, 0, 0, (64,))])
    assert np.unique(again).size < again.size


def correlations(normals: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
    """Correlation of every two rows, each row of mean 0 and variance 1 in law."""
    count = normals.shape[0]
    products = normals @ normals.T / normals.shape[1]
    return np.asarray(products[np.triu_indices(count, 1)])


def test_streams_of_neighbouring_keys_are_uncorrelated() -> None:
    """No two of the neighbouring streams correlate, and their squared correlations add up as those of noise.

    There are 32 of each purpose. Mean products of 4,096 pairs, standard error 1/64. Largest: false alarm 1e-6 over all
    pairs (Bonferroni, normal approximation). Sum of squares: chi-square with a degree of freedom for each pair, false
    alarm 1e-6. Negative control: one stream shifted by one draw and mixed in by a fifth.
    """
    keys = list(itertools.product(PURPOSES, range(4), range(8)))
    normals = np.array([exact_normals(uniforms(11, p, level, block, (4096,))) for p, level, block in keys])
    found = correlations(normals) * 64.0
    largest = norm.isf(1e-6 / 2 / found.size)
    assert np.abs(found).max() < largest
    assert float(found @ found) < chi2.isf(1e-6, found.size)
    normals[1] = math.sqrt(0.96) * normals[1] + 0.2 * normals[0]
    assert np.abs(correlations(normals) * 64.0).max() > largest


def test_a_list_as_seed_collides_and_the_key_does_not() -> None:
    """Why there is a key: as a list [seed, level, block] two audits can share a stream, under a key they do not.

    A list is cut into 32-bit words and filled up with zeros: [2^32, 3, 0] and [0, 1, 3] are the same words.
    """
    first, second = np.random.SeedSequence([2**32, 3, 0]), np.random.SeedSequence([0, 1, 3])
    assert np.array_equal(first.generate_state(8), second.generate_state(8))
    assert not np.array_equal(uniforms(2**32, Purpose.AUDIT, 3, 0, (64,)), uniforms(0, Purpose.AUDIT, 1, 3, (64,)))
    assert not np.array_equal(uniforms(0, Purpose.AUDIT, 0, 0, (64,)), uniforms(0, Purpose.AUDIT, 0, 1, (64,)))
