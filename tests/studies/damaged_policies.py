"""Damaged policy files: each is read as a valid policy or refused with a located message, and nothing else happens.

Run as a program it writes reports/damaged_policies.md: policies drawn up from a small audit (as it is, with a split,
with a box of parameters), damaged in their bytes, in their tokens or in their structure, one to three times each. What
is read as a policy must be written and read back the same. What is refused must be a DocumentError: of a text that is
no JSON with line and column, else with a path that leads to a value in the document, or of the document as a whole.
"""

from __future__ import annotations

import json
import random
import re
import sys
import tempfile
from collections import Counter
from collections.abc import Callable
from pathlib import Path
from typing import Any

import msgspec

from narrowgauge.api import run_audit
from narrowgauge.kernel.auditfile import read_audit_file
from narrowgauge.policy.drawup import draw_up, read_audit
from narrowgauge.record.canonical import DocumentError, below
from narrowgauge.record.policy import ParameterPart, policy_text, read_policy, read_policy_text

KERNEL = """
import numpy as np


def value(dW, h, *, rate, volatility):
    x = np.full(dW.shape[1], 1.0)
    for dw in dW:
        x = x + (rate * h * x + volatility * x * dw)
    return x
"""
AUDIT = """
[kernel]
run = "model.py:value"
takes = "increments"
[parameters]
rate = 0.05
volatility = 0.3
[ladder]
horizon = 1.0
finest = 1
[target]
rmse = 0.01
[formats]
narrow = ["float16", "float32"]
[sampling]
block = 4096
paths = 4096
most_paths = 4096
"""
TOKEN = re.compile(r'"(?:[^"\\]|\\.)*"|[-+0-9.eE]+|true|false|null|[\[\]{}:,]|\s+')
ODD = (
    *(
        "NaN",
        "-Infinity",
        "1e999",
        "-1e-999",
        "-0.0",
        "0",
        "1",
        "-1",
        "2.5",
        "9007199254740993",
        "18446744073709551616",
    ),
    *(
        "true",
        "null",
        '""',
        '"\\u0000"',
        '"\\ud800"',
        '"sha256:0"',
        '"float128"',
        "[]",
        "{}",
        "[[[[[[]]]]]]",
        '{"a":1,"a":2}',
    ),
    *("{", "}", "[", "]", ":", ",", "7" * 400, "7" * 5000, "1e400", "[" * 70, "[" * 5000, '"\x1b[2J"', "'x'", "//"),
)
VALUES: tuple[Any, ...] = (
    *(
        None,
        True,
        0,
        -1,
        2**53,
        2**53 + 1,
        2**64,
        10**400,
        0.5,
        -0.0,
        1e308,
        "",
        "x",
        "float16",
        "pays",
        [],
        {},
        [None],
    ),
    *(
        {"fixed": 1},
        {"low": 1.0, "high": 0.0, "scale": "log"},
        [[[[1]]]],
        "narrowgauge-policy/2",
        "narrowgauge-policy/1",
    ),
)
KINDS = ("bytes", "tokens", "structure")
OUTCOMES = ("valid", "line and column", "path", "whole document")


def policies() -> list[str]:
    """Return the texts that are damaged: of a measured audit, the same with a split, and with a box of parameters."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        (folder / "model.py").write_text(KERNEL, encoding="utf-8")
        (folder / "audit.toml").write_text(AUDIT, encoding="utf-8")
        run_audit(read_audit_file(folder / "audit.toml"), folder / "out")
        document = draw_up(*read_audit(folder / "out"))
    level = msgspec.structs.replace(
        document.levels[0], scheme="split", narrow="float16", wide="float32", paths=9, correction_paths=8
    )
    box = msgspec.structs.replace(
        document.domain, parameters={"volatility": ParameterPart(low=0.1, high=0.4, scale="log")}, scenarios=34
    )
    split = msgspec.structs.replace(document, levels=[level, *document.levels[1:]])
    return [policy_text(one) for one in (document, split, msgspec.structs.replace(split, domain=box))]


def bytes_damaged(text: str, chance: random.Random) -> bytes:
    """Return a text of which a bit is turned, or a piece cut out, doubled, moved, or replaced by noise."""
    data = bytearray(text.encode())
    start = chance.randrange(len(data))
    end = min(len(data), start + chance.choice((1, 2, 8, 64, 1024)))
    piece = bytes(data[start:end])
    match chance.randrange(6):
        case 0:
            data[start] ^= 1 << chance.randrange(8)
        case 1:
            del data[start:end]
        case 2:
            data[start:start] = piece
        case 3:
            data[start:end] = chance.randbytes(end - start)
        case 4:
            del data[start:]
        case _:
            place = chance.randrange(len(data))
            del data[start:end]
            data[place:place] = piece
    return bytes(data)


def tokens_damaged(text: str, chance: random.Random) -> bytes:
    """Return a text of which a token is left out, doubled, exchanged with another one, or replaced by an odd one."""
    tokens = TOKEN.findall(text)
    solid = [place for place, token in enumerate(tokens) if token.strip()]
    place, other = chance.choice(solid), chance.choice(solid)
    match chance.randrange(5):
        case 0:
            del tokens[place]
        case 1:
            tokens.insert(place, tokens[place])
        case 2:
            tokens[place], tokens[other] = tokens[other], tokens[place]
        case 3:
            tokens.insert(place, chance.choice(ODD))
        case _:
            tokens[place] = chance.choice(ODD)
    return "".join(tokens).encode("utf-8", "surrogatepass")


def structure_damaged(text: str, chance: random.Random) -> bytes:
    """Return a document of which an element is left out, doubled, renamed, wrapped, or is another value."""
    document = json.loads(text)
    holders = list(_holders(document))
    inside = chance.choice(holders)
    step: Any = chance.choice(list(inside) if isinstance(inside, dict) else range(len(inside)))
    value = inside[step]
    match chance.randrange(7):
        case 0:
            del inside[step]
        case 1:
            inside[step] = chance.choice(VALUES)
        case 2:
            inside[step] = _nested(value, chance.choice((1, 2, 30, 62, 80)))
        case 3:
            inside[step] = _shifted(value, chance)
        case 4:
            inside[step] = chance.choice(holders)  # may hold itself
        case 5 if isinstance(inside, dict):
            inside[chance.choice(("colour", "", "level", "fixed", "a b", step.upper()))] = inside.pop(step)
        case _:
            if isinstance(inside, list):
                inside.insert(chance.randrange(len(inside) + 1), value)
            else:
                inside[f"{step}2"] = value
    try:
        return json.dumps(document).encode("utf-8", "surrogatepass")
    except (ValueError, RecursionError):
        return text.encode()


def _holders(value: Any) -> Any:
    if isinstance(value, dict | list) and value:
        yield value
        for one in value.values() if isinstance(value, dict) else value:
            yield from _holders(one)


def _nested(value: Any, depth: int) -> Any:
    for _ in range(depth):
        value = [value]
    return value


def _shifted(value: Any, chance: random.Random) -> Any:
    if isinstance(value, bool) or not isinstance(value, int | float):
        return str(value)
    return value * chance.choice((-1, 0, 0.5, 2, 10, 1e-300, 10**16)) + chance.choice((0, 1, -1))


DAMAGES: dict[str, Callable[[str, random.Random], bytes]] = dict(
    zip(KINDS, (bytes_damaged, tokens_damaged, structure_damaged), strict=True)
)


def outcome(data: bytes, path: Path) -> str:
    """Return what comes of a file; raises AssertionError, or whatever else the reader raises, where it must not."""
    path.write_bytes(data)
    try:
        document = read_policy(path)
    except DocumentError as problem:
        return _refused(problem, data, path)
    text = policy_text(document)
    again = read_policy_text(text, "again")
    assert again == document
    assert policy_text(again) == text
    return OUTCOMES[0]


def _refused(problem: DocumentError, data: bytes, path: Path) -> str:
    """Return what a refusal is; raises AssertionError where its message is not one line, or its path leads nowhere."""
    assert str(problem).startswith(str(path))
    assert str(problem).isprintable()
    if not problem.path:
        return OUTCOMES[1] if re.search(r"line \d+", problem.problem) else OUTCOMES[3]
    assert _leads_somewhere(json.loads(data.decode("utf-8"), parse_int=float), problem.path), problem
    return OUTCOMES[2]


def _leads_somewhere(document: Any, path: str) -> bool:
    """Return whether a path of the reader's leads to a value, or a missing schema is what it names."""
    return path == "schema" or path in _paths(document, "")


def _paths(value: Any, path: str) -> Any:
    yield path
    for step, one in value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ():
        yield from _paths(one, below(path, step))


def study(files: int, seed: int, tell: Callable[[str], None] = lambda _: None) -> dict[str, Counter[str]]:
    """Return how often each outcome was met, by kind of damage; `tell` hears of files that end otherwise."""
    texts = policies()
    found: dict[str, Counter[str]] = {kind: Counter() for kind in KINDS}
    with tempfile.TemporaryDirectory() as name:
        path = Path(name) / "p.json"
        for number in range(files):
            chance = random.Random(f"{seed} {number}")
            kind = KINDS[number % len(KINDS)]
            data = chance.choice(texts).encode()
            for _ in range(chance.choice((1, 1, 2, 3))):
                try:
                    data = DAMAGES[kind](data.decode("utf-8"), chance)
                except (ValueError, IndexError):  # the damage before left nothing that this kind could damage
                    break
            try:
                met = outcome(data, path)
            except Exception as problem:  # what the study is looking for
                met = type(problem).__name__
                tell(f"file {number} of seed {seed}, {kind}: {problem!r}")
            found[kind][met] += 1
    return found


def main(files: int = 100_000, seed: int = 1) -> int:
    """Write the report, and return 1 where a file ended in anything but a policy or a located message."""
    found = study(files, seed, lambda text: print(text, file=sys.stderr))
    others = sum(number for one in found.values() for met, number in one.items() if met not in OUTCOMES)
    head = (__doc__ or "").strip()
    lines = [
        "# Damaged policy files",
        "",
        head,
        "",
        f"{files:,} files. Made by `python tests/studies/damaged_policies.py`.",
        "",
        f"| damaged | files | {' | '.join(OUTCOMES)} | anything else |",
        "|---|---|---|---|---|---|---|",
    ]
    for kind, counts in found.items():
        told = [counts[met] for met in OUTCOMES]
        cells = [sum(counts.values()), *told, sum(counts.values()) - sum(told)]
        lines.append(f"| {kind} | {' | '.join(f'{cell:,}' for cell in cells)} |")
    report = Path(__file__).parents[2] / "reports" / "damaged_policies.md"
    report.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return 1 if others else 0


if __name__ == "__main__":
    sys.exit(main())
