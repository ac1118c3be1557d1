"""False alarms: gates of the unchanged reserve example, each with a seed of its own.

Run as a program it writes reports/gate_false_alarms.md: `python tests/studies/gate_false_alarms.py KEPT [GATES]`. The
ladder ends at level 3, so that a gate takes less than a second, all in one process. What is done stands in the file
KEPT, one line a gate, and is not done again: the same command goes on where it was stopped.

What is asked: a gate is designed to fail for an unchanged kernel at most once in 10,000, so that of 1,000 at most 1 may
fail; and at most 10 may be inconclusive.
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

GATES, FAILING, INCONCLUSIVE = 1000, 1, 10
FIRST = 1000  # the first seed


def gates(audit: Path, seeds: range, kept: Path) -> list[dict[str, object]]:
    """Hold the gates that are not kept yet, and return what came of all of these seeds."""
    lines = kept.read_text(encoding="utf-8").splitlines() if kept.exists() else []
    known = {one["seed"]: one for one in map(json.loads, lines)}
    with kept.open("a", encoding="utf-8") as file:
        for seed in seeds:
            if seed in known:
                continue
            entry = cases.gated(audit, seed=seed)
            not_held = [[one.state, one.check, one.message] for one in entry.findings if one.state != "holds"]
            twice = sum(one.stages > 1 for one in entry.findings)
            known[seed] = {
                "seed": seed,
                "verdict": entry.verdict,
                "paths": max(entry.paths),
                "measured twice": twice,
                "not held": not_held,
            }
            file.write(json.dumps(known[seed]) + "\n")
            file.flush()
    return [known[seed] for seed in seeds]


def main() -> int:
    """Write the report, and return 1 where more gates fail, or are inconclusive, than may."""
    kept, number = Path(sys.argv[1]), int(sys.argv[2]) if len(sys.argv) > 2 else GATES
    with tempfile.TemporaryDirectory() as folder:
        found = gates(cases.prepared("reserve", Path(folder)), range(FIRST, FIRST + number), kept)
    verdicts = Counter(str(one["verdict"]) for one in found)
    twice = sum(bool(one["measured twice"]) for one in found)
    head = (__doc__ or "").strip().split("\n\n")
    kept_in = verdicts["fail"] <= FAILING and verdicts["inconclusive"] <= INCONCLUSIVE
    lines = ["# False alarms of the gate", "", head[0], "", head[1], "", head[2], ""]
    lines += [f"{number:,} gates, seeds {FIRST} to {FIRST + number - 1}.", ""]
    lines += ["| verdict | gates |", "|---|---|"]
    lines += [f"| {verdict} | {verdicts[verdict]} |" for verdict in ("pass", "fail", "inconclusive")]
    lines += ["", f"In {twice} of them a claim failed at the first stage and was measured again."]
    paths = Counter(int(str(one["paths"])) for one in found)
    lines += ["Most paths of a level: " + ", ".join(f"{size:,} in {paths[size]}" for size in sorted(paths)) + ".", ""]
    lines += [f"- seed {one['seed']}: {one['not held']}" for one in found if one["verdict"] != "pass"]
    lines += ["All that is asked is so." if kept_in else "More than may."]
    (ROOT / "reports" / "gate_false_alarms.md").write_text("\n".join(lines) + "\n", encoding="utf-8")
    return 0 if kept_in else 1


if __name__ == "__main__":
    sys.exit(main())
