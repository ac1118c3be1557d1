"""Whether a kernel is the one that was audited: its fingerprint, what that covers, and what it cannot see.

It is that of the syntax trees of the function's file and of the listed modules where there are any, so that formatting
does not change it and every version of Python gives the same. Importing this module imports neither numpy nor scipy.
"""

from __future__ import annotations

import functools
import hashlib
import sys
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from types import FunctionType
from typing import Any, Literal

from narrowgauge.dispatch.modules import Sources
from narrowgauge.errors import PolicyError
from narrowgauge.kernel.syntax import imported_names, syntax_digest

__all__ = [
    "Covers",
    "Origin",
    "identity_beside",
    "identity_of",
    "identity_of_command",
    "module_named",
    "named_file",
    "origin_of_sources",
    "sources_beside",
    "versions_of",
]

Covers = Literal["syntax trees", "bytes", "code"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Origin:
    """Where a kernel comes from: `fingerprint` of what it `covers`, `imports` that it does not follow."""

    fingerprint: str
    covers: Covers
    modules: tuple[str, ...] = ()
    imports: tuple[str, ...] = ()


def origin_of_sources(own: Path, name: str, sources: Sources) -> Origin:
    """Return the origin of the function of that name in a file, with the listed modules of `sources`.

    Raises OSError where a file cannot be read.
    """
    listed = sources.texts()
    for known in (None if sources.kernel is None else sources.kernel.name, sources.name_of(own.resolve())):
        if known is not None:
            listed.pop(known, None)
    text = sources.text(str(own))
    imports = set().union(imported_names(text), *map(imported_names, listed.values()))
    around = {module.partition(".")[0] for module in listed}
    return Origin(
        fingerprint=syntax_digest(text, name, listed),
        covers="syntax trees",
        modules=sources.listed,
        imports=tuple(sorted(imports - around)),
    )


def identity_of(kernel: Callable[..., Any] | str | Path, *, run: str, covers: Covers, modules: Sequence[str]) -> str:
    """Return the fingerprint of a kernel that is there now, to be compared with that of a policy.

    `kernel` is the function, or what an audit file's kernel.run says ("file.py:function", from the current folder), or
    the path of a library. `run`, `covers` and `modules` are those of the policy's kernel. Nothing of the kernel's is
    imported or run. Raises PolicyError where there is nothing to compare with.
    """
    try:
        if covers == "bytes":
            return _bytes_of(kernel)
        function = None if isinstance(kernel, str | Path) else _function(kernel)
        if covers == "code":
            return _code_of(function, modules)
        name = run.rpartition(":")[2]
        if function is None:
            path, name = _located(str(kernel))
        else:
            path = Path(function.__code__.co_filename)
            # Under another name in its module it is another kernel, whatever its file.
            name = name if _is_named(kernel, function, name) else function.__qualname__
        sources = Sources([path.parent], modules, last=[path.parent])
        missing = next((module for module in modules if sources.find(module) is None), None)
        if missing is not None:
            raise PolicyError(f"the module {missing!r}, which the policy's fingerprint covers, is not to be found")
        return origin_of_sources(path, name, sources).fingerprint
    except OSError as problem:
        raise PolicyError(f"the kernel cannot be read: {problem.filename}: {problem.strerror}") from None


def named_file(target: str, folder: Path) -> Path | None:
    """Return the file of a path relative to a folder, or of an importable module; None where it is not there.

    Nothing is imported.
    """
    if target.endswith(".py"):
        path = folder / target
        return path.resolve() if path.is_file() else None
    found = Sources([folder]).find(target)
    return None if found is None or found.file is None else Path(found.file)


def sources_beside(
    folder: Path, path: Path | None, *, packaged: bool, modules: Sequence[str], shared: Sequence[str]
) -> Sources:
    """Return where listed modules are searched for: the folder of a kernel that is no part of a package comes first.

    `folder` is that of the audit file, `path` the kernel's file.
    """
    beside = [] if path is None else [path.parent]
    # A package may hold a module of its own name, which must not hide it: its folder comes last.
    return Sources([folder] if packaged else [*beside, folder], modules, shared, last=beside)


def module_named(sources: Sources, path: Path, target: str) -> str:
    """Return the name of the kernel's module: that under which it was found, else that of its file, or what it says."""
    return sources.name_of(path) or (path.stem if target.endswith(".py") else target)


def identity_beside(folder: Path, run: str, *, modules: Sequence[str], shared: Sequence[str]) -> str:
    """Return the fingerprint of the Python kernel that an audit file in a folder names; nothing is imported or run.

    `run`, `modules` and `shared` are what its table [kernel] says. Raises PolicyError where something is not there.
    """
    target, _, name = run.rpartition(":")
    path = named_file(target, folder)
    if path is None:
        raise PolicyError(f"there is no {target}")
    sources = sources_beside(folder, path, packaged=not target.endswith(".py"), modules=modules, shared=shared)
    sources.place(module_named(sources, path, target), str(path))
    missing = next((module for module in modules if sources.find(module) is None), None)
    if missing is not None:
        raise PolicyError(f"there is no module {missing!r}, which kernel.modules lists")
    try:
        return origin_of_sources(path, name, sources).fingerprint
    except OSError as problem:
        raise PolicyError(f"{problem.filename} cannot be read: {problem.strerror}") from None


def identity_of_command(folder: Path, words: Sequence[str]) -> str:
    """Return the fingerprint of a command's words and of the files among them that lie in the audit file's folder.

    Other programs count by their name: a record must not differ because of where they are installed. Raises OSError.
    """
    total = hashlib.sha256()
    for word in words:
        path = folder / word
        inside = path.resolve().is_relative_to(folder.resolve())
        text = path.read_bytes() if inside and path.is_file() else b""
        total.update(f"{word} {hashlib.sha256(text).hexdigest()}\n".encode("utf-8", "surrogateescape"))
    return f"sha256:{total.hexdigest()}"


def versions_of(imports: Iterable[str]) -> dict[str, str]:
    """Return the versions of the packages that these top-level modules belong to, as far as they are installed."""
    from importlib import metadata  # a gate on a finished audit does without

    found: dict[str, str] = {}
    others: list[str] = []
    for name in sorted(set(imports)):
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            others.append(name)
    if others:  # of another name than the module's; looking through all that is installed takes a while
        owners = metadata.packages_distributions()
        names = sorted({owner for name in others for owner in owners.get(name, ())})
        found |= {owner: metadata.version(owner) for owner in names}
    return found


def _bytes_of(kernel: object) -> str:
    if not isinstance(kernel, str | Path):
        raise PolicyError("the policy's kernel is a library, not a Python function; accepted: the path of the library")
    return f"sha256:{hashlib.sha256(Path(kernel).read_bytes()).hexdigest()}"


def _code_of(function: FunctionType | None, modules: Sequence[str]) -> str:
    if function is None:
        raise PolicyError("the policy's kernel has no file: its code was audited; accepted: the function itself")
    from narrowgauge.kernel.fingerprint import fingerprint

    return fingerprint(Sources([], modules).texts(), function)


def _function(kernel: Any) -> FunctionType:
    """Return the Python function inside what is called: a partial, a method, or what a compiler made of one."""
    for _ in range(16):
        if isinstance(kernel, FunctionType):
            return kernel
        if isinstance(kernel, functools.partial):
            kernel = kernel.func
        else:
            kernel = getattr(kernel, "py_func", None) or getattr(kernel, "__func__", None)
    raise PolicyError("the kernel is no Python function; accepted: a function, or file.py:function")


def _is_named(kernel: object, function: FunctionType, name: str) -> bool:
    """Return whether a function stands in its module under a name, or is what stands there, compiled or wrapped."""
    there = function.__globals__.get(name)
    return function.__qualname__ == name or there is kernel or there is function


def _located(run: str) -> tuple[Path, str]:
    """Return the file and the function's name of "file.py:function" or "package.module:function"."""
    target, _, name = run.rpartition(":")
    if not target:
        raise PolicyError(f"{run!r} names no function; accepted: file.py:function, or package.module:function")
    if target.endswith(".py"):
        return Path(target), name
    found = Sources([Path(folder) for folder in sys.path[:1]]).find(target)
    if found is None or found.file is None:
        raise PolicyError(f"there is no Python module {target!r}; accepted: file.py:function, or an importable module")
    return Path(found.file), name
