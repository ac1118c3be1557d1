"""From the words "file.py:function" to a function that runs in an arithmetic of one's choice."""

from __future__ import annotations

import contextlib
import os
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from contextvars import ContextVar
from dataclasses import dataclass, field
from pathlib import Path
from types import CodeType, FunctionType
from typing import Any

import msgspec

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.dispatch.copies import Maker, PrivateCopy, copy_function, new_setting
from narrowgauge.dispatch.feed import Feed
from narrowgauge.dispatch.importing import Copies
from narrowgauge.dispatch.modules import Sources
from narrowgauge.dispatch.setting import Observer, Place
from narrowgauge.errors import AuditFileError, DispatchError, KernelError, said
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.audittables import KernelTable, LibraryTable
from narrowgauge.kernel.branchlibrary import PairLibrary
from narrowgauge.kernel.command import Command
from narrowgauge.kernel.fingerprint import fingerprint
from narrowgauge.kernel.identity import Origin, module_named, origin_of_sources
from narrowgauge.kernel.library import Library
from narrowgauge.kernel.listed import TWICE, allowed_lines, check_listed, compiled_code, located_file, sources_of

__all__ = [
    "WORKER",
    "KernelSource",
    "approximation_function",
    "branch_file",
    "executing",
    "find_kernel",
    "private_copy",
    "refuse_nested",
]

WORKER = "NARROWGAUGE_WORKER"  # in the environment of a worker process
_EXECUTING: ContextVar[bool] = ContextVar("_EXECUTING", default=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class KernelSource:
    """A kernel that was found: compiled code and a function's name in it, a function handed over, or what is `foreign`.

    `sources` holds the kernel's module and the listed ones, read and compiled once for all arms; `allowed` the lines of
    theirs that may let values leave, by the words of the audit file; `approximation` the user's function that makes
    approximate normals, if there is one; `branches` the functions of [branches] by "low" and "correction".
    """

    run: str
    source: str
    name: str
    code: CodeType | None
    module: str
    function: Callable[..., Any] | None
    sources: Sources
    allowed: Mapping[str, Place]
    approximation: KernelSource | None = None
    foreign: Library | Command | None = None
    branches: Mapping[str, KernelSource] = field(default_factory=dict)

    def digest(self) -> str:
        """Return the fingerprint of all that is copied: source texts, and the function that was handed over.

        That of a library or command is the one of its file; a function of the user's that makes normals counts too.

        Raises AuditFileError where a file cannot be read.
        """
        try:
            own = self._own_digest()
            further = {**({} if self.approximation is None else {"draws": self.approximation}), **self.branches}
            texts = {name: source.digest().encode() for name, source in further.items()}
            return fingerprint({"kernel": own.encode(), **texts}) if texts else own
        except OSError as problem:
            what = f"cannot read {problem.filename}: {problem.strerror}"
            raise AuditFileError(self.source, "kernel.modules", what, "Python files") from None

    def origin(self) -> Origin:
        """Return by what a policy knows the kernel: its syntax trees where it has a file of Python, else `digest`.

        A function of the user's that makes normals counts in `digest` alone. Raises AuditFileError as that does.
        """
        own = self.code.co_filename if self.function is None and self.code is not None else ""
        name = self.name
        if isinstance(self.function, FunctionType):
            own, name = self.function.__code__.co_filename, self.function.__qualname__
        if own.endswith(".py") and Path(own).is_file():
            with contextlib.suppress(OSError):  # a module that cannot be read, of which `digest` tells
                return origin_of_sources(Path(own), name, self.sources)
        self.digest()  # which says what cannot be read
        return Origin(
            fingerprint=self._own_digest(),
            covers="code" if self.foreign is None else "bytes",
            modules=self.sources.listed,
        )

    def _own_digest(self) -> str:
        """Return the digest without functions that are called beside the kernel; raises OSError."""
        if self.foreign is not None:
            return self.foreign.digest()
        return fingerprint(self.sources.texts(), self.function)


@contextmanager
def executing() -> Iterator[None]:
    """Note that code of the user's is being executed for an audit, while the context lasts."""
    token = _EXECUTING.set(True)
    try:
        yield
    finally:
        _EXECUTING.reset(token)


def refuse_nested(source: str) -> None:
    """Raise KernelError where an audit is about to begin inside another: each would begin the next, without end."""
    if _EXECUTING.get() or WORKER in os.environ:
        raise KernelError(
            f"{source}: an audit was started by a module that is executed for an audit; accepted: guard the call with "
            "if __name__ == '__main__'"
        )


def find_kernel(audit_file: AuditFile) -> KernelSource:
    """Find and compile the kernel that `[kernel] run` names, and find the modules that it lists, executing nothing.

    Raises AuditFileError where there is no such file or module, or it is not Python.
    """
    run, source = audit_file.kernel.run, audit_file.source
    if (foreign := _foreign(audit_file)) is not None:
        return KernelSource(
            run=run,
            source=source,
            name="",
            code=None,
            module="",
            function=None,
            sources=Sources(),
            allowed={},
            approximation=_approximation(audit_file),
            foreign=foreign,
            branches=_branches(audit_file),
        )
    target, _, name = run.rpartition(":")
    function, path = audit_file.function, None
    if function is None:
        path = located_file(target, audit_file)
    elif isinstance(function, FunctionType):
        path = Path(function.__code__.co_filename)
    sources = sources_of(audit_file, function, path, target)
    code, module = None, target
    if function is None and path is not None:
        module = module_named(sources, path, target)
        code = compiled_code(sources, sources.place(module, str(path)), "kernel.run", source)
    check_listed(audit_file, sources)
    return KernelSource(
        run=run,
        source=source,
        name=name,
        code=code,
        module=module,
        function=function,
        sources=sources,
        allowed=allowed_lines(audit_file, sources, path),
        approximation=_approximation(audit_file),
        branches=_branches(audit_file),
    )


def branch_file(audit_file: AuditFile, name: str) -> AuditFile:
    """Return the audit file by which the function `name` of [branches], "low" or "correction", is found and called."""
    table, kernel, library = audit_file.branches, audit_file.kernel, audit_file.library
    assert table is not None  # it names the function
    run = getattr(table, name)
    if run is None and library is not None:
        own = LibraryTable(
            path=table.library or library.path,
            symbol=table.symbol or library.symbol,
            parameters=library.parameters,
            outputs=library.outputs,
        )
        return msgspec.structs.replace(audit_file, library=own, draws=None, branches=None)
    allow = tuple(line for line in kernel.allow if line.rpartition(":")[0] == run.rpartition(":")[0])
    changed = msgspec.structs.replace(kernel, run=run, rounds=table.rounds or kernel.rounds, allow=allow)
    return msgspec.structs.replace(
        audit_file, kernel=changed, library=None, command=None, function=None, draws=None, branches=None
    )


def _branches(audit_file: AuditFile) -> dict[str, KernelSource]:
    """Find the functions of [branches] as a kernel is found."""
    table = audit_file.branches
    found = {}
    for name in ("low", "correction") if table is not None else ():
        if getattr(table, name) is not None:
            with _blaming(f"branches.{name}"):
                found[name] = find_kernel(branch_file(audit_file, name))
    if table is not None and table.symbol is not None:
        file = branch_file(audit_file, "correction")
        assert file.library is not None  # of the symbol
        with _blaming("branches.library", "library.path"):
            foreign = PairLibrary(file, file.library)
        found["correction"] = KernelSource(
            run=file.library.run, source=file.source, name="", code=None, module="", function=None, sources=Sources(),
            allowed={}, foreign=foreign,
        )  # fmt: skip
    return found


def _approximation(audit_file: AuditFile) -> KernelSource | None:
    """Find the user's function that makes approximate normals as a kernel is found; None where there is none."""
    draws = audit_file.draws
    if draws is None or draws.built_in:
        return None
    table = KernelTable(run=draws.approximate, takes="uniforms")
    with _blaming("draws.approximate"):
        return find_kernel(
            msgspec.structs.replace(
                audit_file, kernel=table, library=None, command=None, function=None, draws=None, branches=None
            )
        )


def approximation_function(kernel: KernelSource) -> Callable[..., Any] | None:
    """Return the user's function that makes approximate normals, to be run in plain NumPy; None where there is none.

    Raises what making a copy of a kernel raises.
    """
    if kernel.approximation is None:
        return None
    with _blaming("draws.approximate"):
        return private_copy(kernel.approximation, None).function


@contextmanager
def _blaming(key: str, said_of: str = "kernel.run") -> Iterator[None]:
    """Let what is said of one key, kernel.run unless told, be said of another, where that is what is looked for."""
    try:
        yield
    except AuditFileError as problem:
        if problem.key != said_of:
            raise
        raise AuditFileError(problem.source, key, problem.problem, problem.accepted) from None


def private_copy(
    kernel: KernelSource,
    arithmetic: Arithmetic | None,
    observer: Observer | None = None,
    draws: Feed | None = None,
    made: Maker = new_setting,
) -> PrivateCopy:
    """Return the kernel's function executed anew in `arithmetic`, or under plain NumPy for None.

    With `draws` numpy.random draws from there; else random numbers are refused, except under plain NumPy. `made` makes
    the setting, where it is to be another than usual.
    Raises AuditFileError where the module has no such function, or a module cannot be copied; KernelError where
    executing it raises.
    """
    setting = None if arithmetic is None else made(arithmetic, observer, draws)
    if setting is not None:
        setting.allowed = frozenset(kernel.allowed.values())
    copies = Copies(setting, kernel.sources, draws)
    try:
        with executing():
            if kernel.function is not None:
                return PrivateCopy(copy_function(kernel.function, setting, copies), setting, copies)
            module = copies.load(kernel.module)
    except KeyboardInterrupt:
        raise
    except BaseException as problem:  # whatever the user's module raises is the user's to see
        _raise_uncopied(kernel, copies, problem)
        if isinstance(problem, (DispatchError, KernelError)):
            raise
        what = f"{kernel.run}: executing the module raised {type(problem).__name__}: {said(problem)}"
        raise KernelError(what) from problem
    _raise_uncopied(kernel, copies, None)
    if setting is not None and setting.faults:  # the module swallowed it
        raise setting.faults[0]
    found = getattr(module, kernel.name, None)
    if not callable(found):
        known = sorted(
            n for n, v in vars(module).items() if callable(v) and getattr(v, "__module__", "") == kernel.module
        )
        assert kernel.code is not None  # find_kernel gives one of the two
        raise AuditFileError(
            kernel.source,
            "kernel.run",
            f"{kernel.code.co_filename} has no function {kernel.name!r}",
            "one of " + ", ".join(known) if known else "a file that defines a function",
        )
    return PrivateCopy(found, setting, copies)


def _foreign(audit_file: AuditFile) -> Library | Command | None:
    if audit_file.library is not None:
        return Library(audit_file, audit_file.library)
    return None if audit_file.command is None else Command(audit_file, audit_file.command)


def _raise_uncopied(kernel: KernelSource, copies: Copies, problem: BaseException | None) -> None:
    """Raise AuditFileError if a module could not be copied, also where the kernel went on without it."""
    if copies.refused is not None:
        name, reason = copies.refused
    elif copies.failed is not None and copies.failed[1] is problem and not isinstance(problem, DispatchError):
        name, reason = copies.failed[0], f"executing it anew raised {type(problem).__name__}: {said(problem)}"
        if name == kernel.module or isinstance(problem, KernelError):
            return
    else:
        return
    own = name == kernel.module
    accepted = "a module that can be executed twice" if own else TWICE
    key = "kernel.run" if own else "kernel.modules"
    raise AuditFileError(kernel.source, key, f"{name} cannot be copied: {reason}", accepted) from problem
