"""Simulators of public packages run as they are: plain NumPy's bits in float64, and nothing unrounded in 16 bits."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest
from idiom_runs import Count
from public_adapters import ADAPTERS, Adapter

from narrowgauge.api import try_out
from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.draws.streams import Purpose, UniformStream
from narrowgauge.draws.tape import Tape
from narrowgauge.errors import EscapeError, KernelError, RefusedError
from narrowgauge.kernel.auditfile import AuditFile, audit_file_from
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.calls import Caller

LEVEL, PATHS = 2, 48  # four steps; few paths, since some of these run one path a call
RUN = {name: one for name, one in ADAPTERS.items() if not one.refused}
REFUSED = {name: one for name, one in ADAPTERS.items() if one.refused}


def file_of(folder: Path, adapter: Adapter, modules: list[str] | None = None) -> AuditFile:
    """The audit file of an adapter, written into a folder, that lists its package."""
    path = folder / "adapter.py"
    path.write_text(adapter.text, encoding="utf-8")
    listed = [adapter.package] if modules is None else modules
    return audit_file_from(
        {
            "kernel": {"run": f"{path}:value", "takes": "rng", "modules": listed},
            "ladder": {"horizon": 1.0, "finest": LEVEL},
        }
    )


def tape(seed: int = 1) -> Tape:
    """The tape of one block."""
    return Tape(UniformStream(seed, Purpose.TRIAL, LEVEL, 0), paths=PATHS, steps=2**LEVEL)


class Runs:
    """An adapter run in plain NumPy first, which writes the tape, then in one arithmetic after the other."""

    def __init__(self, file: AuditFile) -> None:
        self.file, self.kernel, self.tape = file, find_kernel(file), tape()
        self.plain = Caller(file, self.kernel, None).fine(self.tape, LEVEL)["value"]

    def value(self, form: str, count: Count | None = None) -> np.ndarray:
        """What it returns in a format."""
        return Caller(self.file, self.kernel, arithmetic_named(form), count).fine(self.tape, LEVEL)["value"]


@pytest.mark.parametrize("adapter", RUN.values(), ids=list(RUN))
def test_a_package_runs_in_every_format(tmp_path: Path, adapter: Adapter) -> None:
    """float64 gives plain NumPy's bits, twice; 16 bits give values of the format, others, by rounded operations only.

    The error of a format is at most the sum of the errors of the operations of one path: with at most 1,000 of them in
    four steps, values of order 1 and no cancellation below it, it stays below 1,000 unit roundoffs. float16 has 11
    significant bits and bfloat16 has 8, of which the latter's bound would say nothing and is left out.
    """
    runs = Runs(file_of(tmp_path, adapter))
    assert runs.value("float64").tobytes() == runs.plain.tobytes()
    assert runs.value("float64").tobytes() == runs.plain.tobytes()
    assert np.unique(runs.plain).size > PATHS // 4
    for form in ("float16", "bfloat16"):
        count = Count()
        rounded = runs.value(form, count)
        assert arithmetic_named(form).holds(rounded.astype(arithmetic_named(form).format.carrier))
        assert np.isfinite(rounded).all()
        assert rounded.tobytes() != runs.plain.tobytes()
        routes = {route for _, route in count.operations}
        assert routes & {"rounded", "accumulated"}
        assert all(place is not None for place, _ in count.operations)
        if form == "float16":
            assert np.abs(rounded - runs.plain).max() < 1000 * 2.0**-11


@pytest.mark.parametrize("adapter", REFUSED.values(), ids=list(REFUSED))
@pytest.mark.parametrize("form", ["float64", "float16", "bfloat16"])
def test_what_cannot_be_rounded_is_refused_with_its_line(tmp_path: Path, adapter: Adapter, form: str) -> None:
    """The refusal names the package's own file and line, and the reason."""
    runs = Runs(file_of(tmp_path, adapter))
    with pytest.raises(RefusedError, match=adapter.refused):
        runs.value(form)


@pytest.mark.parametrize("name", ["pyesg, Heston", "fbm, factor", "FinStoch, jumps"])
def test_a_package_that_is_not_listed_is_found_out(tmp_path: Path, name: str) -> None:
    """Negative control: a package that is not listed draws from NumPy's own generators, which are on no tape."""
    with pytest.raises(KernelError, match=r"the kernel draws no random numbers from rng or numpy\.random; accepted:"):
        try_out(file_of(tmp_path, RUN[name], modules=[]))


@pytest.mark.parametrize("name", ["pyesg, Heston", "asian_option_pricer, bridge"])
def test_a_package_is_left_as_it_was(tmp_path: Path, name: str) -> None:
    """The package that Python has imported keeps its modules, by identity, and its NumPy."""
    __import__(RUN[name].package)
    before = dict(sys.modules)
    names = {key: dict(vars(module)) for key, module in before.items() if key.startswith(RUN[name].package)}
    Runs(file_of(tmp_path, RUN[name])).value("bfloat16")
    for key, held in names.items():
        assert sys.modules[key] is before[key]
        now = vars(sys.modules[key])
        assert now.keys() == held.keys()
        assert all(now[word] is held[word] for word in held)


def test_a_line_of_the_adapter_that_lets_the_state_escape(tmp_path: Path) -> None:
    """Negative control: the same adapter with its result taken out by float() is refused at its line."""
    adapter = RUN["fbm, factor"]
    text = adapter.text.replace("made.fbm()[-1]", "float(made.fbm()[-1])")
    runs = Runs(file_of(tmp_path, Adapter(adapter.package, text)))
    with pytest.raises(EscapeError, match=r"adapter\.py:7: float\(\), or a store into a plain array, takes a"):
        runs.value("float16")
