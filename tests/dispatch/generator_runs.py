"""Kernels as source text that draw for themselves, run on a tape in plain NumPy and in an arithmetic."""

from __future__ import annotations

import textwrap

import numpy as np

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.copies import new_setting
from narrowgauge.dispatch.feed import Feed
from narrowgauge.dispatch.importing import Copies
from narrowgauge.dispatch.modules import Sources
from narrowgauge.dispatch.randoms import generator
from narrowgauge.dispatch.setting import Wrapped
from narrowgauge.draws.streams import Purpose, UniformStream
from narrowgauge.draws.tape import ArmDraws, Tape

FILE = "nowhere/kernel.py"
STEPS, PATHS = 4, 512


def tape_for(seed=1, steps=STEPS, paths=PATHS):
    """A tape of one block."""
    return Tape(UniformStream(seed, Purpose.TRIAL, 0, 0), paths=paths, steps=steps)


class Run:
    """A source text executed for one arithmetic, plain NumPy for None, with the feed of its generators."""

    def __init__(self, source, form):
        self.feed = Feed()
        self.form = form
        self.setting = None if form is None else new_setting(arithmetic_named(form), None, self.feed)
        code = compile(textwrap.dedent(source), FILE, "exec", dont_inherit=True)
        self.module = Copies(self.setting, Sources.alone(code, "kernel"), self.feed).load("kernel")

    def __call__(self, tape, *arguments, function="kernel"):
        """Call a function of the module as the tape's next run; what it returned, as it is."""
        draws = ArmDraws(tape, arithmetic_named(self.form or "float64"))
        if self.setting is not None:
            self.setting.faults.clear()
        with self.feed.run(draws.fine()), np.errstate(all="ignore"):
            return getattr(self.module, function)(generator(self.feed), *arguments)


def bare(value):
    """A result without its wrapping."""
    if isinstance(value, (list, tuple)):
        return [bare(item) for item in value]
    return value._carrier if isinstance(value, Wrapped) else value


def drawn(source, form=None, *arguments, tape=None):
    """What `kernel` of a source text returns in one run."""
    return bare(Run(source, form)(tape or tape_for(), *arguments))
