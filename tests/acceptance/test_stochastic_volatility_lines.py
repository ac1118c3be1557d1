"""Where the accuracy of a longer kernel goes: eleven lines of a stochastic-volatility path, float16, 64 steps."""

from __future__ import annotations

import numpy as np
import pytest

from narrowgauge.conduct.lines import LineStudy
from narrowgauge.kernel.auditfile import audit_file_from
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.task import Bench


def call(dW, h):
    x = np.zeros(dW.shape[2])
    v = np.full(dW.shape[2], 0.04)
    for dw in dW:
        positive = np.maximum(v, 0.0)
        root = np.sqrt(positive)
        shock = -0.6 * dw[0] + 0.8 * dw[1]
        drift = (0.02 - 0.5 * positive) * h
        x = x + (drift + root * dw[0])
        pull = 1.5 * (0.04 - positive) * h
        v = v + (pull + 0.3 * root * shock)
    S = np.exp(x)
    return np.maximum(S - 1.0, 0.0)


FIRST = call.__code__.co_firstlineno
STATE, EXPONENTIAL = FIRST + 8, FIRST + 11


@pytest.fixture(scope="module")
def study():
    file = audit_file_from(
        {
            "kernel": {"run": call, "takes": "increments", "factors": 2},
            "ladder": {"horizon": 1.0, "finest": 6},
            "sampling": {"seed": 1, "block": 20480},
            "lines": {"level": 6, "paths": 20000, "search": False},
        }
    )
    return LineStudy(finest={"float16": None}, factors=2, coupled=True)(Bench(file, find_kernel(file))).formats[
        "float16"
    ]


def test_the_state_update_and_the_final_exponential_cost_most(study):
    """A prototype on a kernel of this kind, with 20,000 paths, found 46% and 42%: together more than four fifths."""
    shares = {study.parts[one.part].line: one.error for one in study.quantities["value"].parts}
    largest = sorted(shares, key=lambda line: -shares[line].share)[:2]
    assert set(largest) == {STATE, EXPONENTIAL}
    assert shares[STATE].share == pytest.approx(0.46, abs=0.08)
    assert shares[EXPONENTIAL].share == pytest.approx(0.42, abs=0.08)


def test_single_shares_add_up_to_the_whole(study):
    """The prototype's added up to 1.0002; the interval of the sum, at 99%, has 1 in it and is no wider than a fifth."""
    total = study.quantities["value"].error.total
    assert total.share_low < 1.0 < total.share_high
    assert total.share == pytest.approx(1.0, abs=0.1)
    assert total.share_high - total.share_low < 0.2
