"""The house: which module may import which, how long a file may be, and what the commands promise."""

import ast
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
SOURCE = ROOT / "src" / "narrowgauge"
DOCUMENTS = ["errors", "arithmetic", "draws", "dispatch", "kernel", "record"]
ORDER = [*DOCUMENTS, "measure", "judge", "conduct", "policy", "report", "api", "commands", "cli"]
MODULES = sorted(SOURCE.rglob("*.py"))
TESTS = sorted((ROOT / "tests").rglob("*.py"))


def place(module):
    """The position in ORDER of a dotted name inside the package, or of a file."""
    return ORDER.index(module.split(".")[0])


def imported(path):
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom) and node.module and node.module.startswith("narrowgauge"):
            names = [node.module] if node.module != "narrowgauge" else [f"narrowgauge.{n.name}" for n in node.names]
            yield from (name.removeprefix("narrowgauge.") for name in names)
        elif isinstance(node, ast.Import):
            yield from (n.name.removeprefix("narrowgauge.") for n in node.names if n.name.startswith("narrowgauge."))


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(SOURCE)))
def test_a_module_imports_only_from_above(path):
    """Packages follow the order of the house; the lazy __init__ and __main__ are exempt."""
    relative = path.relative_to(SOURCE).with_suffix("")
    if relative.parts in (("__init__",), ("__main__",)):
        return
    for name in imported(path):
        if name == "__version__":
            continue
        assert place(name) <= place(relative.parts[0]), f"{relative} imports {name}"


@pytest.mark.parametrize("path", [*MODULES, *TESTS], ids=lambda path: str(path.relative_to(ROOT)))
def test_a_file_stays_below_four_hundred_lines(path):
    """No source file and no test file reaches 400 lines."""
    assert len(path.read_text(encoding="utf-8").splitlines()) < 400


@pytest.mark.parametrize("package", ["record"])
def test_documents_need_no_numpy(package):
    """The documents can be read where numpy is not imported."""
    code = f"import narrowgauge.{package}.audit, narrowgauge.{package}.canonical, sys; sys.exit('numpy' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_importing_the_package_imports_nothing_heavy():
    """`import narrowgauge` and `narrowgauge --help` import neither numpy nor pandas."""
    code = (
        "import narrowgauge, narrowgauge.cli, sys\n"
        "try: narrowgauge.cli.main(['--help'])\n"
        "except SystemExit: pass\n"
        "sys.exit(bool({'numpy', 'pandas', 'scipy'} & set(sys.modules)))"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False, stdout=subprocess.DEVNULL).returncode == 0


def test_an_audit_does_not_import_pandas():
    """pandas is imported only when a table is asked for."""
    code = "import narrowgauge.api, sys; sys.exit('pandas' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_the_readme_prints_the_two_commands():
    """Each command stands on one line, does its own set-up, and the second is the one that .ci/run looks for."""
    lines = (ROOT / "README.md").read_text(encoding="utf-8").splitlines()
    commands = [line for line in lines if line.startswith("python3 -m venv .venv && ")]
    assert len(commands) == 2
    assert "narrowgauge audit examples/reserve/reserve.toml" in commands[0]
    assert "python -m pytest" in commands[1]
    assert "grep -m 1 -F 'python -m pytest' README.md" in (ROOT / ".ci" / "run").read_text(encoding="utf-8")
