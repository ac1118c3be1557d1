"""What a kernel raises: data in a narrow arm, an error where it says nothing about a format."""

from __future__ import annotations

import pytest

from narrowgauge.errors import AuditFileError, EscapeError, KernelError
from narrowgauge.kernel.raised import kept_apart, own_traceback, whole_traceback, with_place


class HostileError(Exception):
    """An exception whose text raises one of its own."""

    def __str__(self) -> str:
        raise HostileError


@pytest.mark.parametrize("problem", [ValueError("no"), SystemExit(0), HostileError(), GeneratorExit()])
def test_what_a_kernel_raises_is_kept(problem: BaseException) -> None:
    """Whatever its class, and without asking for its text."""
    with kept_apart(2, "float16") as kept:
        raise problem
    assert kept.problem is problem


def test_nothing_raised_is_nothing_kept() -> None:
    """The work inside is done."""
    with kept_apart(2, "float16") as kept:
        done = True
    assert done
    assert kept.problem is None


@pytest.mark.parametrize("problem", [MemoryError("no room"), OSError("no disk")])
def test_want_of_memory_or_files_is_no_result_of_a_format(problem: BaseException) -> None:
    """Another run may not meet it: it is an error with level and arm."""
    words = r"level 2, arm float16: the kernel raised (MemoryError|OSError): no (room|disk)"
    with pytest.raises(KernelError, match=words) as caught, kept_apart(2, "float16"):
        raise problem
    assert caught.value.__cause__ is problem


@pytest.mark.parametrize("problem", [KeyboardInterrupt(), EscapeError("x"), AuditFileError("a", "b", "c", "d")])
def test_what_is_not_the_kernels_passes(problem: BaseException) -> None:
    """Ctrl-C, escapes and wrong audit files are neither kept nor made an error of the kernel."""
    for context in (kept_apart, with_place):
        with pytest.raises(type(problem)) as caught, context(2, "float16"):
            raise problem
        assert caught.value is problem


def test_a_place_is_given_once() -> None:
    """An error of the program has level and arm from the first that knows them, and keeps its cause."""
    cause = ValueError("first")
    with pytest.raises(KernelError) as caught, kept_apart(2, "float16"), with_place(1, "float64"):
        raise cause
    assert str(caught.value) == "level 1, arm float64: the kernel raised ValueError: first"
    with pytest.raises(KernelError) as caught, with_place(1, "float64"):
        raise KernelError("returned nothing") from cause
    assert str(caught.value) == "level 1, arm float64: returned nothing"
    assert caught.value.__cause__ is cause


def test_a_text_that_cannot_be_made() -> None:
    """A hostile exception is told by its class, and its traceback by what there is."""
    words = r"raised HostileError: \(its text cannot be made\), but not there"
    with pytest.raises(KernelError, match=words) as caught, with_place(0, "float64", but=", but not there"):
        raise HostileError
    assert caught.value.__cause__ is not None
    assert "HostileError" in own_traceback(caught.value.__cause__)


def test_a_long_traceback_is_cut_at_a_line_of_its_own() -> None:
    """What is printed after it begins on a new line."""
    for told in (own_traceback, whole_traceback):
        with kept_apart(0, "float64") as kept:
            raise ValueError("x" * 200_000)
        assert kept.problem is not None
        assert told(kept.problem).endswith(" ...\n")
        assert len(told(kept.problem)) < 70_000
