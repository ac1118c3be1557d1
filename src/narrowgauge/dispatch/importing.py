"""The set of private copies of one run, and the `__import__` that its modules meet.

A copied module gets copies of the other listed modules, stand-ins for NumPy and its kin, and everything else for real.
Neither sys.modules nor sys.path learns of a copy: what looks itself up there cannot be copied, and is refused.
"""

from __future__ import annotations

import builtins
import sys
import sysconfig
import threading
from collections.abc import Callable, Iterable, Mapping
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np

from narrowgauge.dispatch.compiled import exchanged_module, numba_namespace
from narrowgauge.dispatch.feed import Feed
from narrowgauge.dispatch.fixeddraws import FixedDraws
from narrowgauge.dispatch.foreign import scipy_namespace
from narrowgauge.dispatch.kinds import TYPE
from narrowgauge.dispatch.mathematics import (
    cmath_namespace,
    fractions_namespace,
    math_namespace,
    statistics_namespace,
)
from narrowgauge.dispatch.modules import STOOD_IN, Found, Sources, absolute_name, listed_name, new_module
from narrowgauge.dispatch.namespaces import Namespace, importlib_namespace, sys_namespace, typing_namespace
from narrowgauge.dispatch.outlets import decimal_namespace, json_namespace, pickle_namespace
from narrowgauge.dispatch.randoms import random_namespace
from narrowgauge.dispatch.setting import Setting
from narrowgauge.dispatch.standin import (
    builtins_namespace,
    dataclasses_namespace,
    numpy_namespace,
    refusing_namespace,
)
from narrowgauge.dispatch.variates import plain_scipy
from narrowgauge.errors import KernelError, RefusedError

__all__ = ["Copies"]

_LEAF = ("__name__",)  # asks __import__ for the module of the full name, and for nothing in it
_TABLE = threading.RLock()  # held while a module is executed, so that no other copy's imports look like its changes
_INSTALLED = frozenset(sysconfig.get_paths().values())


class Copies:
    """The private copies of one setting; under plain NumPy for None, so that both runs see the same modules.

    With `draws` numpy.random is exchanged in either case, and draws from there. `shared` and `compiled` are what was
    met and not copied as it is: modules imported for real, and functions whose Python original runs in place of the
    compiled one. `refused` is the first module that cannot be copied, with the reason; `failed` the module whose
    execution raised last, with the exception. `handed` is the module of a function that was handed over: it is copied
    without its module, so that nothing may import that.
    """

    def __init__(self, setting: Setting | None, sources: Sources, draws: Feed | None = None) -> None:
        self.setting = setting
        self.draws = draws
        self.sources = sources
        self.modules: dict[str, ModuleType] = {}
        self.shared: set[str] = set()
        self.compiled: set[str] = set()
        self.handed = ""
        self.refused: tuple[str, str] | None = None
        self.failed: tuple[str, BaseException] | None = None
        self._path = list(sys.path)
        self._real: set[str] = set()
        self._standins: dict[str, Any] = {}
        self._fixed = FixedDraws(setting, lambda: self._under_way > 0)
        self._under_way = 0  # modules that are being executed
        self._makers = self._makers_of_standins()
        known = None if setting is None else builtins_namespace(setting)
        self._chosen = {} if known is None else {name: getattr(known, name) for name in ("max", "min")}
        if setting is not None or draws is not None:  # else nothing stands in for another value
            self._chosen["type"] = TYPE

    def load(self, name: str) -> Any:
        """Return the private copy of a module, executed at the first call, or a shared module for real.

        Raises what executing it raises, and RefusedError (KernelError under plain NumPy) for what cannot be copied
        and for a module of a copied one's package that is not listed.
        """
        if name in self.modules:
            return self.modules[name]
        sources, (parent, _, last) = self.sources, name.rpartition(".")
        above = self.load(parent) if parent and (sources.copies(parent) or sources.contains(parent)) else None
        if name in self.modules:  # the package imports it by itself
            return self.modules[name]
        if sources.shares(name):
            module = self._shared(name)
            if above is not None:
                setattr(above, last, module)
            return module
        hollow = sources.contains(name)
        is_kernel = sources.kernel is not None and name == sources.kernel.name  # which may have a name of Python's own
        if not hollow and not is_kernel and not sources.copies(name):
            raise self.unlisted(name, name)
        found = sources.find(name)
        if hollow:  # not executed: only what is listed inside it is there
            found = Found(name=name, folders=None if found is None else found.folders)
            return self._executed(found, above)
        if found is None:
            raise ModuleNotFoundError(f"No module named {name!r}", name=name)
        if found.instead:
            raise self.refuse(name, f"it is compiled, without Python source ({found.instead})")
        return self._executed(found, above)

    def stand_in(self, name: str) -> Any:
        """Return the stand-in for a module under its full name, or None if it has none."""
        top, _, inner = name.partition(".")
        if top not in self._makers:
            return None
        if top not in self._standins:
            self._standins[top] = self._makers[top]()
        module = self._standins[top]
        for part in inner.split(".") if inner else ():
            module = getattr(module, part)
        return module

    def importer(self, names: dict[str, Any]) -> Callable[..., Any]:
        """Return the `__import__` of a module with these names."""

        def hand_out(
            name: str,
            globals: Mapping[str, Any] | None = None,
            locals: Mapping[str, Any] | None = None,
            fromlist: Iterable[str] | None = (),
            level: int = 0,
        ) -> Any:
            if name == "dataclasses" and level == 0:
                return dataclasses_namespace(names)
            full = absolute_name(name, names if globals is None else globals, level)
            return self._handed("." * level + name, full, tuple(fromlist or ()), level)

        return hand_out

    def builtins(self, names: dict[str, Any]) -> dict[str, Any]:
        """Return the `__builtins__` of a module with these names."""
        return {**vars(builtins), **self._chosen, "__import__": self.importer(names)}

    def refuse(self, name: str, reason: str) -> Exception:
        """Return the error for a module that cannot be copied, to be raised; the first one is kept."""
        self.refused = self.refused or (name, reason)
        return self._fault(
            f"{name} cannot be copied: {reason}. Accepted: list it under kernel.shared, where it is not rounded"
        )

    def unlisted(self, spelled: str, name: str) -> Exception:
        """Return the error for a module beside a copied one that is not listed, to be raised."""
        return self._fault(
            f"the kernel imports {spelled}, which lies beside it and is not listed: its NumPy would not be rounded. "
            f'Accepted: "{name}" in kernel.modules, or in kernel.shared to run it as it is'
        )

    def _fault(self, message: str) -> Exception:
        return KernelError(message) if self.setting is None else self.setting.fault(RefusedError, message)

    def _makers_of_standins(self) -> dict[str, Callable[[], Any]]:
        """Return what makes the stand-in for each top-level module; those of NumPy's kin only under a setting."""
        makers: dict[str, Callable[[], Any]] = {
            "builtins": lambda: Namespace(builtins, self.builtins({})),
            "importlib": lambda: importlib_namespace(self._named, self._is_private),
            "numba": lambda: numba_namespace(self.stand_in("numpy"), self.compiled.add, self._for_real),
            "pickle": lambda: pickle_namespace(self.setting, self.counterpart, self.load),
            "sys": lambda: sys_namespace(self._path, self._looked_up, self._changing),
            "typing": lambda: typing_namespace(lambda name: getattr(self.modules.get(name), "__dict__", None)),
        }
        setting, draws = self.setting, self.draws
        makers["random"] = self._fixed.python
        if draws is None:
            makers["numpy"] = self._fixed.numpy
        if setting is None and draws is not None:  # plain NumPy, on the tape that the other runs draw from
            makers["numpy"] = lambda: Namespace(np, {"random": random_namespace(draws)})
            makers["scipy"] = lambda: plain_scipy(draws, self._for_real)
        if setting is not None:
            makers["cmath"] = lambda: cmath_namespace(setting)
            makers["decimal"] = lambda: decimal_namespace(setting)
            makers["fractions"] = lambda: fractions_namespace(setting)
            makers["json"] = lambda: json_namespace(setting)
            makers["math"] = lambda: math_namespace(setting)
            makers["scipy"] = lambda: scipy_namespace(setting, self._for_real)
            if draws is not None:
                makers["numpy"] = lambda: numpy_namespace(setting, random_namespace(draws))
            makers["statistics"] = lambda: statistics_namespace(setting)
            makers["secrets"] = lambda: refusing_namespace("secrets", setting)
        return makers

    def _handed(self, spelled: str, name: str, fromlist: tuple[str, ...], level: int) -> Any:
        """Return what an import statement gets: the top-level module, or with `fromlist` the named one."""
        if name and name == self.handed and not self.sources.copies(name) and not self.sources.shares(name):
            what = f"the kernel imports {name}, the module of the function that was handed over without it"
            raise self._fault(f"{what}. Accepted: {listed_name(name)} in kernel.modules, which executes it anew")
        if not name:  # from . import x, in a module of the kernel's folder
            holder = ModuleType("")
            for item in fromlist:
                if not self._is_private(item) and not self.sources.shares(item):
                    raise self.unlisted(spelled + item, item)
                setattr(holder, item, self.load(item))
            return holder
        top = name.partition(".")[0]
        known = None if level else self.stand_in(top)
        if known is not None:
            self._tracked(name, _LEAF)  # its own error where there is no such module
            return known if not fromlist else self.stand_in(name)
        if self._is_private(top):
            if not self._is_private(name) and not self.sources.shares(name):
                raise self.unlisted(spelled, name)
            module = self.load(name)
            if fromlist and name in self.modules:
                self._complete(module, name, fromlist, spelled)
            return module if fromlist else self.load(top)
        if self.sources.shares(name):
            return self._shared(name, top=not fromlist)
        if level or self._is_beside(top):
            raise self.unlisted(spelled, name)
        return exchanged_module(self._tracked(name, fromlist), self.setting, self.counterpart)

    def _is_private(self, name: str) -> bool:
        return self.sources.copies(name) or self.sources.contains(name)

    def _is_beside(self, name: str) -> bool:
        """Whether a module of that name lies in the kernel's folder; what is installed there is not the user's."""
        if name in STOOD_IN or name in sys.stdlib_module_names:
            return False
        kernel = self.sources.kernel
        folders = [] if kernel is None or kernel.file is None else [str(Path(kernel.file).parent)]
        folders += [folder for folder in self._path if folder not in sys.path]  # the kernel's own sys.path.insert
        return any(
            folder not in _INSTALLED
            and (Path(folder, f"{name}.py").is_file() or Path(folder, name, "__init__.py").is_file())
            for folder in folders
        )

    def _named(self, name: str) -> Any:
        """Return the module of a full name, as importlib.import_module does."""
        return self._handed(name, name, _LEAF, 0)

    def _complete(self, module: Any, name: str, fromlist: Iterable[str], spelled: str) -> None:
        """Load the modules inside a package that `from package import ...` asks for."""
        if not hasattr(module, "__path__"):
            return
        for item in fromlist:
            if item == "*":
                words = [word for word in getattr(module, "__all__", ()) if word != "*"]
                self._complete(module, name, words, spelled)
            elif not hasattr(module, item):
                inner = f"{name}.{item}"
                is_there = self.sources.find(inner) is not None
                if self.sources.contains(name) and not self._is_private(inner) and not self.sources.shares(inner):
                    raise self.unlisted(spelled, inner if is_there else name)
                if is_there:
                    self.load(inner)

    def _shared(self, name: str, *, top: bool = False) -> Any:
        """Import a shared module for real, also from the kernel's folder; functions in it that are compiled are met."""
        self.shared.add(name)
        path = sys.path
        sys.path = [*path, *self.sources.folders, *self.sources.last]
        try:
            module = self._tracked(name, () if top else _LEAF)
        finally:
            sys.path = path
        return exchanged_module(module, self.setting, self.counterpart)

    def _for_real(self, name: str) -> ModuleType:
        """Import a module for real, and return the one of the full name."""
        module: ModuleType = self._tracked(name, _LEAF)
        return module

    def _tracked(self, name: str, fromlist: tuple[str, ...]) -> Any:
        """Import for real, and remember what came into sys.modules with it."""
        if name in sys.modules and fromlist in ((), _LEAF):  # no module is executed
            return builtins.__import__(name, None, None, fromlist, 0)
        with _TABLE:
            before = set(sys.modules)
            try:
                return builtins.__import__(name, None, None, fromlist, 0)
            finally:
                self._real |= set(sys.modules) - before

    def counterpart(self, value: Any) -> Any:
        """Return what stands in a private copy where a function or class stands in its listed module, or None."""
        name, inside = getattr(value, "__module__", None), getattr(value, "__qualname__", "")
        if not isinstance(name, str) or not self.sources.copies(name) or "<" in inside:
            return None
        found: Any = self.load(name)
        for part in inside.split("."):
            found = getattr(found, part, None)
        return found

    def _executed(self, found: Found, above: Any) -> ModuleType:
        with _TABLE:
            return self._made(found, above)

    def _made(self, found: Found, above: Any) -> ModuleType:
        """Make the module and execute its source, if it has one, with the table of modules watched."""
        module = new_module(found)
        last = found.name.rpartition(".")[2]
        had = None if above is None else vars(above).get(last)
        self.modules[found.name] = module
        if above is not None:
            # Before it is executed: where a circular import finds no attribute, Python asks sys.modules.
            setattr(above, last, module)
        before = dict(sys.modules)
        try:
            if found.file is not None:
                code = self.sources.code(found)
                if self.setting is not None:
                    self.setting.files.add(found.file)
                module.__dict__["__builtins__"] = self.builtins(module.__dict__)
                self._under_way += 1
                try:
                    exec(code, module.__dict__)
                finally:
                    self._under_way -= 1
        except BaseException as problem:  # an interrupt, too, must not leave half a module to be found; raised on
            del self.modules[found.name]
            if above is not None:
                setattr(above, last, had) if had is not None else vars(above).pop(last, None)
            if self.failed is None or self.failed[1] is not problem:
                self.failed = found.name, problem
            raise
        finally:
            changed = self._restored(before)
        if changed:
            raise self._changing(changed, found.name)
        if above is not None:
            setattr(above, last, module)
        return module

    def _restored(self, before: dict[str, Any]) -> str:
        """Undo what executing a copy did to sys.modules, apart from importing; the name of an entry it changed."""
        changed = ""
        for name, module in before.items():
            if sys.modules.get(name) is not module:
                sys.modules[name] = module
                changed = changed or name
        for name in set(sys.modules) - before.keys() - self._real:
            # Anything else is the doing of a real module that was imported late: compiled ones enter odd things.
            if self._is_private(name) or any(sys.modules[name] is copy for copy in self.modules.values()):
                del sys.modules[name]
                changed = changed or name
        return changed

    def _looked_up(self, name: str) -> Any:
        """Answer for an entry of sys.modules that copied code reads."""
        if self.sources.copies(name):
            raise self.refuse(name, "it is looked up in sys.modules, where no copy is")
        known = self.stand_in(name) if name in sys.modules else None
        return sys.modules[name] if known is None else known

    def _changing(self, name: str, by: str = "") -> Exception:
        """Return the error for an entry of sys.modules that copied code sets or deletes."""
        by = by or self._running()
        return self.refuse(by, f"it changes sys.modules[{name!r}]")

    def _running(self) -> str:
        """Return the name of the copied module whose code is running innermost."""
        frame = sys._getframe(1)
        while frame is not None:
            name = frame.f_globals.get("__name__")
            if name in self.modules and self.modules[name].__dict__ is frame.f_globals:
                return str(name)
            frame = frame.f_back  # type: ignore[assignment]  # None ends the loop
        return "the kernel"
