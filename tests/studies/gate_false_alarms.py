"""False alarms: gates of unchanged kernels, each with a seed of its own.

Run as a program it writes reports/gate_false_alarms.md: `python tests/studies/gate_false_alarms.py KEPT [GATES GATES
GATES]`. The reserve example is gated as it is, by the policy beside the examples; once more on a ladder that ends at
level 3 and with a looser target: that policy takes float16 alone on two levels, so that the bias of float16 is judged,
too; and on one that ends at level 2 with a policy that claims a box of two parameters, whose four corners are tried.
Lost additions and subnormals are counted, as with `[gate] watch = true`: more claims than a gate has otherwise. A gate
takes about a second, all in one process. What is done stands in the file KEPT, one line a gate, and is not done again:
the same command goes on where it was stopped.

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
EXAMPLE = ROOT / "examples" / "reserve" / "reserve.toml"
sys.path.insert(0, str(ROOT / "tests" / "policy"))

import gate_cases as cases  # noqa: E402 (where it lies was only now said)

GATES, FAILING, INCONCLUSIVE = 1000, 1, 10
FIRST = 1000  # the first seed


def gates(name: str, audit: Path, seeds: range, kept: Path) -> list[dict[str, object]]:
    """Hold the gates of an audit file that are not kept yet, and return what came of all of these seeds."""
    lines = kept.read_text(encoding="utf-8").splitlines() if kept.exists() else []
    known = {(one["audit"], one["seed"]): one for one in map(json.loads, lines)}
    with kept.open("a", encoding="utf-8") as file:
        for seed in seeds:
            if (name, seed) in known:
                continue
            entry = cases.gated(audit, seed=seed, watch=True)
            known[name, seed] = {
                "audit": name,
                "seed": seed,
                "verdict": entry.verdict,
                "paths": max(entry.paths),
                "measured twice": sum(one.stages > 1 for one in entry.findings),
                "claims": sum(one.estimate is not None for one in entry.findings),
                "not held": [[one.state, one.check, one.message] for one in entry.findings if one.state != "holds"],
            }
            file.write(json.dumps(known[name, seed]) + "\n")
            file.flush()
    return [known[name, seed] for seed in seeds]


def may(found: list[dict[str, object]]) -> bool:
    """Return whether no more gates fail, and are inconclusive, than may."""
    verdicts = Counter(one["verdict"] for one in found)
    return verdicts["fail"] <= FAILING and verdicts["inconclusive"] <= INCONCLUSIVE


def asked_for(words: list[str]) -> tuple[Path, list[int]]:
    """Return the file KEPT and how many gates of each audit are held; SystemExit for anything but one or four words."""
    if len(words) not in (1, 4) or not all(one.isdecimal() for one in words[1:]):
        raise SystemExit("accepted: KEPT, or KEPT GATES GATES GATES, three whole numbers")
    return Path(words[0]), [int(one) for one in words[1:]] or [GATES, GATES, GATES]


def main() -> int:
    """Write the report, and return 1 where more gates fail, or are inconclusive, than may."""
    kept, numbers = asked_for(sys.argv[1:])
    with tempfile.TemporaryDirectory() as folder:
        audits = {
            "to level 3": cases.prepared("reserve", Path(folder, "short")),
            "as it is": EXAMPLE,
            "in a box": cases.prepared("boxed", Path(folder, "boxed")),
        }
        found = {
            name: gates(name, audit, range(FIRST, FIRST + number), kept)
            for (name, audit), number in zip(audits.items(), numbers, strict=True)
        }
    head = (__doc__ or "").strip().split("\n\n")
    lines = ["# False alarms of the gate", "", head[0], "", head[1], "", head[2], ""]
    lines += [f"Seeds from {FIRST} on. Measured twice: gates in which a claim failed at the first stage.", ""]
    lines += [
        "| reserve example | gates | claims | pass | fail | inconclusive | measured twice | most paths of a level |"
    ]
    lines += ["|---" * 8 + "|"]
    for name, runs in found.items():
        verdicts, paths = Counter(one["verdict"] for one in runs), Counter(int(str(one["paths"])) for one in runs)
        cells = [len(runs), runs[0]["claims"], *(verdicts[one] for one in ("pass", "fail", "inconclusive"))]
        cells += [sum(bool(one["measured twice"]) for one in runs)]
        cells += [", ".join(f"{size:,} in {paths[size]}" for size in sorted(paths))]
        lines += [f"| {name} | {' | '.join(map(str, cells))} |"]
    others = [(name, one) for name, runs in found.items() for one in runs if one["verdict"] != "pass"]
    lines += ["", *(f"- {name}, seed {one['seed']}: {one['not held']}" for name, one in others)]
    asked = all(may(runs) for runs in found.values())
    lines += ["All that is asked is so." if asked else "More than may."]
    (ROOT / "reports" / "gate_false_alarms.md").write_text("\n".join(lines) + "\n", encoding="utf-8")
    return 0 if asked else 1


if __name__ == "__main__":
    sys.exit(main())
