"""Where the kernel's modules lie: which are copied, which are shared, and the code of each, compiled once for all arms.

Nothing is imported to find this out. A package name lists all of it; of two names that list a module the longer counts.
"""

from __future__ import annotations

import importlib.util
import sys
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from importlib.machinery import ModuleSpec, PathFinder
from pathlib import Path
from types import CodeType, ModuleType
from typing import Any

__all__ = ["STOOD_IN", "Found", "Sources", "absolute_name", "listed_name", "new_module"]

# Modules that every copy meets as stand-ins, so that they are never copied themselves.
STOOD_IN = frozenset({
    "builtins", "cmath", "decimal", "fractions", "importlib", "json", "math", "numba", "numpy", "pickle", "random",
    "scipy", "secrets", "statistics", "sys",
})  # fmt: skip  # rows


@dataclass(frozen=True, slots=True, kw_only=True)
class Found:
    """A module that was found: the file of its source, the folders of a package, or what stands in a source's place."""

    name: str
    file: str | None = None
    folders: tuple[str, ...] | None = None
    instead: str = ""


class Sources:
    """The sources of one kernel: its own module and every listed one.

    They are searched for in `folders`, then on Python's path, then in `last`. What was found,
    read and compiled is kept, so that all copies are made of one reading.
    """

    def __init__(
        self,
        folders: Sequence[Path] = (),
        listed: Sequence[str] = (),
        shared: Sequence[str] = (),
        *,
        last: Sequence[Path] = (),
    ) -> None:
        self.folders, self.last = tuple(map(str, folders)), tuple(map(str, last))
        self.listed, self.shared = tuple(listed), tuple(shared)
        self.kernel: Found | None = None
        self._found: dict[str, Found | None] = {}
        self._texts: dict[str, bytes] = {}
        self._codes: dict[str, CodeType] = {}

    @classmethod
    def alone(cls, code: CodeType, name: str) -> Sources:
        """Return the sources of a kernel whose module is compiled already and lists no other one."""
        sources = cls(folders=[Path(code.co_filename).parent])
        sources.place(name, code.co_filename)
        sources._codes[code.co_filename] = code
        return sources

    def place(self, name: str, file: str) -> Found:
        """State the kernel's own module: `file` is searched for no more."""
        folders = (str(Path(file).parent),) if Path(file).name == "__init__.py" else None
        self.kernel = self._found[name] = Found(name=name, file=file, folders=folders)
        return self.kernel

    def copies(self, name: str) -> bool:
        """Whether imports of that name get a private copy."""
        if self.kernel is not None and name == self.kernel.name:
            return name not in STOOD_IN and name not in sys.stdlib_module_names
        return self._nearest(name) in self.listed

    def shares(self, name: str) -> bool:
        """Whether a module of that name is imported for real, because it is listed under `shared`."""
        return not self.copies(name) and self._nearest(name) in self.shared

    def contains(self, name: str) -> bool:
        """Whether a module of that name is a package around a copied module, without being copied itself."""
        around = [*self.listed, *([self.kernel.name] if self.kernel is not None else [])]
        return not self.copies(name) and any(inner.startswith(f"{name}.") for inner in around)

    def find(self, name: str) -> Found | None:
        """Return where a module lies, or None if there is none of that name; nothing is imported."""
        if name not in self._found:
            self._found[name] = self._searched(name)
        return self._found[name]

    def code(self, found: Found) -> CodeType:
        """Return the compiled source of a module that has one.

        Raises OSError where it cannot be read, SyntaxError or ValueError where it is not Python.
        """
        assert found.file is not None
        known = self._codes.get(found.file)
        if known is None:  # two threads may compile it at once: the first one's is kept
            made = compile(self.text(found.file), found.file, "exec", dont_inherit=True)
            known = self._codes.setdefault(found.file, made)
        return known

    def text(self, file: str) -> bytes:
        """Return what a file held when it was first read; raises OSError."""
        known = self._texts.get(file)
        return known if known is not None else self._texts.setdefault(file, Path(file).read_bytes())

    def texts(self) -> dict[str, bytes]:
        """Return the source of the kernel's module and of all that is listed, by name of the module in order.

        A package counts with every file below it, imported or not. Raises OSError.
        """
        files = {found.name: found.file for found in self._copied() if found.file is not None}
        return {name: self.text(files[name]) for name in sorted(files)}

    def files(self) -> list[Path]:
        """Return the files of the kernel's module and of all that is listed, imported or not."""
        return [Path(found.file) for found in self._copied() if found.file is not None]

    def name_of(self, file: Path) -> str | None:
        """Return the full name of a file that lies inside a listed package, or None."""
        for name in self.listed:
            found = self.find(name)
            for folder in () if found is None or found.folders is None else found.folders:
                root = Path(folder).resolve()
                if file.is_relative_to(root):
                    return _dotted(name, file.relative_to(root))
        return None

    def _nearest(self, name: str) -> str:
        """Return the longest listed or shared name that stands for a module, or an empty string."""
        while name and name not in self.listed and name not in self.shared:
            name = name.rpartition(".")[0]
        return name

    def _searched(self, name: str) -> Found | None:
        parent, _, last = name.rpartition(".")
        if parent:
            above = self.find(parent)
            if above is None or above.folders is None:
                return None
            # By its last name alone: under its full name a package without __init__.py asks sys.modules for its parent.
            return _found_as(name, PathFinder.find_spec(last, list(above.folders)))
        spec = PathFinder.find_spec(name, [*self.folders, *sys.path, *self.last])
        for finder in sys.meta_path if spec is None else ():  # what was installed to be edited has finders of its own
            spec = finder.find_spec(name, None)
            if spec is not None:
                break
        return _found_as(name, spec)

    def _copied(self) -> Iterator[Found]:
        """Yield the kernel's module, every listed one, and every file of a listed package."""
        if self.kernel is not None:
            yield self.kernel
        for name in self.listed:
            found = self.find(name)
            if found is None:
                continue
            yield found
            for folder in found.folders or ():
                for file in sorted(Path(folder).rglob("*.py")):
                    inner = _dotted(name, file.relative_to(folder))
                    if self.copies(inner):
                        yield Found(name=inner, file=str(file.resolve()))


def listed_name(name: str) -> str:
    """Return how a message tells what to list for the module of a function that was handed over."""
    return "its module, moved into a file," if name == "__main__" else f'"{name}"'


def _dotted(package: str, path: Path) -> str:
    """Return the name of the module in a file below a package's folder."""
    parts = path.with_suffix("").parts
    return ".".join([package, *(parts[:-1] if parts[-1] == "__init__" else parts)])


def _found_as(name: str, spec: ModuleSpec | None) -> Found | None:
    if spec is None:
        return None
    inside = spec.submodule_search_locations
    folders = None if inside is None else tuple(inside)
    origin = spec.origin or ""
    if origin.endswith(".py"):
        return Found(name=name, file=str(Path(origin).resolve()), folders=folders)
    if folders and not spec.has_location:  # a package without __init__.py
        return Found(name=name, folders=folders)
    return Found(name=name, folders=folders, instead=origin or "no file")


def new_module(found: Found) -> ModuleType:
    """Return a new module with the attributes that Python's own import gives."""
    if found.file is None:
        spec = ModuleSpec(found.name, None, is_package=True)
        spec.submodule_search_locations = list(found.folders or ())
    else:
        inside = None if found.folders is None else list(found.folders)
        known = importlib.util.spec_from_file_location(found.name, found.file, submodule_search_locations=inside)
        assert known is not None  # the name of the file ends in .py
        spec = known
    return importlib.util.module_from_spec(spec)


def absolute_name(name: str, names: Mapping[str, Any], level: int) -> str:
    """Return the full name of a module that code with these names imports; raises ImportError as Python does.

    The folder of a kernel that is named by its file counts as a package without a name.
    """
    if not level:
        return name
    package = names.get("__package__")
    if package is None:
        package = names.get("__name__", "")
        if "__path__" not in names:
            package = package.rpartition(".")[0]
    parts = package.split(".") if package else []
    if level - 1 > max(len(parts) - 1, 0):
        raise ImportError("attempted relative import beyond top-level package")
    above = parts[: len(parts) - (level - 1)] if parts else []
    return ".".join([*above, *([name] if name else [])])
