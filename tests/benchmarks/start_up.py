"""What the command's `--help` takes beside a bare interpreter: processes started in turn."""

from __future__ import annotations

import subprocess
import sys
from functools import partial

from alternating import alternated, ratios
from benchmark_figures import Section, at_most, figure_of
from benchmark_sizes import Size

__all__ = ["start_up"]

HELP, BARE = "narrowgauge --help", "python -c pass"
ASKED = 0.1  # seconds


def start_up(size: Size) -> Section:
    """Return the ratio, and what is added in seconds."""
    commands = {HELP: ["-m", "narrowgauge", "--help"], BARE: ["-c", "pass"]}
    tasks = {name: partial(_run, [sys.executable, *command]) for name, command in commands.items()}
    seconds = alternated(tasks, size.rounds)
    added = [a - b for a, b in zip(seconds[HELP], seconds[BARE], strict=True)]
    return Section(
        figures=[
            figure_of(ratios(seconds[HELP], seconds[BARE]), HELP, BARE),
            figure_of(added, f"{HELP}, added", BARE, unit="s", asked=at_most(ASKED)),
        ]
    )


def _run(command: list[str]) -> None:
    subprocess.run(command, stdout=subprocess.DEVNULL, check=True)
