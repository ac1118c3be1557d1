"""Whether a kernel is the one that was audited: found by its file, or given as a function."""

from __future__ import annotations

import dataclasses
import functools
import importlib.util
import subprocess
import sys
import types

import pytest

from narrowgauge.errors import PolicyError
from narrowgauge.kernel.auditfile import audit_file_from, read_audit_file
from narrowgauge.kernel.fingerprint import fingerprint
from narrowgauge.kernel.identity import identity_of, versions_of
from narrowgauge.kernel.loading import find_kernel

KERNEL = """
import numpy as np
import helper

def value(dW, h):
    return helper.scaled(dW.sum(0))

def other(dW, h):
    return dW
"""
HELPER = "def scaled(x):\n    return 0.5 * x\n"
AUDIT = """
[kernel]
run = "model.py:value"
takes = "increments"
modules = ["helper"]
[ladder]
horizon = 1.0
finest = 1
"""


@pytest.fixture
def folder(tmp_path):
    """A folder with a kernel, the module that it lists, and the audit file."""
    for name, text in (("model.py", KERNEL), ("helper.py", HELPER), ("audit.toml", AUDIT)):
        (tmp_path / name).write_text(text, encoding="utf-8")
    return tmp_path


def origin(folder):
    return find_kernel(read_audit_file(folder / "audit.toml")).origin()


def loaded(folder, name="model"):
    spec = importlib.util.spec_from_file_location(name, folder / "model.py")
    module = importlib.util.module_from_spec(spec)
    sys.path.insert(0, str(folder))
    try:
        spec.loader.exec_module(module)
    finally:
        sys.path.remove(str(folder))
        sys.modules.pop("helper", None)
    return module


def identity(kernel, run="model.py:value", covers="syntax trees", modules=("helper",)):
    return identity_of(kernel, run=run, covers=covers, modules=modules)


class TestOrigin:
    def test_it_says_what_it_covers(self, folder):
        """The syntax trees of the kernel's file and of the listed module; what is only imported is named."""
        found = origin(folder)
        assert (found.covers, found.modules, found.imports) == ("syntax trees", ("helper",), ("numpy",))

    def test_formatting_changes_the_raw_hash_alone(self, folder):
        """A comment gives another hash of the bytes and the same fingerprint; a helper's constant changes both."""
        before, raw = origin(folder), find_kernel(read_audit_file(folder / "audit.toml")).digest()
        (folder / "helper.py").write_text(HELPER.replace("\n    return", "  # half\n\n    return"), encoding="utf-8")
        assert origin(folder) == before
        assert find_kernel(read_audit_file(folder / "audit.toml")).digest() != raw
        (folder / "helper.py").write_text(HELPER.replace("0.5", "0.25"), encoding="utf-8")
        assert origin(folder).fingerprint != before.fingerprint

    def test_a_function_handed_over_has_its_file(self, folder):
        """Its fingerprint is the one that an audit of the same file has, if it bears the same name."""
        module = loaded(folder)
        mapping = {
            "kernel": {"run": module.value, "takes": "increments", "modules": ["helper"]},
            "ladder": {"horizon": 1.0, "finest": 1},
        }
        assert find_kernel(audit_file_from(mapping)).origin() == origin(folder)

    def test_a_function_without_a_file_has_its_code(self):
        """What was typed in has no source to read: its fingerprint is the audit's own."""
        space = {"__name__": "typed_in"}
        exec("def value(dW, h):\n    return dW.sum(0)", space)
        mapping = {"kernel": {"run": space["value"], "takes": "increments"}, "ladder": {"horizon": 1.0, "finest": 1}}
        found = find_kernel(audit_file_from(mapping)).origin()
        assert (found.covers, found.fingerprint) == ("code", fingerprint({}, space["value"]))
        assert identity(space["value"], covers="code", modules=()) == found.fingerprint

    def test_draws_of_ones_own_are_no_part_of_it(self):
        """A kernel without a file is known again although its audit made normals with a function of the user's."""
        space = {"__name__": "typed_in"}
        exec("def value(dW, h):\n    return dW.sum(0)\ndef normals(u):\n    return u", space)
        kernel = {"run": space["value"], "takes": "increments"}
        mapping = {"kernel": kernel, "ladder": {"horizon": 1.0, "finest": 1}}
        found = find_kernel(audit_file_from(mapping))
        other = find_kernel(audit_file_from({**mapping, "kernel": {**kernel, "run": space["normals"]}}))
        with_draws = dataclasses.replace(found, approximation=other)
        assert with_draws.digest() != found.digest()
        assert with_draws.origin() == found.origin()


class TestIdentity:
    def test_the_same_kernel(self, folder, monkeypatch):
        """By its file, by a module's name, as a function, and inside a partial or what a compiler keeps."""
        expected, module = origin(folder).fingerprint, loaded(folder)
        monkeypatch.chdir(folder)
        monkeypatch.syspath_prepend(str(folder))
        compiled = types.SimpleNamespace(py_func=module.value)
        for kernel in ("model.py:value", "model:value", module.value, functools.partial(module.value, h=1), compiled):
            assert identity(kernel) == expected

    def test_another_function_of_the_file(self, folder):
        """Is another kernel."""
        assert identity(loaded(folder).other) != origin(folder).fingerprint
        assert identity(f"{folder}/model.py:other") != origin(folder).fingerprint

    def test_under_another_module_name(self, folder):
        """A module that production calls otherwise, or that is run as the main program, is the same file."""
        assert identity(loaded(folder, "__main__x").value) == origin(folder).fingerprint

    def test_a_function_with_two_names(self, folder):
        """A function that stands in its module under the audited name is the audited one, whatever it calls itself."""
        text = KERNEL.replace("def value", "def made") + "value = made\n"
        (folder / "model.py").write_text(text, encoding="utf-8")
        assert identity(loaded(folder).made) == origin(folder).fingerprint

    def test_a_library_is_its_bytes(self, tmp_path):
        """The hash of the file, as in the audit; a function is no library."""
        path = tmp_path / "kernel.so"
        path.write_bytes(b"\x7fELF")
        assert identity(path, covers="bytes").startswith("sha256:")
        with pytest.raises(PolicyError, match="accepted: the path of the library"):
            identity(len, covers="bytes")

    @pytest.mark.parametrize(
        ("kernel", "message"),
        [
            (len, "the kernel is no Python function; accepted: a function, or file.py:function"),
            ("model.py", "'model.py' names no function; accepted: file.py:function, or package.module:function"),
            ("nowhere.py:value", "the kernel cannot be read: nowhere.py: No such file or directory"),
            (
                "nowhere:value",
                "there is no Python module 'nowhere'; accepted: file.py:function, or an importable module",
            ),
        ],
    )
    def test_nothing_to_compare_with(self, kernel, message):
        """One message says what is wrong, and what is accepted."""
        with pytest.raises(PolicyError) as caught:
            identity(kernel, modules=())
        assert str(caught.value) == message

    def test_a_listed_module_that_is_gone(self, folder):
        """Is said, and is no other fingerprint."""
        (folder / "helper.py").unlink()
        with pytest.raises(
            PolicyError, match=r"^the module 'helper', which the policy's fingerprint covers, is not to be"
        ):
            identity(f"{folder}/model.py:value")


def test_versions_of_what_is_installed():
    """By the name under which a package is installed; a module of nobody's has none."""
    assert list(versions_of(["numpy", "no_such_module"])) == ["numpy"]
    assert versions_of([]) == {}


def test_comparing_needs_no_numpy():
    """Production code that checks a fingerprint does not import numpy or scipy for it."""
    code = "import narrowgauge.kernel.identity, sys; sys.exit(bool({'numpy', 'scipy', 'pandas'} & set(sys.modules)))"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
