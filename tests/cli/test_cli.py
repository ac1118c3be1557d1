"""The command line: what it prints where, and its exit codes, in this process and as a program of its own."""

from __future__ import annotations

import json
import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from narrowgauge import __version__, api
from narrowgauge.cli import main
from narrowgauge.errors import KernelError, NarrowgaugeError
from narrowgauge.kernel.draft import draft

KERNEL = """
import sys
import time
from pathlib import Path

import numpy as np


def growth(dW, h, *, volatility=0.2):
    x = np.full(dW.shape[1], 1.0)
    for n in range(dW.shape[0]):
        x = x + 0.05 * h * x + volatility * x * dW[n]
    return x


def fails(dW, h):
    return inner(dW)


def inner(dW):
    raise ValueError("no \\x1b[31mluck")


def leaves(dW, h):
    sys.exit(1)


def escapes(dW, h):
    x = np.full(dW.shape[1], 1.0)
    return x + float(dW[0, 0])


class Bare(BaseException):
    pass


def bare(dW, h):
    raise Bare("no ordinary exception")


def stuck(dW, h):
    x = np.full(dW.shape[1], 1.0)
    if (x + 0.0001 == x).all():
        raise ValueError("the step is lost")
    return x + dW[0]


def waits(dW, h):
    Path("waiting").touch()
    time.sleep(60)
"""
AUDIT = """
[kernel]
run = "kernel.py:{function}"
takes = "increments"
[ladder]
horizon = 1.0
finest = 2
[target]
rmse = 0.01
[sampling]
block = 1024
paths = 2048
most_paths = 4096
seed = {seed}
"""
# What would change widths, colours or buffering.
SETTINGS = {"FORCE_COLOR", "TTY_COMPATIBLE", "COLUMNS", "PYTHONUNBUFFERED"}
ENVIRONMENT = {name: value for name, value in os.environ.items() if name not in SETTINGS}
COMMAND = [sys.executable, "-c", "import sys; from narrowgauge.cli import main; sys.exit(main())"]


def written(folder, function="growth", seed=1):
    """An audit file of one of the kernels, in a folder of its own."""
    (folder / "kernel.py").write_text(KERNEL, encoding="utf-8")
    path = folder / f"{function}.toml"
    path.write_text(AUDIT.format(function=function, seed=seed), encoding="utf-8")
    return path


def run(*arguments, folder, **options):
    """The program as a process of its own, in a folder."""
    return subprocess.run(
        [*COMMAND, *map(str, arguments)],
        cwd=folder,
        env=ENVIRONMENT,
        capture_output=True,
        text=True,
        encoding="utf-8",
        check=False,
        timeout=120,
        **options,
    )


def raises(problem):
    def anything(*_arguments, **_keywords):
        raise problem

    return anything


class TestUsage:
    def test_help_imports_nothing_heavy(self):
        """--help answers without the numerical libraries and without what draws tables."""
        code = "import sys; from narrowgauge.cli import main; sys.exit(main(['--help']))"
        done = subprocess.run(
            [sys.executable, "-X", "importtime", "-c", code], capture_output=True, text=True, check=True
        )
        assert "audit" in done.stdout
        imported = {line.rpartition("|")[2].strip().partition(".")[0] for line in done.stderr.splitlines()}
        assert "argparse" in imported
        assert not imported & {"numpy", "scipy", "pandas", "rich", "msgspec", "ml_dtypes"}

    def test_version(self, capsys):
        """--version prints name and version."""
        assert main(["--version"]) == 0
        assert capsys.readouterr().out == f"narrowgauge {__version__}\n"

    @pytest.mark.parametrize(
        "arguments",
        [[], ["audit"], ["audi", "a.toml"], ["audit", "a.toml", "--rep"], ["audit", "a.toml", "more"], ["draft"]],
    )
    def test_wrong_usage(self, arguments, capsys):
        """Wrong usage is one line on standard error and exit code 2; options are not guessed from their beginnings."""
        assert main(arguments) == 2
        shown = capsys.readouterr()
        assert shown.out == ""
        assert re.fullmatch(r"narrowgauge: .*; narrowgauge( audit| draft)? --help shows what is accepted\n", shown.err)

    def test_no_file(self, capsys):
        """A file that is not there is exit code 2."""
        assert main(["audit", "nothing.toml"]) == 2
        expected = "narrowgauge: nothing.toml: there is no such file; accepted: the path of a TOML file\n"
        assert capsys.readouterr().err == expected

    def test_draft(self, tmp_path, monkeypatch, capsys):
        """A draft is printed as it is, and nothing else."""
        written(tmp_path)
        monkeypatch.chdir(tmp_path)
        assert main(["draft", "kernel.py:growth"]) == 0
        shown = capsys.readouterr()
        assert shown.out == draft("kernel.py:growth")
        assert shown.err == ""

    def test_draft_of_nothing(self, tmp_path, capsys):
        """A draft of a function that is not there is exit code 2."""
        written(tmp_path)
        assert main(["draft", f"{tmp_path}/kernel.py:nothing"]) == 2
        assert 'there is no function "nothing" at the top level' in capsys.readouterr().err


class TestErrors:
    def audited(self, folder, monkeypatch, problem):
        monkeypatch.setattr(api, "run_audit", raises(problem))
        return main(["audit", str(written(folder))])

    def test_refused(self, tmp_path, monkeypatch, capsys):
        """Any error of the input is one line, without control characters, and its exit code."""
        assert self.audited(tmp_path, monkeypatch, NarrowgaugeError("a\x1b[31m:\nwrong")) == 2
        assert capsys.readouterr().err == "narrowgauge: a[31m: wrong\n"

    def test_internal(self, tmp_path, monkeypatch, capsys):
        """A fault of the program is exit code 70, its traceback, and a line that asks to report it."""
        assert self.audited(tmp_path, monkeypatch, RuntimeError("this is our fault")) == 70
        shown = capsys.readouterr().err
        assert shown.startswith("Traceback (most recent call last):\n")
        assert shown.splitlines()[-1] == (
            "narrowgauge: internal error: RuntimeError: this is our fault. This is a fault of narrowgauge; please "
            "report it with the traceback above and the audit file"
        )

    def test_never_one(self, tmp_path, monkeypatch):
        """Even an exit that somebody else asks for does not become the exit code of a failed gate."""
        assert self.audited(tmp_path, monkeypatch, SystemExit(1)) == 70

    def test_interrupted(self, tmp_path, monkeypatch, capsys):
        """Ctrl-C is one line and exit code 130."""
        assert self.audited(tmp_path, monkeypatch, KeyboardInterrupt()) == 130
        assert capsys.readouterr().err == "narrowgauge: interrupted\n"

    def test_cause_of_ours(self, tmp_path, monkeypatch, capsys):
        """An error caused by another error of the input comes without a traceback."""
        problem = KernelError("what", level=2, arm="float64")
        problem.__cause__ = NarrowgaugeError("why")
        assert self.audited(tmp_path, monkeypatch, problem) == 2
        assert capsys.readouterr().err == "narrowgauge: level 2, arm float64: what\n"

    @pytest.mark.parametrize("dry", [[], ["--dry"]])
    def test_kernel_raises(self, tmp_path, dry):
        """What a kernel raises is shown with the user's lines alone, then in one message."""
        done = run("audit", written(tmp_path, "fails"), *dry, folder=tmp_path)
        assert (done.returncode, done.stdout) == (2, "")
        lines = done.stderr.splitlines()
        assert lines[0] == "Traceback (most recent call last):"
        frames = [line.strip() for line in lines if line.startswith("  File ")]
        numbers = [
            number for number, line in enumerate(KERNEL.splitlines(), 1) if "inner(dW)" in line or "raise" in line
        ]
        places = [(numbers[0], "fails"), (numbers[2], "inner")]
        assert frames == [f'File "{tmp_path}/kernel.py", line {number}, in {name}' for number, name in places]
        assert lines[-2] == "ValueError: no [31mluck"
        assert lines[-1] == "narrowgauge: level 2, arm plain NumPy: the kernel raised ValueError: no [31mluck"

    def test_kernel_leaves(self, tmp_path):
        """A kernel that calls sys.exit(1) is an error of the input, not a failed gate."""
        done = run("audit", written(tmp_path, "leaves"), folder=tmp_path)
        assert done.returncode == 2
        assert done.stderr.endswith("narrowgauge: level 2, arm plain NumPy: the kernel raised SystemExit: 1\n")

    def test_kernel_raises_no_ordinary_exception(self, tmp_path):
        """What is no Exception is the kernel's all the same: exit code 2, with level and arm."""
        done = run("audit", written(tmp_path, "bare"), folder=tmp_path)
        assert done.returncode == 2
        words = "narrowgauge: level 2, arm plain NumPy: the kernel raised Bare: no ordinary exception\n"
        assert done.stderr.endswith(words)

    @pytest.mark.skipif(sys.platform == "win32", reason="signals are sent otherwise there")
    def test_interrupted_process(self, tmp_path):
        """Ctrl-C while a kernel runs ends the program at once, with one line."""
        command = [*COMMAND, "audit", str(written(tmp_path, "waits")), "--quiet"]
        process = subprocess.Popen(command, cwd=tmp_path, stderr=subprocess.PIPE, text=True)
        until = time.monotonic() + 60
        while not (tmp_path / "waiting").exists() and time.monotonic() < until:
            time.sleep(0.05)
        process.send_signal(signal.SIGINT)
        _, shown = process.communicate(timeout=30)
        assert (process.returncode, shown) == (130, "narrowgauge: interrupted\n")

    @pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs a device that is always full")
    def test_full_disk(self, tmp_path):
        """Output that cannot be written is exit code 2 with the system's reason."""
        with open("/dev/full", "w", encoding="utf-8") as full:
            command = [*COMMAND, "draft", "kernel.py:growth"]
            written(tmp_path)
            done = subprocess.run(
                command, cwd=tmp_path, stdout=full, stderr=subprocess.PIPE, text=True, check=False, timeout=60
            )
        expected = "narrowgauge: standard output cannot be written: No space left on device\n"
        assert (done.returncode, done.stderr) == (2, expected)

    @pytest.mark.skipif(sys.platform == "win32", reason="pipes end otherwise there")
    @pytest.mark.parametrize(
        "arguments", [["--help"], ["draft", "kernel.py:growth"], ["audit", "growth.toml", "--dry"]]
    )
    def test_reader_gone(self, tmp_path, arguments):
        """When whoever read the output is gone, the program ends without a word."""
        written(tmp_path)
        reading, writing = os.pipe()
        os.close(reading)
        done = subprocess.run(
            [*COMMAND, *arguments],
            cwd=tmp_path,
            env=ENVIRONMENT,
            stdout=writing,
            stderr=subprocess.PIPE,
            text=True,
            check=False,
            timeout=60,
        )
        os.close(writing)
        assert (done.returncode, done.stderr) == (141, "")


class TestDry:
    def test_clean(self, tmp_path):
        """A dry run counts operations by line, measures and writes nothing, and is exit code 0."""
        done = run("audit", written(tmp_path), "--dry", folder=tmp_path)
        assert (done.returncode, done.stderr) == (0, "")
        line = next(number for number, text in enumerate(KERNEL.splitlines(), 1) if "volatility * x" in text)
        # 4 steps on level 2, in each of them 0.05 * h is plain, and 4 products and sums of the state are left.
        assert re.search(rf"^kernel\.py:{line} +add 8, multiply 12$", done.stdout, re.MULTILINE)
        assert "Nothing: every operation stays in the emulation." in done.stdout
        assert sorted(path.name for path in tmp_path.iterdir()) == ["growth.toml", "kernel.py"]

    def test_escape(self, tmp_path):
        """An escape is shown with file and line, and is exit code 2."""
        done = run("audit", written(tmp_path, "escapes"), "--dry", folder=tmp_path)
        assert (done.returncode, done.stderr) == (2, "")
        line = next(number for number, text in enumerate(KERNEL.splitlines(), 1) if "float(dW" in text)
        assert f"{tmp_path}/kernel.py:{line}:" in "".join(done.stdout.split())

    def test_raised(self, tmp_path):
        """What the kernel raises in a narrow format is shown, and is no escape: the audit itself would go on."""
        done = run("audit", written(tmp_path, "stuck"), "--dry", folder=tmp_path)
        assert (done.returncode, done.stderr) == (0, "")
        assert "bfloat16 and float16: the kernel raised ValueError: the step is lost" in " ".join(done.stdout.split())


class TestAudit:
    def test_whole(self, tmp_path):
        """An audit prints its plan to standard error and the rest to standard output, and writes its files."""
        done = run("audit", written(tmp_path), folder=tmp_path)
        assert done.returncode == 0
        assert done.stderr.startswith("Plan: 3 levels of 1 to 4 steps.")
        assert "look 1" not in done.stderr
        assert "\x1b" not in done.stdout + done.stderr
        assert done.stdout.startswith("Audit of kernel.py:growth\n")
        for heading in ("Verdict", "What to do next", "How was it measured?", "What must be kept in mind?"):
            assert f"\n{heading}\n" in done.stdout
        words = " ".join(done.stdout.split())
        assert "float32: finest level where it still pays: 2 or finer, not extrapolated." in words
        assert "Written to audits/growth: audit.json" in words
        assert "[sampling] confidence = 0.99;" in words
        assert not [line for line in done.stdout.split("\n") if line != line.rstrip() or len(line) > 80]
        record = json.loads((tmp_path / "audits" / "growth" / "audit.json").read_text(encoding="utf-8"))
        assert record["kernel"]["run"] == "kernel.py:growth"
        assert (tmp_path / "audits" / "growth" / "levels.csv").exists()

    def test_quiet(self, tmp_path):
        """With --quiet there is neither plan nor table, only the verdict and where the files are."""
        done = run("audit", written(tmp_path), "--quiet", "--out", "elsewhere", folder=tmp_path)
        assert (done.returncode, done.stderr) == (0, "")
        assert done.stdout.startswith("Verdict\n")
        assert "Written to elsewhere:" in done.stdout
        assert "Signal and noise" not in done.stdout

    def test_folder_is_taken(self, tmp_path):
        """A folder with another audit is refused, unless it may be replaced."""
        assert run("audit", written(tmp_path), "--quiet", folder=tmp_path).returncode == 0
        other = written(tmp_path, seed=2)
        done = run("audit", other, "--quiet", folder=tmp_path)
        assert (done.returncode, done.stdout) == (2, "")
        assert done.stderr == (
            "narrowgauge: audits/growth: holds another audit (other settings); accepted: --out with another folder, or "
            "--replace\n"
        )
        assert run("audit", other, "--quiet", "--replace", folder=tmp_path).returncode == 0

    def test_stem_of_dots(self, tmp_path, monkeypatch):
        """The default folder stays below audits/, whatever the file is called."""
        asked = []
        monkeypatch.setattr(
            api, "run_audit", lambda _file, out, **_: asked.append(out) or raises(NarrowgaugeError(""))()
        )
        written(tmp_path).rename(tmp_path / "...toml")
        assert main(["audit", str(tmp_path / "...toml"), "--quiet"]) == 2
        assert asked == [Path("audits", "audit")]

    @pytest.mark.skipif(sys.platform == "win32", reason="needs a pseudo-terminal")
    def test_terminal(self, tmp_path):
        """On a terminal a bar follows the looks on standard error and is gone at the end."""
        import pty

        ours, theirs = pty.openpty()
        environment = {**ENVIRONMENT, "TERM": "xterm", "COLUMNS": "100"}
        process = subprocess.Popen(
            [*COMMAND, "audit", str(written(tmp_path))],
            cwd=tmp_path,
            env=environment,
            stdout=subprocess.DEVNULL,
            stderr=theirs,
        )
        os.close(theirs)
        shown = b""
        while True:
            try:
                part = os.read(ours, 65536)
            except OSError:  # Linux reports the end of a terminal like this
                break
            if not part:
                break
            shown += part
        os.close(ours)
        assert process.wait(timeout=60) == 0
        text = shown.decode()
        assert "Plan:" in text
        assert "look 1 of 2, levels 0 to 2" in text
        assert text.rstrip("\r\n").endswith("\x1b[2K")  # the last thing is that the bar's line is erased
