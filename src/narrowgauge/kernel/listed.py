"""The files of a kernel: where its module and the listed ones lie, and that copies can be made of them."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from types import CodeType

from narrowgauge.dispatch.modules import STOOD_IN, Found, Sources
from narrowgauge.dispatch.setting import Place
from narrowgauge.errors import AuditFileError
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.audittables import RULES, shown
from narrowgauge.kernel.identity import named_file, sources_beside

__all__ = ["TWICE", "allowed_lines", "check_listed", "compiled_code", "located_file", "sources_of"]

_OWN = __name__.partition(".")[0]
TWICE = "a module that can be executed twice; else list it under kernel.shared, where it is not rounded"


def sources_of(
    audit_file: AuditFile, function: Callable[..., object] | None, path: Path | None, target: str
) -> Sources:
    """Return where the listed modules of an audit file are searched for; its kernel may have been handed over."""
    packaged = "." in function.__module__ if function is not None else not target.endswith(".py")
    table = audit_file.kernel
    return sources_beside(audit_file.folder, path, packaged=packaged, modules=table.modules, shared=table.shared)


def check_listed(audit_file: AuditFile, sources: Sources) -> None:
    """Raise AuditFileError at the first listed module that is not there, or of which no copy can be made."""
    source = audit_file.source
    for key, names in (("kernel.modules", sources.listed), ("kernel.shared", sources.shared)):
        for name in names:
            found = sources.find(name)
            if name.partition(".")[0] == _OWN and key == "kernel.modules":
                raise AuditFileError(source, key, f"{name} is part of the audit itself", "modules of the kernel's own")
            if name.partition(".")[0] in STOOD_IN:
                what = f"{name} belongs to {name.partition('.')[0]}, for which every copy has a stand-in"
                raise AuditFileError(source, key, what, "modules of the kernel's own")
            if found is None:
                what = f"no Python module {name!r}"
                raise AuditFileError(source, key, what, "a module beside the kernel, or an importable one")
            if key == "kernel.shared":
                continue
            if found.instead:
                what = f"{name} cannot be copied: it is compiled, without Python source ({found.instead})"
                raise AuditFileError(source, key, what, TWICE)
            if found.file is not None:
                compiled_code(sources, found, key, source)


def allowed_lines(audit_file: AuditFile, sources: Sources, own: Path | None) -> dict[str, Place]:
    """Return the lines of kernel.allow; AuditFileError at the first that is no line of a file that is copied."""
    found = {}
    if audit_file.kernel.allow:
        copied = {file.resolve() for file in [*sources.files(), *([] if own is None else [own])]}
    for entry in audit_file.kernel.allow:
        name, _, number = entry.rpartition(":")
        path = (audit_file.folder / name).resolve()
        what, accepted = "", RULES["kernel.allow"].accepted
        if not path.is_file():
            what = f"no such file: {path}"
        elif path not in copied:
            what, accepted = "that file is not copied", "lines of the kernel's file and of those in kernel.modules"
        elif int(number) > (lines := len(sources.text(str(path)).splitlines())):
            what, accepted = f"the file ends with line {lines}", f"a line from 1 to {lines}"
        if what:
            raise AuditFileError(audit_file.source, "kernel.allow", f"{shown(entry)}: {what}", accepted)
        found[entry] = Place(str(path), int(number))
    return found


def compiled_code(sources: Sources, found: Found, key: str, source: str) -> CodeType:
    """Return the code of a module; AuditFileError where it cannot be read or is not Python."""
    path = found.file
    try:
        return sources.code(found)
    except OSError as problem:
        raise AuditFileError(source, key, f"cannot read {path}: {problem.strerror}", "a Python file") from None
    except (SyntaxError, ValueError) as problem:
        line = getattr(problem, "lineno", None)
        place = f"{path}:{line}" if line else str(path)
        what = getattr(problem, "msg", str(problem))
        raise AuditFileError(source, key, f"{place} is not Python: {what}", "a Python file") from None


def located_file(target: str, audit_file: AuditFile) -> Path:
    """Return the file of a path or of an importable module; nothing is imported."""
    path = named_file(target, audit_file.folder)
    if path is not None:
        return path
    if target.endswith(".py"):
        raise AuditFileError(
            audit_file.source,
            "kernel.run",
            f"no such file: {audit_file.folder / target}",
            "a Python file, relative to the audit file",
        )
    raise AuditFileError(
        audit_file.source,
        "kernel.run",
        f"no Python module {target!r}",
        "a file ending in .py, or an importable module",
    )
