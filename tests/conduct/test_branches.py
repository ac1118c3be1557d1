"""Branches that must cancel to the bit: seeded defects are caught, and located to the line; clean pairs say nothing."""

from __future__ import annotations

from pathlib import Path

import pytest
from branch_cases import OWN_DEFECTS, PAIR, PATH, audit_file, checked, defective, entry_for, lines

from narrowgauge.conduct.branches import branches_entry, broken_splits
from narrowgauge.errors import KernelError
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner

EMULATED = {"kernel": {"rounds": ""}, "branches": {"correction": '"kernel.py:correction"'}}
ORDERED = """
import numpy as np

def path(dW, h):
    s = np.ones(dW.shape[-1])
    for dw in dW:
        s = s + (0.05 * h * s + 0.2 * s * dw)
    return s

def correction(dW, h):
    low = np.ones(dW.shape[-1], dtype=np.float16)
    for dw in dW:
        noise = 0.2 * low * dw
        drift = 0.05 * h * low
        low = low + (drift + noise)
    return low, path(dW.astype(np.float64), h)
"""


@pytest.mark.parametrize("name", OWN_DEFECTS)
def test_a_seeded_defect_is_found_and_located(tmp_path: Path, name: str) -> None:
    """The line of the defect is the first that differs, by value, and splits on that level are given up."""
    source, line = defective(name)
    entry = checked(tmp_path, source)
    found = [one for one in entry.mismatches if one.condition == "branches"]
    assert {one.arm for one in found} == {"float16"}
    assert all(0 < one.differing <= one.paths for one in found)
    assert ("kernel.py", line) in lines(found[-1])
    assert "float16" in broken_splits(entry, found[-1].level)


@pytest.mark.parametrize(
    ("name", "cause"),
    [("fused multiply-add", "fused multiply-add"), ("float32 intermediate", "wider intermediates, in float32")],
)
def test_what_explains_all_differences_is_named(tmp_path: Path, name: str, cause: str) -> None:
    """The source emulated with that liberty gives the other side's bits on every path that differs."""
    source, _ = defective(name)
    found = [one for one in checked(tmp_path, source).mismatches if one.condition == "branches"]
    assert {one.explanation for one in found} == {cause}
    assert all(0 < one.explained <= one.differing for one in found)


@pytest.mark.parametrize("name", ["reordered sum", "hoisted product", "float64 constant"])
def test_nothing_is_named_that_explains_only_some(tmp_path: Path, name: str) -> None:
    """A reordered sum is no liberty of a compiler that keeps to IEEE 754."""
    source, _ = defective(name)
    found = [one for one in checked(tmp_path, source).mismatches if one.level == 3]
    assert [one.explanation for one in found] == [None]


@pytest.mark.parametrize(
    ("name", "cause"),
    [("float64 constant", "wider intermediate"), ("step size not cast", "wider intermediate"), ("reordered sum", None)],
)
def test_one_rounding_less_is_named_for_the_operation(tmp_path: Path, name: str, cause: str | None) -> None:
    """Also where no liberty of a compiler makes the whole of one side that of the other."""
    source, _ = defective(name)
    where = checked(tmp_path, source).mismatches[-1].where
    assert where is not None
    assert where.cause == cause


def test_clean_pairs_give_no_finding(tmp_path: Path) -> None:
    """Over 100 seeds: a correction of the same code, and one with its statements in another order. No chance enters."""
    moved = PAIR.replace(
        "        drift = mu * s * dt\n        noise = sigma * s * dw\n",
        "        noise = sigma * s * dw\n        drift = mu * s * dt\n",
    )
    assert moved != PAIR
    for folder, source in (("same", PATH + PAIR), ("moved", PATH + moved)):
        (tmp_path / folder).mkdir()
        for seed in range(100):
            entry = checked(tmp_path / folder, source, sampling={"seed": str(seed)}, ladder={"finest": "2"})
            assert entry.mismatches == []
            assert entry.remarks == []


def test_an_emulated_correction_runs_wholly_in_each_arithmetic(tmp_path: Path) -> None:
    """Its casts are ignored and listed by line, so that the moved statements give the kernel's bits."""
    entry = checked(tmp_path, ORDERED, **EMULATED, formats={"narrow": '["float16", "bfloat16"]'})
    assert entry.mismatches == []
    assert [(one.file, one.line) for one in entry.casts] == [("kernel.py", 10), ("kernel.py", 15)]
    assert {one.arm for one in entry.tried} == {"float16", "bfloat16"}
    assert entry.low == "kernel.py:path"
    assert entry.correction == "kernel.py:correction"


def test_an_emulated_defect_has_its_line_on_both_sides(tmp_path: Path) -> None:
    """A reordered sum: the addition of the kernel, and that of the correction."""
    source = ORDERED.replace("low = low + (drift + noise)", "low = (low + drift) + noise")
    found = checked(tmp_path, source, **EMULATED).mismatches
    assert lines(found[-1]) == {("kernel.py", 6), ("kernel.py", 14)}
    assert found[-1].ulps_largest is not None
    assert found[-1].bias is not None


def test_a_high_part_that_is_not_the_kernel_is_said(tmp_path: Path) -> None:
    """The figures of the correction are those of kernel.run, not of another function's high part."""
    entry = checked(tmp_path, ORDERED.replace("path(dW.astype(np.float64), h)", "path(dW, 2 * h)"), **EMULATED)
    assert entry.mismatches == []
    assert any("the high part of value is not what kernel.py:path gives in float64" in one for one in entry.remarks)


def test_a_low_function_of_its_own_is_held_against_the_kernel(tmp_path: Path) -> None:
    """An emulated source beside a kernel that rounds for itself, without a correction: the kernel is its low part."""
    emulated = {"correction": "", "low": '"kernel.py:plain"', "rounds": '"emulated"'}
    plain = "\ndef plain(dW, h):\n" + "".join(
        f"    {line}\n"
        for line in (
            "s = np.ones(dW.shape[-1])",
            "for dw in dW:",
            "    s = s + (0.05 * s * h + 0.2 * s * dw)",
            "return s",
        )
    )
    assert checked(tmp_path, PATH + plain, branches=emulated).mismatches == []
    differs = checked(tmp_path, PATH + plain.replace("0.05 * s * h", "0.05 * h * s"), branches=emulated).mismatches
    assert differs[-1].condition == "branches"


def test_draws_of_the_wide_format_in_the_low_part_are_told_as_draws(tmp_path: Path) -> None:
    """They are none of the low branch's, however close."""
    source, line = defective("draws not rounded")
    where = checked(tmp_path, source).mismatches[-1].where
    assert where is not None
    assert where.correction is not None
    assert (where.correction.kind, where.correction.line) == ("draws", line)


def test_a_correction_that_raises_in_a_format_ends_its_splits(tmp_path: Path) -> None:
    """Only that format's; what it raised is said."""
    refusing = PAIR.replace("low_part(low, high, h), ", "low_part(low, high, h / (high.dtype != low.dtype)), ").replace(
        "    low, high = draws\n",
        "    low, high = draws\n    if low.dtype == np.float16:\n        raise ArithmeticError('no')\n",
    )
    entry = checked(tmp_path, PATH + refusing, formats={"narrow": '["float16", "float32"]'})
    assert entry.raised == {"float16": "level 0, arm float16: ArithmeticError: no"}
    assert entry.mismatches == []
    assert broken_splits(entry, 2) == {"float16"}


def test_a_correction_that_returns_no_pair_is_refused(tmp_path: Path) -> None:
    """With what it returned, and what is accepted."""
    with pytest.raises(KernelError, match=r"the correction returned one array; accepted: a pair, its low and its high"):
        checked(tmp_path, PATH + "\ndef correction(draws, h):\n    return path(draws[0], h)\n")


def test_functions_that_draw_for_themselves_are_compared_on_one_tape(tmp_path: Path) -> None:
    """The same requests get the same numbers; a reordered sum shows."""
    source = """
    import numpy as np

    def path(rng, h, *, steps, paths):
        s = np.ones(paths)
        for n in range(steps):
            noise = 0.2 * s * (np.sqrt(h) * rng.standard_normal(paths))
            s = s + (0.05 * h * s + noise)
        return s

    def correction(rng, h, *, steps, paths):
        s = np.ones(paths)
        for n in range(steps):
            noise = 0.2 * s * (np.sqrt(h) * rng.standard_normal(paths))
            s = s + (0.05 * h * s + noise)
        return s, s
    """
    kernel = {"rounds": "", "takes": '"rng"'}
    assert checked(tmp_path, source, kernel=kernel).mismatches == []
    swapped = "s + 0.05 * h * s + noise\n        return s, s"
    differs = source.replace("s + (0.05 * h * s + noise)\n        return s, s", swapped)
    assert differs != source
    found = checked(tmp_path, differs, kernel=kernel).mismatches
    assert {one.condition for one in found} == {"branches"}
    assert found[-1].differing > 500


def test_a_finding_is_a_function_of_the_audit_file(tmp_path: Path) -> None:
    """The same check again gives the same entry, to the last digit."""
    source, _ = defective("reordered sum")
    file = audit_file(tmp_path, source)
    assert entry_for(file) == entry_for(file)


@pytest.mark.parametrize(("quick", "paths"), [(True, 1024), (False, 3072)])
def test_no_more_paths_are_compared_than_asked(tmp_path: Path, quick: bool, paths: int) -> None:
    """A block larger than what is asked is not run whole: a trial is one of 1,024 paths."""
    sampling = {"block": "16384", "paths": "16384", "most_paths": "16384"}
    asked = {"correction": '"kernel.py:correction"', "paths": "2500"}
    file = audit_file(
        tmp_path, PATH + PAIR, branches=asked, sampling=sampling, ladder={"horizon": "0.7", "finest": "1"}
    )
    kernel = find_kernel(file)
    entry = branches_entry(file, kernel, BlockRunner(file, kernel), quick=quick)
    assert entry is not None
    assert {one.paths for one in entry.tried} == {paths}
