"""Tallies as bytes: every bit comes back, equal tallies have equal bytes, and nothing else is taken for one."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from block_cases import GEOMETRIC, runner_for, same
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from narrowgauge.measure.moments import Moments, Series
from narrowgauge.measure.packing import packed, unpacked
from narrowgauge.measure.tally import LevelTally, QuantityTally, Raised

RAISES = """
import numpy as np

def value(dW, h):
    x = np.ones(dW.shape[1])
    if (x + 0.0001 == x).all():
        raise ValueError("no \\ud800 luck")
    return {"b": x + dW[0], "a": x > 0.5 + dW[0]}
"""


def tally_of(series: Series, coarse: Moments | None = None) -> LevelTally:
    one = QuantityTally(
        values={"float64": series}, errors={}, differences={}, corrections={("a", "b"): series}, coarse=coarse
    )
    return LevelTally(level=3, paths=2**40, dropped=1, blocks=2, quantities={"P\ud800": one}, raised={})


def bits(values: np.ndarray) -> bytes:
    return values.tobytes()


@pytest.mark.parametrize("level", [0, 2])
def test_a_block_comes_back_bit_for_bit(tmp_path: Path, level: int) -> None:
    """Levels with and without a coarse path, quantities in their order, distinct values; packed again the same."""
    tally = runner_for(tmp_path, GEOMETRIC, parameters={"r": 0.05, "s": 0.2}).run(level, 1)
    back = unpacked(packed(tally))
    assert same(back, tally)
    assert list(back.quantities) == ["up", "call"]
    assert back.quantities["up"].values["float64"].distinct == {0.0, 1.0}
    assert packed(back) == packed(tally)
    assert same(back + back, tally + tally)


def test_what_a_kernel_raised_comes_back(tmp_path: Path) -> None:
    """With its file and line, and with text that no encoding has."""
    tally = runner_for(tmp_path, RAISES).run(1, 0)
    back = unpacked(packed(tally))
    assert set(tally.raised) == {"float16", "bfloat16"}
    assert back.raised == tally.raised
    assert back.raised["float16"].message == "no \ud800 luck"
    nowhere = replace(tally, raised={"float32": Raised(kind="E", message="", file=None, line=None)})
    assert unpacked(packed(nowhere)).raised == nowhere.raised


@given(arrays(np.uint64, (5, 32), elements=st.integers(0, 2**64 - 1)))
def test_every_float64_comes_back(words: np.ndarray) -> None:
    """Any bits at all, those of NaNs, infinities, subnormals and negative zeros among them."""
    table = words.view(np.float64)
    moments = Moments(count=table[0], mean=table[1], m2=table[2], m3=table[3], m4=table[4])
    series = Series(
        moments=moments, events=3, largest=math.inf, smallest=5e-324, distinct=frozenset({-0.0, 1e300}), nonfinite=7
    )
    back = unpacked(packed(tally_of(series, moments)))
    one = back.quantities["P\ud800"]
    assert one.coarse is not None
    for found in (one.values["float64"].moments, one.corrections["a", "b"].moments, one.coarse):
        assert [bits(getattr(found, name)) for name in ("count", "mean", "m2", "m3", "m4")] == [
            bits(row) for row in table
        ]
    again = one.values["float64"]
    assert (again.largest, again.smallest, again.events, again.nonfinite) == (math.inf, 5e-324, 3, 7)
    assert sorted(map(str, again.distinct or ())) == ["-0.0", "1e+300"]


@pytest.mark.parametrize("data", [b"", b"\x00", b"\x93\x01\x02\x03", b"\xc1", b"\x96\x01\x01\x01\x01\x91\x01\x90"])
def test_other_bytes_are_no_tally(data: bytes) -> None:
    """They are refused with ValueError, whatever is wrong with them."""
    with pytest.raises(ValueError, match=r"not a packed tally|not enough values|too many values|cannot reshape"):
        unpacked(data)
