"""Power: what somebody might do to a kernel, and which check of the gate sees it.

Run as a program it writes reports/gate_power.md: `python tests/studies/gate_power.py KEPT [RUNS]`. Each mistake is made
in a copy of the reserve or membrane example, whose policy was drawn up before, on a ladder with fewer levels, and gated
with 30 seeds, all in one process. What is done stands in the file KEPT, one line a gate, and is not done again.

What is asked: every gate of every mistake fails. The margin is how far the figure of a claim lies beyond its limit, in
halves of its interval (at 1 in 1,000 or less, so that a half is 3.3 standard errors or more). Where it is above 2.2 for
a claim, the predicted power of that claim alone, over both stages, is above .9999: its figure would have to come out 4
standard errors nearer. Facts have no margin: they are so in every run.
"""

from __future__ import annotations

import json
import sys
import tempfile
from collections import Counter
from pathlib import Path

ROOT = Path(__file__).parents[2]
sys.path.insert(0, str(ROOT / "tests" / "policy"))

import gate_cases as cases  # noqa: E402 (where it lies was only now said)

from narrowgauge.record.gate import Finding, GateEntry  # noqa: E402

RUNS = 30
FIRST = 5000  # the first seed
POWERFUL = 2.2  # halves of an interval: 3.3 standard errors to fail, and 4 more for a run in 20,000, at each stage


def margin(finding: Finding) -> float:
    """Return how far the figure of a claim that failed lies beyond its limit, in halves of its interval."""
    if None in (finding.estimate, finding.low, finding.high, finding.limit):
        return 0.0
    at_least = finding.high < finding.limit
    half = finding.high - finding.estimate if at_least else finding.estimate - finding.low
    off = finding.limit - finding.estimate if at_least else finding.estimate - finding.limit
    return off / half if half > 0 else float("inf")


def caught(entry: GateEntry) -> dict[str, float]:
    """Return the checks that failed, each with its largest margin; facts have -1."""
    found: dict[str, float] = {}
    for one in entry.findings:
        if one.state == "fails":
            size = -1.0 if one.estimate is None else min(margin(one), 999.0)
            found[one.check] = max(found.get(one.check, -1.0), size)
    return found


def gates(folder: Path, kept: Path, runs: int) -> dict[str, list[dict[str, object]]]:
    """Hold the gates that are not kept yet, and return what came of all, by mistake."""
    lines = kept.read_text(encoding="utf-8").splitlines() if kept.exists() else []
    known = {(one["mistake"], one["seed"]): one for one in map(json.loads, lines)}
    audits: dict[str, Path] = {}
    found: dict[str, list[dict[str, object]]] = {}
    with kept.open("a", encoding="utf-8") as file:
        for name, mistake in cases.MISTAKES.items():
            seeds = range(FIRST, FIRST + runs)
            if any((name, seed) not in known for seed in seeds):
                if mistake.base not in audits:
                    audits[mistake.base] = cases.prepared(mistake.base, folder / mistake.base)
                audit = cases.with_mistake(audits[mistake.base], mistake, folder / f"mistake {len(found)}")
                for seed in seeds:
                    if (name, seed) in known:
                        continue
                    entry = cases.gated(audit, seed=seed)
                    known[name, seed] = {
                        "mistake": name,
                        "seed": seed,
                        "verdict": entry.verdict,
                        "caught": caught(entry),
                    }
                    file.write(json.dumps(known[name, seed]) + "\n")
                    file.flush()
            found[name] = [known[name, seed] for seed in seeds]
    return found


def row(name: str, runs: list[dict[str, object]]) -> str:
    """Return one line of the table: by check, in how many runs it saw the mistake."""
    counts: Counter[str] = Counter()
    least: dict[str, float] = {}
    for one in runs:
        for check, size in dict(one["caught"]).items():  # type: ignore[call-overload]
            counts[check] += 1
            least[check] = min(least.get(check, 1e3), size)
    always = {check: least[check] for check in counts if counts[check] == len(runs)}
    best = max(always.values(), default=0.0)
    margin_text = "a fact" if any(size < 0 for size in always.values()) else f"{best:.1f}"
    failing = sum(one["verdict"] == "fail" for one in runs)
    checks = ", ".join(f"{check} {count}" for check, count in counts.most_common())
    return f"| {name} | {failing} of {len(runs)} | {checks} | {margin_text} |"


def main() -> int:
    """Write the report, and return 1 where a gate did not fail."""
    kept, number = Path(sys.argv[1]), int(sys.argv[2]) if len(sys.argv) > 2 else RUNS
    with tempfile.TemporaryDirectory() as folder:
        found = gates(Path(folder), kept, number)
    head = (__doc__ or "").strip().split("\n\n")
    all_caught = all(one["verdict"] == "fail" for runs in found.values() for one in runs)
    lines = ["# Power of the gate", "", head[0], "", head[1], "", head[2], ""]
    lines += [f"{number} gates of each mistake. Beside each check stands in how many of them it saw the mistake.", ""]
    lines += ["| mistake | gates that fail | seen by | least margin |", "|---|---|---|---|"]
    lines += [row(name, runs) for name, runs in found.items()]
    lines += ["", "Every gate fails." if all_caught else "Not every gate fails."]
    (ROOT / "reports" / "gate_power.md").write_text("\n".join(lines) + "\n", encoding="utf-8")
    return 0 if all_caught else 1


if __name__ == "__main__":
    sys.exit(main())
