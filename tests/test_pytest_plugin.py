"""The pytest plugin in a suite of a user's own, run in a process of its own."""

from __future__ import annotations

import tomllib
from pathlib import Path

import pytest

from narrowgauge.cli import main
from small_audit import AUDIT, KERNEL, TARGET

pytest_plugins = ["pytester"]

ROOT = Path(__file__).parents[1]
HELD = AUDIT + TARGET + '[policy]\nfile = "model.policy.json"\n'
SUITE = """
import unittest

import pytest


@pytest.mark.precision_policy("models/good.toml")
def test_marked():
    pass


def test_by_the_fixture(narrowgauge_gate):
    entry = narrowgauge_gate("models/good.toml", workers=1)
    assert entry.verdict == "pass"


@pytest.mark.precision_policy("models/bad.toml", workers=1)
def test_of_a_changed_kernel():
    raise SystemExit("the body of this test must not run")


def test_of_a_changed_kernel_by_the_fixture(narrowgauge_gate):
    narrowgauge_gate("models/bad.toml", seed=3)
    raise SystemExit("this line must not be reached")


class TestMethod(unittest.TestCase):
    @pytest.mark.precision_policy("models/bad.toml", workers=1)
    def test_of_a_changed_kernel_in_a_case(self):
        pass


@pytest.mark.precision_policy("models/short.toml", workers=1)
def test_with_too_few_paths():
    pass


@pytest.mark.precision_policy("models/good.toml", sed=1)
def test_with_a_misspelt_argument():
    pass


@pytest.mark.precision_policy
def test_without_a_file():
    pass


@pytest.mark.precision_policy("models/none.toml")
def test_with_a_file_that_is_not_there():
    pass
"""


@pytest.fixture(scope="module")
def models(tmp_path_factory):
    """A kernel with its policy, and audit files: one that holds, one of a changed kernel, one with too few paths."""
    folder = tmp_path_factory.mktemp("suite") / "models"
    folder.mkdir()
    (folder / "model.py").write_text(KERNEL, encoding="utf-8")
    (folder / "changed.py").write_text(KERNEL.replace("0.2 * x", "0.9 * x"), encoding="utf-8")
    (folder / "good.toml").write_text(HELD, encoding="utf-8")
    (folder / "bad.toml").write_text(HELD.replace("model.py:value", "changed.py:value"), encoding="utf-8")
    (folder / "short.toml").write_text(HELD + "[gate]\npaths = 1024\nmost_paths = 1024\n", encoding="utf-8")
    assert main(["audit", str(folder / "good.toml"), "--out", str(folder / "done"), "--quiet"]) == 0
    assert main(["policy", str(folder / "done"), "--out", str(folder / "model.policy.json")]) == 0
    return folder


@pytest.fixture
def suite(pytester, monkeypatch):
    """Run a suite with the plugin in a new process, whether or not it is installed here."""
    monkeypatch.setenv("PYTEST_DISABLE_PLUGIN_AUTOLOAD", "1")
    for name in ("CI", "BUILD_NUMBER"):  # pytest prints a failure twice, whole, where one of them is set
        monkeypatch.delenv(name, raising=False)

    def run(source, *options):
        pytester.makepyfile(test_suite=source)
        return pytester.runpytest_subprocess("-p", "pytest_narrowgauge", "--strict-markers", "-rA", *options)

    return run


def test_a_policy_that_holds_passes_and_every_other_verdict_fails(suite, models, pytester):
    """By marker and fixture, in functions and unittest's methods; with words, and the table of the gate."""
    (pytester.path / "models").symlink_to(models)
    found = suite(SUITE)
    outcomes = found.parseoutcomes()
    text = found.stdout.str()
    assert outcomes == {"passed": 2, "failed": 7}, text
    assert text.count("the kernel no longer supports its precision policy") >= 3
    assert text.count("the gate FAILS") == 3
    assert "fails: error variance, measured twice: level 1, value, float32" in text
    assert "whether the kernel still supports its precision policy is undecided, which is no pass" in text
    assert "the gate is INCONCLUSIVE: it does not pass" in text
    assert "paths of the level would decide" in text
    assert "unexpected keyword argument 'sed'; accepted: precision_policy(audit, seed=None, workers=2)" in text
    assert "missing 1 required positional argument: 'audit'; accepted: precision_policy(audit, " in text
    assert "the gate cannot be held: " in text
    assert "none.toml: there is no such file" in text
    assert "must not" not in text.replace("raise SystemExit", "")


def test_the_path_is_relative_to_the_file_of_the_test(suite, models, pytester):
    """Wherever pytest is started."""
    (pytester.path / "inner").mkdir()
    (pytester.path / "inner" / "models").symlink_to(models)
    (pytester.path / "inner" / "test_inner.py").write_text(
        'def test_it(narrowgauge_gate):\n    assert narrowgauge_gate("models/good.toml").verdict == "pass"\n',
        encoding="utf-8",
    )
    assert suite("").parseoutcomes() == {"passed": 1}


def test_a_suite_without_gates_imports_nothing_of_the_program(suite):
    """Neither numpy nor the package: the plugin is loaded wherever it is installed."""
    source = """
        import sys

        def test_modules():
            assert "pytest_narrowgauge" in sys.modules
            heavy = {"narrowgauge", "numpy", "pandas", "scipy", "msgspec", "rich"}
            assert not heavy & set(sys.modules)

        def test_modules_with_the_fixture(narrowgauge_gate):
            assert "numpy" not in sys.modules
    """
    assert suite(source).parseoutcomes() == {"passed": 2}


def test_an_installed_plugin_is_found_by_pytest():
    """By its entry point, and the wheel has the module."""
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    assert project["project"]["entry-points"]["pytest11"] == {"narrowgauge": "pytest_narrowgauge"}
    wheel = project["tool"]["hatch"]["build"]["targets"]["wheel"]
    assert "src/pytest_narrowgauge.py" in wheel["only-include"]
    assert (ROOT / "src" / "pytest_narrowgauge.py").is_file()
