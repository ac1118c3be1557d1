"""Records of kernels that something is wrong with, and whether the ladder's levels telescope.

Statistical tests have a fixed seed, state their false-alarm rate, and hold a negative control.
"""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from audit_cases import GEOMETRIC, audited, file_for
from scipy.stats import binom, chi2, norm

from narrowgauge.api import run_audit
from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.rounding import Floats
from narrowgauge.draws.coarsen import Draws
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure import calls
from narrowgauge.measure.block import BlockRunner
from narrowgauge.record.audit import AuditRecord, LawEntry, QuantityEntry, RaisedEntry, TelescopingEntry

FALSE_ALARM = 1e-6
NARROW = ("bfloat16", "float16", "float32")
TARGET = {"target": {"rmse": "0.01"}}

targets = pytest.mark.parametrize("tables", [{}, TARGET], ids=["no target", "target"])


def assert_reasons(record: AuditRecord) -> None:
    """Every judgement is there, and every figure that is not there has its reason."""
    for entry in record.quantities.values():
        for level in entry.levels:
            for arm in NARROW:
                judged = level.arms[arm]
                assert judged.verdict in ("pays", "does not pay", "undecided")
                assert (judged.reason is None) == (judged.verdict == "pays")
        for laws in entry.accumulation.values():
            for law in (laws.error, laws.correction):
                assert_law(law)
            assert laws.sentence
        assert (entry.agreement.agrees is None) == (entry.agreement.reason is not None)
        assert (entry.allocation.cost is None) == (entry.allocation.reason is not None)
        assert all(one.reason for one in entry.finest_paying_level.values())


def assert_law(law: LawEntry) -> None:
    assert (law.walk is None) == (law.reason is not None)


def judged(entry: QuantityEntry, arm: str) -> set[tuple[str | None, str | None]]:
    """Return the verdicts of one arm on all levels, with their reasons."""
    return {(level.arms[arm].verdict, level.arms[arm].reason) for level in entry.levels}


def audit_of(folder: Path, source: str, **tables: dict[str, str]) -> AuditRecord:
    record = audited(folder, source, **tables).record
    assert_reasons(record)
    return record


@targets
@pytest.mark.parametrize("payoff", ["0.1 + 0.0 * dW[0]", "0.0 * dW[0]", "dW[0] > 100.0", "3 * (dW[0] > 100.0)"])
def test_a_constant_payoff_has_no_variance(tmp_path: Path, tables: dict[str, dict[str, str]], payoff: str) -> None:
    """Zero variance in the reference is a reason of its own: no format pays, no gain and no plan exists."""
    record = audit_of(tmp_path, f"def value(dW, h):\n    return {payoff}\n", **tables)
    entry = record.quantities["value"]
    for arm in NARROW:
        assert judged(entry, arm) == {("does not pay", "no_variance")}
        assert all(level.arms[arm].gain is None and level.arms[arm].edge is None for level in entry.levels)
        assert record.verdict.finest_paying_level[arm].reason == "no_variance"
        assert record.verdict.finest_paying_level[arm].level is None
    assert all(level.reference.variance == 0.0 and level.reference.level_kurtosis is None for level in entry.levels)
    assert all(level.best is None for level in entry.levels)
    assert entry.allocation.reason == "nothing varies on any level, so that costs cannot be compared there"
    assert record.verdict.sound


@targets
@pytest.mark.parametrize("payoff", ["np.log(-1.0 - np.abs(dW[0]))", "1.0 / (0.0 * dW[0])"])
def test_a_reference_that_loses_every_path(tmp_path: Path, tables: dict[str, dict[str, str]], payoff: str) -> None:
    """All paths NaN or infinite in float64: dropped and counted, no figure exists, and every format says why."""
    record = audit_of(tmp_path, f"import numpy as np\n\ndef value(dW, h):\n    return {payoff}\n", **tables)
    entry = record.quantities["value"]
    for arm in NARROW:
        assert judged(entry, arm) == {("does not pay", "nonfinite")}
    for level in entry.levels:
        reference = level.reference
        assert reference.nonfinite == level.paths
        assert (reference.mean, reference.mean_se, reference.variance, reference.level_variance) == (None,) * 4
        assert all(level.arms[arm].nonfinite == 0 and level.arms[arm].nonfinite_bound is None for arm in NARROW)
        assert level.telescoping in (None, TelescopingEntry(difference=None, se=None, sound=True))
    assert entry.allocation.cost is None


def test_a_reference_that_keeps_a_few_paths(tmp_path: Path) -> None:
    """Where only some paths are finite most batches are empty; the figures are those of the paths that are left."""
    source = "import numpy as np\n\ndef value(dW, h):\n    return np.sqrt(dW[0] - 2.2)\n"
    record = audit_of(tmp_path, source, ladder={"finest": "0"})
    (level,) = record.quantities["value"].levels
    kept = level.paths - level.reference.nonfinite
    assert 2 <= kept < 64
    file = file_for(tmp_path, source, ladder={"finest": "0"})
    runner = BlockRunner(file, find_kernel(file))
    drawn = np.concatenate([runner.draws(0, k).values[0, 0] for k in range(level.blocks)])
    values = np.sqrt(drawn[drawn > 2.2] - 2.2)
    assert values.size == kept
    assert level.reference.mean == pytest.approx(values.mean(), rel=kept * 2.0**-52)
    assert level.reference.variance == pytest.approx(values.var(ddof=1), rel=4 * kept * 2.0**-52)


@targets
def test_a_format_that_overflows_on_every_path(tmp_path: Path, tables: dict[str, dict[str, str]]) -> None:
    """100,000 is infinite in float16: each path counts, the bound of their share is 1, the other formats are judged."""
    record = audit_of(tmp_path, "def value(dW, h):\n    return 1e5 * (1.0 + dW[0])\n", **tables)
    entry = record.quantities["value"]
    assert judged(entry, "float16") == {("does not pay", "nonfinite")}
    for level in entry.levels:
        lost = level.arms["float16"]
        assert (lost.nonfinite, lost.nonfinite_bound) == (level.paths, 1.0)
        assert (lost.error_mean, lost.error_variance, lost.level_variance, lost.gain) == (None,) * 4
        assert level.corrections["float16:float64"].variance is None
        assert level.arms["float32"].nonfinite == level.reference.nonfinite == 0
        # no event in N paths: at most ln(100) / N, 4.6 / N, at 99%
        assert level.arms["float32"].nonfinite_bound == pytest.approx(math.log(100) / level.paths, rel=2.0**-50)
    assert ("does not pay", "nonfinite") not in judged(entry, "float32")
    assert record.verdict.finest_paying_level["float16"].reason == "nonfinite"


@targets
@pytest.mark.parametrize("size", ["1e100", "1e200", "1e300"])
def test_values_whose_powers_overflow(tmp_path: Path, tables: dict[str, dict[str, str]], size: str) -> None:
    """Finite paths too large for their variance to be a float64: figures that do not exist, and no warning."""
    record = audit_of(tmp_path, f"def value(dW, h):\n    return {size} * (1.0 + dW[0])\n", **tables)
    entry = record.quantities["value"]
    for arm in NARROW:
        assert judged(entry, arm) == {("does not pay", "nonfinite")}
    for level in entry.levels:
        assert level.reference.mean is not None
        assert (level.reference.variance is None) == (size != "1e100")
    assert record.verdict.sound


@targets
def test_an_audit_of_one_level(tmp_path: Path, tables: dict[str, dict[str, str]]) -> None:
    """Plain Monte Carlo: verdicts of level 0, nothing to telescope, no law, and no level beyond it is claimed."""
    record = audit_of(tmp_path, GEOMETRIC, ladder={"finest": "0"}, **tables)
    entry = record.quantities["value"]
    (level,) = entry.levels
    assert level.telescoping is None
    assert record.verdict.sound
    assert all(laws.error.reason for laws in entry.accumulation.values())
    assert (entry.orders.level_variance, entry.orders.level_mean) == (None, None)
    for arm in NARROW:
        found = record.verdict.finest_paying_level[arm]
        assert found.level == (0 if level.arms[arm].verdict == "pays" else None)
        assert not found.extrapolated
        assert found.decided_by == "value"


def test_without_a_target_bias_is_not_judged(tmp_path: Path) -> None:
    """Each format then carries the smallest RMSE that its bias admits, and there is no plan; with a target neither."""
    without = audit_of(tmp_path, GEOMETRIC).quantities["value"]
    assert without.allocation.reason == "no target"
    assert without.allocation.rmse is None
    assert all((level.arms[arm].admitted_rmse or 0) > 0 for level in without.levels for arm in ("float16", "bfloat16"))
    assert not any(reason == "bias" for arm in NARROW for _, reason in judged(without, arm))
    tight = audit_of(tmp_path, GEOMETRIC, target={"rmse": "1e-9"}).quantities["value"]
    assert all(level.arms[arm].admitted_rmse is None for level in tight.levels for arm in NARROW)
    assert tight.allocation.rmse == 1e-9


def test_an_arm_that_raises_is_recorded(tmp_path: Path) -> None:
    """Type, message, file and line stand in the record, the audit goes on, and the format does not pay."""
    source = """
    import numpy as np

    def value(dW, h):
        x = 70000.0 * (1.0 + 0.01 * dW[0])
        if np.isinf(x).any():
            raise ArithmeticError("lost")
        return x
    """
    record = audit_of(tmp_path, source)
    entry = record.quantities["value"]
    assert judged(entry, "float16") == {("does not pay", "raised")}
    raised = RaisedEntry(type="ArithmeticError", message="lost", file="kernel.py", line=6)
    for level in entry.levels:
        assert level.arms["float16"].raised == raised
        assert level.arms["float16"].level_variance is None
        assert level.arms["float32"].raised is None
        assert not any(pair.startswith("float16:") for pair in level.corrections)
    assert record.verdict.finest_paying_level["float16"].reason == "raised"
    assert ("pays", None) in judged(entry, "float32")


def test_the_worst_quantity_decides(tmp_path: Path) -> None:
    """Of two quantities the one without variance decides every format, and is named."""
    record = audit_of(tmp_path, "def value(dW, h):\n    return {'a': 1.0 + dW[0], 'b': 1.0 + 0.0 * dW[0]}\n")
    assert list(record.quantities) == ["a", "b"]
    for arm in NARROW:
        found = record.verdict.finest_paying_level[arm]
        assert (found.level, found.reason, found.decided_by) == (None, "no_variance", "b")


# --- does the ladder telescope? ---


def test_telescoping_by_hand(tmp_path: Path) -> None:
    """Mean of the coarse path on level l less mean of the fine path on level l - 1, and the error of it."""
    record = audit_of(tmp_path, GEOMETRIC)
    file = file_for(tmp_path, GEOMETRIC)
    runner = BlockRunner(file, find_kernel(file))
    ends = {}
    for level in range(3):
        steps, count = 2**level, record.quantities["value"].levels[level].blocks
        drawn = np.concatenate([runner.draws(level, k).values[:, 0] for k in range(count)], axis=1)
        for n, dW in ((steps, drawn), (steps // 2, drawn[0::2] + drawn[1::2] if level else None)):
            if dW is not None:
                ends[level, n] = np.prod(1.0 + 0.05 / n + 0.2 * dW, axis=0)  # the Euler step of the kernel as a factor
    for level in (1, 2):
        coarse, below = ends[level, 2 ** (level - 1)], ends[level - 1, 2 ** (level - 1)]
        found = record.quantities["value"].levels[level].telescoping
        assert found is not None
        assert found.difference is not None
        # Each mean is off by at most n + 3 roundings, for values of mean about 1.
        off = 2 * (max(coarse.size, below.size) + 3 * 4) * 2.0**-53 * 2
        assert abs(found.difference - (coarse.mean() - below.mean())) <= off
        se = math.sqrt(coarse.var(ddof=1) / coarse.size + below.var(ddof=1) / below.size)
        assert found.se == pytest.approx(se, rel=off)
        assert found.sound == (abs(found.difference) <= 3.3 * se)
    assert record.quantities["value"].levels[0].telescoping is None


def telescoping(folder: Path, source: str, seed: int, **tables: dict[str, str]) -> TelescopingEntry:
    """Return the comparison of level 1 with level 0, 1,024 paths each, in a small audit."""
    small = {
        "ladder": {"finest": "1"},
        "formats": {"narrow": '["float32"]', "wide": "[]"},
        "sampling": {"seed": str(seed), "most_paths": "1024"},
    }
    record = run_audit(file_for(folder, source, **{**small, **tables}), None).record
    found = record.quantities["value"].levels[1].telescoping
    assert found is not None
    assert record.verdict.sound == found.sound
    return found


REMEMBERS = """
import numpy as np
steps_seen = []

def value(dW, h):
    steps_seen.append(h)
    x = np.ones_like(dW[0])
    for n in range(dW.shape[0]):
        x = x + DRIFT * min(steps_seen) * x + 0.2 * x * dW[n]
    return x
"""


def test_a_kernel_that_breaks_the_coupling_is_flagged(tmp_path: Path) -> None:
    """A kernel that keeps the smallest h it saw steps the coarse path of level 1 with the fine h, and is unsound.

    The identity run cannot see it, as it uses one h. Means 1.25 and 1.5 of standard deviation .2 in 1,024 paths each:
    28 standard errors. Control: without drift the step size it remembers does no harm.
    """
    assert not telescoping(tmp_path, REMEMBERS.replace("DRIFT", "0.5"), 1).sound
    assert telescoping(tmp_path, REMEMBERS.replace("DRIFT", "0.0"), 1).sound


def test_a_wrong_coarsening_is_flagged(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Coarse increments that lose half of the fine ones have half the variance, which a squared payoff shows."""
    source = "def value(dW, h):\n    x = 1.0 + dW[0]\n    return x * x\n"
    assert telescoping(tmp_path, source, 2).sound

    def every_second(draws: Draws, fine: Floats, arithmetic: Arithmetic) -> Floats:
        return np.ascontiguousarray(fine[::2])

    monkeypatch.setattr(calls, "coarse_draws", every_second)
    assert not telescoping(tmp_path, source, 2).sound


def test_sound_kernels_are_rarely_flagged(tmp_path: Path) -> None:
    """A sound comparison is flagged at 3.3 standard errors, by the normal approximation in 9.7e-4 of cases.

    64 independent audits: difference / se has variance 1 (sum of squares chi-square with 64 degrees of freedom, false
    alarm 1e-6), and no more are flagged than 1e-6 of binomial samples. Negative control: with an error half as large as
    it is, the sum of squares fails.
    """
    found = [telescoping(tmp_path, GEOMETRIC, seed) for seed in range(64)]
    scores = np.array([(one.difference or 0.0) / (one.se or math.nan) for one in found])
    low, high = (chi2.ppf(tail, scores.size) for tail in (FALSE_ALARM / 2, 1 - FALSE_ALARM / 2))
    assert low < float(scores @ scores) < high
    assert float((2 * scores) @ (2 * scores)) > high
    flagged = sum(not one.sound for one in found)
    assert flagged == np.count_nonzero(np.abs(scores) > 3.3)
    assert flagged <= binom.isf(FALSE_ALARM, scores.size, 2 * norm.sf(3.3))


@pytest.mark.parametrize("refinement", ["2", "4"])
def test_orders_are_in_the_step_size(tmp_path: Path, refinement: str) -> None:
    """V_l of Euler's scheme falls about in proportion to h, whatever the refinement.

    "Multilevel Monte Carlo methods", Acta Numerica 24, 2015, doi 10.1017/S096249291500001X, table 5.2: order 1. With
    four levels of at least 8,192 paths the order is known to some .05; by level instead of by h it would be 2.
    """
    sampling = {"paths": "8192", "most_paths": "8192"}
    ladder = {"finest": "4", "refinement": refinement}
    record = audited(tmp_path, GEOMETRIC, ladder=ladder, sampling=sampling).record
    assert record.quantities["value"].orders.level_variance == pytest.approx(1.0, abs=0.2)
