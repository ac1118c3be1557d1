"""Tapes, and runs of them, for the tests beside this file."""

from __future__ import annotations

from narrowgauge.draws.layout import Layout, Request
from narrowgauge.draws.streams import Purpose, UniformStream
from narrowgauge.draws.tape import Tape

PER_STEP = Layout(before=0, period=1, after=0, axes=())


def request(name, size, *parameters):
    """A request whose parameters are all plain."""
    return Request(name=name, size=size, parameters=parameters)


def tape_of(steps, m=2, layout=PER_STEP, seed=3):
    """A tape of a fine run of so many steps."""
    stream = UniformStream(seed, Purpose.TRIAL, 0, 0)
    return Tape(stream, paths=0, steps=steps, refinement=m, layout=layout)


def played(arm, fine, coarse=()):
    """What the fine and the coarse run of an arm get for their requests."""
    reader = arm.fine()
    first = [reader.draw(one, one.parameters) for one in fine]
    reader.finish()
    if not coarse:
        return first, []
    reader = arm.coarse()
    second = [reader.draw(one, one.parameters) for one in coarse]
    reader.finish()
    return first, second
