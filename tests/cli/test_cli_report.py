"""The command that makes a page, and the page at the end of an audit."""

from __future__ import annotations

import sys
from pathlib import Path

import pytest
from test_cli import run, written

from narrowgauge.cli import main


@pytest.fixture(scope="module")
def audited(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder in which an audit has been run, with what it printed as `said.txt`."""
    folder = tmp_path_factory.mktemp("audited")
    done = run("audit", written(folder), "--quiet", "--out", "here", folder=folder)
    assert (done.returncode, done.stderr) == (0, "")
    (folder / "said.txt").write_text(done.stdout, encoding="utf-8")
    return folder


def test_an_audit_ends_with_its_page(audited):
    """It lies beside the record, and the last line says so."""
    assert (audited / "said.txt").read_text(encoding="utf-8").endswith("\nPage to read: here/report.html\n")
    assert "Precision audit of <code>kernel.py:growth</code>" in (audited / "here" / "report.html").read_text("utf-8")


def test_the_command_makes_the_same_page(audited, capsys, monkeypatch):
    """By default beside the record, with --out elsewhere; the bytes are those of the audit's end."""
    monkeypatch.chdir(audited)
    first = (audited / "here" / "report.html").read_bytes()
    assert main(["report", "here", "--out", "mine.html"]) == 0
    assert main(["report", "here"]) == 0
    assert capsys.readouterr().out == "Page to read: mine.html\nPage to read: here/report.html\n"
    assert (audited / "mine.html").read_bytes() == (audited / "here" / "report.html").read_bytes() == first


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["none"], "none: there is no such folder; accepted: a folder into which narrowgauge audit has written"),
        (["."], ".: holds no audit.json; accepted: a folder into which narrowgauge audit has written"),
        (["here", "--out", "no/a.html"], "no/a.html: cannot be written: No such file or directory"),
        (["here", "--out", "here/audit.json"], "here/audit.json: is a file of an audit; accepted: another name"),
        ([], "the following arguments are required: AUDITDIR; narrowgauge report --help shows what is accepted"),
    ],
)
def test_wrong_use(audited, capsys, monkeypatch, arguments, words):
    """One message, and exit code 2."""
    monkeypatch.chdir(audited)
    assert main(["report", *arguments]) == 2
    assert capsys.readouterr().err.startswith(f"narrowgauge: {words}")


def test_without_the_packages(audited, capsys, monkeypatch):
    """The command says what to install; an audit leaves the page out, and says that one that is there is older."""
    monkeypatch.chdir(audited)
    monkeypatch.setitem(sys.modules, "matplotlib", None)
    assert main(["report", "here"]) == 2
    words = "the page needs matplotlib, which is not installed; accepted: pip install '.[report]' first"
    assert capsys.readouterr().err == f"narrowgauge: report: {words}\n"
    assert main(["audit", "growth.toml", "--quiet", "--out", "here"]) == 0
    told = capsys.readouterr()
    assert "Page to read" not in told.out
    words = "is of an earlier audit; pip install '.[report]' and narrowgauge report renew it"
    assert told.err == f"narrowgauge: here/report.html: {words}\n"
