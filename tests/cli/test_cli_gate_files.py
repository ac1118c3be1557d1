"""The files that the command gate writes: what they hold, and which it refuses before anything is judged."""

from __future__ import annotations

import json
import os
from xml.etree import ElementTree

import pytest

from narrowgauge.cli import main
from narrowgauge.record.canonical import canonical_text
from small_audit import AUDIT, KERNEL, TARGET

FORMS = {"--junit": "gate.xml", "--sarif": "gate.sarif", "--summary": "gate.md", "--json": "gate.json"}


@pytest.fixture(scope="module")
def audited(tmp_path_factory):
    """A folder with a kernel, its finished audit in `done` and its policy."""
    folder = tmp_path_factory.mktemp("models")
    (folder / "pyproject.toml").write_text('[tool.narrowgauge]\naudits = ["model.toml"]\n', encoding="utf-8")
    (folder / "model.py").write_text(KERNEL, encoding="utf-8")
    (folder / "model.toml").write_text(AUDIT + TARGET, encoding="utf-8")
    assert main(["audit", str(folder / "model.toml"), "--out", str(folder / "done"), "--quiet"]) == 0
    assert main(["policy", str(folder / "done"), "--out", str(folder / "model.policy.json")]) == 0
    return folder


@pytest.fixture
def judge(audited, tmp_path, monkeypatch, capsys):
    """Judge the finished audit with options, in a folder of its own, and return the exit code and what was printed."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("GITHUB_STEP_SUMMARY", raising=False)

    def call(*options):
        capsys.readouterr()
        code = main(["gate", str(audited / "model.toml"), "--measured", str(audited / "done"), *options])
        return code, capsys.readouterr()

    return call


def test_all_four_are_written_beside_the_table(judge, tmp_path, audited):
    """Each in its form, and all of one verdict; paths are relative to the repository."""
    code, printed = judge(*(part for pair in FORMS.items() for part in pair))
    assert (tmp_path / "gate.md").read_text(encoding="utf-8").startswith("## Precision gate: ")
    found = json.loads((tmp_path / "gate.json").read_text(encoding="utf-8"))
    assert (found["exit_code"], found["gates"][0]["audit"]) == (code, "model.toml")
    assert canonical_text(found) == (tmp_path / "gate.json").read_text(encoding="utf-8")
    assert ElementTree.parse(tmp_path / "gate.xml").getroot().tag == "testsuites"
    run = json.loads((tmp_path / "gate.sarif").read_text(encoding="utf-8"))["runs"][0]
    assert run["invocations"][0]["exitCode"] == code
    assert printed.out.startswith("model.toml: the gate ")


def test_a_failing_gate_writes_them_too(judge, tmp_path, audited):
    """Its exit code is 1, and every file says that it failed."""
    policy = audited / "model.policy.json"
    held = policy.read_text(encoding="utf-8")
    document = json.loads(held)
    document["target"]["bias_share"] = 0.125
    policy.write_text(json.dumps(document), encoding="utf-8")
    try:
        code, _ = judge(*(part for pair in FORMS.items() for part in pair))
    finally:
        policy.write_text(held, encoding="utf-8")
    assert code == 1
    assert ElementTree.parse(tmp_path / "gate.xml").getroot().get("failures") == "1"
    results = json.loads((tmp_path / "gate.sarif").read_text(encoding="utf-8"))["runs"][0]["results"]
    place = results[0]["locations"][0]["physicalLocation"]
    assert (place["artifactLocation"]["uri"], place["region"]["startLine"]) == ("model.py", 5)
    assert "Precision gate: fail" in (tmp_path / "gate.md").read_text(encoding="utf-8")
    assert json.loads((tmp_path / "gate.json").read_text(encoding="utf-8"))["verdict"] == "fail"


def test_a_kernel_that_raises_anything_still_fails_in_every_file(audited, tmp_path, monkeypatch, capsys):
    """Control characters, markup and half a surrogate pair in its message are no fault of this program."""
    monkeypatch.chdir(tmp_path)
    for name in ("model.toml", "model.policy.json"):
        (tmp_path / name).write_bytes((audited / name).read_bytes())
    raising = KERNEL.replace(
        "    for dw in dW:\n", '    raise ValueError("\\ud800\\x1b[31m\\0|<b>]]>\\n{0}")\n    for dw in dW:\n'
    )
    (tmp_path / "model.py").write_text(raising, encoding="utf-8")
    files = [part for pair in FORMS.items() for part in pair]
    assert main(["gate", "model.toml", "--workers", "1", *files]) == 1
    assert "\x1b" not in capsys.readouterr().out
    assert ElementTree.parse(tmp_path / "gate.xml").getroot().get("failures") == "1"
    found = json.loads((tmp_path / "gate.json").read_text(encoding="utf-8"))["gates"][0]["findings"]
    assert r"ValueError: \ud800" in found[-1]["message"]
    assert len(json.loads((tmp_path / "gate.sarif").read_text(encoding="utf-8"))["runs"][0]["results"]) == 1
    assert "&lt;b&gt;" in (tmp_path / "gate.md").read_text(encoding="utf-8")


def test_they_are_written_though_nobody_reads_the_table(judge, tmp_path, monkeypatch):
    """A reader that goes away is no reason for a service to find nothing, or what an earlier gate left."""

    class Gone:
        def write(self, text):
            raise BrokenPipeError

    (tmp_path / "gate.xml").write_text("of an earlier gate", encoding="utf-8")
    with monkeypatch.context() as patched:
        patched.setattr("sys.stdout", Gone())
        code, _ = judge("--junit", "gate.xml")
    assert code == 141
    assert ElementTree.parse(tmp_path / "gate.xml").getroot().tag == "testsuites"


def test_the_page_is_appended_to_the_steps_own(judge, tmp_path, monkeypatch):
    """What earlier steps said stays; without the option nothing is added."""
    page = tmp_path / "step.md"
    page.write_text("# Earlier\n", encoding="utf-8")
    monkeypatch.setenv("GITHUB_STEP_SUMMARY", str(page))
    judge()
    assert page.read_text(encoding="utf-8") == "# Earlier\n"
    judge("--summary")
    judge("--summary")
    text = page.read_text(encoding="utf-8")
    assert text.startswith("# Earlier\n\n## Precision gate: ")
    assert text.count("## Precision gate: ") == 2


def test_a_summary_without_a_place_is_refused(judge):
    """It says which variable it looked for."""
    code, printed = judge("--summary")
    assert (code, printed.out) == (2, "")
    assert printed.err == (
        "narrowgauge: --summary: the environment variable GITHUB_STEP_SUMMARY names no file to append to; accepted: "
        "--summary FILE\n"
    )


@pytest.mark.parametrize("option", FORMS)
def test_no_file_overwrites_an_input(judge, audited, option):
    """`--summary AUDIT.toml` reads the audit file as the page's name: that is refused, and the file stays."""
    before = {path: path.read_bytes() for path in audited.iterdir() if path.is_file()}
    for name in ("model.toml", "model.policy.json", "another.toml"):
        code, printed = judge(option, str(audited / name))
        assert (code, printed.out) == (2, "")
        assert f"{option} {audited / name}: this would overwrite another file of the gate" in printed.err
    assert {path: path.read_bytes() for path in audited.iterdir() if path.is_file()} == before


def test_two_forms_do_not_share_a_file(judge, tmp_path):
    """The second would replace the first."""
    code, printed = judge("--json", "one", "--sarif", "./one")
    assert code == 2
    assert "would overwrite another file of the gate" in printed.err
    assert not (tmp_path / "one").exists()


@pytest.mark.parametrize(
    ("name", "what"),
    [("nowhere/gate.json", "there is no folder nowhere"), (".", "this is a folder"), ("", "this is a folder")],
)
def test_a_folder_that_is_not_there_is_said_first(judge, name, what):
    """Before minutes of measuring."""
    code, printed = judge("--json", name)
    assert (code, printed.out) == (2, "")
    assert f"--json {name}: {what}; accepted: --json with a file of its own" in printed.err


def test_a_pipe_is_written_to_and_stays_one(judge, tmp_path):
    """What is no plain file, such as /dev/stdout, is not replaced by one."""
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    reader = os.open(pipe, os.O_RDONLY | os.O_NONBLOCK)
    try:
        judge("--summary", str(pipe))
        assert os.read(reader, 2**16).startswith(b"## Precision gate: ")
    finally:
        os.close(reader)
    assert pipe.is_fifo()
