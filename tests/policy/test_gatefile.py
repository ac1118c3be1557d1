"""What stands around a gate: places relative to the repository, and what a kernel that stops the gate leaves."""

import shutil

import pytest
from policy_records import AUDIT, KERNEL, policy

from narrowgauge.errors import AuditFileError, EscapeError, KernelError
from narrowgauge.policy.drawup import write_policy
from narrowgauge.policy.gatefacts import fact
from narrowgauge.policy.gatefile import held_to, stopped
from narrowgauge.record.gate import Place


@pytest.fixture
def audit(record, tmp_path):
    """An audit file deep inside a repository, with its kernel and policy."""
    folder = tmp_path / "repository" / "models" / "path"
    folder.mkdir(parents=True)
    (tmp_path / "repository" / ".git").mkdir()
    (folder / "model.py").write_text(KERNEL, encoding="utf-8")
    (folder / "audit.toml").write_text(AUDIT, encoding="utf-8")
    write_policy(policy(record), folder / "audit.policy.json")
    return folder / "audit.toml"


def test_places_are_relative_to_the_repository(audit, record):
    """With forward slashes, wherever the repository lies; the kernel's function is at its line."""
    entry = held_to(audit).entry([], record, seed=3, paths=[1024])
    assert (entry.audit, entry.policy) == ("models/path/audit.toml", "models/path/audit.policy.json")
    assert entry.place == Place(file="models/path/model.py", line=5)
    assert KERNEL.splitlines()[4].startswith("def value(")
    assert entry.renew == "narrowgauge policy models/path/audit.toml"
    assert (entry.seed, entry.paths, entry.verdict) == (3, [1024], "pass")


def test_a_project_inside_a_repository_is_not_its_root(audit):
    """A hosting service knows a file by its path from the root of all projects."""
    (audit.parent / "pyproject.toml").write_text("", encoding="utf-8")
    assert held_to(audit).entry([], None, seed=1).audit == "models/path/audit.toml"


def test_a_command_to_renew_can_be_pasted_into_a_shell(audit, record):
    """A blank in a name is no end of it."""
    (audit.parents[2] / "my models").mkdir()
    moved = audit.rename(audit.parents[2] / "my models" / "audit.toml")
    write_policy(policy(record), moved.parent / "audit.policy.json")
    assert held_to(moved).entry([], None, seed=1).renew == "narrowgauge policy 'my models/audit.toml'"


def test_a_place_of_the_record_is_relative_to_the_audit_file(audit, record):
    """One that is not to be found is where the kernel is."""
    found = [
        fact("finite", "fails", "", place=Place(file="model.py", line=7)),
        fact("finite", "fails", "", place=Place(file="elsewhere.py", line=7)),
        fact("finite", "fails", ""),
    ]
    places = [one.place for one in held_to(audit).entry(found, record, seed=None).findings]
    assert places == [Place(file="models/path/model.py", line=7), Place(file="models/path/model.py", line=5), None]


def test_without_a_repository_places_are_relative_to_the_current_folder(audit, record, monkeypatch):
    """Or to the audit file's where that lies elsewhere."""
    outside = audit.parents[2].parent / "outside"
    shutil.copytree(audit.parent, outside / "path")
    monkeypatch.chdir(outside)
    moved = outside / "path" / "audit.toml"
    assert held_to(moved).entry([], None, seed=1).audit == "path/audit.toml"
    monkeypatch.chdir(audit.parent)
    assert held_to(moved).entry([], None, seed=1).audit == "audit.toml"


def test_a_kernel_without_a_file_of_python_is_placed_at_its_audit_file(audit, record):
    """A library or a command."""
    (audit.parent / "model.py").unlink()
    assert held_to(audit).place() == Place(file="models/path/audit.toml", line=1)


def test_a_missing_policy_is_named_with_the_command_that_makes_it(audit):
    """Wrong usage, not a failure of the gate."""
    (audit.parent / "audit.policy.json").unlink()
    with pytest.raises(AuditFileError) as refusal:
        held_to(audit)
    policy_file = audit.parent / "audit.policy.json"
    told = f"{audit}: policy.file: there is no policy {policy_file}; accepted: one made by narrowgauge policy {audit}"
    assert str(refusal.value) == told


@pytest.mark.parametrize(
    ("problem", "check", "place"),
    [
        (KernelError("the kernel raised ValueError: no", level=2, arm="float64"), "run", None),
        (KernelError("model.py:12: the kernel raised", level=2, arm="float64"), "run", Place(file="model.py", line=12)),
        (EscapeError("models/a b.py:41: float() of the state"), "escapes", Place(file="models/a b.py", line=41)),
        (EscapeError("no place: 3"), "escapes", None),
    ],
)
def test_what_stops_a_gate_is_a_finding_that_fails(problem, check, place):
    """At the line that its message begins with, where it does."""
    found = stopped(problem)
    assert (found.check, found.state, found.message, found.place) == (check, "fails", str(problem), place)
