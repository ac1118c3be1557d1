"""Random variates of scipy.stats on the tape of the run: SciPy's own `rvs`, handed a stand-in to draw from.

SciPy takes a variate apart itself: a standard form from the generator, then `* scale` and `+ loc`, which are operations
of the arithmetic where the standard form is of the state.
"""

from __future__ import annotations

import operator
import sys
from collections.abc import Callable
from types import ModuleType
from typing import Any

import numpy as np

from narrowgauge.dispatch.feed import Feed
from narrowgauge.dispatch.generator import Draws
from narrowgauge.dispatch.namespaces import Exchanging, scipy_parts
from narrowgauge.dispatch.randoms import adopted, random_namespace

__all__ = ["drawing", "is_distribution", "plain_scipy", "plain_variates"]


def is_distribution(value: Any) -> bool:
    """Whether a value is a distribution of scipy.stats, frozen or not."""
    return hasattr(value, "rvs") and not isinstance(value, type)


def drawing(rvs: Callable[..., Any], feed: Feed) -> Callable[..., Any]:
    """Return a distribution's `rvs` whose numbers come from the feed, whatever `random_state` it is given."""

    def drawn(*arguments: Any, random_state: Any = None, **keywords: Any) -> Any:
        return rvs(*arguments, random_state=_source(random_state, feed), **keywords)

    return drawn


def plain_scipy(feed: Feed, imported: Callable[[str], ModuleType]) -> ModuleType:
    """Return the stand-in for `scipy` of a run in plain NumPy on a tape: only `rvs` is another one.

    `imported` imports a module for real.
    """

    def exchange(_: str, value: Any) -> Any:
        return _Variates(value, feed) if is_distribution(value) else value

    return scipy_parts(imported, {"stats": lambda: Exchanging(imported("scipy.stats"), exchange)})


def plain_variates(value: Any, feed: Feed) -> Any:
    """Return what stands for a distribution of scipy.stats in a run in plain NumPy on a tape, or the value itself."""
    home = type(value).__module__
    if "scipy.stats" in sys.modules and home.startswith("scipy.stats.") and is_distribution(value):
        return _Variates(value, feed)
    return value


class _Variates:
    """A distribution that draws from the tape; everything else is its own."""

    def __init__(self, plain: Any, feed: Feed) -> None:
        self._plain, self._feed = plain, feed

    @property  # type: ignore[misc]  # isinstance() must decide as it does in plain code
    def __class__(self) -> Any:
        return type(self._plain)

    def __call__(self, *arguments: Any, **keywords: Any) -> Any:
        return _Variates(self._plain(*arguments, **keywords), self._feed)

    def __getattr__(self, name: str) -> Any:
        found = getattr(self._plain, name)
        return drawing(found, self._feed) if name == "rvs" else found


def _source(random_state: Any, feed: Feed) -> Any:
    """Return what `rvs` draws from: a stand-in as it is, and one in the place of a seed or a generator of NumPy's."""
    if isinstance(random_state, Draws):
        return random_state
    namespace = random_namespace(feed)
    if random_state is None or random_state is np.random:
        return namespace.mtrand._rand
    if isinstance(random_state, (np.random.Generator, np.random.RandomState)):
        known = adopted(random_state, feed)  # None for a stand-in of another kind
        return random_state if known is None else known
    if random_state is namespace:
        return namespace.mtrand._rand
    return namespace.RandomState(operator.index(random_state))
