"""Pairs of branches as source text, run in an emulated arithmetic or as they are, and traced."""

from __future__ import annotations

import textwrap

import numpy as np

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.conduct.firstdifference import first_difference
from narrowgauge.conduct.tracing import Trace
from narrowgauge.conduct.tracingown import run_traced
from narrowgauge.dispatch.array import Array
from narrowgauge.dispatch.copies import PrivateCopy, copy_module, new_setting

STEP = 0.125
MARK = "# here"


def kernel(body, *, before=""):
    """The source of a kernel whose state S starts at 1; `body` is one step, with dw, h and the state."""
    lines = textwrap.indent(textwrap.dedent(body).strip("\n"), " " * 8)
    return (
        "import numpy as np\n\n\ndef kernel(dW, h):\n    S = np.full(dW.shape[-1], 1.0, dW.dtype)\n"
        f"{textwrap.indent(textwrap.dedent(before), '    ')}    for dw in dW:\n{lines}\n    return S\n"
    )


def marked(source):
    """The numbers of the lines of a source that carry the mark."""
    return [number for number, line in enumerate(source.splitlines(), 1) if MARK in line]


def normals(form, *, steps=4, paths=64, seed=1):
    """Normal draws of (steps, paths) rounded to a format, as float64."""
    draws = np.random.default_rng(seed).normal(0.0, 0.3, (steps, paths))
    return arithmetic_named(form).cast(draws).astype(np.float64)


def emulated(source, draws, form, name, kept=None):
    """The trace of a kernel in an emulated arithmetic on draws that are values of its format."""
    trace = Trace(draws.shape[-1], kept)
    setting = new_setting(arithmetic_named(form), trace)
    setting.paths = draws.shape[-1]
    module = copy_module(compile(source, name, "exec", dont_inherit=True), "kernel", setting)
    carrier = draws.astype(setting.arithmetic.format.carrier)
    trace.draws(carrier)
    with np.errstate(all="ignore"):
        result = module.kernel(Array(carrier, setting), STEP)
    assert setting.faults == []
    trace.gave(setting.carrier(result))
    return trace


def own_function(source, name="kernel.py"):
    """The function of a source that is run as it is, as a private copy."""
    return PrivateCopy(copy_module(compile(source, name, "exec", dont_inherit=True), "kernel", None).kernel, None)


def itself(source, draws, form, name, kept=None):
    """The trace of a kernel that rounds for itself, on draws in the format's own type."""
    trace = Trace(draws.shape[-1], kept)
    given = draws if form is None else draws.astype(FORMATS[form].storage)
    trace.gave(run_traced(own_function(source, name), given, STEP, trace=trace))
    return trace


def traces(run, low, correction, form, **draws):
    """The traces of a low and a correction branch on the same draws."""
    given = normals(form, **draws)
    return run(low, given, form, "low.py"), run(correction, given, form, "correction.py")


def located(run, low, correction, form, **draws):
    """Where two branches part on the same draws."""
    return first_difference(*traces(run, low, correction, form, **draws), form=FORMATS[form])


def places(found):
    """File and line of both sides, None for a side that is not there."""
    return [
        None if side is None else (None if side.place is None else (side.place.file, side.place.line))
        for side in (found.low, found.correction)
    ]
