"""Audit files for the tests: the smallest, one with every key, and the refused ones of refusals.txt."""

from __future__ import annotations

from pathlib import Path

import pytest

from narrowgauge.errors import AuditFileError
from narrowgauge.kernel.auditfile import read_audit_file

LEAST = """
[kernel]
run = "reserve.py:value"
takes = "increments"
[ladder]
horizon = 1.0
finest = 8
"""
FULL = """
[kernel]
run = "models/reserve.py:value"
takes = "normals"
factors = 2
layout = "factors, paths,steps"
coupling = "none"
modules = ["plant"]
shared = ["plant.fast"]
allow = ["models/reserve.py:41", "plant.py:7"]
rounds = "emulated"
[parameters]
volatility = 0.4
years = 3
name = "call"
cap = true
rates = [[1, 2.5], [3, 4]]
marks = ["a", "b"]
[ladder]
horizon = 2
coarsest_steps = 3
refinement = 4
finest = 2
[target]
rmse = { call = 2e-3, put = 1 }
bias_share = 0.5
worthwhile = 1
largest_correction = 1.0
[formats]
today = "float32"
narrow = ["bfloat16"]
wide = ["float32"]
schemes = ["split"]
[cost]
float64 = 1.0
float32 = 0.5
float16 = 0.3
bfloat16 = 0.2
tf32 = 0.45
e4m3 = 0.1
e5m2 = 0.15
draws = 0.1
path = 2
measured = false
[sampling]
block = 2048
paths = 1000
most_paths = 1000
confidence = 0.9
seed = 0
"""
POSITIVE = "a finite number above 0"
PARAMETER = "a number, a string, a boolean, or an array of one of these"
RUN = '"file.py:function" or "package.module:function"'


def read(folder, text):
    path = folder / "audit.toml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return read_audit_file(path)


def refusal(folder, text):
    """The message without the name of the file, which is checked here."""
    with pytest.raises(AuditFileError) as caught:
        read(folder, text)
    message, start = str(caught.value), f"{folder / 'audit.toml'}: "
    assert message.startswith(start)
    assert caught.value.__suppress_context__
    assert "$" not in message
    return message.removeprefix(start)


def altered(old, new):
    """The smallest file with one text exchanged."""
    assert LEAST.count(old) == 1
    return LEAST.replace(old, new)


def refusals():
    """Pairs of a change to the smallest file and the message it must get."""
    text = (Path(__file__).parent / "refusals.txt").read_text(encoding="utf-8")
    _, *cases = text.strip().split("\n\n")
    pairs = [case.split("\n") for case in cases]
    return [pytest.param(change.replace("\\n", "\n"), message, id=message) for change, message in pairs]


def least():
    return {"kernel": {"run": "a.py:f", "takes": "normals"}, "ladder": {"horizon": 1.0, "finest": 3}}
