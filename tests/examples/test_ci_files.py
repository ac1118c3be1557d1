"""The files of examples/ci: what they run is run here as it stands, and nothing in them lets a failing gate pass."""

from __future__ import annotations

import os
import re
import shlex
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest
import yaml
from example_files import EXAMPLES

from narrowgauge.policy.gatefile import audit_files, held_to
from small_audit import AUDIT, KERNEL, TARGET

ROOT = EXAMPLES.parent
CI = EXAMPLES / "ci"


@pytest.fixture(scope="module")
def repository(tmp_path_factory, run):
    """A repository with one audit file and its policy, named in its pyproject.toml."""
    folder = tmp_path_factory.mktemp("repository")
    (folder / "pyproject.toml").write_text('[tool.narrowgauge]\naudits = ["model.toml"]\n', encoding="utf-8")
    (folder / "model.py").write_text(KERNEL, encoding="utf-8")
    (folder / "model.toml").write_text(AUDIT + TARGET, encoding="utf-8")
    finished = folder.parent / "finished"
    assert run(folder, "audit", "model.toml", "--out", str(finished)).returncode == 0
    assert run(folder, "policy", str(finished), "--out", "model.policy.json").returncode == 0
    return folder


def program(folder: Path, script: str) -> str:
    """A PATH on which `narrowgauge` is this shell script."""
    folder.mkdir(exist_ok=True)
    (folder / "narrowgauge").write_text(f"#!/bin/sh\n{script}\n", encoding="utf-8")
    (folder / "narrowgauge").chmod(0o755)
    return f"{folder}{os.pathsep}{os.environ['PATH']}"


@pytest.fixture
def real(tmp_path):
    """A PATH with the program itself."""
    return program(tmp_path / "bin", f'exec {shlex.quote(sys.executable)} -m narrowgauge "$@"')


def commands(document: object) -> list[str]:
    """Every line of shell in a workflow that calls the gate."""
    if isinstance(document, dict):
        return [line for value in document.values() for line in commands(value)]
    if isinstance(document, list):
        return [line for value in document for line in commands(value)]
    return [line for line in str(document).splitlines() if line.startswith("narrowgauge gate")]


@pytest.mark.parametrize(
    ("name", "written"),
    [
        ("github.yml", ["gate.json", "gate.sarif", "gate.xml", "step.md"]),
        ("gitlab.yml", ["gate.json", "gate.md", "gate.xml"]),
    ],
)
def test_a_workflows_command_writes_what_the_workflow_collects(repository, real, tmp_path, name, written):
    """Run as the service would: at the root of the repository, and with the step's page where there is one."""
    (command,) = commands(yaml.safe_load((CI / name).read_text(encoding="utf-8")))
    here = tmp_path / "checkout"
    here.mkdir()
    for path in repository.iterdir():
        (here / path.name).write_bytes(path.read_bytes())
    environment = {**os.environ, "PATH": real, "GITHUB_STEP_SUMMARY": str(here / "step.md")}
    done = subprocess.run(["bash", "-e", "-c", command], cwd=here, env=environment, check=False, capture_output=True)
    assert done.returncode == 0, done.stderr
    made = {path.name for path in here.iterdir() if path.is_file()} - {path.name for path in repository.iterdir()}
    assert sorted(made) == written
    collected = set(re.findall(r"gate\.\w+", (CI / name).read_text(encoding="utf-8").replace(command, "")))
    assert collected == made - {"step.md"}


def test_no_workflow_lets_a_failing_gate_pass_or_runs_a_fork_with_secrets():
    """What would turn exit codes 1 and 3 into a pass is on no step that gates."""
    github = yaml.safe_load((CI / "github.yml").read_text(encoding="utf-8"))
    assert set(github[True]) == {"pull_request", "push"}  # YAML 1.1 reads `on` as true
    for job in github["jobs"].values():
        assert "continue-on-error" not in job
        for step in job["steps"]:
            assert "continue-on-error" not in step or "narrowgauge" not in step.get("run", "")
    gitlab = yaml.safe_load((CI / "gitlab.yml").read_text(encoding="utf-8"))
    assert all("allow_failure" not in job for job in gitlab.values())
    for name in ("github.yml", "gitlab.yml", "pre-merge"):
        assert "||" not in "".join(
            line for line in (CI / name).read_text(encoding="utf-8").splitlines() if "narrowgauge gate" in line
        )


def pre_merge(folder: Path, path: str, *options: str, **variables: str) -> subprocess.CompletedProcess[str]:
    environment = {**os.environ, "PATH": path, "HOME": "/proc/nowhere", "TMPDIR": "/proc/nowhere", **variables}
    for name in ("NUMBA_CACHE_DIR", "XDG_CACHE_HOME", "NARROWGAUGE_COMPILED"):
        environment.pop(name, None)
    script = [str(CI / "pre-merge"), *options]
    return subprocess.run(script, cwd=folder, env=environment, check=False, capture_output=True, text=True)


def test_the_pre_merge_script_gates_and_writes_nothing(repository, real):
    """With no home, no cache and no temporary folder of its own; the repository is the same afterwards."""
    before = {path: path.read_bytes() for path in repository.rglob("*") if path.is_file()}
    done = pre_merge(repository, real)
    assert done.returncode == 0, done.stderr
    assert done.stdout.startswith("model.toml: the gate passes")
    assert done.stderr.endswith("pre-merge: every precision policy holds\n")
    assert {path: path.read_bytes() for path in repository.rglob("*") if path.is_file()} == before


@pytest.mark.parametrize(
    ("code", "said"), [(1, "no longer holds"), (3, "undecided, which is no pass"), (2, "exit code 2"), (70, "code 70")]
)
def test_the_pre_merge_script_keeps_the_exit_code_and_says_what_it_means(repository, tmp_path, code, said):
    """Nothing but 0 passes."""
    done = pre_merge(repository, program(tmp_path / "bin", f"exit {code}"))
    assert done.returncode == code
    assert said in done.stderr


def test_the_pre_merge_script_finds_a_folder_for_temporary_files(repository, tmp_path):
    """Where TMPDIR cannot be written, and does without numba's cache where there is none; options are handed on."""
    path = program(tmp_path / "bin", 'echo "$TMPDIR $NARROWGAUGE_COMPILED $*"')
    words = pre_merge(repository, path, "--seed", "3").stdout.split()
    assert Path(words[0]).is_dir()
    assert words[1:] == ["0", "gate", "--seed", "3"]


def test_a_hook_of_git_does_not_take_gits_arguments_for_audit_files(repository, tmp_path):
    """git hands the remote's name and address to a hook before a push."""
    hook = tmp_path / "pre-push"
    hook.symlink_to(CI / "pre-merge")
    path = program(tmp_path / "bin", 'echo "$*"')
    done = subprocess.run(
        [str(hook), "origin", "address"],
        cwd=repository,
        env={**os.environ, "PATH": path},
        check=True,
        capture_output=True,
        text=True,
    )
    assert done.stdout == "gate\n"


def test_this_projects_own_integration_gates_the_reserve_example(monkeypatch):
    """pyproject.toml names it, its policy is committed, and .ci/run holds the gate after the tests."""
    monkeypatch.chdir(ROOT)
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    assert project["tool"]["narrowgauge"]["audits"] == ["examples/reserve/reserve.toml"]
    (audit,) = audit_files([])
    assert held_to(audit).settings.policy.resolve() == EXAMPLES / "policy" / "reserve.policy.json"
    assert ".venv/bin/narrowgauge gate\n" in (ROOT / ".ci" / "run").read_text(encoding="utf-8")
