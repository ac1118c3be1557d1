"""A module of a user's whose functions keep state in every way, as source text, and one of a library beside it."""

from __future__ import annotations

import textwrap

from handed_classes import CLASSES

LIBRARY = """
import functools

class Memo:
    def __init__(self, f):
        self.f, self.held, self.calls = f, {}, 0
    def __call__(self, x):
        self.calls += 1
        return self.held.setdefault(x, self.f(x)) if x not in self.held else self.held[x]

class Store:
    def __init__(self):
        self.held = []
    def keep(self, x):
        self.held.append(x)
        return x

class _Nothing:
    pass

NOTHING = _Nothing()

def memoized(f):
    held = {}
    @functools.wraps(f)
    def inner(x):
        if x not in held:
            held[x] = f(x)
        return held[x]
    inner.held = held
    return inner

class Holder:
    def __init__(self, inner):
        self.inner, self.empty = inner, NOTHING
"""

# Every kind of state with the expression that uses it; x is the array of draws, s = x[0] a value of it.
KINDS = {
    **CLASSES,
    "an lru_cache": (
        """
        @functools.lru_cache(maxsize=None)
        def sq(v): return v * v * 0.3
        """,
        "sq(s)",
    ),
    "an lru_cache of another name": (
        """
        def poly(v): return (v * 0.3 + 0.1) * v
        memo = functools.lru_cache(maxsize=8, typed=True)(poly)
        """,
        "memo(s) + poly(s)",
    ),
    "an lru_cache that calls itself": (
        """
        @functools.cache
        def fib(n): return 0.1 if n < 2 else fib(n - 1) * 0.7 + fib(n - 2)
        """,
        "fib(5) * s",
    ),
    "a partial object": (
        """
        LOG = []
        def add(log, v):
            log.append(v)
            return v * 0.3
        part = functools.partial(add, LOG)
        """,
        "part(s) + len(LOG)",
    ),
    "singledispatch": (
        """
        @functools.singledispatch
        def half(v):
            half.calls.append(1)
            return v * 0.7
        half.calls = []
        @half.register
        def _(v: int): return half(v * 0.1)
        """,
        "half(x) + half(3)",
    ),
    "containers of the library": (
        """
        Q, D = collections.deque([1], 3), collections.defaultdict(list)
        O, C = collections.OrderedDict(a=0.1), collections.Counter('aab')
        A, N = array.array('d', [0.1]), types.SimpleNamespace(v=np.full(3, 0.3))
        """,
        "[Q.append(s), len(Q), D['k'].append(x), len(D), O['a'] * x, O.update(b=1), len(O), C.update('a'), "
        "C['a'], A[0] * s, A.append(0.5), len(A), N.v * x, setattr(N, 'w', 1), len(vars(N))]",
    ),
    "aliases of one object": (
        """
        LIST, SET = [], {1}
        append, PAIR, VIEW = LIST.append, (LIST, SET), types.MappingProxyType({'l': LIST})
        KEYS = {LIST.__len__: 1}
        """,
        "[append(s), len(LIST), 0.3 * x, PAIR[0] is LIST, PAIR[1] is SET, VIEW['l'] is LIST, "
        "len(list(KEYS)[0].__self__)]",
    ),
    "iterators": (
        """
        COUNT, IT = itertools.count(3), iter([0.1, 0.2])
        """,
        "[next(COUNT), next(IT) * x]",
    ),
    "a context manager": (
        """
        OPEN = []
        @contextlib.contextmanager
        def opened(v):
            OPEN.append(v)
            yield np.zeros(3) + v
        def within(v):
            with opened(v) as w: return w * 0.3 + len(OPEN)
        """,
        "within(x)",
    ),
    "an object array": (
        """
        A = np.empty(2, object)
        A[0], A[1] = [], 0.3
        """,
        "[A[0].append(s), len(A[0]), A[1] * x]",
    ),
    "a decorator of another module": (
        """
        @apart_kept.memoized
        def f(v):
            b = np.zeros(3)
            b[:] = v
            return b * 0.3
        """,
        "[f(s), len(f.held)]",
    ),
    "an object of another module": (
        """
        STORE = apart_kept.Store()
        """,
        "[STORE.keep(s), len(STORE.held)]",
    ),
    "a function inside an object of another module": (
        """
        def poly(v): return (v * 0.3 + 0.1) * v
        MEMO = apart_kept.Memo(poly)
        """,
        "[MEMO(s), MEMO.calls]",
    ),
    "a class inside an object of another module": (
        """
        class M:
            seen = []
            def f(self, v):
                M.seen.append(v)
                return np.zeros(3) + v * 0.3
        HOLDER = apart_kept.Holder({'m': [M()]})
        """,
        "[HOLDER.inner['m'][0].f(x), HOLDER.empty is apart_kept.NOTHING, isinstance(HOLDER.inner['m'][0], M)]",
    ),
    "text that is executed": (
        """
        CACHE = {}
        def f(v): return CACHE.setdefault('v', v * 0.3)
        OPEN = (n for n in 'a')
        """,
        "[eval('f(v)', globals(), {'v': s}), len(globals()['CACHE'])]",
    ),
    "views of one buffer": (
        """
        A = np.zeros((2, 3), order="F")
        ROW, T, BACK, COUNTS = A[1], A.T, A[::-1, ::2], np.arange(6)
        ODD = COUNTS[1::2]
        """,
        "[np.add(A, x, out=A)[0], ROW[:] * 1, T * 0.3, BACK.sum(), COUNTS.__iadd__(1)[0], ODD[0]]",
    ),
    "a method inside an object of another module": (
        """
        class M:
            def __init__(self): self.log = []
            def f(self, v):
                self.log.append(v)
                b = np.zeros(3)
                b[:] = v * 0.3
                return b
        MEMO, HOLDER = apart_kept.Memo(M().f), apart_kept.Holder([threading.Lock(), apart_kept.memoized(M().f)])
        """,
        "[MEMO(s), len(MEMO.f.__self__.log), HOLDER.inner[1](s), HOLDER.inner[0].locked()]",
    ),
    "type itself": (
        """
        def kind(v, of=type): return of(v) is np.ndarray
        """,
        "[kind(x), kind(3)]",
    ),
}

HEAD = """
import abc, array, collections, contextlib, dataclasses, enum, functools, inspect, itertools, threading, types, weakref
from typing import Generic, NamedTuple, Protocol, TypeVar, runtime_checkable
import numpy as np
import apart_kept
"""


def text_of(kind):
    """The source of a module with one kind of state; `kernel` uses it twice."""
    made, used = KINDS[kind]
    made = textwrap.dedent(made)
    return f"{HEAD}{made}\ndef once(x, s): return {used}\ndef kernel(x): return [once(x, x[0]), once(x, x[0])]\n"
