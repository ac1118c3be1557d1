"""Packages written into a folder, and kernels of them run as private copies."""

from __future__ import annotations

import sys
import textwrap

import numpy as np
from kernel_runs import owned

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.copies import new_setting
from narrowgauge.dispatch.importing import Copies
from narrowgauge.dispatch.modules import Sources

DRAWS = np.array([0.2, 1.4, 0.75])
# Nested packages that import each other in every way, and a kernel that reaches them.
PACKAGE = {
    "kernel.py": """
        import pkg
        import pkg.models.heston as h
        from pkg import models, scale
        from pkg.models import *
        def kernel(x):
            return [pkg.scale(x), h.step(x), models.heston.step(x), scale(x), local(x), pkg.tools.deep.third(x),
                    euler.step(x)]
        def local(x):
            from pkg.tools import deep as d
            from pkg.tools.deep import third
            import pkg.tools.deep
            assert d.third is third is pkg.tools.deep.third
            return third(x)
    """,
    "pkg/__init__.py": """
        from .tools import scale
        from . import tools
        NAMES = [__name__, __package__]
    """,
    "pkg/tools/__init__.py": """
        import numpy as np
        def scale(x):
            v = np.zeros(3)
            v[:] = x * 0.3
            return v
    """,
    "pkg/tools/deep.py": """
        from .. import tools
        from ..tools import scale
        from . import scale as again
        def third(x):
            assert again is scale is tools.scale
            return again(x) / 3
    """,
    "pkg/models/__init__.py": """
        __all__ = ["euler", "heston"]
        from pkg.tools import deep
    """,
    "pkg/models/euler.py": """
        from .heston import root
        from pkg.models import heston
        def step(x):
            return root(x) + heston.root(x)
    """,
    "pkg/models/heston.py": """
        import numpy as np
        def root(x):
            return np.sqrt(x) * np.full(3, 0.1)
        from . import euler                 # a circle
        import pkg.models.euler as other
        from pkg.models.euler import step as euler_step
        def step(x):
            assert euler is other and euler.step is euler_step
            return euler.step(x)
    """,
}


def written(folder, files):
    """Write source texts into files below a folder, by their relative path."""
    for name, text in files.items():
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(textwrap.dedent(text))


def sources_of(folder, listed=(), shared=(), kernel="kernel"):
    """The sources of a kernel that lies in `folder` under a dotted name."""
    sources = Sources([folder], listed, shared)
    sources.place(kernel, str(folder.joinpath(*kernel.split("."))) + ".py")
    return sources


def copied(folder, form, listed=(), shared=(), kernel="kernel"):
    """The private copy of a kernel's module, and the set that it belongs to."""
    copies = Copies(
        None if form is None else new_setting(arithmetic_named(form)), sources_of(folder, listed, shared, kernel)
    )
    return copies.load(kernel), copies


def run(folder, form, listed=(), shared=(), kernel="kernel"):
    """What `kernel` of a module returns for the draws, and the setting."""
    module, copies = copied(folder, form, listed, shared, kernel)
    with np.errstate(all="ignore"):
        return module.kernel(owned(DRAWS, copies.setting)), copies.setting


class Watch:
    """Python's tables of modules and its search path, as they are now."""

    def __init__(self):
        self.modules, self.path, self.places = dict(sys.modules), sys.path, list(sys.path)

    def unchanged(self, *ignored):
        """Whether they are the same objects in the same order, apart from modules below the `ignored` ones."""

        def counts(name):
            return name.partition(".")[0] not in ignored

        now = {name: module for name, module in sys.modules.items() if counts(name)}
        before = {name: module for name, module in self.modules.items() if counts(name)}
        same_modules = now.keys() == before.keys() and all(now[name] is before[name] for name in now)
        return same_modules and sys.path is self.path and sys.path == self.places
