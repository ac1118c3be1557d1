"""The command that draws up a policy: what it writes where, what it prints, and its exit codes."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from narrowgauge.cli import main
from narrowgauge.policy.cheader import c_header
from narrowgauge.record.policy import policy_text, read_policy
from small_audit import AUDIT, KERNEL, TARGET

FOLDER = "accepted: a folder into which narrowgauge audit has written"


@pytest.fixture(scope="module")
def folders(tmp_path_factory):
    """Two audits in a folder: `with` and `without` a target."""
    folder = tmp_path_factory.mktemp("audits")
    (folder / "model.py").write_text(KERNEL, encoding="utf-8")
    for name, more in (("with", TARGET), ("without", "")):
        (folder / f"{name}.toml").write_text(AUDIT + more, encoding="utf-8")
        assert main(["audit", str(folder / f"{name}.toml"), "--out", str(folder / name), "--quiet"]) == 0
    return folder


@pytest.fixture
def here(folders, monkeypatch, capsys):
    """The folder with the audits as the current one, with nothing printed yet."""
    monkeypatch.chdir(folders)
    capsys.readouterr()
    return folders


def test_it_is_written_beside_the_audit(here, capsys):
    """By default as policy.json in the audit's folder: canonical text, which the command says where to find."""
    assert main(["policy", "with"]) == 0
    path = here / "with" / "policy.json"
    assert path.read_text(encoding="utf-8") == policy_text(read_policy(path))
    printed = capsys.readouterr()
    assert printed.err == ""
    lines = printed.out.splitlines()
    assert lines[:2] == ["Policy for model.py:value", "Root-mean-square error: value 0.01."]
    assert lines[-1] == "Written to with/policy.json"
    assert [line.split()[:4] for line in lines if "float32 alone" in line][:1] == [["0", "1", "float32", "alone"]]
    assert "- A policy is evidence, not approval:" in printed.out
    assert "float64 alone costs 2.00 times as much, costs assumed." in " ".join(printed.out.split())


def test_another_file(here, capsys):
    """--out names the file, which is replaced as a whole; the audit's folder stays as it is."""
    before = sorted(path.name for path in (here / "without").iterdir())
    Path("reserve.policy.json").write_text("old", encoding="utf-8")
    assert main(["policy", "with", "--out", "reserve.policy.json"]) == 0
    assert json.loads(Path("reserve.policy.json").read_text(encoding="utf-8"))["schema"] == "narrowgauge-policy/1"
    assert capsys.readouterr().out.endswith("Written to reserve.policy.json\n")
    assert sorted(path.name for path in (here / "without").iterdir()) == before


def test_a_c_header(here, capsys):
    """--c-header writes the same rules as a C header, too, and the command says where."""
    assert main(["policy", "with", "--c-header", "model.h"]) == 0
    assert capsys.readouterr().out.endswith("Written to with/policy.json, as a C header to model.h\n")
    assert Path("model.h").read_text(encoding="ascii") == c_header(read_policy(here / "with" / "policy.json"))


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (
            ["without"],
            "without: no policy: the audit file has no [target], so that nobody knows how much rounding may ",
        ),
        (["nowhere"], f"nowhere: there is no such folder; {FOLDER}\n"),
        (["with.json"], f"with.json: there is no such folder; {FOLDER}\n"),
        (["damaged"], "damaged/audit.json: kernel.run: 3 is not accepted; accepted: text\n"),
        (["with", "--out", "none/p.json"], "none/p.json: cannot be written: No such file or directory\n"),
        (["with", "--c-header", "none/p.h"], "none/p.h: cannot be written: No such file or directory\n"),
        ([], "the following arguments are required: AUDITDIR|AUDIT.toml; narrowgauge policy --help shows "),
    ],
)
def test_no_policy(here, capsys, arguments, message):
    """Whatever stands in the way is one line and exit code 2."""
    document = json.loads((here / "with" / "audit.json").read_text(encoding="utf-8"))
    document["kernel"]["run"] = 3
    (here / "damaged").mkdir(exist_ok=True)
    (here / "damaged" / "audit.json").write_text(json.dumps(document), encoding="utf-8")
    assert main(["policy", *arguments]) == 2
    printed = capsys.readouterr()
    assert printed.out == ""
    assert printed.err.startswith(f"narrowgauge: {message}")
    assert printed.err.count("\n") == 1
