"""An audit with approximate draws: its arms, what the record says of them, and that nothing else changes."""

from __future__ import annotations

import io
import json
from pathlib import Path

import pytest
from audit_cases import GEOMETRIC, audited, file_for
from rich.console import Console

from narrowgauge.api import Audit, audit, run_audit, try_out
from narrowgauge.draws.approximate import Constant
from narrowgauge.errors import AuditFileError
from narrowgauge.measure.workers import Workers
from narrowgauge.record.audit import TrialEntry
from narrowgauge.record.canonical import canonical_text
from narrowgauge.report.text import trial_text

LADDER = {"finest": "4"}
SAMPLING = {"block": "32768", "paths": "32768", "most_paths": "32768"}
FORMATS = {"narrow": '["float16", "bfloat16"]'}
DRAWS = {"approximate": '"constant"', "cells": "64"}
COST = {"float64": "1", "float32": "0.5", "float16": "0.25", "bfloat16": "0.25", "draws": "0.5"}
CHEAP = """

def cheap(u):
    return np.log(u / (1 - u)) / 1.7
"""


@pytest.fixture(scope="module")
def done(tmp_path_factory: pytest.TempPathFactory) -> Audit:
    folder = tmp_path_factory.mktemp("audit")
    cost = {**COST, "approximate_draws": "0.0625"}
    return audited(folder, GEOMETRIC, ladder=LADDER, sampling=SAMPLING, formats=FORMATS, draws=DRAWS, cost=cost)


def text(result: Audit) -> str:
    document = result.record.document()
    return canonical_text({**document, "provenance": {}})


def test_each_narrow_format_is_tried_with_both_kinds_of_draws(done: Audit) -> None:
    """And float64 with approximate ones, which shows what draws alone do; it is not judged."""
    kinds = {name: (arm.format, arm.draws) for name, arm in done.record.arms.items()}
    assert kinds == {
        "float64": ("float64", "exact"),
        "bfloat16": ("bfloat16", "exact"),
        "float16": ("float16", "exact"),
        "float32": ("float32", "exact"),
        "bfloat16/approximate": ("bfloat16", "approximate"),
        "float16/approximate": ("float16", "approximate"),
        "float64/approximate": ("float64", "approximate"),
    }
    judged = ["float16", "bfloat16", "float16/approximate", "bfloat16/approximate"]
    assert list(done.record.verdict.finest_paying_level) == judged
    for level in done.record.quantities["value"].levels:
        assert [name for name, arm in level.arms.items() if arm.verdict is not None] == sorted(
            judged, key=list(kinds).index
        )


def test_the_record_says_what_the_draws_are(done: Audit) -> None:
    """The map and how good it is, and the defaults that were used."""
    error = Constant.of(64).mean_square_error
    found = done.record.document()["draws"]
    sizes = {"cells": 64, "intervals": None, "degree": None}
    figures = {"mean": 0.0, "variance": 1 - error, "mean_square_error": error}
    assert found == {"approximate": "constant", **sizes, **figures}
    asked = done.record.asked
    assert asked["draws"] == {"approximate": "constant", **sizes, "formats": ["float16", "bfloat16"]}
    assert "draws.formats" in asked["assumed"]
    assert not {"draws.cells", "draws.intervals", "cost.approximate_draws"} & set(asked["assumed"])


def test_the_parts_are_the_corrections_of_their_arms(done: Audit) -> None:
    """Figures that stand in the level too: float16, float64/approximate and float16/approximate, each to float64."""
    entry = done.record.quantities["value"]
    for form in ("float16", "bfloat16"):
        for part, level in zip(entry.separation.parts[form], entry.levels, strict=True):
            found = level.corrections
            assert part.level == level.level
            assert part.arithmetic == found[f"{form}:float64"].variance
            assert part.draws == found["float64/approximate:float64"].variance
            assert part.both == found[f"{form}/approximate:float64"].variance
    # 64 cells have a mean square error of .0039, float16 a relative one of 2^-24: on level 0 the draws are far larger.
    assert entry.separation.parts["float16"][0].larger == "draws"


def test_the_law_is_of_rounding_and_the_order_of_draws(done: Audit) -> None:
    """The law is fitted to arms with exact draws; of the others the order in h is reported, near 1 for draws alone."""
    entry = done.record.quantities["value"]
    assert list(entry.accumulation) == ["bfloat16", "float16", "float32"]
    orders = entry.separation.orders
    assert list(orders) == ["bfloat16/approximate", "float16/approximate", "float64/approximate"]
    alone = orders["float64/approximate"]
    assert alone.levels == [3, 4]
    assert alone.slope_low < 1.0 < alone.slope_high  # false-alarm rate 1%; the fixed seed is 1
    assert alone.slope_low > 0.5  # negative control


def test_a_tail_that_the_sample_does_not_know_ends_undecided(tmp_path: Path) -> None:
    """With 4,096 cells few of 1,024 paths carry the correction: not judged but for want of paths, with their number."""
    sampling = {"block": "1024", "paths": "1024", "most_paths": "1024"}
    formats = {"narrow": '["float32"]', "schemes": '["split"]'}
    draws = {"approximate": '"constant"', "cells": "4096"}
    cost = {**COST, "approximate_draws": "0.0625"}
    result = audited(tmp_path, GEOMETRIC, sampling=sampling, formats=formats, draws=draws, cost=cost)
    for level in result.record.quantities["value"].levels:
        arm = level.arms["float32/approximate"]
        assert level.corrections["float32/approximate:float64"].effective_size < 50
        assert (arm.verdict, arm.reason) == ("undecided", "kurtosis")
        assert arm.paths_needed > 1024
        assert level.arms["float32"].reason != "kurtosis"  # control: rounding has no such tail


def test_nothing_is_extrapolated_from_approximate_draws(done: Audit) -> None:
    """The law of rounding, by which a format is followed beyond the ladder, says nothing about them."""
    found = done.record.quantities["value"].finest_paying_level
    for name, entry in found.items():
        assert not (name.endswith("/approximate") and entry.extrapolated)


def test_cheaper_draws_pay_where_the_variances_are_alike(done: Audit) -> None:
    """On level 0 a step costs .25 and an exact draw .5, an approximate one .0625: the edge is above the exact arm's.

    So the cheapest scheme of the level has approximate draws.
    """
    level = done.record.quantities["value"].levels[0]
    arms = level.arms
    assert level.best.narrow == "float16/approximate"
    assert arms["float16/approximate"].edge_low > arms["float16"].edge_high
    assert arms["float16/approximate"].scheme.narrow == "float16/approximate"


def test_arms_with_exact_draws_are_measured_as_without(tmp_path: Path, done: Audit) -> None:
    """Every figure of theirs but those that hang on rivals; and without [draws] nothing of it is in the record."""
    plain = audited(tmp_path, GEOMETRIC, ladder=LADDER, sampling=SAMPLING, formats=FORMATS, cost=COST)
    document = {**plain.record.document(), "provenance": None}
    assert "/approximate" not in json.dumps(document)
    assert "approximate_draws" not in document["asked"]["cost"]
    assert "draws" not in document["asked"]
    assert "draws" not in document
    assert "separation" not in document["quantities"]["value"]
    entry, other = plain.record.quantities["value"], done.record.quantities["value"]
    assert (entry.accumulation, entry.agreement) == (other.accumulation, other.agreement)
    for here, there in zip(entry.levels, other.levels, strict=True):
        assert here.reference == there.reference
        assert all(there.corrections[pair] == figures for pair, figures in here.corrections.items())


def test_costs_of_approximate_draws_are_those_of_exact_ones_unless_given(tmp_path: Path) -> None:
    """The default is filled in, and counts as assumed."""
    file = file_for(tmp_path, GEOMETRIC, draws={"approximate": '"linear"'}, cost=COST)
    assert file.cost.approximate_draws == 0.5
    assert "cost.approximate_draws" in file.assumed
    assert {"draws.intervals", "draws.formats"} <= set(file.assumed)
    assert not {"draws.cells", "draws.degree"} & set(file.assumed)


def test_a_users_function_travels_to_workers(tmp_path: Path) -> None:
    """They find it by its file, as they find the kernel; the record is the one of a single process."""
    file = file_for(tmp_path, GEOMETRIC + CHEAP, draws={"approximate": '"kernel.py:cheap"'})
    alone = run_audit(file, None)
    assert text(run_audit(file, None, workers=Workers(number=2))) == text(alone)
    assert alone.record.draws.approximate == "kernel.py:cheap"


def test_a_users_function_that_fails_ends_the_audit_and_its_trial(tmp_path: Path) -> None:
    """With one message, whoever runs the blocks."""
    file = file_for(tmp_path, GEOMETRIC + CHEAP.replace("1.7", "(1 / 0)"), draws={"approximate": '"kernel.py:cheap"'})
    for run in (
        lambda: run_audit(file, None),
        lambda: try_out(file),
        lambda: run_audit(file, None, workers=Workers(number=2)),
    ):
        with pytest.raises(AuditFileError, match=r"kernel\.py:cheap raised ZeroDivisionError"):
            run()


def test_float64_may_be_tried_with_approximate_draws_too(tmp_path: Path) -> None:
    """Where it is asked for: judged like a narrow format, corrected to float64 with exact draws."""
    draws = {**DRAWS, "formats": '["float64"]'}
    result = audited(tmp_path, GEOMETRIC, formats=FORMATS, draws=draws, cost={**COST, "approximate_draws": "0.0625"})
    assert list(result.record.verdict.finest_paying_level) == ["float16", "bfloat16", "float64/approximate"]
    separation = result.record.quantities["value"].separation
    assert separation.parts == {}  # its arithmetic adds nothing
    assert list(separation.orders) == ["float64/approximate"]


def test_a_kernel_without_normals_is_refused_from_python_too(tmp_path: Path) -> None:
    """The reason is said of draws.approximate."""
    kernel = {"run": "a.py:f", "takes": "rng"}
    ladder = {"horizon": 1.0, "finest": 0}
    why = "draws.approximate: a kernel that draws for itself asks for its own distributions"
    with pytest.raises(AuditFileError, match=why):
        audit({"kernel": kernel, "ladder": ladder, "draws": {"approximate": "linear"}})


@pytest.mark.parametrize("rounds", ["emulated", "itself"])
def test_the_trial_run_shows_the_approximate_draws(tmp_path: Path, rounds: str) -> None:
    """What is going to be tried, and how good it is, before anything is measured; without [draws] nothing is said."""
    kernel = {} if rounds == "emulated" else {"rounds": '"itself"'}
    shown = shown_of(try_out(file_for(tmp_path, GEOMETRIC, kernel=kernel, draws=DRAWS)))
    assert "Approximate draws" in shown
    assert "piecewise constant on 64 cells; mean square error 0.00391" in shown  # 1 less the variance
    assert "Approximate draws" not in shown_of(try_out(file_for(tmp_path, GEOMETRIC, kernel=kernel)))


def shown_of(trial: TrialEntry) -> str:
    stream = io.StringIO()
    Console(file=stream, width=120).print(trial_text(trial))
    return stream.getvalue()
