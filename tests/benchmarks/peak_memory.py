"""Peak memory of an audit by its number of paths, each in a process of its own; as a program it runs one such audit."""

from __future__ import annotations

import os
import resource
import subprocess
import sys
from pathlib import Path

from alternating import PINNED, ratios
from benchmark_figures import Section, at_most, figure_of
from benchmark_sizes import Size

__all__ = ["peak_memory"]

FINEST = 2
ASKED = 500.0  # MB


def peak_memory(size: Size) -> Section:
    """Return the peaks of the audits in MB (10^6 bytes), and that of the larger over that of the smaller."""
    few, many = size.memory_paths
    peaks: dict[int, list[float]] = {few: [], many: []}
    for _ in range(size.slow_rounds):
        for paths, found in peaks.items():
            found.append(_measured(paths))
    section = Section()
    values = ratios(peaks[many], peaks[few])
    section.figures.append(figure_of(values, f"peak of {many:,} paths a level", f"peak of {few:,}"))
    for paths, found in peaks.items():
        what = f"peak of {paths:,} paths a level"
        section.figures.append(figure_of(found, what, "", unit="MB", asked=at_most(ASKED)))
    section.notes.append(f"one factor, levels 0 to {FINEST}, default formats and block")
    return section


def _measured(paths: int) -> float:
    command = [sys.executable, __file__, str(paths)]
    done = subprocess.run(command, env={**os.environ, **PINNED}, stdout=subprocess.PIPE, text=True, check=True)
    return float(done.stdout)


def _peak() -> float:
    """Return the peak of this process in MB.

    ru_maxrss of a started process begins at the peak of the one that started it, where Linux keeps its own figure.
    """
    status = Path("/proc/self/status")
    if status.exists():
        (kilobytes,) = (line.split()[1] for line in status.read_text().splitlines() if line.startswith("VmHWM"))
        return int(kilobytes) * 1024 / 1e6
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak * (1 if sys.platform == "darwin" else 1024) / 1e6


if __name__ == "__main__":
    from threadpoolctl import threadpool_limits
    from timed_kernels import KERNELS
    from whole_audit import audit_tables

    import narrowgauge

    with threadpool_limits(limits=1):
        narrowgauge.audit(audit_tables(KERNELS["one factor"], FINEST, int(sys.argv[1])), quiet=True)
    print(_peak())
