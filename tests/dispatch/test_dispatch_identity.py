"""float64 through the whole machinery gives plain NumPy's bits, types and layouts, idiom by idiom."""

from __future__ import annotations

import corpus
import numpy as np
import pytest
from kernel_runs import call, same, values_of


@pytest.mark.parametrize("layout", ["C", "F"])
@pytest.mark.parametrize("name", corpus.SOURCES)
def test_float64_gives_plain_bits(name, layout):
    """Results, and the draws that the kernel wrote into, agree with plain NumPy in type, strides and every bit."""
    plain, _, plain_draws = call(corpus.source(name), None, *corpus.draws(layout))
    wrapped, setting, wrapped_draws = call(corpus.source(name), "float64", *corpus.draws(layout))
    assert setting.faults == []
    lines = corpus.source(name).count("\n")
    differing = [
        (i, one, other)
        for i, (one, other) in enumerate(zip(values_of(plain), values_of(wrapped), strict=True))
        if not same(one, other)
    ]
    assert not differing, f"{len(differing)} of {len(values_of(plain))} values in {lines} lines: {differing[:8]}"
    assert same(plain, wrapped)
    assert same(plain_draws, wrapped_draws)


def test_a_difference_would_be_found():
    """Negative control: one bit, a sign of zero, a type, a layout or a length tell two results apart."""
    row = np.array([[0.1, 0.2], [0.3, 0.0]])
    assert same([row, 0.1, (1, None)], [row.copy(), 0.1, (1, None)])
    assert same(np.array([np.nan]), -np.array([np.nan]))
    for other in (
        np.nextafter(row, 1),
        row * np.array([1, -1.0]),
        row.astype(np.float32),
        row.copy("F"),
        row[:1],
        [row],
    ):
        assert not same(row, other)
    assert not same(0.1, np.float64(0.1))
    assert not same(True, np.bool_(True))
    assert not same([0.1], (0.1,))
