"""The random numbers of a module that the audit does not serve: constants at import, refused in a run.

A kernel that is handed its draws must not draw further ones. Its module may make generators all the same, seed them,
hand them on, and draw from a seeded one while it is executed: every copy draws the same numbers there, which are
constants. Without a seed they would differ from copy to copy. Python's `random` is met in this way by every kernel.
The user's own global generators are never touched, by the run in plain NumPy either.
"""

from __future__ import annotations

import copy
import random
from collections.abc import Callable
from types import ModuleType
from typing import Any

import numpy as np

from narrowgauge.dispatch.array import as_state
from narrowgauge.dispatch.namespaces import Namespace
from narrowgauge.dispatch.setting import Setting
from narrowgauge.dispatch.standin import NO_DRAWS, numpy_namespace, refusing_generator, refusing_namespace
from narrowgauge.errors import RefusedError

__all__ = ["FixedDraws"]

_BIT_GENERATORS = ("MT19937", "PCG64", "PCG64DXSM", "Philox", "SFC64")
_ALIASES = {"ranf": "random_sample", "sample": "random_sample"}
_SEEDS = frozenset({"seed", "set_state", "setstate"})
_QUIET = _SEEDS | {"get_state", "getstate", "jumped", "spawn"}  # methods that draw nothing


class _Held:
    """Stands in for a generator or bit generator of NumPy, or one of Python's; `_is_seeded` as plain code seeds it."""

    _fixed: FixedDraws
    _kind: type
    _plain: Any
    _is_seeded: bool
    _shown: str

    def __init__(self, *given: Any, **named: Any) -> None:
        seeds = [*given, *named.values()]
        bare = {name: _bare(value) for name, value in named.items()}
        self._own(self._kind(*map(_bare, given), **bare), bool(seeds) and all(map(self._fixed.is_seeded, seeds)))

    def _own(self, plain: Any, is_seeded: bool, shown: str = "") -> None:
        self.__dict__.update(_plain=plain, _is_seeded=is_seeded, _shown=shown or self._kind.__name__)

    def __getattr__(self, name: str) -> Any:
        if name.startswith("__"):
            raise AttributeError(f"{self._kind.__name__!r} object has no attribute {name!r}")
        found = getattr(self._plain, name)
        if isinstance(found, np.random.BitGenerator):
            return self._fixed.held(found, self._is_seeded)
        return self._guarded(name, found) if callable(found) else found

    def __setattr__(self, name: str, value: Any) -> None:
        setattr(self._plain, name, value)
        self.__dict__["_is_seeded"] = True  # by its state

    def __deepcopy__(self, memo: dict[int, Any]) -> Any:
        return self._fixed.held(copy.deepcopy(self._plain, memo), self._is_seeded)

    def _guarded(self, name: str, found: Callable[..., Any]) -> Callable[..., Any]:
        def function(*given: Any, **named: Any) -> Any:
            if name not in _QUIET:
                self._fixed.check(f"{self._shown}.{name}", self._is_seeded)
                return as_state(found(*given, **named), self._fixed.setting)
            result = found(*given, **named)
            if name in _SEEDS:
                seeds = [*given, *named.values()]
                self.__dict__["_is_seeded"] = bool(seeds) and all(map(self._fixed.is_seeded, seeds))
            if name == "spawn":
                return [self._fixed.held(one, self._is_seeded) for one in result]
            return self._fixed.held(result, self._is_seeded) if name == "jumped" else result

        function.__name__ = function.__qualname__ = name
        return function


class FixedDraws:
    """Makes the stand-ins of one set of copies; under plain NumPy generators are NumPy's own, global ones private.

    `importing` tells whether a module is being executed.
    """

    def __init__(self, setting: Setting | None, importing: Callable[[], bool]) -> None:
        self.setting = setting
        self._importing = importing
        self._kinds: dict[type, type] = {}
        self._unseeded: set[Any] = set()  # what the system gave to sequences without a seed

    def numpy(self) -> ModuleType:
        """Return the stand-in for numpy."""
        if self.setting is not None:
            return numpy_namespace(self.setting, self._numpy_random())
        names = {name: value for name, value in vars(np).items() if not name.startswith("__")}  # as fast as NumPy's
        return Namespace(np, {**names, "random": self._numpy_random()})

    def python(self) -> ModuleType:
        """Return the stand-in for Python's `random`."""
        everything = self._everything(random.Random(), "random")
        names = {name: getattr(everything, name) for name in random.__all__ if hasattr(random.Random, name)}
        if self.setting is not None:
            names["Random"] = self._kind(random.Random)
            names["SystemRandom"] = refusing_namespace("random", self.setting).SystemRandom
        return Namespace(random, names)

    def held(self, plain: Any, is_seeded: bool) -> Any:
        """Return the stand-in for a generator."""
        kind: Any = self._kind(type(plain))
        made = kind.__new__(kind)
        made._own(plain, is_seeded)
        return made

    def check(self, name: str, is_seeded: bool) -> None:
        """Raise RefusedError unless a module that is being executed draws from a seeded generator."""
        assert self.setting is not None  # under plain NumPy no generator is held
        if not self._importing():
            raise self.setting.fault(RefusedError, f"{name} is not offered by this version: {NO_DRAWS}")
        if not is_seeded:
            what = f"{name} draws while the module is executed, without a seed: each format would get other numbers"
            raise self.setting.fault(RefusedError, f"{what}; accepted: a generator with a seed")

    def is_seeded(self, seed: Any) -> bool:
        """Whether numbers from this seed, sequence or generator are the same at every start of the program."""
        if isinstance(seed, np.random.SeedSequence):
            return seed.entropy not in self._unseeded
        return seed is not None and getattr(seed, "_is_seeded", True)

    def _kind(self, plain: type) -> type:
        if plain not in self._kinds:
            names = {"_fixed": self, "_kind": plain, "__class__": plain, "__module__": plain.__module__}
            self._kinds[plain] = type(plain.__name__, (_Held,), names)
        return self._kinds[plain]

    def _everything(self, plain: Any, shown: str) -> Any:
        """Return the generator of a module's functions."""
        if self.setting is None:
            return plain
        made = self.held(plain, False)
        made._own(plain, False, shown)
        return made

    def _numpy_random(self) -> ModuleType:
        everything = self._everything(np.random.RandomState(), "numpy.random")
        public = [name for name in dir(np.random) if name[0] != "_" and callable(getattr(np.random, name))]
        names: dict[str, Any] = {}
        for name in public:
            known = _ALIASES.get(name, name)
            if hasattr(np.random.RandomState, known):
                names[name] = getattr(everything, known)
        if self.setting is not None:
            for name in ("Generator", "RandomState", *_BIT_GENERATORS):
                names[name] = self._kind(getattr(np.random, name))
            names |= {"default_rng": self._default_rng, "SeedSequence": self._sequence()}
            for name in ("get_bit_generator", "set_bit_generator"):
                names[name] = refusing_generator(f"numpy.random.{name}", self.setting)
            bits = {name: names[name] for name in (*_BIT_GENERATORS, "SeedSequence")}
            names["bit_generator"] = Namespace(np.random.bit_generator, bits)
        return Namespace(np.random, {**names, "mtrand": Namespace(np.random.mtrand, {**names, "_rand": everything})})

    def _default_rng(self, seed: Any = None) -> Any:
        if isinstance(seed, np.random.Generator):
            return seed
        return self.held(np.random.default_rng(_bare(seed)), self.is_seeded(seed))

    def _sequence(self) -> type:
        unseeded = self._unseeded

        class SeedSequence(np.random.SeedSequence):
            def __init__(self, entropy: Any = None, **others: Any) -> None:
                super().__init__(entropy, **others)
                if entropy is None:
                    unseeded.add(self.entropy)

        return SeedSequence


def _bare(seed: Any) -> Any:
    return seed._plain if isinstance(seed, _Held) else seed
