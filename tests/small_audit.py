"""A kernel and an audit of it that are over at once, for tests of what is made of an audit. INVENTED DATA."""

from __future__ import annotations

__all__ = ["AUDIT", "KERNEL", "TARGET"]

KERNEL = """
import numpy as np


def value(dW, h):
    x = np.full(dW.shape[1], 1.0)
    for dw in dW:
        x = x + 0.2 * x * dw
    return x
"""
AUDIT = """
[kernel]
run = "model.py:value"
takes = "increments"
[ladder]
horizon = 1.0
finest = 1
[formats]
narrow = ["float32"]
[sampling]
block = 4096
paths = 4096
most_paths = 4096
"""
TARGET = "[target]\nrmse = 0.01\n"
