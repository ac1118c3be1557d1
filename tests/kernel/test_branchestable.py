"""The table [branches]: its defaults, what it is refused for, and how its functions are found and counted."""

from __future__ import annotations

from pathlib import Path

import pytest
from auditfile_cases import LEAST, read, refusal

from narrowgauge.errors import AuditFileError
from narrowgauge.kernel.loading import find_kernel

TABLE = LEAST + "[branches]\n"
RUN = '"file.py:function" or "package.module:function"'


def test_defaults(tmp_path: Path) -> None:
    """Functions round as the kernel does, and as many paths are compared as a first look has; both count as assumed."""
    file = read(tmp_path, TABLE + 'correction = "model.py:pair"')
    assert file.branches is not None
    assert (file.branches.low, file.branches.rounds, file.branches.paths) == (None, "emulated", 32768)
    assert file.branches.named
    assert {"branches.rounds", "branches.paths"} <= set(file.assumed)
    assert file.asked()["branches"] == {
        "low": None,
        "correction": "model.py:pair",
        "rounds": "emulated",
        "library": None,
        "symbol": None,
        "allow": None,
        "paths": 32768,
    }


def test_without_the_table(tmp_path: Path) -> None:
    """Nothing of it is asked for or assumed."""
    file = read(tmp_path, LEAST)
    assert file.branches is None
    assert "branches" not in file.asked()
    assert not any(key.startswith("branches") for key in file.assumed)


def test_an_empty_table_names_nothing(tmp_path: Path) -> None:
    """The kernel is both, as without it; there is nothing whose rounding or library could be a default."""
    file = read(tmp_path, TABLE)
    assert file.branches is not None
    assert not file.branches.named
    assert [key for key in file.assumed if key.startswith("branches")] == ["branches.paths"]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ('low = "model"', f'branches.low: "model" does not end in ":" and the name of a function; accepted: {RUN}'),
        ("correction = 7", f"branches.correction: 7 is an integer; accepted: {RUN}"),
        ('rounds = "up"', 'branches.rounds: "up" is not accepted; accepted: "emulated" or "itself"'),
        (
            'rounds = "itself"',
            "branches.rounds: [branches] names no function whose rounding it could be; accepted: no such key",
        ),
        ('allow = "all"', 'branches.allow: "all" is not accepted; accepted: "within budget"'),
        (
            'allow = "within budget"',
            "branches.allow: there is no [target], and so no budget for a mismatch; accepted: no such key, or a table "
            "[target]",
        ),
        ("paths = 0", "branches.paths: 0 is not accepted; accepted: an integer of 1 or more"),
        (
            'symbol = "value"',
            "branches.symbol: there is no [library], whose parameters and outputs it has; accepted: "
            "branches.correction",
        ),
        (
            'library = "a.so"',
            "branches.library: there is no branches.symbol to be found in it; accepted: branches.symbol beside it",
        ),
        (
            'symbol = "value"\ncorrection = "a.py:f"',
            "branches.symbol: branches.correction is there, too; accepted: one of the two",
        ),
        (
            '[formats]\nschemes = ["alone"]',
            'branches.low: "split" is not in formats.schemes, and nothing else has branches; accepted: no [branches]',
        ),
        (
            'low = "a.py:f"\nrounds = "itself"\n[formats]\nnarrow = ["tf32"]',
            'branches.rounds: "itself", and "tf32" has no type of its own, in which to get draws; accepted: '
            '"emulated" or "itself"',
        ),
    ],
)
def test_refused(tmp_path: Path, text: str, message: str) -> None:
    """Each message, word for word."""
    assert refusal(tmp_path, TABLE + text) == message


def test_a_function_that_is_not_there_is_refused_by_its_key(tmp_path: Path) -> None:
    """As the kernel's own would be."""
    (tmp_path / "reserve.py").write_text("def value(dW, h):\n    return dW[0]\n", encoding="utf-8")
    file = read(tmp_path, TABLE + 'correction = "missing.py:pair"')
    with pytest.raises(AuditFileError, match=r"branches\.correction: no such file: .*missing\.py"):
        find_kernel(file)


def test_the_functions_count_for_the_fingerprint(tmp_path: Path) -> None:
    """An audit whose correction has changed is another one."""
    (tmp_path / "reserve.py").write_text("def value(dW, h):\n    return dW[0]\n", encoding="utf-8")
    pair = tmp_path / "pair.py"
    digests = set()
    for text in ("def pair(dW, h):\n    return dW[0], dW[0]\n", "def pair(dW, h):\n    return dW[0], 2 * dW[0]\n"):
        pair.write_text(text, encoding="utf-8")
        digests.add(find_kernel(read(tmp_path, TABLE + 'correction = "pair.py:pair"')).digest())
    digests.add(find_kernel(read(tmp_path, LEAST)).digest())
    assert len(digests) == 3
