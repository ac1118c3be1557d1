"""The benchmarks: `python tests/benchmarks/run.py [names] [--quick] [--out FOLDER]`.

Writes benchmarks.json and benchmarks.md into reports/. With names only these are measured, and the others stay as they
are in the file, if it was made with the same versions on the same class of machine. `--quick` measures next to nothing,
to see that all of it runs.
"""

from __future__ import annotations

import argparse
import json
import os
import sys
from collections.abc import Callable
from importlib import metadata
from pathlib import Path
from typing import Any

from alternating import PINNED
from benchmark_figures import Section
from benchmark_page import TITLES, page
from benchmark_sizes import SIZES, Size
from kernel_alone import kernel_alone, kernel_alone_uncompiled
from peak_memory import peak_memory
from policy_questions import policy_questions
from several_workers import several_workers
from start_up import start_up
from threadpoolctl import threadpool_limits
from watched_run import watched_run
from whole_audit import whole_audit

from narrowgauge.measure.provenance import provenance

BENCHMARKS: dict[str, Callable[[Size], Section]] = {
    "kernel": kernel_alone,
    "uncompiled": kernel_alone_uncompiled,
    "audit": whole_audit,
    "watch": watched_run,
    "workers": several_workers,
    "memory": peak_memory,
    "start": start_up,
    "policy": policy_questions,
}
REPORTS = Path(__file__).parents[2] / "reports"


def main(arguments: list[str]) -> None:
    """Measure, and write both files after every benchmark."""
    parser = argparse.ArgumentParser(description="Measures narrowgauge against plain NumPy.")
    parser.add_argument(
        "names", nargs="*", metavar="name", help=f"one of {', '.join(BENCHMARKS)}; all if none is given"
    )
    parser.add_argument("--quick", action="store_true", help="next to nothing of each; needs --out")
    parser.add_argument("--out", type=Path, help="folder of the two files (default: reports)")
    given = parser.parse_args(arguments)
    unknown = [name for name in given.names if name not in BENCHMARKS]
    if unknown:
        parser.error(f"{unknown[0]} is no benchmark; accepted: {', '.join(BENCHMARKS)}")
    if given.quick and given.out is None:
        parser.error("--quick needs --out: its figures mean nothing")
    folder = given.out or REPORTS
    folder.mkdir(parents=True, exist_ok=True)
    document = _kept(folder / "benchmarks.json")
    os.environ.update(PINNED)  # for the processes that are started from here
    for name in given.names or BENCHMARKS:
        print(f"{TITLES[name][0]} ...", flush=True)
        with threadpool_limits(limits=1):
            section = BENCHMARKS[name](SIZES["quick" if given.quick else "full"])
        document["benchmarks"][name] = section.document()
        text = json.dumps(document, indent=1, allow_nan=False) + "\n"
        (folder / "benchmarks.json").write_text(text, encoding="utf-8")
        (folder / "benchmarks.md").write_text(page(document), encoding="utf-8")


def _made_with() -> dict[str, Any]:
    """Return the class of machine and the versions, without the time of day."""
    of_one_run = ("finished", "seconds", "engine", "resumed_blocks", "workers")
    found: dict[str, Any] = {key: value for key, value in provenance(0.0, "", (), 0).items() if key not in of_one_run}
    further = {name: metadata.version(name) for name in ("numba", "distributed") if _installed(name)}
    cache = Path("/sys/devices/system/cpu/cpu0/cache/index2/size")
    return {
        **found,
        "packages": {**found["packages"], **further},
        "cache": cache.read_text().strip() if cache.exists() else "unknown",
    }


def _installed(name: str) -> bool:
    return any(metadata.distributions(name=name))


def _kept(path: Path) -> dict[str, Any]:
    """Return the document that is there, if it was made alike, or an empty one."""
    made_with = _made_with()
    if path.exists():
        found: dict[str, Any] = json.loads(path.read_text(encoding="utf-8"))
        if found["made_with"] == made_with:
            return found
        print(f"{path} was made with other versions or elsewhere, and begins anew")
    return {"made_with": made_with, "benchmarks": {}}


if __name__ == "__main__":
    main(sys.argv[1:])
