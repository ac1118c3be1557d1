"""From the words "file.py:function" to a function that runs in an arithmetic of one's choice."""

from __future__ import annotations

import sys
from collections.abc import Callable
from dataclasses import dataclass
from importlib.machinery import PathFinder
from pathlib import Path
from types import CodeType
from typing import Any

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.dispatch.copies import PrivateCopy, copy_function, copy_module, new_setting
from narrowgauge.dispatch.setting import Observer
from narrowgauge.errors import AuditFileError, DispatchError, KernelError
from narrowgauge.kernel.auditfile import AuditFile

__all__ = ["KernelSource", "find_kernel", "private_copy"]


@dataclass(frozen=True, slots=True, kw_only=True)
class KernelSource:
    """A kernel that was found: compiled code and the function's name in it, or a function handed over from Python."""

    run: str
    source: str
    name: str
    code: CodeType | None
    module: str
    function: Callable[..., Any] | None


def find_kernel(audit_file: AuditFile) -> KernelSource:
    """Find and compile the kernel that `[kernel] run` names, without executing it.

    Raises AuditFileError where there is no such file or module, or it is not Python.
    """
    run, source = audit_file.kernel.run, audit_file.source
    target, _, name = run.rpartition(":")
    if audit_file.function is not None:
        return KernelSource(run=run, source=source, name=name, code=None, module=target, function=audit_file.function)
    path = _located(target, audit_file)
    try:
        text = path.read_bytes()
        code = compile(text, str(path), "exec", dont_inherit=True)
    except OSError as problem:
        raise AuditFileError(source, "kernel.run", f"cannot read {path}: {problem.strerror}", "a Python file") from None
    except (SyntaxError, ValueError) as problem:
        line = getattr(problem, "lineno", None)
        place = f"{path}:{line}" if line else str(path)
        what = getattr(problem, "msg", str(problem))
        raise AuditFileError(source, "kernel.run", f"{place} is not Python: {what}", "a Python file") from None
    module = path.stem if target.endswith(".py") else target
    return KernelSource(run=run, source=source, name=name, code=code, module=module, function=None)


def private_copy(kernel: KernelSource, arithmetic: Arithmetic | None, observer: Observer | None = None) -> PrivateCopy:
    """Return the kernel's function executed anew in `arithmetic`, or under plain NumPy for None.

    Raises AuditFileError where the module has no such function, KernelError where executing it raises.
    """
    setting = None if arithmetic is None else new_setting(arithmetic, observer)
    if kernel.code is None:
        assert kernel.function is not None  # find_kernel gives one of the two
        function = kernel.function if setting is None else copy_function(kernel.function, setting)
        return PrivateCopy(function, setting)
    try:
        module = copy_module(kernel.code, kernel.module, setting)
    except (DispatchError, KernelError):
        raise
    except (Exception, SystemExit) as problem:  # whatever the user's module raises is the user's to see
        raise KernelError(f"{kernel.run}: executing the module raised {type(problem).__name__}: {problem}") from problem
    found = getattr(module, kernel.name, None)
    if not callable(found):
        known = sorted(
            n for n, v in vars(module).items() if callable(v) and getattr(v, "__module__", "") == kernel.module
        )
        raise AuditFileError(
            kernel.source,
            "kernel.run",
            f"{kernel.code.co_filename} has no function {kernel.name!r}",
            "one of " + ", ".join(known) if known else "a file that defines a function",
        )
    return PrivateCopy(found, setting)


def _located(target: str, audit_file: AuditFile) -> Path:
    """Return the file of a path or of an importable module; nothing is imported."""
    if target.endswith(".py"):
        path = audit_file.folder / target
        if path.is_file():
            return path.resolve()
        raise AuditFileError(
            audit_file.source,
            "kernel.run",
            f"no such file: {path}",
            "a Python file, relative to the audit file",
        )
    where: list[str] | None = [str(audit_file.folder), *sys.path]
    parts = target.split(".")
    for depth, part in enumerate(parts):
        # By its last name alone: under its full name a package without __init__.py asks sys.modules for its parent.
        spec = PathFinder.find_spec(part, where)
        if spec is None:
            break
        where = None if spec.submodule_search_locations is None else list(spec.submodule_search_locations)
        if depth == len(parts) - 1 and spec.origin and spec.origin.endswith(".py"):
            return Path(spec.origin).resolve()
        if where is None:
            break
    raise AuditFileError(
        audit_file.source,
        "kernel.run",
        f"no Python module {target!r}",
        "a file ending in .py, or an importable module",
    )
