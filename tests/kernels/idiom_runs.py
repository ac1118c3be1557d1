"""Kernels as files that draw for themselves, run on one tape in plain NumPy and in a format; a rounding of its own."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.copies import new_setting
from narrowgauge.dispatch.feed import Feed
from narrowgauge.dispatch.importing import Copies
from narrowgauge.dispatch.modules import Sources
from narrowgauge.dispatch.randoms import generator
from narrowgauge.dispatch.setting import Observer, Place, Route, Setting, Way, Wrapped
from narrowgauge.draws.streams import Purpose, UniformStream
from narrowgauge.draws.tape import ArmDraws, Tape

STEPS, PATHS, H = 4, 48, 0.25
# Significant bits, and the exponent of the smallest positive number (IEEE 754-2008 and the definition of bfloat16).
FORMATS = {"float16": (11, -24), "bfloat16": (8, -133)}


def rounding(form: str) -> Any:
    """Rounding of float64 values to a format, to nearest and even, by powers of two alone; no overflow is met here."""
    if form == "float64":
        return lambda value: np.asarray(value, np.float64)
    digits, smallest = FORMATS[form]

    def rounded(value: Any) -> Any:
        wide = np.asarray(value, np.float64)
        quantum = np.maximum(np.frexp(wide)[1] - digits, smallest)
        return np.ldexp(np.rint(np.ldexp(wide, -quantum)), quantum)

    return rounded


class Count:
    """An observer that keeps the places and routes of operations, and the number of decisions."""

    def __init__(self) -> None:
        self.operations: set[tuple[Place | None, str]] = set()
        self.decisions = 0

    def saw(self, setting: Setting, operation: str, route: Route, operands: Sequence[Any], result: Any) -> None:
        """Take note of one operation."""
        self.operations.add((setting.where(), route))

    def met(self, setting: Setting, constant: Any) -> None:
        """Take no note of constants."""

    def decided(self, setting: Setting, answer: bool) -> None:
        """Take note of one decision."""
        self.decisions += 1

    def left(self, setting: Setting, way: Way) -> None:
        """Take no note of what leaves."""


class Bench:
    """A kernel written into a folder, and a tape that its plain run writes and every format reads."""

    def __init__(self, folder: Path, source: str, listed: Mapping[str, str] | None = None) -> None:
        self.folder, self.listed = folder, listed or {}
        for name, text in {"kernel": source, **self.listed}.items():
            (folder / f"{name}.py").write_text(textwrap.dedent(text).lstrip("\n"), encoding="utf-8")
        self.tape = Tape(UniformStream(1, Purpose.TRIAL, 0, 0), paths=PATHS, steps=STEPS)
        self.feed = Feed()

    def run(self, form: str | None, observer: Observer | None = None) -> Any:
        """What `kernel` returns, without its wrapping; the first fault is raised, also one that was swallowed."""
        self.feed = Feed()
        setting = None if form is None else new_setting(arithmetic_named(form), observer, self.feed)
        sources = Sources([self.folder], list(self.listed), ())
        sources.place("kernel", str(self.folder / "kernel.py"))
        made = Copies(setting, sources, self.feed).load("kernel")
        if setting is not None:
            setting.paths = PATHS
        draws = ArmDraws(self.tape, arithmetic_named(form or "float64"))
        try:
            with np.errstate(all="ignore"), self.feed.run(draws.fine()):
                result = made.kernel(generator(self.feed), H)
        finally:  # as an audit does: what the kernel or NumPy made of a fault comes second
            if setting is not None and setting.faults:
                raise setting.faults[0]
        carrier = result._carrier if isinstance(result, Wrapped) else result
        if setting is not None and carrier.dtype.kind == "f":
            assert isinstance(result, Wrapped)
            assert setting.arithmetic.holds(carrier)
        return np.asarray(carrier, np.float64)


def drawn(folder: Path, requests: str) -> Any:
    """What a tape serves to the expression `requests` in plain NumPy."""
    return Bench(folder, f"import numpy as np\ndef kernel(rng, h): return np.array({requests})\n").run(None)
