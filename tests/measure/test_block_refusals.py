"""What ends the run of a block: exceptions in the reference, results of the wrong kind, and escapes; word for word."""

from __future__ import annotations

import sys
import types
from pathlib import Path

import pytest
from block_cases import runner_for, written

from narrowgauge.errors import AuditFileError, EscapeError, KernelError, RefusedError, SettingsMixedError

ARRAY = "accepted: an array of shape (paths,), or a mapping of names to such arrays"


def refusal(folder: Path, source: str, level: int = 0, **tables: dict[str, object]) -> KernelError:
    runner = runner_for(folder, source, **tables)
    with pytest.raises(KernelError) as caught:
        runner.run(level, 0)
    return caught.value


@pytest.mark.parametrize("exception", ["ValueError", "SystemExit"])
def test_what_a_kernel_raises_in_the_reference_ends_the_run(tmp_path: Path, exception: str) -> None:
    """The error names level and arm, and its cause is the kernel's own exception."""
    source = f"""
    def value(dW, h):
        raise {exception}("no such rate")
    """
    problem = refusal(tmp_path, source, 1)
    assert str(problem) == f"level 1, arm float64: the kernel raised {exception}: no such rate"
    assert (problem.level, problem.arm) == (1, "float64")
    assert type(problem.__cause__).__name__ == exception


@pytest.mark.parametrize("raised", ["MemoryError('3 GiB')", "PermissionError('3 GiB')", "ValueError('3 GiB')"])
def test_what_comes_of_the_machine_is_no_property_of_a_format(tmp_path: Path, raised: str) -> None:
    """Want of memory, disk or files ends the run in a narrow arm, too; anything else is kept as what the arm does."""
    source = f"""
    import numpy as np

    def value(dW, h):
        if np.isinf(dW[0] * 0.0 + 70000.0).any():
            raise {raised}
        return dW[0]
    """
    kind = raised.partition("(")[0]
    if kind == "ValueError":
        kept = runner_for(tmp_path, source).run(0, 0).raised
        assert [(arm, one.message) for arm, one in kept.items()] == [("float16", "3 GiB")]
        return
    problem = refusal(tmp_path, source)
    assert str(problem) == f"level 0, arm float16: the kernel raised {kind}: 3 GiB"
    assert type(problem.__cause__).__name__ == kind


@pytest.mark.parametrize("text", ["3", "1 / 0", "sys.exit(1)"])
def test_an_exception_without_a_text_is_still_the_kernels(tmp_path: Path, text: str) -> None:
    """Whatever its class does when it is asked for a text: in the reference an error, in a narrow arm data."""
    source = f"""
    import sys

    import numpy as np

    class Mute(Exception):
        def __str__(self):
            return {text}

    def value(dW, h):
        if CONDITION:
            raise Mute
        return dW[0]
    """
    problem = refusal(tmp_path, source.replace("CONDITION", "True"))
    assert str(problem) == "level 0, arm float64: the kernel raised Mute: (its text cannot be made)"
    kept = (
        runner_for(tmp_path, source.replace("CONDITION", "np.isinf(dW[0] * 0.0 + 70000.0).any()"))
        .run(0, 0)
        .raised["float16"]
    )
    assert (kept.kind, kept.message) == ("Mute", "(its text cannot be made)")


def test_a_text_without_end_is_cut(tmp_path: Path) -> None:
    """A message may hold a whole array, and says how much is missing."""
    source = """
    def value(dW, h):
        raise ValueError("x" * 1_000_000)
    """
    shown = str(refusal(tmp_path, source))
    assert shown.endswith("xxx ... (cut, of 1,000,000 characters)")
    assert len(shown) < 9000


RETURNS = [
    ("None", f"the kernel returned nothing (None); {ARRAY}"),
    ("[x, x]", f"the kernel returned a list; {ARRAY}"),
    ("1.5", f"the kernel returned a float; {ARRAY}"),
    ("x[0]", f"the kernel returned a float64; {ARRAY}"),
    ("x[:4]", f"the kernel returned an array of shape (4,) for 1024 paths; {ARRAY}"),
    ("dW", f"the kernel returned an array of shape (1, 1024) for 1024 paths; {ARRAY}"),
    ("{}", f"the kernel returned an empty mapping; {ARRAY}"),
    ("{3: x}", "the kernel returned a quantity named 3; accepted: names that are strings"),
    ("{'': x}", "the kernel returned a quantity named ''; accepted: names that are strings"),
    ("{'a': x, 'b': None}", f"the kernel returned nothing (None) as 'b'; {ARRAY}"),
    ("{'a': x, 'b': x[:2]}", f"the kernel returned an array of shape (2,) as 'b' for 1024 paths; {ARRAY}"),
    ("np.arange(1024) * 1j", "the kernel returned an array of dtype complex128; accepted: real numbers"),
    ("{'c': np.arange(1024) * 1j}", "the kernel returned an array of dtype complex128 as 'c'; accepted: real numbers"),
]


@pytest.mark.parametrize(("expression", "message"), RETURNS)
def test_returning_the_wrong_thing(tmp_path: Path, expression: str, message: str) -> None:
    """What is not one array a quantity is refused with level and arm, what it is, and what is accepted."""
    source = f"""
    import numpy as np

    def value(dW, h):
        x = dW[0]
        return {expression}
    """
    problem = refusal(tmp_path, source)
    assert str(problem) == f"level 0, arm float64: {message}"
    assert problem.__cause__ is None


def test_returning_the_wrong_thing_in_one_arm_only(tmp_path: Path) -> None:
    """A narrow arm is held to the same contract, and to the quantities of the reference in any order."""
    source = """
    import numpy as np

    def value(dW, h):
        x = 60000.0 + 8000.0 * dW[0]
        return {"low": x, "high": x} if np.isinf(x).any() else {"high": x, "low": x}
    """
    assert list(runner_for(tmp_path, source).run(0, 0).quantities) == ["high", "low"]
    for wrong, message in (
        ('{"high": x}', "the kernel returned high where the reference has high, low"),
        ("None", f"the kernel returned nothing (None); {ARRAY}"),
    ):
        problem = refusal(tmp_path, source.replace('{"low": x, "high": x}', wrong))
        assert str(problem) == f"level 0, arm float16: {message}"


def test_quantities_that_differ_between_paths_or_levels(tmp_path: Path) -> None:
    """Fine path, coarse path and every level have the same quantities, or the run ends and says who has which."""
    source = """
    def value(dW, h):
        return {"a": dW[0], "b": dW[0]} if h CONDITION else {"a": dW[0]}
    """
    problem = refusal(tmp_path, source.replace("CONDITION", "> 0.9"), 1)
    assert str(problem) == "level 1, arm float64: the kernel returned a, b where its fine path has a"
    runner = runner_for(tmp_path, source.replace("CONDITION", "> 0.9"), kernel={"coupling": "none"})
    runner.run(0, 0)
    with pytest.raises(KernelError) as caught:
        runner.run(2, 0)
    assert str(caught.value) == "level 2, arm float64: the kernel returned a where level 0 has a, b"


def test_plain_floats_that_an_arm_does_not_have_are_an_escape(tmp_path: Path) -> None:
    """A plain array that the state never met is refused in the first arm that does not have its values."""
    source = """
    import numpy as np

    def value(dW, h):
        return {"grid": np.linspace(0.0, 1.0, dW.shape[1])}
    """
    with pytest.raises(EscapeError) as caught:
        runner_for(tmp_path, source).run(2, 0)
    assert str(caught.value) == (
        "level 2, arm bfloat16: the kernel returned a plain array as 'grid' whose values bfloat16 does not have: they "
        "did not go through the emulated arithmetic"
    )


def test_a_swallowed_fault_still_ends_the_run(tmp_path: Path) -> None:
    """A kernel that catches everything cannot hide an escape or a refusal; level, arm, file and line are named."""
    source = """
    import numpy as np

    def value(dW, h):
        try:
            EXPRESSION
        except BaseException:
            pass
        return dW[0]
    """
    path = written(tmp_path, source)
    for expression, kind in (("float(dW[0, 0])", EscapeError), ("np.random.standard_normal()", RefusedError)):
        with pytest.raises(kind) as caught:
            runner_for(tmp_path, source.replace("EXPRESSION", expression)).run(0, 0)
        assert str(caught.value).startswith(f"level 0, arm float64: {path}:5: ")


def test_a_missing_function_is_the_audit_files_fault(tmp_path: Path) -> None:
    """The error about kernel.run comes out as it is, not as something that the kernel raised."""
    path = written(tmp_path, "def other(dW, h):\n    return dW[0]\n")
    with pytest.raises(AuditFileError) as caught:
        runner_for(tmp_path, "def other(dW, h):\n    return dW[0]\n").run(0, 0)
    assert str(caught.value) == f"audit: kernel.run: {path} has no function 'value'; accepted: one of other"


def test_a_result_of_another_run_is_refused(tmp_path: Path) -> None:
    """A cache that two arms share hands a float64 array to a narrow arm: named, with level and arm."""
    cache: dict[str, object] = {}
    shared = types.ModuleType("shared_cache_of_a_test")
    shared.cache = cache  # type: ignore[attr-defined]  # a module of the user's that is not copied
    sys.modules[shared.__name__] = shared
    try:
        source = """
        import shared_cache_of_a_test as shared

        def value(dW, h):
            return shared.cache.setdefault("first", dW[0] + 1.0)
        """
        with pytest.raises(SettingsMixedError) as caught:
            runner_for(tmp_path, source).run(0, 0)
    finally:
        del sys.modules[shared.__name__]
    expected = "the kernel returned a value of another run: a cache of it outlives the run"
    assert str(caught.value) == f"level 0, arm bfloat16: {expected}"
