"""Precision policies in a test suite, for pytest: a marker and a fixture that hold the gate of an audit file.

    @pytest.mark.precision_policy("audits/reserve.toml")
    def test_the_reserve_option_keeps_its_policy():
        pass

The gate is held before the body of the test runs. The fixture `narrowgauge_gate` is a function that does the same,
`narrowgauge_gate(audit, seed=None, workers=2)`, and returns the verdict with its findings where the gate passes. A path
is relative to the folder of the test's own file. A test fails, with the table that the command `narrowgauge gate`
prints, where the gate fails, and where it is inconclusive: what nobody could decide is no pass.

pytest loads this module wherever narrowgauge is installed, so that nothing but pytest is imported until then.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

import pytest

if TYPE_CHECKING:
    from narrowgauge.record.gate import GateEntry

__all__ = ["narrowgauge_gate", "pytest_configure", "pytest_runtest_call"]

_MARKER = "precision_policy"


def pytest_configure(config: pytest.Config) -> None:
    """Tell pytest of the marker."""
    config.addinivalue_line(
        "markers", f"{_MARKER}(audit, seed=None, workers=2): fail unless the policy of this audit file holds"
    )


@pytest.hookimpl(tryfirst=True)
def pytest_runtest_call(item: pytest.Item) -> None:
    """Hold the gates that a test is marked with, whatever kind of test it is; the first that does not pass fails it."""
    for marker in item.iter_markers(_MARKER):
        try:
            # Bound by name, so that a misspelt argument is an error here and not a gate of other draws.
            audit, seed, workers = _arguments(*marker.args, **marker.kwargs)
        except TypeError as problem:
            pytest.fail(f"{_MARKER}: {problem}; accepted: {_MARKER}(audit, seed=None, workers=2)", pytrace=False)
        _hold(item.path.parent, audit, seed, workers)


@pytest.fixture
def narrowgauge_gate(request: pytest.FixtureRequest) -> Callable[..., GateEntry]:
    """Return the function that holds the gate of an audit file, and fails the test unless it passes."""
    folder = request.path.parent

    def gate(audit: str | Path, seed: int | None = None, workers: int = 2) -> GateEntry:
        return _hold(folder, audit, seed, workers)

    return gate


def _arguments(audit: str | Path, seed: int | None = None, workers: int = 2) -> tuple[str | Path, int | None, int]:
    return audit, seed, workers


def _hold(folder: Path, audit: str | Path, seed: int | None, workers: int) -> GateEntry:
    """Return the verdict where it is a pass; else the test fails with the table, or with what is wrong with a file."""
    __tracebackhide__ = True
    from narrowgauge import __version__, api
    from narrowgauge.errors import NarrowgaugeError
    from narrowgauge.record.gate import report_of
    from narrowgauge.report.gate import gate_lines

    try:
        entry = api.gate(folder / audit, seed=seed, workers=workers)
    except NarrowgaugeError as problem:
        pytest.fail(f"the gate cannot be held: {problem}", pytrace=False)
    if entry.verdict != "pass":
        said = {
            "fail": "the kernel no longer supports its precision policy",
            "inconclusive": "whether the kernel still supports its precision policy is undecided, which is no pass",
        }[entry.verdict]
        table = gate_lines(report_of([entry], f"narrowgauge {__version__}"))
        pytest.fail(f"{said}\n\n{table}", pytrace=False)
    return entry
