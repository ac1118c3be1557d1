"""Whole kernels against the same kernels written in NumPy's own float16 and in ml_dtypes' bfloat16.

Those types round + - * / sqrt and maximum in code that has nothing to do with this project, so that the two must agree
in every bit. What differs between the two texts is only that the reference casts every constant, once, by hand.
"""

from __future__ import annotations

import ml_dtypes
import numpy as np
import pytest
from kernel_runs import FILE, owned

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.copies import copy_module, new_setting

TYPES = {"float16": np.float16, "bfloat16": ml_dtypes.bfloat16}
PATHS = 512

KERNELS = """
import math
import numpy as np

def euler(dW, h, rate=0.05, volatility=0.2, start=1.0):
    S = np.full(dW.shape[1], start)
    for dw in dW:
        S = S + (rate * h * S + volatility * S * dw)
    return S

def milstein(dW, h, rate=0.05, volatility=0.2, start=1.0):
    path = np.empty((len(dW) + 1, dW.shape[1]))
    path[0] = start
    for n, dw in enumerate(dW):
        S = path[n]
        path[n + 1] = S + S * (rate * h + volatility * dw + 0.5 * volatility**2 * (dw * dw - h))
    return np.maximum(path[-1] - 1.0, 0.0) * math.exp(-rate)

def square_root(dW, h, reversion=1.5, level=0.04, volatility=0.3, start=0.04):
    v = np.full(dW.shape[1], start)
    total = np.zeros_like(v)
    for dw in dW:
        positive = np.maximum(v, 0.0)
        v += reversion * h * (level - positive) + volatility * np.sqrt(positive) * dw
        total += positive * h
    return total / (len(dW) * h)

def ornstein_uhlenbeck(dW, h, reversion=1.5, level=0.5, volatility=0.3, start=1.0):
    out = np.zeros(dW.shape[1])
    for i in range(dW.shape[1]):
        x = np.float64(start)
        for n in range(dW.shape[0]):
            x += reversion * (level - x) * h + volatility * dW[n, i]
        out[i] = max(x, 0.0)
    return out
"""


def euler(dW, h, c, *, rate=0.05, volatility=0.2, start=1.0):
    S = np.full(dW.shape[1], c(start))
    for dw in dW:
        S = S + (c(rate * h) * S + c(volatility) * S * dw)
    return S


def milstein(dW, h, c, *, rate=0.05, volatility=0.2, start=1.0):
    S = np.full(dW.shape[1], c(start))
    for dw in dW:
        S = S + S * (c(rate * h) + c(volatility) * dw + c(0.5 * volatility**2) * (dw * dw - c(h)))
    return np.maximum(S - c(1.0), c(0.0)) * c(np.exp(-rate))


def square_root(dW, h, c, *, reversion=1.5, level=0.04, volatility=0.3, start=0.04):
    v = np.full(dW.shape[1], c(start))
    total = np.full(dW.shape[1], c(0.0))
    for dw in dW:
        positive = np.maximum(v, c(0.0))
        v = v + (c(reversion * h) * (c(level) - positive) + c(volatility) * np.sqrt(positive) * dw)
        total = total + positive * c(h)
    return total / c(len(dW) * h)


def ornstein_uhlenbeck(dW, h, c, *, reversion=1.5, level=0.5, volatility=0.3, start=1.0):
    x = np.full(dW.shape[1], c(start))
    for n, dw in enumerate(dW):
        # the kernel's first step is on a plain float: a constant, until it meets the first draw
        drift = c(reversion * (level - start) * h) if n == 0 else c(reversion) * (c(level) - x) * c(h)
        x = x + (drift + c(volatility) * dw)
    return np.maximum(x, c(0.0))


@pytest.mark.parametrize("reference", [euler, milstein, square_root, ornstein_uhlenbeck], ids=lambda f: f.__name__)
@pytest.mark.parametrize("form", TYPES)
@pytest.mark.parametrize("steps", [1, 4, 32])
def test_a_kernel_gives_the_bits_of_the_types_own_arithmetic(reference, form, steps):
    """Every path of the unmodified kernel equals the reference's, and no fault was recorded."""
    paths = PATHS if reference is not ornstein_uhlenbeck else 16
    kind, h = TYPES[form], 1.0 / steps
    rng = np.random.Generator(np.random.PCG64DXSM([7, steps]))
    setting = new_setting(arithmetic_named(form))
    kernel = getattr(copy_module(compile(KERNELS, FILE, "exec"), "kernel", setting), reference.__name__)
    increments = rng.standard_normal((steps, paths)) * np.sqrt(h)
    with np.errstate(all="ignore"):
        emulated = kernel(owned(increments, setting), h)
        expected = reference(increments.astype(kind), h, kind)
    assert setting.faults == []
    assert expected.dtype == kind
    assert np.array_equal(emulated._carrier.astype(np.float64), expected.astype(np.float64))


@pytest.mark.parametrize("form", TYPES)
def test_the_reference_tells_float64_from_the_format(form):
    """Negative control: the same kernel in float64, rounded at the end only, does not give the reference's bits."""
    kind, h = TYPES[form], 1 / 32
    rng = np.random.Generator(np.random.PCG64DXSM([7, 32]))
    increments = rng.standard_normal((32, PATHS)) * np.sqrt(h)
    module = copy_module(compile(KERNELS, FILE, "exec"), "kernel", None)
    late = module.euler(increments.astype(kind).astype(np.float64), h).astype(kind)
    assert not np.array_equal(late, euler(increments.astype(kind), h, kind))


STATEMENTS = (
    "{t} = {a} {o} {b}",
    "{t} = {a} {o} {k}",
    "{t} = {k} {o} {a}",
    "{t} = {a} {o} {k} {p} {b}",
    "{t} = np.sqrt(abs({a}))",
    "{t} = np.maximum({a}, {k})",
    "{t} = np.where({a} > {b}, {a}, {b} {o} {k})",
    "{t} = {a} {o} {b}[{i}]",
    "{t} = {a}[{i}] {o} {b}",
    "{t} = {a}[::-1] {o} {b}",
    "{t} = np.concatenate([{a}[:3], {b}[3:]])",
    "{t} = np.stack([{a}, {b}], axis=1)[:, 0] {o} {k}",
    "{t} = -{a} {o} {b}.copy()",
    "{t} = {a}.copy(); {t} {o}= {b}",
    "{t} = {a}.copy(); {t}[1:4] {o}= {k}",
    "{t} = {a}.copy(); {t}[{a} > {b}] = {k}",
    "{t} = {a}.copy(); {t}[{i}] = {b}[{j}] {o} {k}",
    "{t} = np.multiply({a}, {k}); np.add({t}, {b}, out={t})",
    "{t} = {a} * ({b} > {a}) {o} {k}",
    "{t} = {a} + ({b} > {k}) * {k}",
)


def program(rng, constant):
    """A random straight-line program over x, y and z; `constant` writes a constant down."""
    lines = ["def kernel(x, y, z):"]
    for _ in range(14):
        words = {name: rng.choice(list("xyz")) for name in "tab"}
        words |= {name: rng.choice(list("+-*/")) for name in "op"}
        words |= {name: int(rng.integers(5)) for name in "ij"}
        number = float(np.round(rng.normal(), 2))
        lines.append("    " + STATEMENTS[rng.integers(len(STATEMENTS))].format(**words, k=f"({constant(number)})"))
    return "import numpy as np\n" + "\n".join(lines) + "\n    return x, y, z\n"


@pytest.mark.parametrize("form", TYPES)
def test_random_programs_give_the_bits_of_the_types_own_arithmetic(form):
    """120 programs of operators, views, masks, stores and selections agree with the type's own arithmetic."""
    kind = TYPES[form]
    finite = 0
    for seed in range(120):
        draws = np.random.Generator(np.random.PCG64DXSM([11, seed])).standard_normal((3, 5))
        texts = [program(np.random.Generator(np.random.PCG64DXSM([12, seed])), c) for c in (repr, "kind({!r})".format)]
        setting = new_setting(arithmetic_named(form))
        emulated = copy_module(compile(texts[0], FILE, "exec"), "kernel", setting)
        reference = copy_module(compile(texts[1], FILE, "exec"), "kernel", None)
        reference.kind = kind
        with np.errstate(all="ignore"):
            ours = emulated.kernel(*(owned(row, setting) for row in draws))
            theirs = reference.kernel(*draws.astype(kind))
        assert setting.faults == []
        for mine, other in zip(ours, theirs, strict=True):
            assert other.dtype == kind
            assert np.array_equal(mine._carrier.astype(float), other.astype(float), equal_nan=True), texts[0]
            finite += int(np.isfinite(other.astype(float)).sum())
    assert finite > 120 * 15 // 2  # most programs did not end in infinities
