"""The stand-in for numpy.random: its functions, constructors and bit generators, all on the tape of the run."""

from __future__ import annotations

from collections.abc import Callable
from types import ModuleType
from typing import Any

import numpy as np

from narrowgauge.dispatch.feed import Feed, family_of
from narrowgauge.dispatch.generator import REFUSED, Draws, GeneratorDraws, RandomStateDraws
from narrowgauge.dispatch.namespaces import Namespace

__all__ = ["adopted", "generator", "random_namespace"]

_BIT_GENERATORS = ("BitGenerator", "MT19937", "PCG64", "PCG64DXSM", "Philox", "SFC64")
_OWN = frozenset({"SeedSequence", "test"})  # a seed is integers alone; what it seeds is a stand-in
_PUBLIC = frozenset(name for name in dir(np.random) if name[0] != "_" and callable(getattr(np.random, name)))


class BitDraws:
    """Stands in for a bit generator: it can be handed to a generator, copied into further ones, and no more."""

    _feed: Feed
    _plain: type

    def __init__(self, seed: Any = None) -> None:
        self._line = self._feed.line(family_of(self._plain.__name__, seed))

    def jumped(self, jumps: int = 1) -> Any:
        """Return a bit generator whose numbers are its own."""
        made = object.__new__(type(self))
        made._line = self._feed.line()
        return made

    def spawn(self, n_children: int) -> list[Any]:
        """Return bit generators whose numbers are their own."""
        return [self.jumped() for _ in range(n_children)]

    def __getattr__(self, name: str) -> Any:
        if name.startswith("__") or not hasattr(self._plain, name):
            raise AttributeError(f"{self._plain.__name__!r} object has no attribute {name!r}")
        raise self._feed.fault(
            f"{self._plain.__name__}.{name} is not offered by this version: {REFUSED['bit_generator']}"
        )


def random_namespace(feed: Feed) -> ModuleType:
    """Return the stand-in for numpy.random of a private copy; what is no part of it is refused when it is called."""
    known = feed.kinds.get("namespace")
    if known is None:
        known = feed.kinds["namespace"] = _namespace(feed)
    assert isinstance(known, ModuleType)  # the dictionary holds classes too
    return known


def generator(feed: Feed) -> Any:
    """Return a new generator: what a kernel gets as its first argument."""
    random_namespace(feed)
    return feed.kinds["Generator"](None)


def adopted(value: Any, feed: Feed) -> Any:
    """Return the stand-in for what comes from numpy.random and was met outside the copy; None for anything else.

    That is a name of the module, a generator or bit generator, or a method of a generator.
    """
    name = getattr(value, "__name__", None)
    # The functions of numpy.random are methods of one RandomState: equal, since each look-up makes a new one.
    if isinstance(name, str) and name in _PUBLIC and getattr(np.random, name) == value:
        return getattr(random_namespace(feed), name)
    owner = getattr(value, "__self__", None)
    if isinstance(owner, (np.random.Generator, np.random.RandomState)):
        return getattr(adopted(owner, feed), value.__name__)
    for kind in (np.random.Generator, np.random.RandomState, np.random.BitGenerator):
        if isinstance(value, kind) and not isinstance(value, (Draws, BitDraws)):
            random_namespace(feed)
            own = type(value).__name__
            return feed.kinds[own if own in feed.kinds else kind.__name__](None)
    return None


def _namespace(feed: Feed) -> ModuleType:
    kinds = feed.kinds
    kinds["Generator"] = _kind("Generator", GeneratorDraws, feed)
    kinds["RandomState"] = _kind("RandomState", RandomStateDraws, feed)
    for name in _BIT_GENERATORS:
        plain = getattr(np.random, name)
        kinds[name] = type(name, (BitDraws,), {"_feed": feed, "_plain": plain, "__class__": plain, **_home()})
    everything = kinds["RandomState"](None)
    names: dict[str, Any] = {**kinds, "default_rng": _default_rng(feed)}
    for name in sorted(_PUBLIC - names.keys() - _OWN):
        names[name] = _function(name, everything, feed)
    names["bit_generator"] = Namespace(np.random.bit_generator, {name: kinds[name] for name in _BIT_GENERATORS})
    # `mtrand._rand` is what libraries that check a random_state argument look up.
    return Namespace(np.random, {**names, "mtrand": Namespace(np.random.mtrand, {**names, "_rand": everything})})


def _home() -> dict[str, Any]:
    return {"__module__": "numpy.random"}


def _kind(name: str, base: type[Draws], feed: Feed) -> type:
    return type(name, (base,), {"_feed": feed, "__class__": getattr(np.random, name), **_home()})


def _default_rng(feed: Feed) -> Callable[..., Any]:
    def default_rng(seed: Any = None) -> Any:
        if isinstance(seed, np.random.Generator):
            return adopted(seed, feed) or seed
        if isinstance(seed, (np.random.BitGenerator, np.random.RandomState)):
            return feed.kinds["Generator"](seed)
        made = feed.kinds["Generator"](None)
        made._line = feed.line(family_of("PCG64", seed))
        return made

    return default_rng


def _function(name: str, everything: Any, feed: Feed) -> Any:
    """Return a function of numpy.random: a method of one RandomState, or one that is refused when it is called."""
    found = getattr(type(everything), name, None)
    if found is not None:
        return getattr(everything, name)

    def refused(*arguments: Any, **keywords: Any) -> Any:
        reason = REFUSED.get(name, REFUSED["bit_generator"])
        raise feed.fault(f"numpy.random.{name} is not offered by this version: {reason}")

    return refused
