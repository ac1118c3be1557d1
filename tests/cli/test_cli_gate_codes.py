"""The command gate: what it is told, and the exit codes that it ends with."""

import json
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

from narrowgauge.cli import main

sys.path.insert(0, str(Path(__file__).parents[1] / "policy"))

import gate_cases as cases

STEPS = "    steps, _, paths = dW.shape\n"


@pytest.fixture(scope="module")
def audited(tmp_path_factory):
    """An audit file with its kernel, its policy and the folder of its audit, `out`."""
    return cases.prepared("reserve", tmp_path_factory.mktemp("gate") / "audit")


@pytest.fixture
def audit(audited, tmp_path):
    """A copy of them that a test may change."""
    shutil.copytree(audited.parent, tmp_path / "one", ignore=shutil.ignore_patterns("__pycache__"))
    return tmp_path / "one" / "audit.toml"


def changed(audit, *changes):
    kernel = audit.parent / "reserve.py"
    kernel.write_text(cases.changed(kernel.read_text(encoding="utf-8"), changes), encoding="utf-8")


def in_a_process(*arguments, cwd=None):
    command = [sys.executable, "-m", "narrowgauge", *map(str, arguments)]
    return subprocess.run(command, check=False, capture_output=True, text=True, cwd=cwd)


def test_a_kernel_that_holds_ends_with_0(audit, capsys):
    """And says so."""
    assert main(["gate", str(audit)]) == 0
    assert "the gate passes" in capsys.readouterr().out


def test_a_kernel_that_fails_ends_with_1(audit, capsys):
    """And says which claim, and how to renew the policy."""
    changed(audit, ("    total = np.zeros(paths, dtype=dW.dtype)\n", "    total = np.full(paths, 100.0)\n"))
    assert main(["gate", str(audit), "--workers", "1"]) == 1
    text = " ".join(capsys.readouterr().out.split())
    assert "the gate FAILS" in text
    assert "error variance, measured twice" in text
    assert "narrowgauge policy audit.toml" in text


def test_an_inconclusive_gate_ends_with_3(audit):
    """It is never a pass."""
    with audit.open("a", encoding="utf-8") as file:
        file.write("\n[gate]\npaths = 1024\nmost_paths = 1024\n")
    assert main(["gate", str(audit), "--workers", "1"]) == 3


@pytest.mark.parametrize(
    ("place", "ending"),
    [
        ("in the function", "os._exit(0)"),
        ("in the function", "sys.exit(0)"),
        ("in the function", "raise KeyboardInterrupt"),
        ("in the module", "os._exit(0)"),
        ("in the module", "sys.exit(0)"),
    ],
)
def test_a_kernel_that_ends_its_process_never_passes(audit, ending, place):
    """Whatever it ends it with, and with one worker too: the gate fails."""
    if place == "in the function":
        changed(audit, (STEPS, f"    import os, sys\n    {ending}\n{STEPS}"))
    else:
        changed(audit, ("import math\n", f"import math\nimport os, sys\n{ending}\n"))
    done = in_a_process("gate", audit, "--workers", "1")
    assert done.returncode == 1, done.stdout + done.stderr
    assert "fails: run:" in done.stdout


def test_a_fault_of_the_program_ends_with_70(audit, monkeypatch, capsys):
    """1 means that a gate failed: nothing else leaves with it."""

    def broken(*_, **__):
        raise RuntimeError("a fault")

    monkeypatch.setattr("narrowgauge.api.gate_held", broken)
    assert main(["gate", str(audit)]) == 70
    assert "internal error: RuntimeError: a fault" in capsys.readouterr().err


def test_of_several_files_the_worst_verdict_counts(audit, tmp_path, capsys):
    """One verdict each; one that fails comes before one that is open."""
    for name in ("two", "three"):
        shutil.copytree(audit.parent, tmp_path / name)
    with (tmp_path / "two" / "audit.toml").open("a", encoding="utf-8") as file:
        file.write("\n[gate]\npaths = 1024\nmost_paths = 1024\n")
    changed(tmp_path / "three" / "audit.toml", (STEPS, f'{STEPS}    raise ValueError("no")\n'))
    files = {name: str(tmp_path / name / "audit.toml") for name in ("one", "two", "three")}
    options = ["--workers", "1"]
    assert main(["gate", files["one"], files["two"], *options]) == 3
    capsys.readouterr()
    assert main(["gate", *files.values(), *options]) == 1
    text = capsys.readouterr().out
    assert [text.count(one) for one in ("the gate passes", "the gate FAILS", "is INCONCLUSIVE")] == [1, 1, 1]


@pytest.mark.parametrize(
    ("make", "said"),
    [
        (lambda audit: (audit.parent / "held.policy.json").unlink(), "policy.file: there is no policy"),
        (lambda audit: (audit.parent / "held.policy.json").write_text("{}"), "null is no schema of a policy"),
        (lambda audit: audit.write_text("[kernel"), "this is not TOML"),
        (lambda audit: audit.unlink(), "there is no such file"),
    ],
)
def test_a_wrong_file_among_several_ends_with_2_before_anything_is_measured(audit, tmp_path, make, said, capsys):
    """Whatever the verdict on the others would be."""
    shutil.copytree(audit.parent, tmp_path / "good")
    make(audit)
    assert main(["gate", str(tmp_path / "good" / "audit.toml"), str(audit)]) == 2
    written = capsys.readouterr()
    assert said in written.err
    assert written.out == ""


def test_a_project_names_its_audit_files(audit, capsys, monkeypatch):
    """Found from the current folder upwards; without one it is wrong usage."""
    inner = audit.parent / "deep" / "down"
    inner.mkdir(parents=True)
    monkeypatch.chdir(inner)
    assert main(["gate"]) == 2
    assert "no pyproject.toml from here upwards has a table [tool.narrowgauge]" in capsys.readouterr().err
    (audit.parent / "pyproject.toml").write_text('[tool.narrowgauge]\naudits = ["audit.toml"]\n', encoding="utf-8")
    assert main(["gate", "--workers", "1"]) == 0
    assert "audit.toml: the gate passes" in capsys.readouterr().out


def test_a_finished_audit_is_judged_without_numpy(audit):
    """In a process of its own: what is imported is imported by the gate alone."""
    code = (
        "import sys\n"
        "from narrowgauge.cli import main\n"
        f"code = main(['gate', {str(audit)!r}, '--measured', {str(audit.parent / 'out')!r}])\n"
        "heavy = {'numpy', 'scipy', 'pandas', 'rich'} & set(sys.modules)\n"
        "sys.exit(f'{code} {heavy}' if code or heavy else 0)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], check=False, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    assert "the gate passes" in done.stdout


def test_a_finished_audit_of_another_kernel_fails(audit, capsys):
    """A kernel that was changed after its audit is not what was measured."""
    changed(audit, ("    span = steps * h\n", "    span = h * steps\n"))
    assert main(["gate", str(audit), "--measured", str(audit.parent / "out")]) == 1
    assert "the audit is one of another state of the kernel" in " ".join(capsys.readouterr().out.split())


def test_a_finished_audit_that_is_worse_fails(audit, capsys):
    """Judged from its record: an error variance ten times the policy's."""
    path = audit.parent / "out" / "audit.json"
    record = json.loads(path.read_text(encoding="utf-8"))
    arm = record["quantities"]["option"]["levels"][2]["arms"]["float16"]
    arm["error_variance"] *= 10
    arm["error_variance_se"] *= 10
    path.write_text(json.dumps(record), encoding="utf-8")
    assert main(["gate", str(audit), "--measured", str(audit.parent / "out")]) == 1
    assert "level 2, option, float16: its error variance" in " ".join(capsys.readouterr().out.split())


@pytest.mark.parametrize("more", [["--seed", "3"], ["audit.toml"]])
def test_a_finished_audit_is_one_and_has_its_seed(audit, more, capsys):
    """--measured judges what is there."""
    assert main(["gate", str(audit), *more, "--measured", str(audit.parent / "out")]) == 2
    assert "--measured judges one audit that is there" in capsys.readouterr().err


@pytest.mark.parametrize("seed", ["-1", "x", str(2**63)])
def test_a_seed_that_is_none_is_refused(audit, seed, capsys):
    """Before anything is read."""
    assert main(["gate", str(audit), "--seed", seed]) == 2
    assert "a whole number from 0 to 9223372036854775807" in capsys.readouterr().err


def test_one_command_renews_a_policy(audit, monkeypatch, capsys):
    """After a change that is meant the audit is run anew and the policy written where the audit file has it."""
    monkeypatch.chdir(audit.parent)
    changed(audit, ("    span = steps * h\n", "    span = h * steps\n"))
    before = (audit.parent / "held.policy.json").read_bytes()
    assert main(["policy", "audit.toml"]) == 0
    assert (audit.parent / "held.policy.json").read_bytes() != before
    capsys.readouterr()
    assert main(["gate", "audit.toml", "--workers", "1"]) == 0
    assert "note" not in capsys.readouterr().out
