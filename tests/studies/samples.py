"""Sample reports: the audits of two examples with their pages and policies.

Run as a program (python tests/studies/samples.py) it writes reports/samples/reserve and reports/samples/membrane:
report.html, audit.json, policy.json, and the audit file, which is the example's with the tables below at its end. Two
runs differ in where and when they were made, and in nothing else. It takes some minutes.
"""

from __future__ import annotations

import shutil
import sys
import tempfile
from pathlib import Path

from narrowgauge.cli import main as narrowgauge

ROOT = Path(__file__).parents[2]
FOLDER = ROOT / "reports" / "samples"
KEPT = ("report.html", "audit.json", "policy.json")
LARGEST = 1_000_000  # bytes of a file, for a repository

_LINES = """
[lines]                       # which lines cost the accuracy
what_ifs = true
"""
ADDED = {
    "reserve": f"""
[domain]                      # does the verdict hold for other parameters?
parameters.price_volatility = {{ low = 0.1, high = 0.8 }}
parameters.inflow_start = {{ low = 0.3, high = 3.0, scale = "log" }}
scenarios = 32
{_LINES}""",
    "membrane": _LINES,
}


def sample(example: str, added: str, folder: Path) -> None:
    """Audit an example with more tables in its audit file, and leave its page, record, policy and audit file there.

    Raises RuntimeError where a command fails, or a file has grown too large.
    """
    with tempfile.TemporaryDirectory() as scratch:
        own = Path(scratch) / example
        shutil.copytree(ROOT / "examples" / example, own, ignore=shutil.ignore_patterns("audits", "__pycache__"))
        file, results = own / f"{example}.toml", own / "results"
        file.write_text(file.read_text(encoding="utf-8") + added, encoding="utf-8")
        for command in (["audit", str(file), "--out", str(results)], ["policy", str(results)]):
            if narrowgauge(command) != 0:
                raise RuntimeError(f"narrowgauge {command[0]} of {example} failed")
        folder.mkdir(parents=True, exist_ok=True)
        for found in (file, *(results / name for name in KEPT)):
            if found.stat().st_size > LARGEST:
                raise RuntimeError(f"{found.name} of {example} is larger than {LARGEST:,} bytes")
            shutil.copyfile(found, folder / found.name)


def main() -> int:
    """Write all samples and return the exit code."""
    for example, added in ADDED.items():
        sample(example, added, FOLDER / example)
    return 0


if __name__ == "__main__":
    sys.exit(main())
