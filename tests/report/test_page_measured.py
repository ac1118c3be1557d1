"""Pages of audits that were run: kernels with nothing to show in one section or another, and one of hostile names."""

from __future__ import annotations

from functools import cache

import numpy as np
import pages
import pytest
from test_page import ASKED, section, words

import narrowgauge

PATHS = 2048


def walk(dW, h):
    x = np.full(dW.shape[1], 1.0)
    for dw in dW:
        x = x + 0.2 * x * dw
    return x


def not_finite(dW, h):
    return walk(dW, h) * np.inf


def still(dW, h):
    return walk(dW, h) * 0.0 + 1.0


def too_large(dW, h):
    return walk(dW, h) * 1e30 * 1e30


def raises(dW, h):
    x = walk(dW, h)
    if (x + 2.0**-40 == x).any():
        raise ValueError("too coarse a number")
    return x


def hostile(dW, h, *, label):
    x = walk(dW, h)
    return {pages.SCRIPT: x, pages.BRACKETS: np.maximum(x - 1.0, 0.0)}


hostile.__name__ = hostile.__qualname__ = pages.SCRIPT

CASES = {
    "nothing finite": (not_finite, 4, "No verdict: on levels 0 to 4 float64 itself has no results of finite variance"),
    "nothing varies": (still, 4, "fewer than two levels have a signal"),
    "too large in every format": (too_large, 4, "float32: no noise was measured."),
    "raised in every format": (raises, 4, "No: lower precision does not pay here."),
    "one level": (walk, 0, "on its only level"),
    "two levels": (walk, 1, "measured on levels 0 to 1"),
}


@cache
def measured(case):
    kernel, finest, _ = CASES[case]
    return audited(kernel, finest)


def audited(kernel, finest, parameters=None):
    tables = {
        "kernel": {"run": kernel, "takes": "increments"},
        "parameters": parameters or {},
        "ladder": {"horizon": 1.0, "finest": finest},
        "sampling": {"block": 1024, "paths": PATHS, "most_paths": PATHS},
    }
    return narrowgauge.audit(tables, quiet=True).record


@pytest.mark.parametrize("case", CASES)
def test_every_section_has_words(case):
    """Whatever is missing, and the answer is there."""
    record = measured(case)
    assert CASES[case][2] in words(record)
    for key in ASKED:
        assert len(section(record, key)) > 60


def test_names_of_a_kernel_that_was_run():
    """A function, its quantities and its parameters by any name reach the page as text."""
    record = audited(hostile, 1, {"label": pages.CONTROL})
    assert pages.SCRIPT in record.kernel.run
    shown = words(record)
    assert f"Quantity {pages.SCRIPT}" in shown
    assert f"Quantity {pages.BRACKETS}" in shown
    assert "a\\x1b[31mb" in section(record, "measured")
