"""The tables [policy] and [gate] of an audit file, and [tool.narrowgauge] of a project."""

import dataclasses
import re
import subprocess
import sys

import pytest

from narrowgauge.errors import AuditFileError
from narrowgauge.kernel.auditfile import audit_file_from, read_audit_file
from narrowgauge.kernel.audittables import SamplingTable
from narrowgauge.kernel.gatetable import GATE_LINES, audit_files_of, gate_settings, project_file

POLICY = "the path of a policy, relative to the audit file"
AUDIT = """
[kernel]
run = "model.py:value"
takes = "increments"

[ladder]
horizon = 1.0
finest = 2
"""


def written(folder, more=""):
    path = folder / "plant.toml"
    path.write_text(AUDIT + more, encoding="utf-8")
    return path


def test_without_tables_the_policy_lies_beside_the_audit_file(tmp_path):
    """Of its stem; a changed kernel is a note."""
    settings = gate_settings(written(tmp_path))
    assert settings.policy == tmp_path / "plant.policy.json"
    assert (settings.stale, settings.paths, settings.most_paths, settings.watch) == ("note", 8192, None, True)


def test_what_the_tables_say_is_kept(tmp_path):
    """The policy is relative to the audit file."""
    more = '[policy]\nfile = "../held.json"\n[gate]\nstale = "fail"\npaths = 2048\nmost_paths = 4096\nwatch = false\n'
    settings = gate_settings(written(tmp_path, more))
    assert settings.policy == tmp_path / ".." / "held.json"
    assert (settings.stale, settings.paths, settings.most_paths, settings.watch) == ("fail", 2048, 4096, False)


def test_an_audit_does_not_record_them(tmp_path):
    """They say nothing of what is measured: with them an audit is the same audit."""
    plain = read_audit_file(written(tmp_path)).asked()
    assert read_audit_file(written(tmp_path, '[gate]\nstale = "fail"\n')).asked() == plain


@pytest.mark.parametrize(
    ("more", "key", "said", "accepted"),
    [
        ('[gate]\nstale = "ignore"\n', "gate.stale", "'ignore' is not accepted", '"note" or "fail"'),
        ("[gate]\nwatch = 1\n", "gate.watch", "1 is not accepted", "a boolean"),
        (
            '[gate]\nstael = "note"\n',
            "gate.stael",
            'unknown key, perhaps "stale" is meant',
            "stale, paths, most_paths, watch",
        ),
        ("[gate]\npaths = 0\n", "gate.paths", "0 is not accepted", "an integer from 1 to 1099511627776"),
        ("[gate]\npaths = true\n", "gate.paths", "True is not accepted", "an integer from 1 to 1099511627776"),
        ("[gate]\nmost_paths = 100\n", "gate.most_paths", "100 is below gate.paths", "an integer of 8192 or more"),
        (
            "[policy]\nfile = 3\n",
            "policy.file",
            "3 is not accepted",
            "the path of a policy, relative to the audit file",
        ),
    ],
)
def test_a_wrong_key_is_refused_by_the_gate_and_by_the_audit(tmp_path, more, key, said, accepted):
    """With the same words."""
    path = written(tmp_path, more)
    for read in (gate_settings, read_audit_file):
        with pytest.raises(AuditFileError) as refusal:
            read(path)
        assert str(refusal.value) == f"{path}: {key}: {said}; accepted: {accepted}"


def test_a_table_that_is_none_is_refused():
    """A mapping made in Python passes the same check."""
    mapping = {
        "kernel": {"run": "model.py:value", "takes": "increments"},
        "ladder": {"horizon": 1.0, "finest": 2},
        "gate": 3,
    }
    with pytest.raises(AuditFileError, match="gate: 3 is no table; accepted: a table with keys of stale, paths"):
        audit_file_from(mapping)


@pytest.mark.parametrize(
    ("data", "said"),
    [(b"= 3", "this is not TOML"), (b"\xff", "this is not TOML"), (None, "there is no such file")],
)
def test_a_file_that_cannot_be_read_is_named(tmp_path, data, said):
    """Whatever is wrong with it."""
    path = tmp_path / "plant.toml"
    if data is not None:
        path.write_bytes(data)
    with pytest.raises(AuditFileError, match=said):
        gate_settings(path)


def test_the_nearest_project_with_the_table_is_found(tmp_path):
    """A pyproject.toml without it, nearer by, is passed over."""
    (tmp_path / "pyproject.toml").write_text('[tool.narrowgauge]\naudits = ["a/one.toml", "two.toml"]\n')
    inner = tmp_path / "package" / "deep"
    inner.mkdir(parents=True)
    (tmp_path / "package" / "pyproject.toml").write_text("[project]\n")
    found = project_file(inner)
    assert found == tmp_path / "pyproject.toml"
    assert audit_files_of(found) == [tmp_path / "a" / "one.toml", tmp_path / "two.toml"]


@pytest.mark.parametrize(
    ("table", "said"),
    [
        ("audits = []", "tool.narrowgauge.audits: [] is not accepted"),
        ("audits = [3]", "tool.narrowgauge.audits: [3] is not accepted"),
        ("", "tool.narrowgauge.audits: None is not accepted"),
        ('audit = ["a.toml"]', "tool.narrowgauge.audit: unknown key"),
    ],
)
def test_a_wrong_table_of_a_project_is_refused(tmp_path, table, said):
    """With what is accepted."""
    path = tmp_path / "pyproject.toml"
    path.write_text(f"[tool.narrowgauge]\n{table}\n")
    with pytest.raises(AuditFileError) as refusal:
        audit_files_of(path)
    assert str(refusal.value) == f'{path}: {said}; accepted: audits = ["path/of/audit.toml", ...]'


def test_reading_them_needs_no_numpy():
    """A finished audit is judged in the time that a commit hook has."""
    code = "import narrowgauge.kernel.gatetable, sys; sys.exit('numpy' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_a_draft_shows_every_key_with_its_default(tmp_path):
    """Behind a #; without it what it shows is accepted, and is what counts anyway."""
    text = "\n".join(GATE_LINES)
    shown = re.findall(r"^# (\w+) = ", text, flags=re.MULTILINE)
    assert shown == ["file", "stale", "paths", "most_paths", "watch"]
    path = tmp_path / "audit.toml"
    path.write_text(AUDIT + re.sub(r"^# ", "", text, flags=re.MULTILINE), encoding="utf-8")
    given = gate_settings(path)
    path.write_text(AUDIT + text, encoding="utf-8")
    assert dataclasses.replace(given, most_paths=None) == gate_settings(path)
    assert given.most_paths == SamplingTable().most_paths
