"""What the canary finds: kernels that round in the formats they claim, and seeded ones that do not."""

from __future__ import annotations

from pathlib import Path

import pytest
from audit_cases import file_for

from narrowgauge.api import try_out
from narrowgauge.record.canary import CanaryEntry

# `dW` arrives in the format; {start}, {rate} ... say in which type the kernel works, and {end} what it returns.
KERNEL = """
import ml_dtypes
import numpy as np

def value(dW, h):
    own = dW.dtype
    dW = dW.astype({work})
    one = dW.dtype.type
    x = np.ones(dW.shape[1], dW.dtype)
    for dw in dW:
        x = {step}
    return {end}
"""
ROUNDED = "x + (one(0.05 * h) * x + one(0.2) * x * dw)"
WHOLE = {"narrow": '["float16", "bfloat16", "float32"]'}


def canary(folder: Path, work: str = "own", step: str = ROUNDED, end: str = "x.astype(own)") -> list[CanaryEntry]:
    source = KERNEL.format(work=work, step=step, end=end)
    file = file_for(folder, source, kernel={"rounds": '"itself"'}, ladder={"finest": "5"}, formats=WHOLE)
    trial = try_out(file)
    assert trial.canary is not None
    assert (trial.identical, trial.reach, trial.range, trial.faults) == (True, None, None, [])
    return trial.canary


def findings(entries: list[CanaryEntry]) -> dict[str, tuple[str, str | None]]:
    return {entry.arm: (entry.finding, entry.like) for entry in entries}


def test_a_kernel_in_the_formats_of_its_draws_rounds(tmp_path: Path) -> None:
    """32 steps in the draws' own type: errors of some u, and results that no wider format gives when rounded once."""
    entries = canary(tmp_path)
    assert findings(entries) == {
        "bfloat16": ("rounds", None),
        "float16": ("rounds", None),
        "float32": ("rounds", None),
        "float64": ("unknown", None),
    }
    for entry in entries:
        assert (entry.quantity, entry.level, entry.outside) == ("value", 5, 0)
        if entry.arm == "float64":
            assert (entry.rounded_once, entry.rounded_once_small, entry.error) == (None, None, None)
            continue
        assert entry.rounded_once is not None
        assert entry.rounded_once < 0.5
        assert entry.rounded_once_small is not None
        assert entry.error is not None
        assert 0.5 < entry.error < 32  # one rounding, and the sum of all 64 with one sign


@pytest.mark.parametrize(("wide", "narrow"), [("np.float32", ["float16", "bfloat16"]), ("np.float64", ["float32"])])
def test_a_format_that_is_storage_alone_is_found(tmp_path: Path, wide: str, narrow: list[str]) -> None:
    """Draws are widened, and the result is rounded: the dropped cast of a compiler looks like this."""
    found = findings(canary(tmp_path, work=wide))
    like = wide.removeprefix("np.")
    assert {name: found[name] for name in narrow} == dict.fromkeys(narrow, ("result only", like))


@pytest.mark.parametrize("work", ["own", "np.float32"])
def test_a_plain_sum_is_told_apart_by_its_accumulator(tmp_path: Path, work: str) -> None:
    """Nothing but additions, 32 of them: in float16, or in float32 and rounded once."""
    found = findings(canary(tmp_path, work=work, step="x + dw"))
    assert found["float16"] == (("rounds", None) if work == "own" else ("result only", "float32"))


def test_a_result_that_is_not_rounded_at_all_is_found(tmp_path: Path) -> None:
    """The same without the last cast; the type of the result may be wider, but that it is no format's is said."""
    entries = canary(tmp_path, work="np.float64", end="x")
    found = findings(entries)
    assert {found.pop("float64")} == {("unknown", None)}
    assert found == dict.fromkeys(("bfloat16", "float16", "float32"), ("wider", "float64"))
    assert all(entry.outside > 900 for entry in entries if entry.arm != "float64")


def test_a_wider_last_operation_is_said_and_no_defect(tmp_path: Path) -> None:
    """A state in the format, divided once in float64, is rounded on the way; how many results are outside is kept."""
    entries = {entry.arm: entry for entry in canary(tmp_path, end="x.astype(np.float64) / 3.0")}
    assert entries["float16"].finding == "rounds"
    assert entries["float16"].outside > 600  # two numbers of three have no third in the format


def test_a_narrower_format_is_found(tmp_path: Path) -> None:
    """Whatever the draws, the kernel works in float16: the claims of float32 and of the reference are false.

    Of float16 itself nothing can be told then, since there is no wider format to hold it against.
    """
    found = findings(canary(tmp_path, work="np.float16"))
    assert found["float16"] == ("unknown", None)
    assert found["float32"] == ("narrower", "float16")
    assert found["float64"] == ("narrower", "float16")


def test_a_narrower_state_with_a_wider_end_is_found_by_its_errors(tmp_path: Path) -> None:
    """The results look like float32, and err like float16; those of float64 are what they claim."""
    work = "np.float16 if own == np.float32 else own"
    found = findings(canary(tmp_path, work=work, end="(x.astype(np.float64) * 0.3).astype(own)"))
    assert found["float32"] == ("narrower", "float16")
    assert found["float16"] == ("rounds", None)


@pytest.mark.parametrize("end", ["(x > one(1)).astype(own)", "np.floor(x * one(20))", "dw"])
def test_where_nothing_rounds_nothing_can_be_told(tmp_path: Path, end: str) -> None:
    """A yes/no quantity, one that counts to some twenty, and one that only moves numbers."""
    found = findings(canary(tmp_path, end=end))
    assert {found[arm] for arm in ("bfloat16", "float16", "float32")} == {("unknown", None)}


@pytest.mark.parametrize("takes", ["normals", "uniforms"])
def test_other_draws_do_as_well(tmp_path: Path, takes: str) -> None:
    """The probe of draws that shrink to nothing is made for what the kernel takes."""
    source = KERNEL.format(work="own", step=ROUNDED, end="x")
    kernel = {"rounds": '"itself"', "takes": f'"{takes}"'}
    trial = try_out(file_for(tmp_path, source, kernel=kernel, ladder={"finest": "4"}, formats=WHOLE))
    assert trial.canary is not None
    assert [entry.finding for entry in trial.canary] == ["rounds"] * 3 + ["unknown"]


def test_wider_intermediates_inside_an_expression_cannot_be_seen(tmp_path: Path) -> None:
    """What the canary says that it cannot show: the state rounds at every step, the products before it do not."""
    step = "(x.astype(np.float64) + (0.05 * h * x + 0.2 * x.astype(np.float64) * dw)).astype(own)"
    assert findings(canary(tmp_path, step=step))["float16"] == ("rounds", None)
