"""Kinds of state that classes of a user's module keep, as source text, and the expression that uses each."""

CLASSES = {
    "singledispatchmethod": (
        """
        class M:
            @functools.singledispatchmethod
            def f(self, v): return v * 0.3
            @f.register
            def _(self, v: int): return self.f(v * 0.1)
        MADE = M()
        """,
        "MADE.f(x) + MADE.f(2)",
    ),
    "cached_property": (
        """
        class M:
            @functools.cached_property
            def v(self): return np.full(3, 0.1)
        MADE = M()
        """,
        "MADE.v * x",
    ),
    "class attributes": (
        """
        class M:
            calls, table = 0, [0.1]
            def step(self, v):
                M.calls += 1
                self.table.append(v)
                return v * self.table[0] + self.calls
        MADE = M()
        """,
        "MADE.step(x)",
    ),
    "class methods, static methods and properties": (
        """
        class M:
            seen = []
            @classmethod
            def c(cls, v):
                cls.seen.append(v)
                return v * 0.3
            @staticmethod
            def s(v): return np.zeros(3) + v
            @property
            def p(self): return len(self.seen)
            @p.setter
            def p(self, v): self.seen.append(v)
        MADE = M()
        c = M.c
        b = MADE.c
        """,
        "MADE.c(x) + MADE.s(x) + MADE.p + c(x) + b(x)",
    ),
    "super and inheritance": (
        """
        class A:
            def __init__(self): self.hist = []
            def f(self, v):
                self.hist.append(v)
                return np.ones(3) * v * 0.3
        class B(A):
            def f(self, v): return super().f(v) + __class__.k
            k = 1
        MADE = B()
        """,
        "MADE.f(x) + len(MADE.hist) + isinstance(MADE, A)",
    ),
    "slots": (
        """
        class M:
            __slots__ = ('__a', 'b', 'c')
            def __init__(self): self.__a, self.b = [], 0.3
            def f(self, v):
                self.__a.append(v)
                return v * self.b + len(self.__a)
        MADE = M()
        """,
        "MADE.f(x) + hasattr(MADE, 'c')",
    ),
    "a data class": (
        """
        @dataclasses.dataclass(frozen=True, slots=True)
        class P:
            rate: float
            w: list = dataclasses.field(default_factory=lambda: [0.1])
            n: int = dataclasses.field(default=2, repr=False)
        MADE = P(0.3)
        """,
        "[MADE.rate * x, P(0.7).w[0] * s, MADE.w.append(s), len(MADE.w), dataclasses.replace(MADE, n=5).n, "
        "[f.name for f in dataclasses.fields(MADE)], MADE == P(0.3), len(dataclasses.asdict(P(0.1)))]",
    ),
    "a named tuple": (
        """
        class P(NamedTuple):
            rate: float
            w: list
            def f(self, v):
                self.w.append(v)
                return self.rate * v
        MADE = P(0.3, [])
        Q = collections.namedtuple('Q', 'a b')
        OTHER = Q(1, [2])
        """,
        "MADE.f(x) + OTHER.b[0] + Q(1, 2)._replace(a=3).a + len(MADE.w)",
    ),
    "enumerations": (
        """
        class K(enum.Enum):
            A = 1
            B = 0.3
            def f(self, v): return np.zeros(3) + v * self.value
        class I(enum.IntEnum):
            ONE = 1
        class F(enum.Flag):
            R = 1
            W = 2
        TABLE = {K.B: 0.7}
        """,
        "[K.B.f(x), TABLE[K['B']] * x, x * I.ONE, K(1) is K.A, isinstance(K.A, K), F.R in (F.R | F.W), "
        "list(K) == [K.A, K.B], I(1) is I.ONE, K.A.name, [k.name for k in F]]",
    ),
    "abstract classes": (
        """
        class A(abc.ABC):
            @abc.abstractmethod
            def f(self, v): ...
        class B(A):
            held = []
            def f(self, v):
                self.held.append(v)
                return v * 0.3
        class C: pass
        A.register(C)
        MADE = B()
        """,
        "[MADE.f(x), isinstance(C(), A), isinstance(MADE, A), isinstance(3, A), inspect.isabstract(A)]",
    ),
    "generic classes and protocols": (
        """
        T = TypeVar('T')
        class G(Generic[T]):
            def __init__(self): self.h = []
            def f(self, v):
                self.h.append(v)
                return v * 0.3
        @runtime_checkable
        class P(Protocol):
            def f(self, v): ...
        MADE = G[int]()
        """,
        "[MADE.f(x), isinstance(MADE, P), isinstance(3, P), G[float]().f(s)]",
    ),
    "a metaclass and a registry": (
        """
        ALL = {}
        class Meta(type):
            def __call__(cls, *a):
                cls.made += 1
                return super().__call__(*a)
            def __new__(m, n, b, d):
                kind = super().__new__(m, n, b, d)
                ALL[n] = kind
                return kind
        class A(metaclass=Meta):
            made = 0
            def f(self, v): return np.zeros(3) + v * 0.3
        """,
        "[A().f(x), A.made, ALL['A'] is A, len(ALL), type(A) is Meta]",
    ),
    "__init_subclass__ and subclasses": (
        """
        class A:
            kinds = []
            def __init_subclass__(cls, **k): A.kinds.append(cls)
        class B(A):
            def f(self, v): return np.zeros(3) + v * 0.3
        """,
        "[A.kinds[0]().f(x), len(A.kinds), A.kinds[0] is A.__subclasses__()[0], type('C', (A,), {}) in A.kinds]",
    ),
    "descriptors": (
        """
        class D:
            def __init__(self): self.log = []
            def __set_name__(self, owner, name): self.name = name
            def __get__(self, one, kind):
                self.log.append(self.name)
                return len(self.log) * 0.3
        class M:
            rate = D()
        MADE = M()
        """,
        "[MADE.rate * x, M.rate * s]",
    ),
    "weak references": (
        """
        class M: pass
        MADE = M()
        W = weakref.WeakKeyDictionary({MADE: 0.3})
        R = weakref.ref(MADE)
        """,
        "[W[MADE] * x, R() is MADE, W.setdefault(M(), 1)]",
    ),
    "exceptions": (
        """
        class Knocked(Exception):
            seen = []
            def __init__(self, v):
                super().__init__(v)
                self.seen.append(v)
        def run(v):
            try: raise Knocked(v)
            except Knocked as k: return k.args[0]
        ONCE = Knocked(0.3)
        """,
        "run(x) * ONCE.args[0] + len(Knocked.seen)",
    ),
    "numbers and texts with a class": (
        """
        class R(float):
            def f(self, v): return np.zeros(3) + v * self
        class N(str): pass
        MADE, NAME = R(0.3), N('a')
        NAME.log = []
        """,
        "[MADE.f(x), NAME + 'b', NAME.log.append(1), len(NAME.log)]",
    ),
    "classes with items": (
        """
        class L(list): pass
        class D(dict):
            def f(self, v): return np.zeros(3) + v * self['r']
        class O(collections.OrderedDict): pass
        class S(set): pass
        ML, MD, MO, MS = L(), D(r=0.3), O(), S()
        """,
        "[ML.append(s), len(ML), MD.f(x), MD.update(k=1), len(MD), MO.update(k=1), len(MO), MS.add(1), len(MS)]",
    ),
}
